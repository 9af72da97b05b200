# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
What a mapping kind is, and how the configured one is made.

A kind is one class in one file. It gets the arm's geometry and its own settings once, then
turns operator cells into the ideal command, cell by cell and without memory of its own
beyond what `Ideal` shows.
"""

from __future__ import annotations

import difflib
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry
from teleop_eval.core.settings import MappingSettings


@dataclass(frozen=True)
class OperatorCells:
    """
    Operator motion on the grid, NaN where there is none.

    `hand_m` (m, 3) in the frame of the hand's messages; `hand_xyzw` (m, 4) x, y, z, w or
    None; `joints` (m, d) of the operator arm with their `joint_names`, or None;
    `robot_joints` (m, n), only to carry a moving robot shoulder.
    """

    hand_m: np.ndarray | None
    hand_xyzw: np.ndarray | None
    joints: np.ndarray | None
    joint_names: tuple[str, ...]
    robot_joints: np.ndarray


@dataclass(frozen=True)
class Ideal:
    """
    Ideal command on the grid.

    `positions_m` (m, 3) of the tool in the robot's base link; `orientations` (m, 4)
    x, y, z, w or None; `joints` (m, n) for a mapping between joints, else None.
    """

    positions_m: np.ndarray
    orientations: np.ndarray | None
    joints: np.ndarray | None


class MappingModel(Protocol):
    """One configured mapping."""

    needs: str
    """Operator input the model is computed from: 'hand' or 'operator_joints'."""

    estimates_tool_rotation: bool
    """True if hand-to-tool is not configured and must be estimated from motion."""

    def take_tool_rotation(self, hand_to_tool: np.ndarray) -> None:
        """Use the hand-to-tool rotation (4,) x, y, z, w estimated from motion, if needed."""
        ...

    def ideal(self, cells: OperatorCells) -> Ideal:
        """Return the ideal command for operator cells."""
        ...


def make_mapping(label: str, settings: MappingSettings, operator: OperatorGeometry,
                 robot: RobotGeometry) -> MappingModel:
    """
    Return the model of one configured mapping.

    Raises
    ------
    ConfigError
        If the kind is unknown or its settings do not fit the arms.

    """
    # Imported here because each kind builds on this module.
    from teleop_eval.core.mappings.joint_space import JointSpaceMapping
    from teleop_eval.core.mappings.task_space import TaskSpaceMapping

    kinds: dict[str, Callable[..., MappingModel]] = {
        'joint_space': JointSpaceMapping, 'task_space': TaskSpaceMapping}
    if settings.kind not in kinds:
        near = difflib.get_close_matches(settings.kind, kinds, 1)
        hint = f'; did you mean {near[0]!r}?' if near else '.'
        raise ConfigError(
            f'mapping {label!r} has kind {settings.kind!r}, but there are only '
            f'{" and ".join(kinds)}{hint}')
    return kinds[settings.kind](label, settings, operator, robot)
