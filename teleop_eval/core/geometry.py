# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Geometry of one pair of arms: chain, shoulders, arm lengths, normalised positions."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.reach import Reach, Shoulder, find_reach, find_shoulder
from teleop_eval.core.settings import ArmSettings, OperatorSettings
from teleop_eval.core.urdf import parse_urdf

# Shoulder to wrist and to finger tip as shares of stature: Drillis & Contini 1966, as given
# in Winter, Biomechanics and Motor Control of Human Movement, Fig. 4.1. Published tables
# differ by the relative uncertainty below.
STATURE_SHARE = {'wrist': 0.332, 'finger_tip': 0.440}
STATURE_UNCERTAINTY = 0.12


@dataclass(frozen=True)
class OperatorGeometry:
    """
    The operator's arm in the frame of the hand's messages.

    `shoulder_m` (3,) or None; `length_m` or None with `scale_uncertainty` relative;
    `axes` quaternion x, y, z, w that turns operator axes into robot axes.
    """

    shoulder_m: np.ndarray | None
    length_m: float | None
    scale_uncertainty: float | None
    axes: np.ndarray
    note: str

    def normalise(self, positions_m: np.ndarray) -> np.ndarray | None:
        """Return u_o (n, 3) = R (p_o - s_o) / L_o, None where a length is not known."""
        if self.shoulder_m is None or self.length_m is None:
            return None
        return rotations.rotate(self.axes, (positions_m - self.shoulder_m) / self.length_m)

    @property
    def missing(self) -> str:
        """Return what is not configured, '' if all is."""
        lacking = []
        if self.shoulder_m is None:
            lacking.append('operator.shoulder_m')
        if self.length_m is None:
            lacking.append('operator.arm_length_m (or stature_m)')
        return ' and '.join(lacking)


@dataclass(frozen=True)
class RobotGeometry:
    """The robot's arm in its base link: chain, shoulder, reach, names of sliding joints."""

    chain: SerialChain
    shoulder: Shoulder
    reach: Reach
    sliding: frozenset[str]

    def unit_of(self, joint: str) -> str:
        """Return the unit of a joint's position, 'rad' or 'm'."""
        return 'm' if joint in self.sliding else 'rad'

    def normalise(self, positions_m: np.ndarray, joints: np.ndarray) -> np.ndarray:
        """Return u_r (n, 3) = (p_r - s_r) / L_r; joints (n, d) carry a moving shoulder."""
        return (positions_m - self.shoulder.positions(joints)) / self.reach.length_m


def operator_geometry(settings: OperatorSettings) -> OperatorGeometry:
    """Return the operator's geometry from what the configuration gives."""
    length, uncertainty, note = settings.arm_length_m, None, ''
    if length is not None:
        if settings.arm_length_sd_m is not None:
            uncertainty = settings.arm_length_sd_m / length
        note = f'operator arm length {length:.3f} m as configured'
    elif settings.stature_m is not None:
        share = STATURE_SHARE[settings.tracked_point]
        length, uncertainty = share * settings.stature_m, STATURE_UNCERTAINTY
        note = (f'operator arm length {length:.3f} m = {share} x stature {settings.stature_m:g} '
                f'm (+-{STATURE_UNCERTAINTY:.0%}, shoulder to {settings.tracked_point}); '
                'measure it for better')
    shoulder = None if settings.shoulder_m is None else np.array(settings.shoulder_m)
    return OperatorGeometry(
        shoulder, length, uncertainty, rotations.normalize(np.array(settings.axes_xyzw)), note)


def robot_geometry(settings: ArmSettings, urdf: str, *, source: str) -> RobotGeometry:
    """
    Return the robot's geometry from its description.

    Raises
    ------
    DescriptionError
        If the description cannot be used or a configured link is not in it.

    """
    robot = settings.robot
    description = parse_urdf(urdf, source=source)
    chain = SerialChain.from_description(description, robot.base_link or '', robot.tip_link or '')
    shoulder = find_shoulder(chain, robot.shoulder_link)
    sliding = frozenset(
        name for name, joint in description.joints.items() if joint.kind == 'prismatic')
    return RobotGeometry(chain, shoulder, find_reach(chain, shoulder), sliding)
