# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The part of normalised space a robot arm can reach, found by sampling its joints."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from teleop_eval.core.cell_grid import CellGrid
from teleop_eval.core.errors import DescriptionError

# One further round of so many random postures must add less than this share of cells.
ROUND_SAMPLES = 100_000
ROUND_GROWTH = 0.005


class Positions(Protocol):
    """Anything that gives a point for joint positions: (N, n) in, (N, 3) metres out."""

    def positions(self, q: np.ndarray) -> np.ndarray:
        """Return the points (N, 3) in the base frame, metres, for joints (N, n)."""


class Chain(Positions, Protocol):
    """A robot chain: joint limits (n,), rad or m, and joint kinds as the description has them."""

    # Properties, so that attributes of narrower types fit as well.
    @property
    def lower(self) -> np.ndarray:
        """Return the lower limits (n,)."""

    @property
    def upper(self) -> np.ndarray:
        """Return the upper limits (n,)."""

    @property
    def kinds(self) -> Sequence[str]:
        """Return 'revolute', 'continuous' or 'prismatic' for each joint."""

    @property
    def joint_names(self) -> Sequence[str]:
        """Return the names of the joints."""


@dataclass(frozen=True)
class ReachableSet:
    """
    Cubes that random postures within the joint limits reach.

    Attributes
    ----------
    cells
        Codes (k,) of the sampled cubes, ascending, also those with their centre beyond reach.
    samples
        Number of postures.
    growth
        Number of cubes after each round of 100 000 postures.
    complete
        Whether the last round added less than 0.5 %.

    """

    grid: CellGrid
    cells: np.ndarray
    samples: int
    growth: tuple[int, ...]
    complete: bool

    @property
    def last_growth(self) -> float | None:
        """Return the share of cubes the last round added, None before the second."""
        if len(self.growth) < 2:
            return None
        return self.growth[-1] / self.growth[-2] - 1.0

    def with_visited(self, visited: np.ndarray) -> np.ndarray:
        """Return the reachable cubes inside reach: sampled, visited, or closed in by 4 of 6."""
        cells = self.grid.closed(np.union1d(self.cells, visited))
        return np.asarray(cells[self.grid.inside(cells)])


class ReachableCells:
    """
    Sampling of a robot's reachable cubes in slices, so that a live process need not wait.

    Joints are drawn uniformly within their limits, those without limits in [-pi, pi]. The result
    depends on the seed alone, not on the size of the slices.

    Parameters
    ----------
    shoulder
        Gives the shoulder (N, 3) in the base frame, m, for the same joints.
    reach_m
        Arm length, m.
    max_rounds
        Sampling ends after so many rounds of 100 000 at the latest, then `complete` is false.

    Raises
    ------
    DescriptionError
        If a prismatic joint has no limits, or the reach is not positive.

    """

    def __init__(
        self, chain: Chain, shoulder: Positions, reach_m: float, *,
        seed: int, grid: CellGrid | None = None, max_rounds: int = 30,
    ) -> None:
        if not (math.isfinite(reach_m) and reach_m > 0.0):
            raise DescriptionError(
                f'the arm length must be a positive number of metres, got {reach_m!r}')
        self._chain, self._shoulder, self._reach_m = chain, shoulder, reach_m
        self._low, self._high = _limits(chain)
        self._random = np.random.default_rng(seed)
        self._grid = CellGrid() if grid is None else grid
        self._taken = np.zeros(self._grid.size, dtype=bool)
        self._max_rounds = max_rounds
        self._growth: list[int] = []
        self._samples = 0
        self._complete = False

    def step(self, samples: int = 20_000) -> bool:
        """Try up to that many further postures; return whether the sampling has ended."""
        if self.ended:
            return True
        # Never across the end of a round, so that slices of any size end at the same sample.
        samples = min(max(samples, 1), ROUND_SAMPLES - self._samples % ROUND_SAMPLES)
        share = self._random.random((samples, self._low.size))
        q = self._low + share * (self._high - self._low)
        u = (self._chain.positions(q) - self._shoulder.positions(q)) / self._reach_m
        codes = self._grid.cells_of(u)
        self._taken[codes[codes >= 0]] = True
        self._samples += samples
        if self._samples % ROUND_SAMPLES == 0:
            found = int(np.count_nonzero(self._taken))
            before = self._growth[-1] if self._growth else 0
            self._growth.append(found)
            self._complete = before > 0 and found - before < ROUND_GROWTH * before
        return self.ended

    @property
    def ended(self) -> bool:
        """Return whether further steps would change nothing."""
        return self._complete or len(self._growth) >= self._max_rounds

    def result(self) -> ReachableSet:
        """Return what has been found so far."""
        return ReachableSet(
            self._grid, np.flatnonzero(self._taken), self._samples, tuple(self._growth),
            self._complete)


def reachable_cells(
    chain: Chain, shoulder: Positions, reach_m: float, *,
    seed: int, should_stop: Callable[[], bool] | None = None,
) -> ReachableSet:
    """Return the reachable cubes, sampled to the end or until `should_stop()` is true."""
    sampling = ReachableCells(chain, shoulder, reach_m, seed=seed)
    while not (should_stop is not None and should_stop()):
        if sampling.step():
            break
    return sampling.result()


def _limits(chain: Chain) -> tuple[np.ndarray, np.ndarray]:
    """Return the ranges (n,), (n,) to draw from: a turn for joints without limits."""
    low = np.array(chain.lower, dtype=float)
    high = np.array(chain.upper, dtype=float)
    for i, kind in enumerate(chain.kinds):
        limited = math.isfinite(low[i]) and math.isfinite(high[i])
        if kind == 'prismatic' and not limited:
            raise DescriptionError(
                f'prismatic joint {chain.joint_names[i]!r} has the limits {float(low[i])!r} to '
                f'{float(high[i])!r}: give finite ones, its reach cannot be sampled')
        if kind == 'continuous' or not limited:
            low[i], high[i] = -math.pi, math.pi
    return low, high
