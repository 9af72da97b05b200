# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Rotations as quaternions, vectorised over leading axes.

Quaternions are float arrays (..., 4) in the order x, y, z, w (geometry_msgs); q and -q are the
same rotation. A rotation matrix R(q) turns coordinates: v' = R v. Angles are radians. NaN rows
stay NaN rows: nothing is repaired or dropped here.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

# Below this angle (rad) sin(x)/x and its inverse come from their series; the first term left
# out is then below 1e-18 relative, and nothing is divided by a vanishing angle.
SERIES_ANGLE = 1e-3

# A quaternion shorter than this says nothing about a direction (ROS messages that were never
# filled hold 0, 0, 0, 0).
LEAST_NORM = 1e-9


def normalize(q: npt.ArrayLike) -> Array:
    """
    Scale quaternions to unit norm.

    Parameters
    ----------
    q
        Quaternions (..., 4), x, y, z, w.

    Returns
    -------
    (..., 4) unit quaternions; NaN where the norm is below 1e-9 or not finite, because such a
    quaternion has no direction.

    """
    q = np.asarray(q, dtype=float)
    norm = np.sqrt(np.sum(q * q, axis=-1, keepdims=True))
    usable = np.isfinite(norm) & (norm >= LEAST_NORM)
    return np.asarray(q / np.where(usable, norm, np.nan))


def multiply(a: npt.ArrayLike, b: npt.ArrayLike) -> Array:
    """
    Compose rotations: first b, then a, so that R(a b) = R(a) R(b).

    Parameters
    ----------
    a, b
        Quaternions (..., 4), broadcast against each other.

    Returns
    -------
    (..., 4) Hamilton products.

    """
    ax, ay, az, aw = _components(a)
    bx, by, bz, bw = _components(b)
    return np.stack(
        [
            aw * bx + ax * bw + ay * bz - az * by,
            aw * by - ax * bz + ay * bw + az * bx,
            aw * bz + ax * by - ay * bx + az * bw,
            aw * bw - ax * bx - ay * by - az * bz,
        ],
        axis=-1,
    )


def conjugate(q: npt.ArrayLike) -> Array:
    """Return the inverse rotation of unit quaternions (..., 4)."""
    flipped: Array = np.asarray(q, dtype=float) * np.array([-1.0, -1.0, -1.0, 1.0])
    return flipped


def to_matrix(q: npt.ArrayLike) -> Array:
    """
    Turn unit quaternions into rotation matrices.

    Parameters
    ----------
    q
        Unit quaternions (..., 4).

    Returns
    -------
    (..., 3, 3) matrices with v' = R v.

    """
    x, y, z, w = _components(q)
    matrix = np.empty(x.shape + (3, 3))
    matrix[..., 0, 0] = 1.0 - 2.0 * (y * y + z * z)
    matrix[..., 1, 1] = 1.0 - 2.0 * (x * x + z * z)
    matrix[..., 2, 2] = 1.0 - 2.0 * (x * x + y * y)
    matrix[..., 0, 1] = 2.0 * (x * y - z * w)
    matrix[..., 1, 0] = 2.0 * (x * y + z * w)
    matrix[..., 0, 2] = 2.0 * (x * z + y * w)
    matrix[..., 2, 0] = 2.0 * (x * z - y * w)
    matrix[..., 1, 2] = 2.0 * (y * z - x * w)
    matrix[..., 2, 1] = 2.0 * (y * z + x * w)
    return matrix


def from_matrix(matrix: npt.ArrayLike) -> Array:
    """
    Turn rotation matrices into unit quaternions with w >= 0.

    Parameters
    ----------
    matrix
        Rotation matrices (..., 3, 3).

    Returns
    -------
    (..., 4) unit quaternions.

    References
    ----------
    Shepperd 1978, "Quaternion from rotation matrix", J. Guidance and Control 1(3), 223-224
    (citation from memory): of the four ways to start, take the one with the largest divisor.

    """
    m = np.asarray(matrix, dtype=float)
    d0, d1, d2 = m[..., 0, 0], m[..., 1, 1], m[..., 2, 2]
    x_first = m[..., 2, 1] - m[..., 1, 2]
    y_first = m[..., 0, 2] - m[..., 2, 0]
    z_first = m[..., 1, 0] - m[..., 0, 1]
    xy = m[..., 1, 0] + m[..., 0, 1]
    xz = m[..., 0, 2] + m[..., 2, 0]
    yz = m[..., 2, 1] + m[..., 1, 2]
    # Each row is a multiple of the same quaternion: 4x q, 4y q, 4z q, 4w q.
    rows = np.stack(
        [
            np.stack([1.0 + d0 - d1 - d2, xy, xz, x_first], axis=-1),
            np.stack([xy, 1.0 - d0 + d1 - d2, yz, y_first], axis=-1),
            np.stack([xz, yz, 1.0 - d0 - d1 + d2, z_first], axis=-1),
            np.stack([x_first, y_first, z_first, 1.0 + d0 + d1 + d2], axis=-1),
        ],
        axis=-2,
    )
    divisors = np.diagonal(rows, axis1=-2, axis2=-1)
    best = np.argmax(divisors, axis=-1)[..., None, None]
    return _positive_w(normalize(np.take_along_axis(rows, best, axis=-2)[..., 0, :]))


def rotate(q: npt.ArrayLike, v: npt.ArrayLike) -> Array:
    """
    Rotate vectors: v' = R(q) v.

    Parameters
    ----------
    q
        Unit quaternions (..., 4).
    v
        Vectors (..., 3), broadcast against q.

    Returns
    -------
    (..., 3) rotated vectors, in the unit of v.

    """
    x, y, z, w = _components(q)
    v = np.asarray(v, dtype=float)
    vx, vy, vz = v[..., 0], v[..., 1], v[..., 2]
    tx = 2.0 * (y * vz - z * vy)
    ty = 2.0 * (z * vx - x * vz)
    tz = 2.0 * (x * vy - y * vx)
    return np.stack(
        [
            vx + w * tx + y * tz - z * ty,
            vy + w * ty + z * tx - x * tz,
            vz + w * tz + x * ty - y * tx,
        ],
        axis=-1,
    )


def log(q: npt.ArrayLike) -> Array:
    """
    Return the rotation vector (axis times angle) of the shorter way.

    Parameters
    ----------
    q
        Quaternions (..., 4); the norm does not matter.

    Returns
    -------
    (..., 3) rotation vectors, rad, norm in [0, pi].

    """
    q = _positive_w(np.asarray(q, dtype=float))
    vector, w = q[..., :3], q[..., 3]
    sine = np.sqrt(np.sum(vector * vector, axis=-1))
    small = sine < SERIES_ANGLE * w
    ratio = np.where(small, sine, 0.0) / np.where(small, w, 1.0)
    series = (2.0 - ratio**2 * (2.0 / 3.0 - ratio**2 * 0.4)) / np.where(small, w, 1.0)
    exact = 2.0 * np.arctan2(sine, w) / np.where(small | (sine == 0.0), 1.0, sine)
    return np.where(small, series, exact)[..., None] * vector


def exp(v: npt.ArrayLike) -> Array:
    """
    Return the unit quaternions of rotation vectors.

    Parameters
    ----------
    v
        Rotation vectors (..., 3), axis times angle, rad, any length.

    Returns
    -------
    (..., 4) unit quaternions.

    """
    v = np.asarray(v, dtype=float)
    angle = np.sqrt(np.sum(v * v, axis=-1))
    small = angle < SERIES_ANGLE
    square = np.where(small, angle, 0.0) ** 2
    series = 0.5 - square / 48.0 + square * square / 3840.0
    exact = np.sin(0.5 * angle) / np.where(small, 1.0, angle)
    factor = np.where(small, series, exact)
    return np.concatenate([factor[..., None] * v, np.cos(0.5 * angle)[..., None]], axis=-1)


def angle_between(a: npt.ArrayLike, b: npt.ArrayLike) -> Array:
    """
    Return the geodesic angle between rotations.

    Parameters
    ----------
    a, b
        Quaternions (..., 4), broadcast against each other; the norms do not matter.

    Returns
    -------
    (...) angles in [0, pi] rad: 2 atan2(|vector part|, |w|) of the relative rotation, which
    unlike acos keeps full precision near 0.

    """
    relative = multiply(conjugate(a), b)
    sine = np.sqrt(np.sum(relative[..., :3] ** 2, axis=-1))
    return np.asarray(2.0 * np.arctan2(sine, np.abs(relative[..., 3])))


def slerp(a: npt.ArrayLike, b: npt.ArrayLike, fraction: npt.ArrayLike) -> Array:
    """
    Interpolate at constant angular velocity, the short way round.

    Parameters
    ----------
    a, b
        Unit quaternions (..., 4): the rotations at fraction 0 and 1.
    fraction
        (...) numbers, broadcast against the leading axes of a and b.

    Returns
    -------
    (..., 4) unit quaternions; for opposite rotations (180 deg) one of the two ways.

    """
    a, b = np.asarray(a, dtype=float), np.asarray(b, dtype=float)
    part = np.asarray(fraction, dtype=float)[..., None]
    b = np.where(np.sum(a * b, axis=-1, keepdims=True) < 0.0, -b, b)
    half = np.arctan2(_norm(b - a), _norm(a + b))
    theta = 2.0 * half
    # Under 1e-8 rad the straight line differs from the arc by less than one rounding.
    flat = theta < 1e-8
    sine = np.sin(np.where(flat, 1.0, theta))
    weight_a = np.where(flat, 1.0 - part, np.sin((1.0 - part) * theta) / sine)
    weight_b = np.where(flat, part, np.sin(part * theta) / sine)
    return normalize(weight_a * a + weight_b * b)


def chordal_mean(q: npt.ArrayLike) -> Array:
    """
    Return the rotation with the least sum of squared chordal distances.

    Parameters
    ----------
    q
        Quaternions (n, 4), n >= 1, finite, not zero; signs and norms do not matter.

    Returns
    -------
    (4,) unit quaternion with w >= 0.

    Raises
    ------
    ValueError
        If there is no quaternion, or one that is not finite or zero.

    References
    ----------
    Markley, Cheng, Crassidis, Oshman 2007, "Averaging quaternions", J. Guidance, Control, and
    Dynamics 30(4), 1193-1197 (citation from memory): the eigenvector of sum q q^T with the
    largest eigenvalue.

    """
    q = np.asarray(q, dtype=float)
    if q.ndim != 2 or q.shape[0] == 0 or q.shape[1] != 4:
        raise ValueError(f'the mean needs quaternions of shape (n, 4) with n >= 1, got {q.shape}')
    unit = normalize(q)
    if not np.all(np.isfinite(unit)):
        raise ValueError('the mean needs finite quaternions that are not zero')
    _, vectors = np.linalg.eigh(unit.T @ unit)
    return _positive_w(vectors[:, -1])


def _components(q: npt.ArrayLike) -> tuple[Array, Array, Array, Array]:
    q = np.asarray(q, dtype=float)
    return q[..., 0], q[..., 1], q[..., 2], q[..., 3]


def _norm(v: Array) -> Array:
    return np.asarray(np.sqrt(np.sum(v * v, axis=-1, keepdims=True)))


def _positive_w(q: Array) -> Array:
    return np.where(q[..., 3:] < 0.0, -q, q)
