# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Geometry of one pair of arms: chain, shoulders, arm lengths, normalised positions."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.arm_calibration import ArmCalibration
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.operator_arm import OperatorArm
from teleop_eval.core.operator_settings import OperatorSettings
from teleop_eval.core.reach import Reach, Shoulder, find_reach, find_shoulder
from teleop_eval.core.settings import ArmSettings
from teleop_eval.core.urdf import parse_urdf

# Shoulder to wrist and to finger tip as shares of stature: Drillis & Contini 1966, as given
# in Winter, Biomechanics and Motor Control of Human Movement, Fig. 4.1. Published tables
# differ by the relative uncertainty below.
STATURE_SHARE = {'wrist': 0.332, 'finger_tip': 0.440}
STATURE_UNCERTAINTY = 0.12
NO_ROBOT = 'this arm has no usable robot description'


@dataclass(frozen=True)
class OperatorGeometry:
    """
    The operator's arm in the frame of the hand's messages.

    `shoulder_m` (3,), None where it moves or is not known; `length_m` or None with
    `scale_uncertainty` relative; `axes` quaternion x, y, z, w that turns operator axes into
    robot axes; `note` where all this is from. `arm`: the chain that the hand follows from, if
    it does. `shoulder_moves`: by a topic or by joints. `lacking`: a clause on why shoulder or
    length are not known although their source is configured.
    """

    shoulder_m: np.ndarray | None
    length_m: float | None
    scale_uncertainty: float | None
    axes: np.ndarray
    note: str
    arm: OperatorArm | None = None
    shoulder_moves: bool = False
    lacking: str = ''

    def normalise(self, positions_m: np.ndarray,
                  shoulder_m: np.ndarray | None = None) -> np.ndarray | None:
        """
        Return u_o (n, 3) = R (p_o - s_o) / L_o, None where a length is not known.

        `shoulder_m` (n, 3) is needed where the shoulder moves.
        """
        shoulder = self.shoulder_m if shoulder_m is None else shoulder_m
        if shoulder is None or self.length_m is None:
            return None
        return rotations.rotate(self.axes, (positions_m - shoulder) / self.length_m)

    @property
    def missing(self) -> str:
        """Return what is not configured, '' if all is."""
        lacking = []
        if self.shoulder_m is None and not self.shoulder_moves:
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


def operator_geometry(settings: OperatorSettings,
                      arm: OperatorArm | None = None) -> OperatorGeometry:
    """Return the operator's geometry from what the configuration and the description give."""
    length, uncertainty, note = settings.arm_length_m, None, ''
    if length is not None:
        if settings.arm_length_sd_m is not None:
            uncertainty = settings.arm_length_sd_m / length
        note = f'operator arm length {length:.3f} m as configured'
    elif arm is not None:
        length, note = arm.reach.length_m, f"reach of the operator's chain {arm.reach.note}"
        if settings.description_stature_m is not None:
            uncertainty = STATURE_UNCERTAINTY
            note += (f'; scaled by {arm.factor:.4f} to the stature {settings.stature_m:g} m '
                     f'(+-{STATURE_UNCERTAINTY:.0%}); measure it for better')
    elif settings.stature_m is not None and not settings.described:
        share = STATURE_SHARE[settings.tracked_point]
        length, uncertainty = share * settings.stature_m, STATURE_UNCERTAINTY
        note = (f'operator arm length {length:.3f} m = {share} x stature {settings.stature_m:g} '
                f'm (+-{STATURE_UNCERTAINTY:.0%}, shoulder to {settings.tracked_point}); '
                'measure it for better')
    shoulder = None if settings.shoulder_m is None else np.array(settings.shoulder_m)
    moves = settings.shoulder_topic is not None
    if shoulder is None and not moves and arm is not None:
        moves = arm.shoulder_moves
        if not moves:
            shoulder = arm.shoulder.positions(np.zeros((1, arm.chain.size)))[0]
    lacking = ('there is no usable description of the operator'
               if settings.described and arm is None else '')
    return OperatorGeometry(
        shoulder, length, uncertainty, rotations.normalize(np.array(settings.axes_xyzw)), note,
        arm, moves, lacking)


def calibrated_geometry(known: OperatorGeometry, found: ArmCalibration, *,
                        tracked_shoulder: bool) -> OperatorGeometry:
    """
    Return the geometry with what an accepted calibration has found.

    Where a topic tracks the shoulder it stays the shoulder and the calibration gives the
    length alone: the fitted centre is an offset from the tracked point that turns with the
    body, and the orientation of the shoulder's messages is not used.
    """
    center, length, sd = found.shoulder_m, found.length_m, found.length_sd_m
    assert center is not None and length is not None and sd is not None  # accepted
    at = ', '.join(f'{part:.3f}' for part in center)
    quality = (f'{found.residual:.2%} off a sphere, {found.spread_deg:.0f} deg apart, '
               f'{found.samples - found.outliers} of {found.samples} positions')
    note = f'operator arm length {length:.3f} +- {sd:.3f} m from the calibration ({quality}); '
    if tracked_shoulder:
        off = float(np.linalg.norm(center))
        return replace(known, length_m=length, scale_uncertainty=sd / length, lacking='',
                       note=note + f'its centre lies {off:.3f} m from the tracked shoulder')
    off_sd = float(np.linalg.norm(found.shoulder_sd_m)) if found.shoulder_sd_m is not None else 0.0
    return replace(known, shoulder_m=center, shoulder_moves=False, length_m=length,
                   scale_uncertainty=sd / length, lacking='',
                   note=note + f'shoulder at {at} m (+- {off_sd:.3f} m)')


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
