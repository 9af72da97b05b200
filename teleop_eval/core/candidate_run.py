# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Every configured mapping on the operator's motion of one arm, whichever was active.

A prediction: what the mapping would have commanded had the operator moved just so. Mappings
anchored at an engagement begin there from where the prediction has left the robot.
"""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING, Any

import numpy as np

from teleop_eval.core.boundaries import CellStates
from teleop_eval.core.candidates import NOTE, CandidateAccumulator
from teleop_eval.core.errors import TeleopEvalError
from teleop_eval.core.geometry import NO_ROBOT
from teleop_eval.core.history import Track
from teleop_eval.core.mapping_input import operator_cells
from teleop_eval.core.mappings import Anchor, Ideal, MappingModel, OperatorCells, make_mapping
from teleop_eval.core.mappings.base import OPERATOR_JOINTS, VELOCITY
from teleop_eval.core.mappings.guarded import checked_ideal
from teleop_eval.core.mappings.registry import is_modelled
from teleop_eval.core.mappings.unmodelled import NOT_MODELLED
from teleop_eval.core.reachable_cells import ReachableSet

if TYPE_CHECKING:
    from teleop_eval.core.arm import ArmEvaluator

_NEVER = 'the operator input that this mapping needs never came'


class CandidateRun:
    """Runs a model of its own for each configured mapping of an arm with a known robot."""

    def __init__(self, arm: ArmEvaluator, period_s: float) -> None:
        self._arm = arm
        self._period_s = period_s
        self._candidates: dict[str, _Candidate] = {}
        self.why_not: dict[str, str] = {}
        for label, mapping in arm.arm.mappings.items():
            if arm.robot is None:
                self.why_not[label] = NO_ROBOT
            elif not is_modelled(mapping.kind):
                self.why_not[label] = NOT_MODELLED
            else:
                try:
                    model = make_mapping(label, mapping, arm.operator, arm.robot)
                except TeleopEvalError as error:
                    self.why_not[label] = str(error).removesuffix('.')
                    continue
                self._candidates[label] = _Candidate(arm, model, period_s)

    def interrupt(self) -> None:
        """Pass over a stretch without data."""
        for one in self._candidates.values():
            one.interrupt()

    def take_tool_rotation(self, hand_to_tool: np.ndarray) -> None:
        """Use the hand-to-tool rotation (4,) x, y, z, w that was estimated from motion."""
        for one in self._candidates.values():
            one.model.take_tool_rotation(hand_to_tool)

    def add(self, states: CellStates, tracks: dict[str, Track], robot_joints: np.ndarray,
            anchors: dict[int, Anchor], ends: dict[int, Anchor]) -> None:
        """
        Add one window; `robot_joints` (m, n) of the chain carry a moving shoulder.

        `anchors` and `ends` are the poses at beginning and end of its stretches.
        """
        cells = operator_cells(
            tracks, self._arm.setup.operator_joint_names, robot_joints,
            stretch=states.stretch, anchors=anchors, period_s=self._period_s)
        # Where the robot was driven is not where this mapping would have taken it.
        cells = dataclasses.replace(cells, robot_m=None, robot_xyzw=None)
        operator = tracks.get('u_o')
        for one in self._candidates.values():
            if one.model.needs in tracks:
                one.add(cells, states, ends, None if operator is None else operator.values)

    def summary(self, reachable: ReachableSet | None) -> dict[str, Any]:
        """Return the predictions by mapping, in plain types."""
        found: dict[str, Any] = {}
        lacking = self._arm.operator.missing or 'operator.hand_topic'
        for label in self._arm.arm.mappings:
            one = self._candidates.get(label)
            why = self.why_not.get(label, '') if one is None else one.why_not
            metrics = {} if one is None or one.accumulator is None else (
                one.accumulator.metrics(reachable, no_operator=f'needs {lacking}'))
            found[label] = {
                'prediction': NOTE, 'why_not': why,
                'metrics': {name: metric.to_dict() for name, metric in metrics.items()}}
        return found


class _Candidate:
    """One mapping's prediction."""

    def __init__(self, arm: ArmEvaluator, model: MappingModel, period_s: float) -> None:
        self._arm = arm
        self._period_s = period_s
        self.model = model
        # Made with the first ideal command, which shows whether the mapping turns the tool.
        self.accumulator: CandidateAccumulator | None = None
        self.why_not = _NEVER
        self._anchors: dict[int, Anchor] = {}
        self._last: Anchor | None = None

    def interrupt(self) -> None:
        self.model.restart()
        if self.accumulator is not None:
            self.accumulator.restart()

    def add(self, cells: OperatorCells, states: CellStates, ends: dict[int, Anchor],
            operator: np.ndarray | None) -> None:
        ideal = self._ideal(cells, ends)
        if isinstance(ideal, str):
            self.why_not = ideal
            self.interrupt()
            return
        if self.accumulator is None:
            if not np.isfinite(ideal.positions_m).any():
                return
            self.accumulator = self._made(ideal)
            self.why_not = ''
        robot = self._arm.robot
        assert robot is not None  # else there is no candidate
        if self.model.gives == VELOCITY:
            raw = ideal.raw_velocities_mps
            operator = None if raw is None else raw / robot.reach.length_m
        self.accumulator.add(ideal, usable=states.usable, run=states.run,
                             robot_joints=cells.robot_joints, operator=operator)

    def _made(self, ideal: Ideal) -> CandidateAccumulator:
        assert self._arm.robot is not None  # else there is no candidate
        turns = ideal.orientations is not None or self.model.estimates_tool_rotation
        return CandidateAccumulator(
            self._arm.robot, period_s=self._period_s,
            between_joints=self.model.needs == OPERATOR_JOINTS and ideal.joints is not None,
            with_orientation=turns and not self.model.estimates_tool_rotation,
            gives_velocity=self.model.gives == VELOCITY)

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
        end, robot = ends.get(stretch), self._arm.robot
        if end is None or end.hand_m is None or stretch not in self._anchors or robot is None or (
                self.model.gives == VELOCITY):
            return
        turn = None if end.hand_xyzw is None else end.hand_xyzw[None]
        part = checked_ideal(self.model, OperatorCells(
            hand_m=end.hand_m[None], hand_xyzw=turn, joints=None, joint_names=(),
            robot_joints=np.zeros((1, len(robot.chain.joint_names))), period_s=self._period_s,
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
