# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""From samples of any type to the rows of one arm's streams."""

from __future__ import annotations

import numpy as np

from teleop_eval.core.joint_match import JointMatcher
from teleop_eval.core.samples import (
    ArraySample,
    JointSample,
    PoseSample,
    Sample,
    TrajectorySample,
)
from teleop_eval.core.streams import Row, SampledStream

# A planned point has no successor yet: its interval is never a gap.
NEVER_A_GAP_NS = 2 ** 62


class Intake:
    """
    Turns the samples of one role into rows, and collects what is wrong with them.

    Attributes
    ----------
    problems
        Sentences with how often each was met.

    """

    def __init__(self, arm: str, stream: SampledStream, matcher: JointMatcher | None) -> None:
        self._arm = arm
        self.stream = stream
        self.matcher = matcher
        self.problems: dict[str, int] = {}
        self.planned = False
        self.posed = False
        self.foreign_messages = 0
        self._frame_id: str | None = None
        if matcher is not None:
            stream.width = len(matcher.names)
        else:
            stream.width = 3

    def rows(self, receive_ns: int, sample: Sample) -> list[Row]:
        """Return the rows of a sample, [] if it cannot be used."""
        if isinstance(sample, PoseSample):
            return self._pose(receive_ns, sample)
        if isinstance(sample, JointSample):
            return self._joints(receive_ns, sample)
        if isinstance(sample, TrajectorySample):
            return self._trajectory(receive_ns, sample)
        if isinstance(sample, ArraySample):
            return self._array(receive_ns, sample)
        self._problem(f'{type(sample).__name__} is of no use here')
        return []

    def _pose(self, receive_ns: int, sample: PoseSample) -> list[Row]:
        if self.stream.role in ('robot_joints', 'operator_joints'):
            self._problem('poses came where joints are expected')
            return []
        self.posed = True
        self.stream.width = 3
        if self._frame_id is None:
            self._frame_id = sample.frame_id
        elif sample.frame_id != self._frame_id:
            self._problem(f'frame_id changed from {self._frame_id!r} to {sample.frame_id!r}; '
                          'only messages in the first frame are used')
            return []
        finite = bool(np.isfinite(sample.position).all())
        if sample.orientation is not None:
            finite = finite and bool(np.isfinite(sample.orientation).all())
        return self._finite(
            finite, (receive_ns, sample.stamp_ns, sample.position, sample.orientation, None))

    def _joints(self, receive_ns: int, sample: JointSample) -> list[Row]:
        if self.matcher is None:
            self._problem('joints came where a pose is expected')
            return []
        found = self.matcher.values(sample)
        if found is None:
            self._lacking(sample.names)
            return []
        values, enabled = found
        return self._finite(bool(np.isfinite(values).all()),
                            (receive_ns, sample.stamp_ns, values, None, enabled))

    def _array(self, receive_ns: int, sample: ArraySample) -> list[Row]:
        if self.matcher is None or len(sample.values) != len(self.matcher.names):
            wanted = 0 if self.matcher is None else len(self.matcher.names)
            self._problem(f'{len(sample.values)} numbers came for {wanted} joints; set '
                          'command.joint_order')
            return []
        values = sample.values * self.matcher.scale
        return self._finite(bool(np.isfinite(values).all()), (receive_ns, 0, values, None, None))

    def _trajectory(self, receive_ns: int, sample: TrajectorySample) -> list[Row]:
        if self.matcher is None:
            self._problem('a joint trajectory came where a pose is expected')
            return []
        points = self.matcher.points(sample)
        if points is None:
            self._lacking(sample.names)
            return []
        self.planned = True
        start_ns = sample.stamp_ns or receive_ns
        rows: list[Row] = []
        for offset_ns, point in zip(sample.offsets_ns.tolist(), points, strict=True):
            time_ns = start_ns + offset_ns
            # Both columns carry the planned time, so that either time base finds it.
            stamp_ns = time_ns if sample.stamp_ns else 0
            rows += self._finite(bool(np.isfinite(point).all()),
                                 (time_ns if not sample.stamp_ns else receive_ns + offset_ns,
                                  stamp_ns, point, None, None))
        return rows

    def _finite(self, finite: bool, row: Row) -> list[Row]:
        if not finite:
            self.stream.counts.non_finite += 1
            return []
        return [row]

    def _lacking(self, names: tuple[str, ...]) -> None:
        assert self.matcher is not None  # only asked after a match failed
        if self.matcher.foreign:
            self.foreign_messages += 1
            return
        lacking = ', '.join(self.matcher.missing)
        self._problem(f'joint {lacking} is missing; the message has {", ".join(names)}')

    def _problem(self, text: str) -> None:
        sentence = f'{self._arm}: {self.stream.role} ({self.stream.topic}): {text}.'
        self.problems[sentence] = self.problems.get(sentence, 0) + 1

    def never_matched(self) -> str:
        """Return the sentence for a topic whose messages have none of the wanted joints."""
        if self.matcher is None or not self.foreign_messages or self.stream.present:
            return ''
        return (f'{self._arm}: {self.stream.role} ({self.stream.topic}): none of the joints '
                f'{", ".join(self.matcher.names)} was in {self.foreign_messages} messages; '
                'check joint names and topic.')
