# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Two iterations of inverse kinematics from one posture, both inside the joint limits.

`follow` goes to the posture that reaches a target and lies nearest to another one; `closest`
goes to the nearest minimum of the error, where the target may be out of reach. All variables are
scaled, see `scaled_chain`.

References
----------
C. W. Wampler, "Manipulator inverse kinematic solutions based on vector formulations and damped
least-squares methods", IEEE Trans. Systems, Man, and Cybernetics 16(1), 1986, 93-101, and
Y. Nakamura, H. Hanafusa, "Inverse kinematic solutions with singularity robustness for robot
manipulator control", J. Dynamic Systems, Measurement, and Control 108(3), 1986, 163-171: the
damped step J^T (J J^T + mu I)^-1 e.

T. Sugihara, "Solvability-unconcerned inverse kinematics by the Levenberg-Marquardt method",
IEEE Trans. Robotics 27(5), 2011, 984-991 (citation from memory): damping that falls with the
squared error keeps the convergence quadratic.

"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy.linalg.lapack import dposv

from teleop_eval.core.rotations import Array
from teleop_eval.core.scaled_chain import Posture, ScaledChain, Target

# Norm of the scaled error (arm lengths, rad) at which an iteration ends: a tenth of what counts
# as reached. Most ends are far better, since the last step squares the error.
CONVERGED = 1e-7
# Largest change of a variable in one iteration, rad or arm lengths.
STEP = 0.5
FOLLOW_STEPS = 10
CLOSEST_STEPS = 60
# Damping of `follow`: a share of the squared error above a floor that only keeps the equations
# of a planar arm in space solvable.
_SHARE, _FLOOR = 1e-2, 1e-12


class End(NamedTuple):
    """Where an iteration ended, the scaled error there, and whether that is converged."""

    posture: Posture
    error: Array
    converged: bool


def follow(chain: ScaledChain, start: Posture, target: Target, anchor: Array) -> End:
    """
    Go to the posture nearest to `anchor` (n,) among those that reach the target.

    Each step d solves: least |y + d - anchor| subject to J d = e and the limits. The joint that
    would pass its limit farthest is held there and the rest is solved anew, until none passes.

    Returns
    -------
    The end; not converged where the error stops falling or after 10 steps.

    """
    posture = start
    error = chain.error(posture, target)
    norm = _norm(error)
    slow = 0
    for _ in range(FOLLOW_STEPS):
        y = _step(chain, posture, error, anchor, _FLOOR + _SHARE * norm * norm)
        posture = chain.at(y)
        error = chain.error(posture, target)
        before, norm = norm, _norm(error)
        if norm < CONVERGED:
            return End(posture, error, True)
        slow = slow + 1 if norm > 0.8 * before else 0
        if slow == 3:
            break
    return End(posture, error, False)


def _step(chain: ScaledChain, posture: Posture, error: Array, anchor: Array,
          damping: float) -> Array:
    y, jacobian = posture.y, posture.jacobian
    wish = anchor - y
    move = wish + _least(jacobian, error - jacobian.dot(wish), damping)
    low, high = chain.lower - y, chain.upper - y
    if bool(((move >= low) & (move <= high)).all()):
        return _shortened(chain, y, move)
    free = np.ones(len(y), dtype=bool)
    beyond = np.maximum(low - move, move - high)
    while True:
        worst = int(np.argmax(beyond))
        if beyond[worst] <= 0.0:
            break
        free[worst] = False
        held = np.where(free, 0.0, np.clip(move, low, high))
        rest = jacobian * free
        wish_left = wish * free
        move = held + wish_left + _least(
            rest, error - jacobian.dot(held) - rest.dot(wish_left), damping)
        beyond = np.where(free, np.maximum(low - move, move - high), 0.0)
    return _shortened(chain, y, move)


def _shortened(chain: ScaledChain, y: Array, move: Array) -> Array:
    largest = float(np.abs(move).max())
    if largest > STEP:
        move = move * (STEP / largest)
    # Adding and subtracting may miss a limit by a rounding.
    return _inside(chain, y + move)


def closest(chain: ScaledChain, start: Posture, target: Target, toward: Array) -> End:
    """
    Go down to a minimum of |e|^2 inside the limits.

    Newton's method with the exact second derivatives, damped by what the last steps
    gained; a joint at a limit that the error pushes outward is held. A stretched arm with the
    target inside reach is at a saddle: it is left along the most negative curvature, to the side
    of `toward` (n,).

    Returns
    -------
    The end; converged where the target is reached.

    """
    end = _down(chain, End(start, chain.error(start, target), False), target)
    for _ in range(3):
        if end.converged:
            break
        beside = _beside(chain, end, target, toward)
        if beside is None:
            break
        end = _down(chain, beside, target)
    return end


def _down(chain: ScaledChain, start: End, target: Target) -> End:
    posture, error, _ = start
    cost = 0.5 * float(error.dot(error))
    damping = 1e-4
    for _ in range(CLOSEST_STEPS):
        if _norm(error) < CONVERGED:
            return End(posture, error, True)
        slope, held = _slope(chain, posture, error)
        if float(np.abs(slope).max()) < 1e-12:
            break
        move, damping = _downhill(_curvature(chain, posture, error, held), slope, damping)
        largest = float(np.abs(move).max())
        if largest > STEP:
            move *= STEP / largest
        tried = chain.at(_inside(chain, posture.y + move))
        error_there = chain.error(tried, target)
        cost_there = 0.5 * float(error_there.dot(error_there))
        if cost_there < cost:
            gained = cost - cost_there
            posture, error, cost = tried, error_there, cost_there
            damping = max(0.2 * damping, 1e-10)
            if gained < 1e-10 * cost:
                break
        elif damping > 1e3 or largest < 1e-12:
            break
        else:
            damping *= 5.0
    return End(posture, error, _norm(error) < CONVERGED)


def _beside(chain: ScaledChain, end: End, target: Target, toward: Array) -> End | None:
    """Return a posture beside a saddle with less error, None at a minimum."""
    posture, error, _ = end
    _, held = _slope(chain, posture, error)
    values, vectors = np.linalg.eigh(_curvature(chain, posture, error, held))
    if values[0] > -1e-9:
        return None
    way = vectors[:, 0]
    if float(way.dot(toward - posture.y)) < 0.0:
        way = -way
    for length in 0.3 * 0.5 ** np.arange(12):
        tried = chain.at(_inside(chain, posture.y + length * way))
        error_there = chain.error(tried, target)
        if _norm(error_there) < _norm(error):
            return End(tried, error_there, False)
    return None


def _slope(chain: ScaledChain, posture: Posture, error: Array) -> tuple[Array, Array]:
    """Return the slope (n,) of |e|^2 / 2, 0 for joints held at a limit, and which those are."""
    y = posture.y
    slope = -posture.jacobian.T.dot(error)
    held = ((y <= chain.lower) & (slope > 0.0)) | ((y >= chain.upper) & (slope < 0.0))
    slope[held] = 0.0
    return slope, held


def _curvature(chain: ScaledChain, posture: Posture, error: Array, held: Array) -> Array:
    """Return the second derivatives (n, n) of |e|^2 / 2, 0 for joints that are held."""
    curvature = posture.jacobian.T.dot(posture.jacobian) - chain.bending(posture, error)
    curvature[held, :] = 0.0
    curvature[:, held] = 0.0
    return np.asarray(curvature)


def _inside(chain: ScaledChain, y: Array) -> Array:
    return np.asarray(np.minimum(np.maximum(y, chain.lower), chain.upper))


def _downhill(curvature: Array, slope: Array, damping: float) -> tuple[Array, float]:
    """Return the damped Newton step, with as much damping as makes it lead down."""
    unit = np.eye(len(slope))
    while True:
        _, move, info = dposv(curvature + damping * unit, -slope)
        if info == 0:
            return move, damping
        damping = max(5.0 * damping, 1e-6)


def _least(jacobian: Array, error: Array, damping: float) -> Array:
    """Return the damped least-squares step J^T (J J^T + mu I)^-1 e."""
    square = jacobian.dot(jacobian.T)
    square.flat[::len(square) + 1] += damping
    _, weights, info = dposv(square, error)
    if info:
        # Rounding has made the damped square indefinite: it needs more than the floor.
        square.flat[::len(square) + 1] += 1e-9
        _, weights, info = dposv(square, error)
    return np.asarray(jacobian.T.dot(weights))


def _norm(error: Array) -> float:
    return float(error.dot(error)) ** 0.5
