# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The operator's arm as a chain of joints, from a description: hand, shoulder and reach."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.description import CONTINUOUS
from teleop_eval.core.description_scaling import scaled
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.operator_settings import OperatorSettings
from teleop_eval.core.reach import Reach, find_reach
from teleop_eval.core.shoulder import Shoulder, find_shoulder, shoulder_at_base
from teleop_eval.core.urdf import parse_urdf


@dataclass(frozen=True, eq=False)
class OperatorArm:
    """
    The chain from `operator.base_link` to `operator.tip_link`; all positions in the base link.

    `factor`: stature over the stature the description is drawn for, 1 without these.
    """

    chain: SerialChain
    shoulder: Shoulder
    reach: Reach
    factor: float

    @property
    def turning(self) -> frozenset[str]:
        """Return the joints without limits."""
        return frozenset(name for name, kind in zip(
            self.chain.joint_names, self.chain.kinds, strict=True) if kind == CONTINUOUS)

    @property
    def shoulder_moves(self) -> bool:
        """Tell whether joints carry the shoulder."""
        return bool(self.shoulder.columns)

    def hand(self, joints: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """
        Return the hand's poses.

        Parameters
        ----------
        joints
            (n, d) in the order of `chain.joint_names`, rad or m.

        Returns
        -------
        (n, 3) positions, m, and (n, 4) orientations x, y, z, w.

        """
        pose = self.chain.forward(joints)
        return pose.positions, rotations.from_matrix(pose.rotations)


def operator_arm(settings: OperatorSettings, urdf: str, *, source: str) -> OperatorArm:
    """
    Return the operator's arm from its description.

    A configured `shoulder_m` takes the place of the chain's own shoulder; the reach is then
    counted from it.

    Raises
    ------
    DescriptionError
        If the description cannot be used or a configured link is not in it.

    """
    factor = 1.0
    if settings.description_stature_m and settings.stature_m:
        factor = settings.stature_m / settings.description_stature_m
    description = scaled(parse_urdf(urdf, source=source), factor)
    chain = SerialChain.from_description(
        description, settings.base_link or '', settings.tip_link or '')
    if settings.shoulder_m is None:
        shoulder = find_shoulder(chain, settings.shoulder_link)
    else:
        shoulder = replace(shoulder_at_base(chain), offset=np.array(settings.shoulder_m),
                           note='operator.shoulder_m as configured')
    return OperatorArm(chain, shoulder, find_reach(chain, shoulder), factor)
