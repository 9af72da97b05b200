# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Shoulder and arm length of an operator from sweeps with the stretched arm.

While the arm stays stretched the tracked point keeps its distance from the shoulder: it
moves on a sphere about the shoulder. A sphere can be fitted to any motion, so the fit counts
only where the points lie near a sphere and cover enough of it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import least_squares

from teleop_eval.core.metric import INSUFFICIENT, OK

Array = npt.NDArray[np.float64]

MAX_RESIDUAL = 0.015
MIN_SPREAD_DEG = 60.0
# A cap of 60 degrees, evenly covered, has 0.039; one circle has none but for its noise.
MIN_DEPTH = 0.025
# A sample further than this many robust standard deviations from the sphere is left out.
OUTLIER_SD = 5.0
MAX_OUTLIERS = 0.02
# Of the length: what lies nearer than 5 times this counts in the residual instead. Slow
# errors, as of the body leaning, are no outliers although they stray far for a time.
LEAST_SD = MAX_RESIDUAL / 2.0
# Few and long: what lasts longer than a block escapes the uncertainty.
BLOCKS = 10
# Student's t of 9 degrees of freedom over the normal quantile, at 95 %.
_FEW_BLOCKS = 2.2622 / 1.9600
MIN_SAMPLES = 100
MIN_EXTENT_M = 0.01
# Directions that are compared with each other for the spread.
_COMPARED = 1500


@dataclass(frozen=True)
class ArmCalibration:
    """
    A fitted sphere, and whether it can be trusted.

    Attributes
    ----------
    status, reason
        'ok' and '', or 'insufficient' and one sentence with the numbers.
    shoulder_m
        (3,) centre, in the frame of the positions; None where no sphere could be fitted.
    length_m
        Radius; None where no sphere could be fitted.
    residual
        RMS distance of the samples from the sphere, over the radius.
    spread_deg
        Largest angle at the centre between any two of the samples, degrees.
    depth
        Smallest RMS extent of the directions from the centre (unit vectors) about their mean
        along any axis: 0 for points of one circle, which have no definite centre.
    shoulder_sd_m, length_sd_m
        Standard uncertainties, (3,) and a number, of the fit alone: neither a shoulder that
        moves along nor an arm that is not quite stretched is in them.
    samples, outliers
        How many samples were given, and how many of them were left out.

    """

    status: str
    reason: str
    shoulder_m: Array | None = None
    length_m: float | None = None
    residual: float = math.nan
    spread_deg: float = math.nan
    depth: float = math.nan
    shoulder_sd_m: Array | None = None
    length_sd_m: float | None = None
    samples: int = 0
    outliers: int = 0

    @property
    def accepted(self) -> bool:
        """Tell whether shoulder and length may be used."""
        return self.status == OK


def calibrate_arm(positions_m: npt.ArrayLike) -> ArmCalibration:
    """
    Fit a sphere to sweeps of the stretched arm and judge it.

    The squared distances from the sphere are minimised (geometric fit), starting from the
    linear fit of Kasa. Samples more than 5 robust standard deviations (1.4826 times the
    median absolute distance) and more than 3.75 % of the length off the sphere are left out,
    and the fit is repeated until these stay the same; more than 2 % of them are no accident
    and make the result insufficient. Accepted is a
    residual below 1.5 % with a spread above 60 degrees and directions that do not lie on one
    circle. The uncertainties come from a jackknife that leaves out one of 10 consecutive
    blocks at a time, so that an error which lasts over many samples does not look small; they
    are widened so that 1.96 of them make a 95 % interval although the blocks are few.

    Parameters
    ----------
    positions_m
        (n, 3) positions of the tracked point in the order of their times, m.

    Returns
    -------
    The sphere, with status 'ok' or 'insufficient'.

    References
    ----------
    I. Kasa 1976, "A circle fitting procedure and its error analysis", IEEE Trans. Instrum.
    Meas. 25:8-14; H. R. Kuensch 1989, "The jackknife and the bootstrap for general stationary
    observations", Ann. Statist. 17:1217-1241 (both from memory).

    """
    points = np.asarray(positions_m, dtype=float).reshape(-1, 3)
    points = points[np.isfinite(points).all(axis=1)]
    count = len(points)
    if count < MIN_SAMPLES:
        return ArmCalibration(INSUFFICIENT, f'{count} positions came, but {MIN_SAMPLES} are '
                              'needed', samples=count)
    extent = float(np.ptp(points, axis=0).max())
    if extent < MIN_EXTENT_M:
        return ArmCalibration(INSUFFICIENT, f'the hand moved only {1e3 * extent:.1f} mm',
                              samples=count)
    kept, sphere = _fit_without_outliers(points)
    center, length = sphere[:3], float(sphere[3])
    arms = points[kept] - center
    distances = np.linalg.norm(arms, axis=1)
    directions = arms / distances[:, None]
    residuals = distances - length
    deviations = _jackknife(directions, residuals)
    found = ArmCalibration(
        OK, '', center, length, float(np.sqrt(np.mean(residuals ** 2))) / length,
        _spread_deg(directions), _depth(directions), deviations[:3], float(deviations[3]),
        count, count - int(kept.sum()))
    reason = _why_not(found)
    return found if not reason else ArmCalibration(
        **{**vars(found), 'status': INSUFFICIENT, 'reason': reason})


def _why_not(found: ArmCalibration) -> str:
    """Return why a fit cannot be accepted, '' if it can."""
    reasons = []
    if not found.residual < MAX_RESIDUAL:
        reasons.append(f'the positions lie {found.residual:.2%} (RMS) off a sphere, but less than '
                       f'{MAX_RESIDUAL:.1%} is needed: keep the arm stretched')
    if not found.spread_deg > MIN_SPREAD_DEG:
        reasons.append(f'the sweeps span {found.spread_deg:.0f} deg, but more than '
                       f'{MIN_SPREAD_DEG:.0f} deg are needed: sweep further')
    if not found.depth > MIN_DEPTH:
        reasons.append(
            f'the sweeps lie nearly on one circle (depth {found.depth:.3f}, more than {MIN_DEPTH} '
            'is needed), which has no definite centre: sweep up and down as well as sideways')
    if found.outliers > MAX_OUTLIERS * found.samples:
        reasons.append(f'{found.outliers} of {found.samples} positions lie far off the sphere of '
                       f'the others, but at most {MAX_OUTLIERS:.0%} may')
    return '; '.join(reasons)


def _fit_without_outliers(points: Array) -> tuple[npt.NDArray[np.bool_], Array]:
    """Return which points (n,) belong to the sphere, and the sphere (4,): centre, radius."""
    kept = np.ones(len(points), dtype=bool)
    sphere = _fit(points)
    for _ in range(10):
        off = np.abs(np.linalg.norm(points - sphere[:3], axis=1) - sphere[3])
        sd = max(1.4826 * float(np.median(off)), LEAST_SD * float(sphere[3]))
        near = off <= OUTLIER_SD * sd
        if np.array_equal(near, kept):
            break
        kept = near
        sphere = _fit(points[kept])
    return kept, sphere


def _fit(points: Array) -> Array:
    """Return centre and radius (4,) of the sphere nearest to points (n, 3)."""
    middle = points.mean(axis=0)
    local = points - middle
    # |p|^2 = 2 p . c + (r^2 - |c|^2) is linear in c and the bracket.
    system = np.column_stack([2.0 * local, np.ones(len(local))])
    answer = np.linalg.lstsq(system, np.sum(local ** 2, axis=1), rcond=1e-10)[0]
    start = np.append(answer[:3], math.sqrt(max(answer[3] + float(answer[:3] @ answer[:3]),
                                                1e-12)))

    def residuals(sphere: Array) -> Array:
        return np.asarray(np.linalg.norm(local - sphere[:3], axis=1) - sphere[3])

    def slopes(sphere: Array) -> Array:
        arms = local - sphere[:3]
        lengths = np.maximum(np.linalg.norm(arms, axis=1), 1e-12)
        return np.column_stack([-arms / lengths[:, None], -np.ones(len(arms))])

    sphere = least_squares(residuals, start, slopes, method='lm', max_nfev=100).x
    return np.asarray(np.append(sphere[:3] + middle, abs(sphere[3])))


def _spread_deg(directions: Array) -> float:
    """Return the largest angle between unit vectors (n, 3), of some 1500 taken evenly."""
    some = directions[::max(1, len(directions) // _COMPARED)]
    chord = min(math.sqrt(max(0.0, 2.0 - 2.0 * float((some @ some.T).min()))), 2.0)
    return math.degrees(2.0 * math.asin(chord / 2.0))


def _depth(directions: Array) -> float:
    """Return the smallest RMS extent of unit vectors (n, 3) about their mean."""
    return float(np.sqrt(max(0.0, np.linalg.eigvalsh(np.cov(directions.T, bias=True))[0])))


def _jackknife(directions: Array, residuals: Array) -> Array:
    """
    Return standard uncertainties (4,) of centre and radius.

    What the fit would be without one block follows from the normal equations: one step of
    Newton from where the sum over all blocks has no slope.
    """
    slopes = np.column_stack([-directions, -np.ones(len(directions))])
    blocks = np.array_split(np.arange(len(slopes)), BLOCKS)
    normal = np.array([slopes[block].T @ slopes[block] for block in blocks])
    pull = np.array([slopes[block].T @ residuals[block] for block in blocks])
    whole, slope = normal.sum(axis=0), pull.sum(axis=0)
    steps = np.array([np.linalg.lstsq(whole - own, own_pull - slope, rcond=1e-12)[0]
                      for own, own_pull in zip(normal, pull, strict=True)])
    squares = np.sum((steps - steps.mean(axis=0)) ** 2, axis=0)
    return np.asarray(_FEW_BLOCKS * np.sqrt((BLOCKS - 1) / BLOCKS * squares))
