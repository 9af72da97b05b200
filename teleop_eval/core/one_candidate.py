# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The prediction for one mapping of one arm."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np

from teleop_eval.core import candidate_words as words
from teleop_eval.core.boundaries import CellStates
from teleop_eval.core.candidates import CandidateAccumulator, Start
from teleop_eval.core.geometry import RobotGeometry
from teleop_eval.core.inverse_kinematics import orientation_possible
from teleop_eval.core.mappings import Anchor, Ideal, MappingModel, OperatorCells
from teleop_eval.core.mappings.base import HAND, OPERATOR_JOINTS, VELOCITY
from teleop_eval.core.mappings.guarded import checked_ideal
from teleop_eval.core.metric import Metric
from teleop_eval.core.reachable_cells import ReachableSet

# Poses stand for a run from so many seconds on; before, positions alone do.
POSES_S = 10.0


class Candidate:
    """
    Runs one mapping's model and adds up what it commands.

    The tool's orientation may come to be known during a run, as when the rotation from hand to
    tool is estimated. From then on poses are followed, by an accumulator of their own, beside
    the positions alone until 10 s of poses are there, which then stand for the run.

    Attributes
    ----------
    model
        The mapping.

    """

    def __init__(self, robot: RobotGeometry, model: MappingModel, period_s: float) -> None:
        self._robot = robot
        self._period_s = period_s
        self.model = model
        self._fault = ''
        self._positions: CandidateAccumulator | None = None
        self._poses: CandidateAccumulator | None = None
        self._late = False
        self._between = False
        self._lost_cells = 0
        self._anchors: dict[int, Anchor] = {}
        self._last: Anchor | None = None

    @property
    def accumulator(self) -> CandidateAccumulator | None:
        """Return the one that stands for the run, None before the first command."""
        if self._poses is not None and (
                self._positions is None or self._poses.followed_s >= POSES_S):
            return self._poses
        return self._positions

    @property
    def searches(self) -> bool:
        """Return whether postures come from inverse kinematics."""
        return self.accumulator is not None and not self._between

    def interrupt(self) -> None:
        """Pass over a stretch without data."""
        self.model.restart()
        for one in (self._positions, self._poses):
            if one is not None:
                one.restart()

    def add(self, cells: OperatorCells, states: CellStates, ends: dict[int, Anchor], *,
            start: Start, turned: np.ndarray | None, operator: np.ndarray | None) -> None:
        """
        Add one window.

        Parameters
        ----------
        cells, states
            Motion of the operator and state of the m cells.
        ends
            Poses at the end of each stretch.
        start
            Where postures begin.
        turned
            (m,) where the hand's orientation is known, None if the mapping does not use it.
        operator
            (m, 3) u_o, arm lengths.

        """
        ideal = self._ideal(cells, ends)
        if isinstance(ideal, str):
            self._fault = ideal
            self.interrupt()
            return
        if turned is not None and ideal.orientations is not None:
            ideal = dataclasses.replace(
                ideal, orientations=np.where(turned[:, None], ideal.orientations, np.nan))
        self._choose(ideal)
        if self.model.gives == VELOCITY:
            raw = ideal.raw_velocities_mps
            operator = None if raw is None else raw / self._robot.reach.length_m
            self._count_lost(ideal, states.usable)
        for one in (self._positions, self._poses):
            if one is not None:
                one.add(ideal, usable=states.usable, run=states.run,
                        robot_joints=cells.robot_joints, operator=operator, start=start)
        if self._poses is not None and self._poses.followed_s >= POSES_S:
            self._positions = None

    def _choose(self, ideal: Ideal) -> None:
        """Make what adds up this window, by what the mapping has come to tell."""
        known = np.isfinite(ideal.positions_m).all(axis=1)
        turns = ideal.orientations is not None and bool(
            (known & np.isfinite(ideal.orientations).all(axis=1)).any())
        if not known.any():
            return
        self._between = self.model.needs == OPERATOR_JOINTS and ideal.joints is not None
        if self._poses is None and turns and not self._between and orientation_possible(
                self._robot.chain):
            self._late = self._positions is not None
            self._poses = self._made(with_orientation=True)
        if self._poses is None and self._positions is None:
            self._positions = self._made(with_orientation=False)

    def _made(self, *, with_orientation: bool) -> CandidateAccumulator:
        return CandidateAccumulator(
            self._robot, period_s=self._period_s, between_joints=self._between,
            with_orientation=with_orientation, gives_velocity=self.model.gives == VELOCITY)

    def _count_lost(self, ideal: Ideal, usable: np.ndarray) -> None:
        if self.accumulator is None or ideal.velocities_mps is None:
            return
        self._lost_cells += int(np.count_nonzero(
            usable & np.isfinite(ideal.velocities_mps).all(axis=1)
            & ~np.isfinite(ideal.positions_m).all(axis=1)))

    def why_not(self, seen: words.Seen) -> str:
        """Return why nothing is predicted, '' if something is."""
        if self.accumulator is None:
            return self._fault or seen.why_not(self.model)
        return seen.nothing_counts

    def metrics(self, reachable: ReachableSet | None, seen: words.Seen, *,
                no_operator: str) -> dict[str, Metric]:
        """Return the predictions by name; see `CandidateAccumulator.metrics`."""
        assert self.accumulator is not None  # else `why_not` says why
        said = self.orientation(seen)
        return self.accumulator.metrics(
            reachable, no_operator=no_operator,
            postures=said if said.startswith(words.POSITIONS_ONLY) else '')

    def caveats(self) -> list[str]:
        """Return what else must be said of the prediction."""
        if not self._lost_cells:
            return []
        return ['after a gap in the data it is not known where the velocities lead to until the '
                f'next engagement: {self._lost_cells * self._period_s:.1f} s are missing in '
                'everything but the discrepancy']

    def orientation(self, seen: words.Seen) -> str:
        """Return whether the tool's orientation is predicted, and if not why."""
        if self._between:
            return words.BY_JOINTS
        if self.accumulator is self._poses:
            return words.FOLLOWED + (
                ', from when it was known; what was before is left out' if self._late else '')
        return f'{words.POSITIONS_ONLY}: {self._why_positions_only(seen)}'

    def _why_positions_only(self, seen: words.Seen) -> str:
        if not orientation_possible(self._robot.chain):
            return (f"the tool's orientation needs 6 or more joints, and there are "
                    f'{self._robot.chain.size}')
        if self._poses is not None:
            return (f"the tool's orientation was known for {self._poses.followed_s:.1f} s only, "
                    f'{POSES_S:.0f} s are needed')
        if self.model.needs == HAND and 'hand_turn' not in seen.tracks:
            return words.NO_TURNS
        return words.NOT_ESTIMATED if self.model.estimates_tool_rotation else words.NOT_GIVEN

    def _ideal(self, cells: OperatorCells, ends: dict[int, Anchor]) -> Ideal | str:
        """Return the ideal command, stretch after stretch for a mapping that is anchored."""
        if not self.model.anchored or cells.stretch is None:
            return checked_ideal(self.model, cells)
        here = {one for one in cells.stretch.tolist() if one >= 0}
        joined: Ideal | None = None
        for stretch in sorted(here | ends.keys()):
            self._anchor(stretch, cells.anchors)
            if stretch not in here:
                self._end(stretch, ends)
                continue
            part = checked_ideal(self.model, dataclasses.replace(
                cells, stretch=np.where(cells.stretch == stretch, stretch, -1),
                anchors=self._anchors))
            if isinstance(part, str):
                return part
            self._remember(part)
            self._end(stretch, ends)
            joined = part if joined is None else _joined(joined, part, cells.stretch == stretch)
        return checked_ideal(self.model, cells) if joined is None else joined

    def _end(self, stretch: int, ends: dict[int, Anchor]) -> None:
        """Predict the pose at the very end of a stretch, which lies between two cells."""
        end = ends.get(stretch)
        if end is None or end.hand_m is None or stretch not in self._anchors or (
                self.model.gives == VELOCITY):
            return
        turn = None if end.hand_xyzw is None else end.hand_xyzw[None]
        part = checked_ideal(self.model, OperatorCells(
            hand_m=end.hand_m[None], hand_xyzw=turn, joints=None, joint_names=(),
            robot_joints=np.zeros((1, self._robot.chain.size)), period_s=self._period_s,
            stretch=np.array([stretch]), anchors=self._anchors))
        if not isinstance(part, str):
            self._remember(part)

    def _anchor(self, stretch: int, measured: dict[int, Anchor] | Any) -> None:
        """Anchor a new stretch: the hand where it was, the robot where the prediction is."""
        if stretch in self._anchors or stretch not in measured:
            return
        anchor: Anchor = measured[stretch]
        if self._last is not None:
            anchor = dataclasses.replace(
                anchor, robot_m=self._last.robot_m, robot_xyzw=self._last.robot_xyzw)
        self._anchors = {stretch: anchor}

    def _remember(self, part: Ideal) -> None:
        """Keep the last pose predicted: there the robot stays until the next engagement."""
        known = np.flatnonzero(np.isfinite(part.positions_m).all(axis=1))
        if not len(known):
            return
        cell = int(known[-1])
        turn = None if part.orientations is None else part.orientations[cell]
        self._last = Anchor(robot_m=part.positions_m[cell], robot_xyzw=turn)


def _joined(before: Ideal, part: Ideal, here: np.ndarray) -> Ideal:
    """Return the ideal command of several stretches of one window."""
    joined = {}
    for field in dataclasses.fields(Ideal):
        old, new = getattr(before, field.name), getattr(part, field.name)
        joined[field.name] = new if old is None else old if new is None else (
            np.where(here[:, None], new, old))
    return Ideal(**joined)
