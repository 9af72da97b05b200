# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Shoulder of a robot arm: the point about which it turns, origin of normalised positions."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from teleop_eval.core.errors import DescriptionError
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.rotations import Array

PARALLEL_RAD = 1e-3


@dataclass(frozen=True, eq=False)
class Shoulder:
    """
    Shoulder point of an arm.

    Attributes
    ----------
    joint
        The joint on whose axis the point lies; '' where a link was named.
    note
        How the point was found, one sentence.
    carrier
        Chain from the arm's base to the link that carries the point.
    columns
        Columns of the arm's variables that move the carrier, in the carrier's order.
    offset
        (3,) the point in the carrier's tip axes, m.

    """

    joint: str
    note: str
    carrier: SerialChain
    columns: tuple[int, ...]
    offset: Array

    def positions(self, q: npt.ArrayLike) -> Array:
        """
        Return the shoulder's positions.

        Parameters
        ----------
        q
            (N, n) positions of the arm's variables, rad or m.

        Returns
        -------
        (N, 3) m, in the axes of the arm's base link.

        """
        q = np.asarray(q, dtype=float)
        if not self.columns:
            pose = self.carrier.forward(np.empty((1, 0)))
            fixed = pose.positions + pose.rotations @ self.offset
            return np.repeat(fixed, len(q), axis=0)
        pose = self.carrier.forward(q[:, list(self.columns)])
        return pose.positions + pose.rotations @ self.offset

    def jacobian(self, q: npt.ArrayLike) -> Array:
        """
        Return the shoulder's velocity (m/s) per unit rate of the arm's variables, (N, 3, n).

        Parameters
        ----------
        q
            (N, n) positions of the arm's variables, rad or m.

        """
        q = np.asarray(q, dtype=float)
        jacobian = np.zeros((len(q), 3, q.shape[1]))
        if self.columns:
            own = q[:, list(self.columns)]
            carried = self.carrier.jacobian(own)
            arm = self.carrier.forward(own).rotations @ self.offset
            turned = np.cross(carried[:, 3:], arm[:, :, None], axis=1)
            jacobian[:, :, list(self.columns)] = carried[:, :3] + turned
        return jacobian


def find_shoulder(chain: SerialChain, shoulder_link: str | None = None) -> Shoulder:
    """
    Find the shoulder of an arm.

    Parameters
    ----------
    chain
        The arm.
    shoulder_link
        Link whose origin is the shoulder, carried by the joints between base and that link.
        None: the point of the first revolute or continuous joint's axis nearest to the next
        one's axis; with axes within 1e-3 rad of parallel, or no second one, the first joint's
        origin; carried by the prismatic joints before it.

    Returns
    -------
    The shoulder.

    Raises
    ------
    DescriptionError
        If the link does not exist or is moved by joints that are not the arm's, or if there
        is no revolute joint to go by.

    """
    if shoulder_link is not None:
        note = f'origin of link {shoulder_link!r}, as configured'
        return _carried(chain, shoulder_link, '', note)
    turning = [index for index, step in enumerate(chain.steps) if not step.prismatic]
    if not turning:
        raise DescriptionError(
            f'{chain.description.source}: no joint between {chain.base_link!r} and '
            f'{chain.tip_link!r} turns, so the shoulder cannot be found: name a shoulder_link'
        )
    first = chain.steps[turning[0]].joint
    joint = chain.description.joints[first]
    link = joint.child if chain.steps[turning[0]].backward else joint.parent
    zero = _nearest_to_zero(chain)
    axes = chain.joint_axes(zero[None, :])
    point, direction = axes.points[0, turning[0]], axes.directions[0, turning[0]]
    if len(turning) < 2:
        note = f'origin of joint {first!r}, the only one that turns'
        return _carried(chain, link, first, note, point, zero)
    second = chain.steps[turning[1]].joint
    along = _nearest_along(
        point, direction, axes.points[0, turning[1]], axes.directions[0, turning[1]]
    )
    if along is None:
        note = f'origin of joint {first!r}, whose axis is parallel to that of {second!r}'
        return _carried(chain, link, first, note, point, zero)
    note = f'point of the axis of joint {first!r} nearest to the axis of {second!r}'
    if turning[1] > turning[0] + 1:
        note += ', with the prismatic joints between them at or next to zero'
    return _carried(chain, link, first, note, point + along * direction, zero)


def shoulder_at_base(chain: SerialChain) -> Shoulder:
    """Return the base link's origin as a shoulder, to show how much the choice matters."""
    note = f'origin of base link {chain.base_link!r}'
    return _carried(chain, chain.base_link, '', note)


def _nearest_along(point: Array, direction: Array, other: Array, heading: Array) -> float | None:
    """Return how far along the first line its point nearest to the second lies."""
    normal = np.cross(direction, heading)
    square = float(normal @ normal)
    if square < math.sin(PARALLEL_RAD) ** 2:
        return None
    return float(np.cross(other - point, heading) @ normal) / square


def _nearest_to_zero(chain: SerialChain) -> Array:
    return np.clip(np.zeros(chain.size), chain.lower, chain.upper)


def _carried(
    chain: SerialChain,
    link: str,
    joint: str,
    note: str,
    point: Array | None = None,
    q: Array | None = None,
) -> Shoulder:
    """Attach a point, known in base axes at q, to a link; None: the link's origin."""
    carrier = SerialChain.from_description(chain.description, chain.base_link, link)
    strange = [name for name in carrier.joint_names if name not in chain.joint_names]
    if strange:
        raise DescriptionError(
            f'{chain.description.source}: link {link!r} is moved by joint {strange[0]!r}, '
            f'which does not move {chain.tip_link!r}: choose another shoulder_link'
        )
    columns = tuple(chain.joint_names.index(name) for name in carrier.joint_names)
    offset = np.zeros(3)
    if point is not None and q is not None:
        pose = carrier.forward(q[None, list(columns)])
        offset = pose.rotations[0].T @ (point - pose.positions[0])
    return Shoulder(joint, note, carrier, columns, offset)
