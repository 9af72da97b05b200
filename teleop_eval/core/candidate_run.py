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
from teleop_eval.core.candidate_start import StartPosture
from teleop_eval.core.candidate_words import Seen
from teleop_eval.core.candidates import NOTE, POSTURE_RULE
from teleop_eval.core.errors import TeleopEvalError
from teleop_eval.core.geometry import NO_ROBOT
from teleop_eval.core.history import Track
from teleop_eval.core.mapping_input import operator_cells
from teleop_eval.core.mappings import Anchor, make_mapping
from teleop_eval.core.mappings.base import HAND
from teleop_eval.core.mappings.registry import is_modelled
from teleop_eval.core.mappings.unmodelled import NOT_MODELLED
from teleop_eval.core.one_candidate import Candidate
from teleop_eval.core.reachable_cells import ReachableSet

if TYPE_CHECKING:
    from teleop_eval.core.arm import ArmEvaluator


class CandidateRun:
    """Runs a model of its own for each configured mapping of an arm with a known robot."""

    def __init__(self, arm: ArmEvaluator, period_s: float) -> None:
        self._arm = arm
        self._period_s = period_s
        self._candidates: dict[str, Candidate] = {}
        self._start, self._seen = StartPosture(), Seen()
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
                self._candidates[label] = Candidate(arm.robot, model, period_s)

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

        `anchors` and `ends` are the poses at beginning and end of its stretches. Postures begin
        near the measured one of the first usable cell.
        """
        start = self._start.of_window(states.usable, tracks.get('q_r'), robot_joints)
        self._seen.add(states, tracks, anchors)
        cells = operator_cells(
            tracks, self._arm.setup.operator_joint_names, robot_joints,
            stretch=states.stretch, anchors=anchors, period_s=self._period_s)
        # Where the robot was driven is not where this mapping would have taken it.
        cells = dataclasses.replace(cells, robot_m=None, robot_xyzw=None)
        operator, turn = tracks.get('u_o'), tracks.get('hand_turn')
        for one in self._candidates.values():
            if one.model.needs in tracks:
                turned = None if turn is None or one.model.needs != HAND else turn.valid
                one.add(cells, states, ends, start=start, turned=turned,
                        operator=None if operator is None else operator.values)

    def summary(self, reachable: ReachableSet | None) -> dict[str, Any]:
        """Return the predictions by mapping, in plain types."""
        found: dict[str, Any] = {}
        lacking = self._arm.operator.missing or 'operator.hand_topic'
        for label in self._arm.arm.mappings:
            one = self._candidates.get(label)
            if one is None:
                found[label] = _entry(why_not=self.why_not.get(label, ''))
            elif why := one.why_not(self._seen):
                found[label] = _entry(why_not=why)
            else:
                metrics = one.metrics(
                    reachable, self._seen, no_operator=f'needs {lacking}')
                found[label] = _entry(
                    postures=POSTURE_RULE if one.searches else '',
                    orientation=one.orientation(self._seen), caveats=one.caveats(),
                    metrics={name: metric.to_dict() for name, metric in metrics.items()})
        return found


def _entry(**parts: Any) -> dict[str, Any]:
    return {'prediction': NOTE, 'why_not': '', 'postures': '', 'orientation': '', 'caveats': [],
            'metrics': {}, **parts}
