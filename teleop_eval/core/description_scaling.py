# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""A kinematic tree drawn for one size, in another size."""

from __future__ import annotations

import math
from dataclasses import replace
from types import MappingProxyType

from teleop_eval.core.description import PRISMATIC, Joint, Mimic, RobotDescription


def scaled(description: RobotDescription, factor: float) -> RobotDescription:
    """
    Return the tree with every length multiplied and every angle kept.

    Lengths are the joints' origins and, of prismatic joints, limits, speed and what mimic
    joints make of them.

    Parameters
    ----------
    description
        The tree as drawn.
    factor
        Such as the stature of a person over the stature an arm was drawn for.

    Returns
    -------
    The tree in the other size.

    Raises
    ------
    ValueError
        If the factor is not a positive finite number.

    """
    if not (math.isfinite(factor) and factor > 0.0):
        raise ValueError(f'a size factor must be positive, got {factor!r}')
    joints = {name: _scaled(joint, description, factor)
              for name, joint in description.joints.items()}
    return replace(description, joints=MappingProxyType(joints))


def _scaled(joint: Joint, description: RobotDescription, factor: float) -> Joint:
    origin = joint.origin_xyz * factor
    origin.setflags(write=False)
    slides = factor if joint.kind == PRISMATIC else 1.0
    mimic = joint.mimic
    if mimic is not None:
        driver = factor if description.joints[mimic.joint].kind == PRISMATIC else 1.0
        mimic = Mimic(mimic.joint, mimic.multiplier * slides / driver, mimic.offset * slides)
    return replace(joint, origin_xyz=origin, lower=joint.lower * slides,
                   upper=joint.upper * slides, velocity=joint.velocity * slides, mimic=mimic)
