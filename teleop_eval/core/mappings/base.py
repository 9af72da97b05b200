# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
What a mapping kind is.

A kind is one class in one file. It gets the arm's geometry and its own settings once, then
turns the operator cells of one window after the other into the ideal command: what a stack
that applies this mapping without delay and without error would command.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, ClassVar

import numpy as np

from teleop_eval.core.mappings.settings import MappingSettings

if TYPE_CHECKING:
    from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry

# Operator tracks that a model can be computed from.
HAND, OPERATOR_JOINTS, RATE_INPUT = 'hand', 'operator_joints', 'rate_input'
NEEDS = (HAND, OPERATOR_JOINTS, RATE_INPUT)
POSE, VELOCITY = 'pose', 'velocity'
GIVES = (POSE, VELOCITY)


@dataclass(frozen=True)
class Anchor:
    """
    Poses at the moment an engagement (or another mapping) began, None where not known.

    `hand_m` (3,) and `hand_xyzw` (4,) in the frame of the hand's messages; `robot_m` (3,) and
    `robot_xyzw` (4,) of the tool in the robot's base link; quaternions x, y, z, w.
    """

    hand_m: np.ndarray | None = None
    hand_xyzw: np.ndarray | None = None
    robot_m: np.ndarray | None = None
    robot_xyzw: np.ndarray | None = None


@dataclass(frozen=True)
class OperatorCells:
    """
    Motion on the grid of one window, NaN where there is none.

    `hand_m` (m, 3) and `hand_xyzw` (m, 4) x, y, z, w in the frame of the hand's messages;
    `joints` (m, d) of the operator's arm with their `joint_names`; `robot_joints` (m, n), only
    to carry a moving robot shoulder. `rate_input` (m, 6): linear and angular, or stick axes
    from -1 to 1 in that order. `shoulder_m` (m, 3): the operator's shoulder cell by cell.
    `robot_m` (m, 3) and `robot_xyzw` (m, 4): the tool as measured, in the base link. Each is
    None where there is no such input. `period_s`: length of a cell. `stretch` (m,): number of
    the engagement that each cell belongs to, -1 outside of any; `anchors` by that number.
    """

    hand_m: np.ndarray | None
    hand_xyzw: np.ndarray | None
    joints: np.ndarray | None
    joint_names: tuple[str, ...]
    robot_joints: np.ndarray
    shoulder_m: np.ndarray | None = None
    rate_input: np.ndarray | None = None
    robot_m: np.ndarray | None = None
    robot_xyzw: np.ndarray | None = None
    period_s: float = 0.0
    stretch: np.ndarray | None = None
    anchors: Mapping[int, Anchor] = field(default_factory=dict)

    def __len__(self) -> int:
        """Return the number of cells."""
        return len(self.robot_joints)


@dataclass(frozen=True)
class Ideal:
    """
    Ideal command on the grid, NaN where it cannot be known.

    `positions_m` (m, 3) of the tool in the robot's base link; `orientations` (m, 4)
    x, y, z, w or None; `joints` (m, n) in the order of the robot's chain for a mapping between
    joints, else None. Kinds that give velocities: `velocities_mps` and `turn_rates_rad_s`
    (m, 3) of the tool in the base link, and `raw_velocities_mps` (m, 3), the input times gain
    before dead band and cap.
    """

    positions_m: np.ndarray
    orientations: np.ndarray | None = None
    joints: np.ndarray | None = None
    velocities_mps: np.ndarray | None = None
    turn_rates_rad_s: np.ndarray | None = None
    raw_velocities_mps: np.ndarray | None = None


class MappingModel:
    """
    Base of all mapping kinds: one object for each configured mapping of an arm.

    A kind sets what differs of the attributes below, on the class or on the object, and
    defines `__init__` and `ideal`.

    Attributes
    ----------
    Settings
        Frozen dataclass of the kind's own parameters.
    modelled
        False if there is no ideal command at all.
    needs
        Operator track it is computed from: 'hand', 'operator_joints' or 'rate_input'.
    gives
        'pose', or 'velocity' if errors are to be computed on velocities.
    anchored
        True if it needs the poses at the beginning of each engagement.
    scales_by_arm_lengths
        True if the operator's arm length enters, so that its uncertainty does.
    turns_move
        True if there are no positions without the hand's orientation.
    estimates_tool_rotation
        True if hand-to-tool is not configured and must be estimated from motion.

    """

    Settings: ClassVar[type[MappingSettings]] = MappingSettings
    modelled: ClassVar[bool] = True
    needs: str = HAND
    gives: str = POSE
    anchored: bool = False
    scales_by_arm_lengths: bool = False
    turns_move: bool = False
    estimates_tool_rotation: bool = False

    def __init__(self, label: str, settings: MappingSettings, operator: OperatorGeometry,
                 robot: RobotGeometry) -> None:
        """
        Take what stays the same during a run.

        Raises
        ------
        ConfigError
            If the settings do not fit the arms, with one sentence that says what to do.

        """

    def take_tool_rotation(self, hand_to_tool: np.ndarray) -> None:
        """Use the hand-to-tool rotation (4,) x, y, z, w estimated from motion, if needed."""

    def restart(self) -> None:
        """Forget what spans windows, at the start of a new segment."""

    def ideal(self, cells: OperatorCells) -> Ideal:
        """Return the ideal command for the operator cells of the next window."""
        raise NotImplementedError(f'{type(self).__name__} does not define ideal()')
