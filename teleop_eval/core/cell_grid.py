# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Cubes of normalised space, and those a stream of positions visits.

Space about the shoulder is cut into cubes of edge 0.1 arm lengths. A count of cubes touched by
a body over-states its volume by about half a cube along its surface.

References
----------
R. K. Colwell, C. X. Mao, J. Chang, "Interpolating, extrapolating, and comparing
incidence-based species accumulation curves", Ecology 85(10), 2004, 2717-2727; S. H. Hurlbert,
"The nonconcept of species diversity", Ecology 52(4), 1971, 577-586: the expected number of
classes met in a random part of a sample (citations from memory).

"""

from __future__ import annotations

import math

import numpy as np
from scipy.special import gammaln

# Positions farther out than this many arm lengths are counted, not stored: a wrong shoulder
# or arm length must not fill the memory.
BOUND = 1.5
_FACES = ((1, 0, 0), (-1, 0, 0), (0, 1, 0), (0, -1, 0), (0, 0, 1), (0, 0, -1))


class CellGrid:
    """
    Cubes about the shoulder, numbered by integer codes.

    Cube (i, j, k) spans [i, i + 1) x [j, j + 1) x [k, k + 1) edges, so that the shoulder is a
    corner of eight cubes. Only cubes within `BOUND` have codes, which lie in [0, size).

    Attributes
    ----------
    ball
        Codes (k,) of the cubes with their centre in the unit ball, ascending.

    """

    def __init__(self, edge: float = 0.1) -> None:
        if not 0.01 <= edge <= 0.5:
            raise ValueError(f'a cell edge of 0.01 to 0.5 arm lengths is needed, got {edge!r}')
        self.edge = edge
        # Two spare layers on each side: every stored cube has six neighbours with codes.
        self._half = math.ceil(BOUND / edge) + 2
        self._side = 2 * self._half
        self.size = self._side ** 3
        # No centre falls on the sphere for the default edge: a sum of three odd squares is
        # never 400, so rounding cannot decide.
        every = np.arange(self.size, dtype=np.int64)
        self._inside = np.linalg.norm(self.centres(every), axis=-1) <= 1.0 + 1e-12
        self.ball = every[self._inside]

    def cells_of(self, u: np.ndarray) -> np.ndarray:
        """
        Return the codes (n,) of int64 of positions u (n, 3), arm lengths.

        A position that is not finite or beyond `BOUND` has the code -1.
        """
        u = np.asarray(u, dtype=float).reshape(-1, 3)
        squared = np.einsum('ij,ij->i', u, u)
        usable = squared <= BOUND ** 2  # false for NaN
        # The nudge keeps a planar arm in one layer: rounding scatters its zeros about 0.
        index = np.floor(u[usable] / self.edge + 1e-9).astype(np.int64) + self._half
        codes = np.full(len(u), -1, dtype=np.int64)
        codes[usable] = (index[:, 0] * self._side + index[:, 1]) * self._side + index[:, 2]
        return codes

    def centres(self, codes: np.ndarray) -> np.ndarray:
        """Return the centres (k, 3) of the cubes, arm lengths."""
        return (np.stack(self._indices(codes), axis=-1) - self._half + 0.5) * self.edge

    def inside(self, codes: np.ndarray) -> np.ndarray:
        """Return whether the centres of the cubes lie in the unit ball, (k,) of bool."""
        return np.asarray(self._inside[codes])

    def closed(self, codes: np.ndarray, neighbours: int = 4) -> np.ndarray:
        """Return the codes, plus cubes with that many of 6 face neighbours among them."""
        taken = np.zeros((self._side,) * 3, dtype=np.int8)
        taken.reshape(-1)[codes] = 1
        count = np.zeros_like(taken)
        for shift in _FACES:
            # The outermost layer is never taken, so rolling over the edge brings nothing.
            count += np.roll(taken, shift, axis=(0, 1, 2))
        return np.flatnonzero((taken > 0) | (count >= neighbours)).astype(np.int64)

    def _indices(self, codes: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        i, rest = np.divmod(np.asarray(codes, dtype=np.int64), self._side ** 2)
        return (i, *np.divmod(rest, self._side))


class VisitedCells:
    """
    Cubes visited in engaged time, and how their number grows with time.

    The engaged samples are cut into blocks of `block_s` seconds. Each cube keeps its samples,
    its first visit and the number of blocks it was visited in: from the latter follows the
    number expected in any part of the blocks, without treating samples as independent.

    Parameters
    ----------
    period_s
        Time from one sample to the next, s.
    block_s
        Length of a block, s.

    """

    def __init__(
        self, grid: CellGrid | None = None, *, period_s: float, block_s: float = 10.0,
    ) -> None:
        if not (math.isfinite(period_s) and 0.0 < period_s <= block_s):
            raise ValueError(f'a period in (0, {block_s}] s is needed, got {period_s!r}')
        self.grid = CellGrid() if grid is None else grid
        self.period_s = period_s
        self.samples = 0
        self.samples_beyond = 0
        self._block_samples = max(1, round(block_s / period_s))
        self._dwell = np.zeros(self.grid.size, dtype=np.int64)
        self._first = np.full(self.grid.size, -1, dtype=np.int64)
        self._last_block = np.full(self.grid.size, -1, dtype=np.int32)
        self._blocks_in = np.zeros(self.grid.size, dtype=np.int32)

    def add(self, u: np.ndarray, valid: np.ndarray | None = None) -> None:
        """
        Add positions u (n, 3), arm lengths, in time order; those not `valid` (n,) are left out.

        Valid positions beyond `BOUND` take time and count in `samples_beyond`, but visit no
        cube; positions that are not finite are never valid.
        """
        u = np.asarray(u, dtype=float).reshape(-1, 3)
        usable = np.isfinite(u).all(axis=1)
        if valid is not None:
            usable &= np.asarray(valid, dtype=bool)
        codes = self.grid.cells_of(u[usable])
        order = self.samples + np.arange(codes.size, dtype=np.int64)
        self.samples += codes.size
        stored = codes >= 0
        self.samples_beyond += int(codes.size - np.count_nonzero(stored))
        codes, order = codes[stored], order[stored]
        np.add.at(self._dwell, codes, 1)
        blocks = order // self._block_samples
        for block in np.unique(blocks):
            here = blocks == block
            cells, where = np.unique(codes[here], return_index=True)
            self._blocks_in[cells[self._last_block[cells] != block]] += 1
            self._last_block[cells] = block
            new = self._first[cells] < 0
            self._first[cells[new]] = order[here][where[new]]

    @property
    def duration_s(self) -> float:
        """Return the time of the valid samples, s."""
        return self.samples * self.period_s

    @property
    def blocks(self) -> int:
        """Return the number of blocks begun."""
        return -(-self.samples // self._block_samples)

    def cells(self) -> np.ndarray:
        """Return the codes (k,) of the visited cubes, ascending, also beyond reach."""
        return np.flatnonzero(self._dwell)

    def cells_inside(self) -> np.ndarray:
        """Return the codes (k,) of the visited cubes with their centre inside reach."""
        cells = self.cells()
        return np.asarray(cells[self.grid.inside(cells)])

    def dwell_s(self, codes: np.ndarray) -> np.ndarray:
        """Return the time spent in the cubes, (k,) s."""
        return np.asarray(self._dwell[codes] * self.period_s)

    def first_visit_s(self, codes: np.ndarray) -> np.ndarray:
        """Return the engaged time before the first visit, (k,) s, NaN where there was none."""
        first = self._first[codes]
        return np.where(first < 0, np.nan, first * self.period_s)

    def rarefied(self, duration_fraction: float) -> float:
        """Return `rarefaction` at one fraction."""
        return float(self.rarefaction(np.array([duration_fraction]))[0])

    def rarefaction(self, duration_fractions: np.ndarray) -> np.ndarray:
        """
        Return the expected numbers (k,) of cubes inside reach in random parts of the blocks.

        With B blocks, of which cube i was visited in m_i, b = fraction * B drawn at random meet
        sum_i 1 - C(B - m_i, b) / C(B, b) cubes; linear between whole b. At fraction 1 this is
        the number visited. It stands for a shorter run of the same kind: measured on reaches to
        random targets, it meets the cubes of contiguous stretches within 1 %; where the work
        drifts through space during the run, random blocks see more than a stretch would (a
        quarter more at fraction 0.4 of one slow turn through all regions in 300 s).

        Raises
        ------
        ValueError
            If a fraction is not in [0, 1].

        """
        fractions = np.asarray(duration_fractions, dtype=float)
        if not np.all((fractions >= 0.0) & (fractions <= 1.0)):
            raise ValueError(f'fractions between 0 and 1 are needed, got {fractions.tolist()!r}')
        # Few different values of m_i occur.
        visited_in, cubes = np.unique(
            self._blocks_in[self.cells_inside()], return_counts=True)
        wanted = fractions * self.blocks
        low = np.floor(wanted).astype(int)
        drawn = np.arange(self.blocks + 2)
        needed = np.isin(drawn, low) | np.isin(drawn, low + 1)
        expected = np.zeros(drawn.size)
        for b in drawn[needed]:
            expected[b] = _expected(visited_in, cubes, self.blocks, drawn=min(b, self.blocks))
        part = wanted - low
        return np.asarray((1.0 - part) * expected[low] + part * expected[low + 1])


def _expected(visited_in: np.ndarray, cubes: np.ndarray, blocks: int, *, drawn: int) -> float:
    """Return the expected number met in `drawn` of `blocks`, with `cubes` (k,) of each kind."""
    left = blocks - visited_in - drawn
    missed = np.zeros(visited_in.size)
    some = left >= 0
    missed[some] = np.exp(
        gammaln(blocks - visited_in[some] + 1) - gammaln(left[some] + 1)
        - gammaln(blocks + 1) + gammaln(blocks - drawn + 1))
    return float(np.dot(cubes, 1.0 - missed))
