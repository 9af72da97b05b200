# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""From a kinematic tree to the moving joints between two links, fixed parts folded away."""

from __future__ import annotations

import difflib
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from teleop_eval.core.description import (
    FIXED,
    MOVING_KINDS,
    PRISMATIC,
    Joint,
    RobotDescription,
)
from teleop_eval.core.errors import DescriptionError
from teleop_eval.core.rotations import Array
from teleop_eval.core.sentences import listed, shown

# Arms with hands and torso have under 30. Without a bound a hostile file could ask for a chain
# of a hundred thousand joints, and for the memory to sample it.
MAX_STEPS = 100


@dataclass(frozen=True, eq=False)
class Step:
    """
    One moving joint of a chain: a fixed transform, then motion along or about the new z axis.

    Attributes
    ----------
    joint
        The joint's name in the description.
    prismatic
        Whether the joint slides.
    backward
        Whether it is walked from child to parent.
    variable
        Column of the independent variable that drives it.
    factor, offset
        Motion = factor * variable + offset; the factor is 1 for a free joint walked from
        parent to child, -1 walked backward, and carries the multiplier of a mimic joint.
    rotation, translation
        (3, 3) and (3,): the fixed transform from the previous moving joint's frame.

    """

    joint: str
    prismatic: bool
    backward: bool
    variable: int
    factor: float
    offset: float
    rotation: Array
    translation: Array

    def motion(self, q: Array) -> Array:
        """Return the joint's (N,) motion, rad or m."""
        return self.factor * q[:, self.variable] + self.offset


def path_between(
    description: RobotDescription, base_link: str, tip_link: str
) -> Iterator[tuple[Joint, bool]]:
    """Yield the joints from base to tip, with True where they are walked backward."""
    above = {joint.child: joint for joint in description.joints.values()}
    up = _ancestry(description, above, base_link)
    down = _ancestry(description, above, tip_link)
    shared = set(down)
    meeting = next((link for link in up if link in shared), None)
    if meeting is None:
        raise DescriptionError(
            f'{description.source}: no joints connect {base_link!r} with {tip_link!r}: '
            'choose links of the same tree'
        )
    for link in up[: up.index(meeting)]:
        yield above[link], True
    for link in reversed(down[: down.index(meeting)]):
        yield above[link], False


def _ancestry(
    description: RobotDescription, above: dict[str, Joint], link: str
) -> list[str]:
    """Return the link and all links above it, up to the root."""
    if link not in description.links:
        links = sorted(description.links)
        near = difflib.get_close_matches(link[:80], links, n=3)
        hint = (f'did you mean {" or ".join(map(shown, near))}?' if near
                else f'the links are {listed(links)}')
        raise DescriptionError(
            f'{description.source}: there is no link {shown(link)}: {hint}')
    trail = [link]
    while trail[-1] in above:
        trail.append(above[trail[-1]].parent)
    return trail


def merged_steps(
    description: RobotDescription, path: list[tuple[Joint, bool]]
) -> tuple[tuple[Step, ...], list[Joint], Array, Array]:
    """Fold fixed transforms into the next moving joint and turn every axis into z."""
    steps: list[Step] = []
    variables: list[Joint] = []
    rotation, translation = np.eye(3), np.zeros(3)
    for joint, backward in path:
        origin_r, origin_p = joint.origin_rotation, joint.origin_xyz
        if not backward:
            translation = translation + rotation @ origin_p
            rotation = rotation @ origin_r
        if joint.kind in MOVING_KINDS:
            master, factor, offset = _driver(description, joint)
            if master not in variables:
                variables.append(master)
            sign = -1.0 if backward else 1.0
            align = _z_onto(joint.axis)
            steps.append(
                Step(
                    joint=joint.name,
                    prismatic=joint.kind == PRISMATIC,
                    backward=backward,
                    variable=variables.index(master),
                    factor=sign * factor,
                    offset=sign * offset,
                    rotation=rotation @ align,
                    translation=translation,
                )
            )
            rotation, translation = align.T, np.zeros(3)
        elif joint.kind != FIXED:
            raise DescriptionError(
                f'{description.source}: joint {joint.name!r} between the links is '
                f'{joint.kind}, which one number cannot move: choose a base link behind it'
            )
        if len(steps) > MAX_STEPS:
            raise DescriptionError(
                f'{description.source}: more than {MAX_STEPS} moving joints lie between the '
                'links: choose a base and a tip link of one arm'
            )
        if backward:
            rotation = rotation @ origin_r.T
            translation = translation - rotation @ origin_p
    return tuple(steps), variables, rotation, translation


def _driver(description: RobotDescription, joint: Joint) -> tuple[Joint, float, float]:
    """Return the free joint that drives a joint, with position = factor * its + offset."""
    factor, offset = 1.0, 0.0
    master = joint
    while master.mimic is not None:
        offset += factor * master.mimic.offset
        factor *= master.mimic.multiplier
        master = description.joints[master.mimic.joint]
    if master.kind not in MOVING_KINDS:
        raise DescriptionError(
            f'{description.source}: joint {joint.name!r} mimics {master.name!r}, which is '
            f'{master.kind}: let it mimic a revolute, continuous or prismatic joint'
        )
    return master, factor, offset


def _z_onto(axis: Array) -> Array:
    """Return a rotation that turns the z axis onto a unit axis, exact along x, y and z."""
    side = np.cross(np.eye(3)[np.argmin(np.abs(axis))], axis)
    side = side / np.linalg.norm(side)
    return np.stack([side, np.cross(axis, side), axis], axis=1)
