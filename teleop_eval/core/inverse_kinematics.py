# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Joint postures of a real arm that follow a tool path, within its joint limits.

Used to predict what a mapping between hand and tool would have asked of the joints. A target the
arm cannot reach is reported as such, with the closest posture: never clipped silently.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from teleop_eval.core import rotations
from teleop_eval.core.description import CONTINUOUS
from teleop_eval.core.inverse_search import ROUNDS, StartPool
from teleop_eval.core.inverse_steps import End, closest, follow
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.rotations import Array
from teleop_eval.core.scaled_chain import Posture, ScaledChain, Target, rotation_vector

# A target counts as reached within this many metres and arm lengths, and radians.
TOLERANCE = 1e-6
# A target farther from the last one than this (arm lengths, rad) does not continue a path.
FAR, FAR_TURN = 0.1, 0.5
# While targets are out of reach, every so many of them other starts are tried again.
SEARCH_EVERY = 50
# A posture from a search replaces the followed one if it is closer by this scaled error.
_CLOSER = 1e-6
_SEED = 0
_AT_LIMIT = 1e-9

Mask = npt.NDArray[np.bool_]


def orientation_possible(chain: SerialChain) -> bool:
    """Return whether the tool's orientation can be followed too: with 6 or more variables."""
    return chain.size >= 6


def pull_share(period_s: float, settle_s: float = 2.0) -> float:
    """Return the share per target that lets free motion settle with this time constant, s."""
    return -math.expm1(-period_s / settle_s)


@dataclass(frozen=True, eq=False)
class IkResult:
    """
    Postures for m targets.

    Attributes
    ----------
    joints
        (m, n) positions in the order of the chain, rad or m, inside the limits; NaN where
        nothing was asked. For a target out of reach, the closest posture found.
    asked
        (m,) whether there was a target: False where a row has NaN.
    reached
        (m,) whether the posture meets the target within the tolerance.
    jumped
        (m,) whether the posture was found by a search instead of from the one before it: the
        first one, after a jump of the target, or on another branch. No joint speed follows
        from the step that leads to it.
    position_error_m
        (m,) distance between tip and target, m; NaN where nothing was asked.
    orientation_error_rad
        (m,) angle between them, rad; NaN without orientation.
    at_limit
        (m, n) whether a joint lies at one of its limits.

    """

    joints: Array
    asked: Mask
    reached: Mask
    jumped: Mask
    position_error_m: Array
    orientation_error_rad: Array
    at_limit: Mask


class PathSolver:
    """
    Follows a tool path with the joints of one arm, target by target.

    Damped least squares (see `inverse_steps`) on variables and errors of one scale: lengths in
    units of the reach L, angles in radians, so that a turn of 1 rad weighs as much as 1 L.

    Null-space rule: of all postures within the limits that reach a target, the one nearest to
    the posture before it, moved by the share `pull` towards `rest`, in the norm of the scaled
    variables. While a target stands still this settles in the posture nearest to `rest` on
    its branch; the first posture is settled at once. A continuous joint is pulled towards the
    whole turn of its rest that is nearest. Joints at a limit are held there while the step
    would lead outward.

    Targets that no path leads to (the first one, one more than 0.1 L or 0.5 rad from the last,
    one after `interrupt`, and the first that cannot be followed) are tried from up to 72 seeded
    starts, whole turns of a joint apart as its limits let it. The first posture is the one
    found nearest to `rest`, of which one is where a straight way of the tool from `rest` leads;
    any other the one nearest to the last. While targets stay out of reach the closest
    posture is followed, in the least-squares sense of |position error / L|^2 + |angle|^2, and
    24 other starts are tried at every 50th target: up to 49 targets that another branch could
    reach may then be called out of reach. The same targets give the same postures, however
    they are cut into windows.

    Parameters
    ----------
    chain
        The arm.
    reach_m
        Its arm length L, m.
    with_orientation
        Follow poses instead of positions; only where `orientation_possible`.
    rest
        (n,) posture to begin near and to pull to, rad or m: that of the robot at the beginning,
        where it is known, since an arm reaches a pose with several postures and stays in its
        own. By default the middle of the limits, and 0 for joints without limits.
    pull
        Share per target, 0 to 1; see `pull_share`.

    Raises
    ------
    ValueError
        If orientation is asked of fewer than 6 variables, the reach is not positive, `pull`
        lies outside [0, 1], or `rest` has another shape or is outside the limits.

    """

    def __init__(
        self, chain: SerialChain, *, reach_m: float, with_orientation: bool,
        rest: npt.ArrayLike | None = None, pull: float = 0.01,
    ) -> None:
        if chain.size == 0:
            raise ValueError('a chain without moving joints cannot follow a path')
        if with_orientation and not orientation_possible(chain):
            raise ValueError(
                f'orientation needs 6 or more joints, and there are {chain.size}: follow the '
                'position alone')
        if not (math.isfinite(reach_m) and reach_m > 0.0):
            raise ValueError(f'the reach must be positive, got {reach_m!r}')
        if not 0.0 <= pull <= 1.0:
            raise ValueError(f'the pull must lie between 0 and 1, got {pull!r}')
        self.chain, self.pull, self.with_orientation = chain, pull, with_orientation
        self.rest = _middle(chain) if rest is None else np.array(rest, dtype=float)
        if self.rest.shape != (chain.size,) or not np.all(
                (self.rest >= chain.lower) & (self.rest <= chain.upper)):
            raise ValueError(
                f'rest needs {chain.size} positions inside the limits, got {self.rest.tolist()}')
        self.tolerance_m = TOLERANCE * min(1.0, reach_m)
        self._scaled = ScaledChain(chain, reach_m, with_orientation=with_orientation)
        self._rest = self.rest / self._scaled.scale
        self._endless = np.array([kind == CONTINUOUS for kind in chain.kinds])
        self._whole = _same_after_a_turn(chain)
        self._pool = StartPool(self._scaled, self._rest, seed=_SEED)
        self.restart()

    def restart(self) -> None:
        """Forget the last posture: the next target begins a path of its own."""
        self._posture: Posture | None = None
        self._target: Target | None = None
        self._failing = 0

    def interrupt(self) -> None:
        """Note that the next target does not follow the last one; the posture is kept."""
        self._target = None
        self._failing = 0

    def solve(self, positions: npt.ArrayLike,
              orientations: npt.ArrayLike | None = None) -> IkResult:
        """
        Follow the targets of one window.

        Parameters
        ----------
        positions
            (m, 3) of the tip in base axes, m; a row with NaN asks nothing and leaves the last
            posture as it is.
        orientations
            (m, 4) x, y, z, w, tip to base axes; needed with orientation, ignored without.

        Raises
        ------
        ValueError
            If a shape is wrong or orientations are missing.

        """
        wanted, turns = self._checked(positions, orientations)
        count, size = len(wanted), self.chain.size
        asked = np.asarray(np.isfinite(wanted).all(axis=1))
        if turns is not None:
            asked &= np.isfinite(turns).all(axis=(1, 2))
        y = np.full((count, size), np.nan)
        errors = np.full((count, self._scaled.rows), np.nan)
        jumped = np.zeros(count, dtype=bool)
        for row in np.flatnonzero(asked):
            target = Target(wanted[row], None if turns is None else turns[row])
            end, jumped[row] = self._next(target)
            y[row], errors[row] = end.posture.y, end.error
        at_limit = np.asarray((y <= self._scaled.lower + _AT_LIMIT)
                              | (y >= self._scaled.upper - _AT_LIMIT))
        distance = np.linalg.norm(errors[:, :3], axis=1) * self._scaled.reach_m
        angle = np.full(count, np.nan)
        reached = np.asarray(distance <= self.tolerance_m)  # false for NaN
        if turns is not None:
            angle = np.linalg.norm(errors[:, 3:], axis=1)
            reached &= angle <= TOLERANCE
        # Scaling there and back must not carry a sliding joint over its limit.
        joints = np.clip(y * self._scaled.scale, self.chain.lower, self.chain.upper)
        return IkResult(joints, asked, reached, jumped, distance, angle, at_limit)

    def _checked(self, positions: npt.ArrayLike,
                 orientations: npt.ArrayLike | None) -> tuple[Array, Array | None]:
        wanted = np.asarray(positions, dtype=float)
        if wanted.ndim != 2 or wanted.shape[1] != 3:
            raise ValueError(f'positions must have shape (m, 3), got {wanted.shape}')
        if not self.with_orientation:
            return wanted, None
        if orientations is None or np.shape(orientations) != (len(wanted), 4):
            given = None if orientations is None else np.shape(orientations)
            raise ValueError(f'orientations must have shape ({len(wanted)}, 4), got {given}')
        return wanted, rotations.to_matrix(rotations.normalize(orientations))

    def _next(self, target: Target) -> tuple[End, bool]:
        """Return the end for the next target, and whether it was found by a search."""
        far = self._is_far(target)
        self._target = target
        if self._posture is None:
            end, jumped = self._first(target), True
        else:
            end, jumped = self._continued(self._posture, target, far=far)
        self._failing = 0 if end.converged else self._failing + 1
        self._posture = end.posture
        return end, jumped

    def _continued(self, last: Posture, target: Target, *, far: bool) -> tuple[End, bool]:
        anchor = self._pulled(last.y, self.pull)
        if not (far or self._failing):
            end = follow(self._scaled, last, target, anchor)
            if end.converged:
                return end, False
        end = closest(self._scaled, last, target, self._rest)
        if not far and (end.converged or self._failing % SEARCH_EVERY):
            return end, False
        rounds = 1 if self._failing else ROUNDS
        also = np.stack([last.y, end.posture.y])
        other = self._searched(target, also, anchor, rounds=rounds)
        if other.converged or _norm(other.error) < _norm(end.error) - _CLOSER:
            return other, True
        return end, far

    def _first(self, target: Target) -> End:
        """Return the posture of the first target, settled near the rest."""
        also = np.stack([self._rest, self._walked(target)])
        end = self._searched(target, also, self._rest)
        for _ in range(100):
            if not end.converged:
                break
            last = end.posture.y
            other = follow(self._scaled, end.posture, target, self._pulled(last, 0.2))
            if not other.converged:
                break
            end = other
            if float(np.abs(end.posture.y - last).max()) < 1e-6:
                break
        return end

    def _walked(self, target: Target) -> Array:
        """Return where a straight way of the tool from the rest leads, as far as it can."""
        posture = self._scaled.at(self._rest)
        apart = target.position - posture.position
        parts = float(np.linalg.norm(apart)) / (0.5 * FAR * self._scaled.reach_m)
        first, turn = posture, np.zeros(3)
        if target.rotation is not None:
            turn = rotation_vector(target.rotation.dot(first.rotation.T))
            parts = max(parts, float(np.linalg.norm(turn)) / (0.5 * FAR_TURN))
        count = math.ceil(parts)
        for part in range(1, count + 1):
            left = part / count - 1.0
            back = rotations.to_matrix(rotations.exp(left * turn))
            end = follow(self._scaled, posture, Target(
                target.position + left * apart,
                None if target.rotation is None else back.dot(target.rotation)), posture.y)
            if not end.converged:
                break
            posture = end.posture
        return posture.y

    def _searched(self, target: Target, also: Array, anchor: Array, *,
                  rounds: int = ROUNDS) -> End:
        """Return the reached posture nearest to the anchor, else the closest one found."""
        found = self._pool.search(target, also, rounds=rounds)
        reached = self._unwound(found.reached, anchor)
        order = np.argsort(np.linalg.norm(reached - anchor, axis=1), kind='stable')
        for y in reached[order]:
            start = self._scaled.at(y)
            end = follow(self._scaled, start, target, anchor)
            if not end.converged:
                end = closest(self._scaled, start, target, self._rest)
            if end.converged:
                return end
        return closest(self._scaled, self._scaled.at(found.best), target, self._rest)

    def _unwound(self, y: Array, anchor: Array) -> Array:
        """Return postures (k, n) with each joint at the whole turn nearest to the anchor."""
        turn = 2.0 * math.pi
        turns = np.clip(np.round((anchor - y) / turn), np.ceil((self._scaled.lower - y) / turn),
                        np.floor((self._scaled.upper - y) / turn))
        return np.asarray(np.where(self._whole, y + turn * turns, y))

    def _pulled(self, y: Array, share: float) -> Array:
        rest = self._rest
        if self._endless.any():
            turn = 2.0 * math.pi
            rest = rest + np.where(self._endless, turn * np.round((y - rest) / turn), 0.0)
        return np.asarray(y + share * (rest - y))

    def _is_far(self, target: Target) -> bool:
        last = self._target
        if last is None:
            return True
        apart = target.position - last.position
        if float(apart.dot(apart)) > (FAR * self._scaled.reach_m) ** 2:
            return True
        if target.rotation is None or last.rotation is None:
            return False
        turn = rotation_vector(target.rotation.dot(last.rotation.T))
        return float(turn.dot(turn)) > FAR_TURN ** 2


def _middle(chain: SerialChain) -> Array:
    limited = np.isfinite(chain.lower) & np.isfinite(chain.upper)
    low, high = np.where(limited, chain.lower, 0.0), np.where(limited, chain.upper, 0.0)
    return np.asarray(np.clip(0.5 * (low + high), chain.lower, chain.upper))


def _same_after_a_turn(chain: SerialChain) -> Mask:
    """Return which variables (n,) turn joints that are where they were after a whole turn."""
    same = ~np.asarray(chain.prismatic, dtype=bool)
    for step in chain.steps:
        same[step.variable] &= not step.prismatic and float(step.factor).is_integer()
    return same


def _norm(error: Array) -> float:
    return float(error.dot(error)) ** 0.5
