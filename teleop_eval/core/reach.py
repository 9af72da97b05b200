# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Reach of a robot arm: the unit of normalised positions."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import minimize

from teleop_eval.core.description import CONTINUOUS
from teleop_eval.core.errors import DescriptionError
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.rotations import Array
from teleop_eval.core.shoulder import Shoulder, find_shoulder, shoulder_at_base

__all__ = ['Reach', 'Shoulder', 'find_reach', 'find_shoulder', 'shoulder_at_base']

SAMPLES = 20_000
STARTS = 48
LEAST_REACH_M = 1e-6


@dataclass(frozen=True, eq=False)
class Reach:
    """
    Largest distance of the tip from the shoulder.

    Attributes
    ----------
    length_m
        The distance, m: one arm length of the robot.
    posture
        (n,) a posture that attains it, rad or m; variables without influence are at, or next
        to, zero.
    samples
        Random configurations looked at.
    sampled_m
        Largest distance among those alone, a lower bound, m.
    ascents
        Local searches started.
    note
        One sentence for the report.

    """

    length_m: float
    posture: Array
    samples: int
    sampled_m: float
    ascents: int
    note: str


def find_reach(chain: SerialChain, shoulder: Shoulder, *, seed: int = 0) -> Reach:
    """
    Find the largest distance of the tip from the shoulder within the joint limits.

    Random sampling finds the neighbourhoods and bounded local ascents (L-BFGS-B) climb from
    the best sample of each of many batches: one ascent alone ends at a folded posture against
    a limit often enough. Continuous joints are sampled in [-pi, pi].

    Parameters
    ----------
    chain
        The arm.
    shoulder
        Its shoulder.
    seed
        Of the random samples; the result is the same for the same seed.

    Returns
    -------
    The reach.

    Raises
    ------
    DescriptionError
        If no joint moves the tip away from the shoulder.

    """
    if chain.size == 0:
        raise DescriptionError(
            f'{chain.description.source}: no joint moves between {chain.base_link!r} and '
            f'{chain.tip_link!r}: choose another base or tip link'
        )
    box = _search_box(chain)
    samples = np.random.default_rng(seed).uniform(
        box.lower, box.upper, size=(SAMPLES, chain.size)
    )
    distances = _distances(chain, shoulder, samples)
    sampled = float(distances.max())
    if sampled < LEAST_REACH_M:
        raise DescriptionError(
            f'{chain.description.source}: {chain.tip_link!r} never leaves the shoulder '
            f'({shoulder.note}): choose another tip link or name a shoulder_link'
        )
    best, posture = sampled, samples[int(np.argmax(distances))]
    for batch in np.array_split(np.arange(SAMPLES), STARTS):
        start = samples[batch[np.argmax(distances[batch])]]
        end = _ascend(chain, shoulder, start, box, sampled)
        length = float(_distances(chain, shoulder, end[None, :])[0])
        if length > best * (1.0 + 1e-12):
            best, posture = length, end
    posture = _tidied(chain, shoulder, posture, box)
    length = float(_distances(chain, shoulder, posture[None, :])[0])
    values = ', '.join(
        f'{name} {value:.3f} {"m" if slides else "rad"}'
        for name, value, slides in zip(
            chain.joint_names, posture, chain.prismatic, strict=True
        )
    )
    note = (
        f'{length:.4f} m from the shoulder ({shoulder.note}) at {values}; '
        f'largest of {SAMPLES} samples and {STARTS} ascents'
    )
    return Reach(length, posture, SAMPLES, sampled, STARTS, note)


@dataclass(frozen=True, eq=False)
class _Box:
    """Where to sample, and which variables may leave the box because they only turn."""

    lower: Array
    upper: Array
    turns: npt.NDArray[np.bool_]


def _search_box(chain: SerialChain) -> _Box:
    continuous = np.array([kind == CONTINUOUS for kind in chain.kinds], dtype=bool)
    # Files give a joint without stops limits of many turns; two already repeat every pose.
    whole = ~chain.prismatic & (chain.lower <= -math.pi) & (chain.upper >= math.pi)
    endless = continuous | (whole & (chain.upper - chain.lower > 8.0 * math.pi))
    lower = np.where(endless, -math.pi, chain.lower)
    upper = np.where(endless, math.pi, chain.upper)
    # A mimic joint with another ratio is not back where it was after one turn of its driver.
    plain = np.ones(chain.size, dtype=bool)
    for step in chain.steps:
        plain[step.variable] &= abs(step.factor) == 1.0
    return _Box(lower, upper, endless & plain)


def _distances(chain: SerialChain, shoulder: Shoulder, q: Array) -> Array:
    return np.asarray(np.linalg.norm(chain.positions(q) - shoulder.positions(q), axis=1))


def _ascend(
    chain: SerialChain, shoulder: Shoulder, start: Array, box: _Box, scale: float
) -> Array:
    """Climb from one configuration to a local maximum within the box."""

    def objective(q: Array) -> tuple[float, Array]:
        row = q[None, :]
        arm = (chain.positions(row) - shoulder.positions(row))[0] / scale
        slope = (chain.jacobian(row)[0, :3] - shoulder.jacobian(row)[0]) / scale
        return -float(arm @ arm), -2.0 * (arm @ slope)

    bounds = [
        (None, None) if turns else (low, high)
        for low, high, turns in zip(box.lower, box.upper, box.turns, strict=True)
    ]
    found = minimize(
        objective,
        start,
        jac=True,
        method='L-BFGS-B',
        bounds=bounds,
        options={'maxiter': 500, 'ftol': 1e-15, 'gtol': 1e-10},
    )
    end = np.asarray(found.x, dtype=float)
    wrapped = np.remainder(end + math.pi, 2.0 * math.pi) - math.pi
    return np.where(box.turns, wrapped, np.clip(end, box.lower, box.upper))


def _tidied(chain: SerialChain, shoulder: Shoulder, posture: Array, box: _Box) -> Array:
    """Put variables that do not matter for the length at, or next to, zero."""
    length = _distances(chain, shoulder, posture[None, :])[0]
    for column in range(chain.size):
        trial = posture.copy()
        trial[column] = np.clip(0.0, box.lower[column], box.upper[column])
        if _distances(chain, shoulder, trial[None, :])[0] >= length * (1.0 - 1e-12):
            posture = trial
    return posture
