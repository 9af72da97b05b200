# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Relative (indexed) mapping: the tool repeats the hand's motion since the clutch closed."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.mappings.base import Anchor, Ideal, MappingModel, OperatorCells
from teleop_eval.core.mappings.scaling import ScaleSettings, scale_of
from teleop_eval.core.mappings.settings import quaternion_fault
from teleop_eval.core.parameters import DOUBLES, STRING, parameter

if TYPE_CHECKING:
    from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry

WORLD, TOOL = 'world', 'tool'


class RelativeMapping(MappingModel):
    """
    Increments since engagement, anchored at the robot's pose then.

    With hand p_o, R_o and tool p_r, R_r, those at engagement marked 0, R from operator to robot
    axes, S the scale along the axes of the robot's base:

    - `frame: world`: p_i = p_r0 + S R (p_o - p_o0) and R_i = R (R_o R_o0^T) R^T R_r0.
    - `frame: tool`: what the hand does in its own axes at engagement, the tool does in its own
      axes at engagement: p_i = p_r0 + S R_r0 Q^T R_o0^T (p_o - p_o0) and
      R_i = R_r0 Q^T R_o0^T R_o Q, with Q the rotation from hand to tool.

    A stretch whose anchor is not known has no ideal command.
    """

    @dataclass(frozen=True)
    class Settings(ScaleSettings):
        """Scale, frame and the rotation from hand to tool."""

        frame: str = parameter(
            STRING, WORLD, '"world": increments along the axes of operator and robot base; '
            '"tool": along those of hand and tool at engagement.', choices=(WORLD, TOOL))
        hand_to_tool_xyzw: tuple[float, ...] | None = parameter(
            DOUBLES, None, 'Rotation from hand to tool, quaternion x, y, z, w, for frame: tool; '
            'not given: none.', size=4)

        def fault(self, key: str) -> str:
            """Return the sentence on settings that do not go together, else ''."""
            if self.frame == WORLD and self.hand_to_tool_xyzw is not None:
                return (f'{key}.hand_to_tool_xyzw has no effect with frame: world; remove it or '
                        'choose frame: tool.')
            return super().fault(key) or quaternion_fault(
                f'{key}.hand_to_tool_xyzw', self.hand_to_tool_xyzw)

    anchored = True

    def __init__(self, label: str, settings: Settings, operator: OperatorGeometry,
                 robot: RobotGeometry) -> None:
        self._axes = operator.axes
        self._scale = scale_of(label, settings, operator, robot)
        self.scales_by_arm_lengths = settings.normalized
        self._in_tool = self.turns_move = settings.frame == TOOL
        given = settings.hand_to_tool_xyzw or (0.0, 0.0, 0.0, 1.0)
        self._hand_to_tool = rotations.normalize(np.array(given))

    def ideal(self, cells: OperatorCells) -> Ideal:
        """Return the tool pose (m, 3) and (m, 4), NaN outside of anchored stretches."""
        assert cells.hand_m is not None and cells.stretch is not None  # asked for only with them
        positions = np.full((len(cells), 3), np.nan)
        turns = np.full((len(cells), 4), np.nan)
        for stretch, anchor in cells.anchors.items():
            here = cells.stretch == stretch
            hand_turns = None if cells.hand_xyzw is None else cells.hand_xyzw[here]
            positions[here] = self._positions(cells.hand_m[here], anchor)
            turns[here] = self._turns(hand_turns, anchor)
        return Ideal(positions, turns if np.isfinite(turns).any() else None)

    def _positions(self, hand_m: np.ndarray, anchor: Anchor) -> np.ndarray:
        if anchor.hand_m is None or anchor.robot_m is None:
            return np.full(hand_m.shape, np.nan)
        axes = self._axes
        if self._in_tool:
            if anchor.hand_xyzw is None or anchor.robot_xyzw is None:
                return np.full(hand_m.shape, np.nan)
            axes = self._hand_to_robot_axes(anchor.hand_xyzw, anchor.robot_xyzw)
        return anchor.robot_m + self._scale * rotations.rotate(axes, hand_m - anchor.hand_m)

    def _turns(self, hand_xyzw: np.ndarray | None, anchor: Anchor) -> np.ndarray | float:
        start, tool = anchor.hand_xyzw, anchor.robot_xyzw
        if hand_xyzw is None or start is None or tool is None:
            return np.nan
        if self._in_tool:
            axes = self._hand_to_robot_axes(start, tool)
            return rotations.multiply(
                axes, rotations.multiply(hand_xyzw, self._hand_to_tool))
        turned = rotations.multiply(hand_xyzw, rotations.conjugate(start))
        return rotations.multiply(
            rotations.multiply(self._axes, turned),
            rotations.multiply(rotations.conjugate(self._axes), tool))

    def _hand_to_robot_axes(self, hand_xyzw: np.ndarray, tool_xyzw: np.ndarray) -> np.ndarray:
        """Return R_r0 Q^T R_o0^T (4,), from operator axes to those of the robot's base."""
        back = rotations.multiply(hand_xyzw, self._hand_to_tool)
        return rotations.multiply(tool_xyzw, rotations.conjugate(back))
