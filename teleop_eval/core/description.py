# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The kinematic tree of a robot: links and the joints between them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import NamedTuple

from teleop_eval.core.rotations import Array

REVOLUTE, CONTINUOUS, PRISMATIC, FIXED = 'revolute', 'continuous', 'prismatic', 'fixed'
MOVING_KINDS = (REVOLUTE, CONTINUOUS, PRISMATIC)
KINDS = (*MOVING_KINDS, FIXED, 'floating', 'planar')


class Mimic(NamedTuple):
    """Position = multiplier * position of `joint` + offset."""

    joint: str
    multiplier: float
    offset: float


@dataclass(frozen=True, eq=False)
class Joint:
    """
    One joint as the URDF states it.

    Attributes
    ----------
    name, kind, parent, child
        Texts; `kind` is one of `KINDS`.
    origin_xyz
        (3,) child frame's origin at position 0, m, in parent axes.
    origin_rotation
        (3, 3) rotation from child to parent axes at position 0, made from the fixed-axis
        roll, pitch, yaw of the file.
    axis
        (3,) unit vector in child axes; zero for kinds without an axis.
    lower, upper
        Position limits, rad or m; -inf and inf where the kind has none. Limits written on a
        continuous joint are ignored, soft limits of a safety controller too.
    velocity
        Largest speed, rad/s or m/s; inf where the file gives none.
    mimic
        What drives the joint, None where it is free.

    """

    name: str
    kind: str
    parent: str
    child: str
    origin_xyz: Array
    origin_rotation: Array
    axis: Array
    lower: float
    upper: float
    velocity: float
    mimic: Mimic | None


@dataclass(frozen=True, eq=False)
class RobotDescription:
    """
    Links and joints of one robot: every link has at most one parent, and there is no cycle.

    Attributes
    ----------
    name
        The robot's name, '' where the file gives none.
    links
        Link names.
    joints
        Joints by name, in the order of the file.
    source
        Where the text came from, for error messages.

    """

    name: str
    links: frozenset[str]
    joints: Mapping[str, Joint]
    source: str
