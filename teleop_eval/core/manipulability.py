# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""How well an arm can move its tip in all directions, on a scale free of the arm's size."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import numpy.typing as npt

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.rotations import Array

RANK_SAMPLES = 256
# Descriptions write right angles as 1.57 or 1.571, so that a planar arm leaves its plane by up
# to 1e-3 of its motion. Arms that move in space have singular values above 0.05 of the largest
# in some postures.
RANK_TOLERANCE = 3e-3


@lru_cache(maxsize=64)
def generic_rank(chain: SerialChain, seed: int = 0) -> int:
    """
    Return the number of directions in which the tip can move at once in a general posture.

    Parameters
    ----------
    chain
        The arm.
    seed
        Of the random postures looked at.

    Returns
    -------
    3 for an arm that moves in space, 2 in a plane or on a surface, 1 on a line, 0 without
    motion: the largest rank of the translational Jacobian over random postures, singular
    values below 3e-3 of the largest counted as zero.

    """
    if chain.size == 0:
        return 0
    lower = np.clip(chain.lower, -np.pi, None)
    upper = np.clip(chain.upper, None, np.pi)
    q = np.random.default_rng(seed).uniform(
        np.minimum(lower, upper), np.maximum(lower, upper), size=(RANK_SAMPLES, chain.size)
    )
    values = np.linalg.svd(chain.jacobian(q)[:, :3], compute_uv=False)
    largest = values.max()
    if largest < 1e-9:
        return 0
    return int(np.max(np.sum(values > RANK_TOLERANCE * largest, axis=1)))


def manipulability_norm(chain: SerialChain, q: npt.ArrayLike, reach_m: float) -> Array:
    """
    Return the normalised translational manipulability.

    Parameters
    ----------
    chain
        The arm.
    q
        (N, n) joint positions, rad or m.
    reach_m
        Reach L of the arm, m.

    Returns
    -------
    (N,) product of the r largest singular values of the translational Jacobian, prismatic
    columns times L, divided by L^r, with r the generic rank; 0 in a singular posture, NaN where
    q is NaN. Arms of the same shape have the same value whatever their size.

    Raises
    ------
    ValueError
        If the reach is not positive.

    References
    ----------
    Yoshikawa 1985, "Manipulability of robotic mechanisms", Int. J. Robotics Research 4(2), 3-9
    (citation from memory): w = sqrt(det(J J^T)), the product of the singular values.

    """
    if not reach_m > 0.0:
        raise ValueError(f'the reach must be positive, got {reach_m!r}')
    jacobian = chain.jacobian(q)[:, :3] / reach_m
    jacobian[:, :, chain.prismatic] *= reach_m
    rank = generic_rank(chain)
    if rank == 3:
        return _volume(jacobian)
    values = np.full((len(jacobian), 3), np.nan)
    known = np.all(np.isfinite(jacobian), axis=(1, 2))
    few = np.linalg.svd(jacobian[known], compute_uv=False)
    values[known, : few.shape[1]] = few
    return np.asarray(np.prod(values[:, :rank], axis=1))


def _volume(rows: Array) -> Array:
    """
    Return the volume spanned by three rows, the product of the singular values of (N, 3, n).

    Rows are made orthogonal one after the other: several times faster than singular values,
    and unlike the root of a determinant accurate next to a singular posture.
    """
    a, b, c = rows[:, 0], rows[:, 1], rows[:, 2]
    b = b - a * _ratio(a, b)
    c = c - a * _ratio(a, c)
    c = c - b * _ratio(b, c)
    lengths = np.sqrt(np.stack([np.sum(row * row, axis=1) for row in (a, b, c)]))
    return np.asarray(np.prod(lengths, axis=0))


def _ratio(onto: Array, row: Array) -> Array:
    square = np.sum(onto * onto, axis=1, keepdims=True)
    product = np.sum(onto * row, axis=1, keepdims=True)
    return np.asarray(product / np.where(square == 0.0, 1.0, square))
