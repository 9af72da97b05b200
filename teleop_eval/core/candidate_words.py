# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Why a mapping could not be predicted, or its orientations not: the true cause in words."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from teleop_eval.core.boundaries import CellStates
from teleop_eval.core.history import Track
from teleop_eval.core.mappings import Anchor, MappingModel
from teleop_eval.core.mappings.base import HAND, OPERATOR_JOINTS, RATE_INPUT, VELOCITY

FOLLOWED = 'followed'
POSITIONS_ONLY = 'positions only'
BY_JOINTS = 'by the joints'
_INPUTS = {HAND: 'the position of the hand', OPERATOR_JOINTS: "the operator's joints",
           RATE_INPUT: 'the rate input (operator.rate_topic)'}
NOT_ESTIMATED = ("the tool's orientation is not predicted, since hand_to_tool_xyzw is not "
                 'configured and could not be estimated')
NO_TURNS = "the tool's orientation is not predicted, since the hand's messages have none"
NOT_GIVEN = "the mapping tells nothing of the tool's orientation"


@dataclass
class Seen:
    """What came during a run, to tell afterwards what was missing."""

    tracks: set[str] = field(default_factory=set)
    active: bool = False
    engaged: bool = False
    usable: bool = False
    anchored: bool = False

    def add(self, states: CellStates, tracks: dict[str, Track],
            anchors: dict[int, Anchor]) -> None:
        """Note what one window has."""
        for name, track in tracks.items():
            if name not in self.tracks and track.valid.any():
                self.tracks.add(name)
        known = states.label >= 0
        self.active |= bool(known.any())
        self.engaged |= bool((states.engaged & known).any())
        self.usable |= bool(np.any(states.usable))
        self.anchored |= any(
            one.hand_m is not None and one.robot_m is not None for one in anchors.values())

    @property
    def nothing_counts(self) -> str:
        """Return why no cell counts, '' if one does."""
        if self.usable:
            return ''
        if not self.active:
            return 'no mapping was active, so no motion counts'
        if not self.engaged:
            return 'the operator was never engaged, so no motion counts'
        return 'every engagement was over before the motion had settled (time.settling_s)'

    def why_not(self, model: MappingModel) -> str:
        """Return why a model that raised nothing gave no command at all."""
        if why := self.nothing_counts:
            return why
        if model.needs not in self.tracks:
            return f'{_INPUTS[model.needs]}, which this mapping needs, never came'
        if model.anchored and 'u_r' not in self.tracks:
            return ('where the tool was at an engagement, which this mapping needs, is not known: '
                    "the robot's joints never came")
        if model.anchored and model.needs == HAND and not self.anchored:
            return ('no engagement began where hand and tool were both seen, and this mapping '
                    'counts from there')
        if model.needs == HAND and 'hand_turn' not in self.tracks:
            return "the hand's messages have no orientation, which this mapping needs"
        if model.gives == VELOCITY:
            return ('it is not known where the velocities lead to, since each engagement began '
                    'with some of the input missing')
        return 'the mapping gave no command in any cell'
