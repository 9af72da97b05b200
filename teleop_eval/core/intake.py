# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""From samples of any type to the rows of one arm's streams."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from teleop_eval.core.joint_match import JointMatcher
from teleop_eval.core.mappings.base import RATE_INPUT
from teleop_eval.core.samples import (
    ArraySample,
    JointSample,
    JoySample,
    PoseSample,
    Sample,
    TrajectorySample,
    TwistSample,
)
from teleop_eval.core.sentences import Sentences, listed, nearest, shown
from teleop_eval.core.streams import Row, SampledStream

_POSES, _JOINTS, _PLANS = 'poses', 'joints', 'joint trajectories'
_TWISTS, _STICKS = 'velocities', 'joystick states'
_POINT = ('x', 'y', 'z')
_TWIST = (*_POINT, 'rx', 'ry', 'rz')
_NO_AXIS = -1
# No position in metres or radians; its square can still be summed.
_LARGEST = 1e12
RUN_ON = 'let the clocks of all publishers run on during a session'


class Intake:
    """
    Turns the samples of one role into rows, and collects what is wrong with them.

    Parameters
    ----------
    arm
        Name of the arm.
    stream
        Where the rows go.
    matcher
        Of the joints, None where none are expected.
    joy_axes
        Which axes of a joystick are x, y, z, rx, ry, rz; -1 for none.
    base_link
        Frame in which poses and velocities are expected, None where any one frame will do.

    Attributes
    ----------
    problems
        Sentences about what could not be used.
    foreign_messages
        Number of messages with none of the wanted joints, as of a gripper.
    foreign_names
        Joints of the last one of them.

    """

    def __init__(self, arm: str, stream: SampledStream, matcher: JointMatcher | None, *,
                 joy_axes: Sequence[int] = range(6), base_link: str | None = None) -> None:
        self._arm = arm
        self._base_link = base_link
        self.stream = stream
        self.matcher = matcher
        self.problems = Sentences()
        self._kind = ''
        self._kinds: dict[type, tuple[str, Callable[[int, Any], list[Row]]]] = {
            PoseSample: (_POSES, self._pose), JointSample: (_JOINTS, self._joints),
            ArraySample: (_JOINTS, self._array), TrajectorySample: (_PLANS, self._trajectory),
            TwistSample: (_TWISTS, self._twist), JoySample: (_STICKS, self._joy)}
        self._joy_axes = tuple(joy_axes)
        self.foreign_messages = 0
        self.foreign_names: tuple[str, ...] = ()
        self._frame_id: str | None = None
        self._non_finite = ''
        if matcher is not None:
            stream.width = len(matcher.names)
        else:
            stream.width = len(_TWIST) if stream.role == RATE_INPUT else len(_POINT)

    @property
    def posed(self) -> bool:
        """Tell whether poses come, not joints."""
        return self._kind == _POSES

    @property
    def velocities(self) -> bool:
        """Tell whether velocities come, rows (6,) of linear and angular velocity."""
        return self._kind == _TWISTS

    @property
    def frame_id(self) -> str | None:
        """Return the frame of the poses that are used, None before the first."""
        return self._frame_id

    @property
    def turning(self) -> np.ndarray:
        """Return the columns of joints that turn without limits."""
        return np.zeros(0, dtype=np.int64) if self.matcher is None else self.matcher.turning

    def rows(self, receive_ns: int, sample: Sample) -> list[Row]:
        """Return the rows of a sample, [] if it cannot be used."""
        known = self._kinds.get(type(sample))
        if known is None:
            self.problem(f'{type(sample).__name__} is of no use here')
            return []
        kind, convert = known
        if kind != self._kind and self.stream.matched:
            self.problem(f'{kind} came after {self._kind} on one topic; only the first kind is '
                         'used')
            return []
        found = convert(receive_ns, sample)
        if found and kind != self._kind:
            self._kind = kind
            self.stream.planned = kind == _PLANS
        return found

    def _pose(self, receive_ns: int, sample: PoseSample) -> list[Row]:
        if self.stream.role in ('robot_joints', 'operator_joints'):
            self.problem('poses came where joints are expected')
            return []
        if self.stream.role == RATE_INPUT:
            self.problem('poses came where velocities or joystick states are expected')
            return []
        self.stream.width = len(_POINT)
        if not self._in_first_frame(sample.frame_id):
            return []
        if sample.position.shape != (3,) or (
                sample.orientation is not None and sample.orientation.shape != (4,)):
            self.problem('a pose came whose position or orientation has the wrong size')
            return []
        finite = _finite(sample.position) and (
            sample.orientation is None or _finite(sample.orientation))
        return self._row(
            finite, (receive_ns, sample.stamp_ns, sample.position, sample.orientation, None),
            _POINT)

    def _in_first_frame(self, frame_id: str) -> bool:
        if not frame_id:
            # A message without a frame is taken to be in that of the others.
            return True
        if self._frame_id is None:
            self._frame_id = frame_id
            self._check_frame(frame_id)
        elif frame_id != self._frame_id:
            self.problem(f'frame_id changed from {shown(self._frame_id)} to '
                         f'{shown(frame_id)}; only messages in the first frame are used')
            return False
        return True

    def _check_frame(self, frame_id: str) -> None:
        """Say once if messages are not in the frame in which they are evaluated."""
        base = self._base_link
        # Names of tf2 have no slash in front, those of older publishers do.
        if base and frame_id.lstrip('/') != base.lstrip('/'):
            self.problem(f'messages come in frame {shown(frame_id)}, but are evaluated as if they '
                         f'were in robot.base_link, {shown(base)}; publish them in {shown(base)}, '
                         'or give the link of their frame as base_link')

    def _twist(self, receive_ns: int, sample: TwistSample) -> list[Row]:
        if self.stream.role not in (RATE_INPUT, 'command'):
            self.problem('velocities can only be a rate input or commands')
            return []
        self.stream.width = len(_TWIST)
        if not self._in_first_frame(sample.frame_id):
            return []
        values = np.concatenate([sample.linear, sample.angular])
        return self._row(
            _finite(values), (receive_ns, sample.stamp_ns, values, None, None), _TWIST)

    def _joy(self, receive_ns: int, sample: JoySample) -> list[Row]:
        if self.stream.role != RATE_INPUT:
            self.problem('joystick states can only be a rate input')
            return []
        lacking = [axis for axis in self._joy_axes if axis >= len(sample.axes)]
        if lacking:
            self.problem(f'operator.joy_axes names axis {lacking[0]}, but a message has '
                         f'{len(sample.axes)} axes, counted from 0; set operator.joy_axes to the '
                         'axes for x, y, z, rx, ry, rz, with -1 for each that the stick lacks')
            return []
        values = np.array([0.0 if axis == _NO_AXIS else float(sample.axes[axis])
                           for axis in self._joy_axes])
        return self._row(
            _finite(values), (receive_ns, sample.stamp_ns, values, None, None), _TWIST)

    def _joints(self, receive_ns: int, sample: JointSample) -> list[Row]:
        if self.matcher is None:
            self.problem('joints came where a pose is expected')
            return []
        columns = self.matcher.find(sample.names)
        if columns is None:
            self._lacking(sample.names)
            return []
        if len(sample.positions) != len(sample.names) or (
                sample.enabled is not None and len(sample.enabled) != len(sample.names)):
            self.problem(f'a message has {len(sample.names)} names but '
                         f'{len(sample.positions)} positions')
            return []
        values = self.matcher.values(sample, columns)
        enabled = None if sample.enabled is None else sample.enabled[columns]
        return self._row(
            _finite(values), (receive_ns, sample.stamp_ns, values, None, enabled),
            self.matcher.names)

    def _array(self, receive_ns: int, sample: ArraySample) -> list[Row]:
        if self.matcher is None or len(sample.values) != len(self.matcher.names):
            wanted = 0 if self.matcher is None else len(self.matcher.names)
            self.problem(f'{len(sample.values)} numbers came for {wanted} joints; set '
                          'command.joint_order')
            return []
        values = self.matcher.continued(sample.values * self.matcher.scale)
        return self._row(
            _finite(values), (receive_ns, 0, values, None, None), self.matcher.names)

    def _trajectory(self, receive_ns: int, sample: TrajectorySample) -> list[Row]:
        if self.matcher is None or self.stream.role != 'command':
            self.problem('joint trajectories can only be commands')
            return []
        columns = self.matcher.find(sample.names)
        if columns is None:
            self._lacking(sample.names)
            return []
        if sample.positions.shape != (len(sample.offsets_ns), len(sample.names)):
            self.problem('a joint trajectory came whose points do not have its joints')
            return []
        points = self.matcher.points(sample, columns)
        rows: list[Row] = []
        for offset_ns, point in zip(sample.offsets_ns.tolist(), points, strict=True):
            # A zero stamp means that the plan starts on receipt.
            stamp_ns = sample.stamp_ns + offset_ns if sample.stamp_ns else 0
            rows += self._row(
                _finite(point), (receive_ns + offset_ns, stamp_ns, point, None, None),
                self.matcher.names)
        return rows

    def _row(self, finite: bool, row: Row, names: Sequence[str]) -> list[Row]:
        if not finite:
            self.stream.counts.non_finite += 1
            # Only the first values are shown: all others count under the same sentence.
            self._non_finite = self._non_finite or self._where_not_finite(row, names)
            self.problem(f'{self._non_finite} came; messages with NaN or infinity are left out, '
                         'so look for their cause at the publisher')
            return []
        return [row]

    def _where_not_finite(self, row: Row, names: Sequence[str]) -> str:
        parts = [*zip(names, row[2].tolist(), strict=True)]
        if row[3] is not None:
            parts += zip(('qx', 'qy', 'qz', 'qw'), row[3].tolist(), strict=True)
        return listed(f'{name} = {value:g}' for name, value in parts
                      if not math.isfinite(value * value)) or 'a number too large'

    def _lacking(self, names: tuple[str, ...]) -> None:
        assert self.matcher is not None  # only asked after a match failed
        if self.matcher.foreign:
            self.foreign_messages += 1
            self.foreign_names = names
            return
        near = nearest(self.matcher.missing[0], [
            name for name in names if name not in self.matcher.names])
        hint = f'; did you mean {near}?' if near else '; correct the name or the topic'
        self.problem(f'joint {listed(self.matcher.missing)} is missing in a message that has '
                     f'{listed(names)}{hint}')

    def stepped_back(self, back_ns: int) -> None:
        """Say that the header stamps fell back."""
        self.problem(f'header stamps stepped back by {back_ns / 1e9:.3f} s, so a new segment '
                     f'began; {RUN_ON}')

    def problem(self, text: str) -> None:
        """Note what is wrong with this input."""
        end = '' if text.endswith('?') else '.'
        self.problems.say(f'{self._arm}: {self.stream.role} ({self.stream.topic}): {text}{end}')

    def never_matched(self) -> str:
        """Return the sentence for a topic whose messages have none of the wanted joints."""
        if self.matcher is None or not self.foreign_messages or self.stream.matched:
            return ''
        return (f'{self._arm}: {self.stream.role} ({self.stream.topic}): none of the joints '
                f'{listed(self.matcher.names)} was in {self.foreign_messages} messages, the last '
                f'of which has {listed(self.foreign_names)}; check joint names and topic.')


def _finite(values: np.ndarray) -> bool:
    """Tell whether all values (n,) are usable numbers; this is called for every message."""
    # For so few values this is several times quicker than numpy; NaN fails the comparison.
    return sum(map(abs, values.tolist())) < _LARGEST
