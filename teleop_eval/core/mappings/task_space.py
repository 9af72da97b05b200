# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Task-space mapping: the tool follows the hand, scaled about a centre."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.errors import ConfigError
from teleop_eval.core.mappings.base import Ideal, MappingModel, OperatorCells
from teleop_eval.core.mappings.scaling import ScaleSettings, scale_of
from teleop_eval.core.mappings.settings import quaternion_fault
from teleop_eval.core.parameters import DOUBLES, parameter

if TYPE_CHECKING:
    from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry


class TaskSpaceMapping(MappingModel):
    """
    p_i = c_r + S R (p_o - c_o) and R_i = R R_o Q.

    S is `scale` or `scale_xyz`, times L_r / L_o if normalized; the centres are the shoulders
    unless given; Q is the fixed rotation from hand to tool, given or estimated by the arm
    evaluator.
    """

    @dataclass(frozen=True)
    class Settings(ScaleSettings):
        """Scale, centres and the rotation from hand to tool."""

        operator_center_m: tuple[float, ...] | None = parameter(
            DOUBLES, None, 'Operator point that maps to robot_center_m; not given: the shoulder.',
            unit='m', size=3)
        robot_center_m: tuple[float, ...] | None = parameter(
            DOUBLES, None, 'Robot point; not given: the shoulder.', unit='m', size=3)
        hand_to_tool_xyzw: tuple[float, ...] | None = parameter(
            DOUBLES, None, 'Rotation from hand to tool, quaternion x, y, z, w; not given: '
            'estimated from the first engaged 10 s.', size=4)

        def fault(self, key: str) -> str:
            """Return the sentence on a scale given twice or a rotation that is none, else ''."""
            return super().fault(key) or quaternion_fault(
                f'{key}.hand_to_tool_xyzw', self.hand_to_tool_xyzw)

    def __init__(self, label: str, settings: Settings, operator: OperatorGeometry,
                 robot: RobotGeometry) -> None:
        self._robot = robot
        self._axes = operator.axes
        center = settings.operator_center_m
        if center is None and operator.shoulder_m is None and not operator.shoulder_moves:
            raise ConfigError(
                f'mapping {label!r} needs a centre; give operator.shoulder_m or '
                f'mappings.{label}.operator_center_m.')
        self._operator_center = None if center is None else np.array(center)
        self._shoulder = operator.shoulder_m
        self._robot_center = (None if settings.robot_center_m is None
                              else np.array(settings.robot_center_m))
        self._scale = scale_of(label, settings, operator, robot)
        self.scales_by_arm_lengths = settings.normalized
        given = settings.hand_to_tool_xyzw
        self.hand_to_tool = None if given is None else rotations.normalize(np.array(given))
        self.estimates_tool_rotation = given is None

    def take_tool_rotation(self, hand_to_tool: np.ndarray) -> None:
        """Use an estimated rotation (4,) x, y, z, w unless one is configured."""
        if self.hand_to_tool is None:
            self.hand_to_tool = hand_to_tool

    def turned(self, hand_xyzw: np.ndarray) -> np.ndarray:
        """Return R R_o (m, 4), the hand's orientation in robot axes."""
        return rotations.multiply(self._axes, hand_xyzw)

    def ideal(self, cells: OperatorCells) -> Ideal:
        """Return tool positions (m, 3), and orientations once hand-to-tool is known."""
        assert cells.hand_m is not None  # the arm evaluator asks only if it is there
        center = (self._robot.shoulder.positions(cells.robot_joints)
                  if self._robot_center is None else self._robot_center)
        offset = rotations.rotate(self._axes, cells.hand_m - self._center(cells))
        orientations = None
        if cells.hand_xyzw is not None and self.hand_to_tool is not None:
            orientations = rotations.multiply(self.turned(cells.hand_xyzw), self.hand_to_tool)
        return Ideal(center + self._scale * offset, orientations, None)

    def _center(self, cells: OperatorCells) -> np.ndarray:
        """Return the operator's centre (3,) or (m, 3), NaN where the shoulder is not known."""
        for center in (self._operator_center, cells.shoulder_m, self._shoulder):
            if center is not None:
                return center
        return np.full(3, np.nan)
