# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Inverse kinematics from many starting postures at once, for targets that no path leads to.

One start alone ends at a limit or in a folded posture often enough; a target counts as out of
reach only after many starts failed.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.kinematics import ChainPose
from teleop_eval.core.rotations import Array
from teleop_eval.core.scaled_chain import ScaledChain, Target

# Postures known in advance; each search starts from those with the least error.
POOL = 4096
# Starts of one round: nearest ones, and others for variety.
NEAR, OTHERS = 16, 8
ROUNDS = 3
STEPS = 40
# Scaled error (arm lengths, rad) below which the single iteration converges by itself.
FOUND = 1e-5
# A descent ends when a step gains less than this share of the squared error, or with this damping.
STALLED, MOST_DAMPING = 1e-4, 1e4


@dataclass(frozen=True, eq=False)
class Found:
    """
    Ends of a search.

    `y` (s, n) scaled postures inside the limits, `norms` (s,) of their scaled errors.
    """

    y: Array
    norms: Array

    @property
    def reached(self) -> Array:
        """Return the postures (k, n) next to which the target is reached."""
        return self.y[self.norms < FOUND]

    @property
    def best(self) -> Array:
        """Return the posture (n,) with the least error."""
        return np.asarray(self.y[int(np.argmin(self.norms))])


class StartPool:
    """
    Seeded starting postures within the limits, and what they reach.

    Joints without limits are drawn from [-pi, pi] about their rest, sliding ones without limits
    from an arm length to either side. The same seed gives the same postures.
    """

    def __init__(self, chain: ScaledChain, rest: Array, *, seed: int) -> None:
        self._chain = chain
        span = np.where(chain.chain.prismatic, 1.0, math.pi)
        low = np.maximum(chain.lower, rest - span)
        high = np.minimum(chain.upper, rest + span)
        share = np.random.default_rng(seed).random((POOL, len(rest)))
        self._y = low + share * (high - low)
        self._y[0] = rest
        pose = chain.chain.forward(self._y * chain.scale)
        self._positions = pose.positions
        self._rotations = pose.rotations

    def search(self, target: Target, also: Array, *, rounds: int = ROUNDS) -> Found:
        """
        Descend from many starts, in rounds until the target is reached.

        Parameters
        ----------
        target
            Where the tip should be.
        also
            (s, n) further starts of the first round, scaled.
        rounds
            Of at most 24 starts each.

        """
        square = np.sum((self._positions - target.position) ** 2, axis=1)
        square /= self._chain.reach_m ** 2
        if target.rotation is not None:
            # |R - R'|^2 is twice the squared angle for small ones, and grows with it.
            square += 0.5 * np.sum((self._rotations - target.rotation) ** 2, axis=(1, 2))
        nearest = np.argsort(square, kind='stable')
        y, norms = np.empty((0, also.shape[1])), np.empty(0)
        for turn in range(rounds):
            chosen = np.concatenate([
                nearest[turn * NEAR:(turn + 1) * NEAR],
                np.arange(turn * OTHERS, (turn + 1) * OTHERS)])
            starts = self._y[chosen] if turn else np.concatenate([also, self._y[chosen]])
            ends, errors = descend(self._chain, starts, target)
            y, norms = np.concatenate([y, ends]), np.concatenate([norms, errors])
            if np.any(norms < FOUND):
                break
        return Found(y, norms)


def descend(chain: ScaledChain, starts: Array, target: Target) -> tuple[Array, Array]:
    """
    Reduce the error from many starts (s, n) at once, inside the limits.

    Damped Gauss-Newton steps, each start with its own damping; steps that do not help are taken
    back.

    Returns
    -------
    The ends (s, n) and the norms (s,) of their scaled errors.

    """
    best = np.minimum(np.maximum(starts, chain.lower), chain.upper)
    error, jacobian = _errors(chain, best, target)
    cost = np.sum(error ** 2, axis=1)
    damping = np.full(len(best), 1e-2)
    for _ in range(STEPS):
        busy = np.flatnonzero((cost > 0.01 * FOUND ** 2) & (damping < MOST_DAMPING))
        if busy.size == 0:
            break
        tried = _moved(chain, best[busy], error[busy], jacobian[busy], damping[busy])
        error_there, jacobian_there = _errors(chain, tried, target)
        cost_there = np.sum(error_there ** 2, axis=1)
        better = cost_there < cost[busy]
        gone = busy[better]
        stalled = busy[better & (cost_there > (1.0 - STALLED) * cost[busy])]
        best[gone], cost[gone] = tried[better], cost_there[better]
        error[gone], jacobian[gone] = error_there[better], jacobian_there[better]
        damping[busy] *= np.where(better, 0.2, 5.0)
        damping[stalled] = np.inf
    return best, np.sqrt(cost)


def _moved(chain: ScaledChain, y: Array, error: Array, jacobian: Array,
           damping: Array) -> Array:
    slope = np.einsum('ski,sk->si', jacobian, error)
    held = ((y <= chain.lower) & (slope < 0.0)) | ((y >= chain.upper) & (slope > 0.0))
    free = jacobian * ~held[:, None, :]
    square = np.matmul(free.transpose(0, 2, 1), free)
    square += (damping + 1e-9)[:, None, None] * np.eye(y.shape[1])
    move = np.linalg.solve(square, np.where(held, 0.0, slope)[:, :, None])[:, :, 0]
    largest = np.abs(move).max(axis=1, keepdims=True)
    move *= np.minimum(1.0, 1.0 / np.maximum(largest, 1e-12))
    return np.minimum(np.maximum(y + move, chain.lower), chain.upper)


def _errors(chain: ScaledChain, y: Array, target: Target) -> tuple[Array, Array]:
    """Return the scaled errors (s, k) and Jacobians (s, k, n)."""
    q = y * chain.scale
    pose: ChainPose = chain.chain.forward(q)
    jacobian = chain.chain.jacobian(q) * chain.scale
    jacobian[:, :3] /= chain.reach_m
    error = (target.position - pose.positions) / chain.reach_m
    if target.rotation is None:
        return error, jacobian[:, :3]
    turn = np.matmul(target.rotation, pose.rotations.transpose(0, 2, 1))
    return np.concatenate([error, rotations.log(rotations.from_matrix(turn))], axis=1), jacobian
