# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The ideal command of each window, cell by cell under the mapping that was active there."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from teleop_eval.core.anchors import AnchorBook
from teleop_eval.core.boundaries import CellStates
from teleop_eval.core.candidate_run import CandidateRun
from teleop_eval.core.geometry import RobotGeometry
from teleop_eval.core.history import Track
from teleop_eval.core.mapping_input import operator_cells
from teleop_eval.core.mappings import Anchor, Ideal, MappingModel
from teleop_eval.core.mappings.base import HAND, RATE_INPUT, VELOCITY
from teleop_eval.core.mappings.guarded import checked_ideal
from teleop_eval.core.window import Span

if TYPE_CHECKING:
    from teleop_eval.core.arm import ArmEvaluator


class IdealCommand:
    """
    Runs the mapping models of one arm.

    Attributes
    ----------
    anchors
        Where hand and tool were when each stretch began.
    faults
        By label, what a model did wrong last.
    made
        Labels of which an ideal command was made.
    candidates
        Every configured mapping on the same motion, None unless asked for.

    """

    def __init__(self, arm: ArmEvaluator, period_s: float) -> None:
        self._arm = arm
        self._period_s = period_s
        self.anchors = AnchorBook()
        self.faults: dict[str, str] = {}
        self.made: set[str] = set()
        self.candidates = CandidateRun(arm, period_s) if arm.predicts else None

    def notes(self) -> list[str]:
        """Return the sentences on anchors, if errors of any mapping depend on them."""
        depends = any(model.anchored and model.needs != RATE_INPUT
                      for model in self._arm.setup.models.values())
        return self.anchors.notes(self._arm.name) if depends else []

    def interrupt(self) -> None:
        """Pass over a stretch without data."""
        self.anchors.interrupt()
        if self.candidates is not None:
            self.candidates.interrupt()
        for model in self._arm.setup.models.values():
            model.restart()

    def tracks(self, span: Span, states: CellStates, tracks: dict[str, Track],
               robot_joints: np.ndarray) -> dict[str, Track]:
        """
        Return u_i, turn_i, q_i, and w_i, w_o, spin_i of velocity kinds, as far as known.

        `robot_joints` (m, n) of the chain carry a moving shoulder.
        """
        arm, joined = self._arm, dict[str, Track]()
        if arm.robot is None:
            return joined
        anchors: dict[int, Anchor] = {}
        if any(model.anchored for model in arm.setup.models.values()):
            if (u_r := tracks.get('u_r')) is not None:
                shoulder = arm.robot.shoulder.positions(robot_joints)
                tracks = tracks | {'p_r': Track.computed(
                    shoulder + arm.robot.reach.length_m * u_r.values, u_r.valid)}
            anchors = self.anchors.of_window(span, states, tracks)
        if self.candidates is not None:
            self.candidates.add(states, tracks, robot_joints, anchors, self.anchors.ends)
        for index in np.unique(states.label[states.label >= 0]):
            label = arm.boundaries.labels[index]
            model = arm.setup.models.get(label)
            here = states.label == index
            if model is None or model.needs not in tracks:
                continue
            cells = operator_cells(
                tracks, arm.setup.operator_joint_names, robot_joints,
                stretch=np.where(here, states.stretch, -1), anchors=anchors,
                period_s=self._period_s)
            ideal = checked_ideal(model, cells)
            if isinstance(ideal, str):
                self.faults[label] = ideal
                arm.problems.say(f'{arm.name}: mapping {label!r} of kind '
                                 f'{arm.arm.mappings[label].kind}: {ideal}; its author must '
                                 'mend it, other mappings are not affected.')
                continue
            if np.isfinite(ideal.positions_m).any():
                self.made.add(label)
            for name, track in tracks_of(model, ideal, tracks, robot_joints, arm.robot).items():
                old = joined.get(name) or Track(
                    np.full(track.values.shape, np.nan), np.zeros(len(here), dtype=bool))
                joined[name] = Track(np.where(here[:, None], track.values, old.values),
                                     np.where(here, track.valid, old.valid))
        return joined


def tracks_of(model: MappingModel, ideal: Ideal, operator: dict[str, Track],
              robot_joints: np.ndarray, robot: RobotGeometry) -> dict[str, Track]:
    """Return the tracks of one model's ideal command."""
    source, turn = operator[model.needs], operator.get('hand_turn')
    valid = source.valid
    turned = valid if model.needs != HAND or turn is None else valid & turn.valid
    tracks: dict[str, Track] = {}
    if model.gives == VELOCITY:
        for name, values, scale, good in (
                ('w_i', ideal.velocities_mps, robot.reach.length_m, valid),
                ('w_o', ideal.raw_velocities_mps, robot.reach.length_m, valid),
                ('spin_i', ideal.turn_rates_rad_s, 1.0, turned)):
            if values is not None:
                tracks[name] = Track.computed(values / scale, good)
        return tracks
    # A sliding joint carries the shoulder: the ideal one belongs to the ideal joints.
    carried = robot_joints if ideal.joints is None else ideal.joints
    tracks['u_i'] = Track.computed(robot.normalise(ideal.positions_m, carried), valid)
    if ideal.orientations is not None:
        tracks['turn_i'] = Track.computed(ideal.orientations, turned)
    if ideal.joints is not None:
        tracks['q_i'] = Track.computed(ideal.joints, valid)
    return tracks
