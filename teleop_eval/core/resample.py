# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Streams of any rate onto one uniform grid of cells.

Cell k covers [k T, (k + 1) T), T the grid's period, times counted in integer nanoseconds from
the run's origin. A sampled stream's value in a cell is the exact time average of its
piecewise linear interpolant over the cell. The average is the low pass that a fast stream
needs before decimation; it has zero phase and is the same for every stream, so that no
stream is late by it. A held stream's value is the time average of its step function.

A cell needs no sample beyond the first one at or after its end, and each cell is summed on
its own. The grid is therefore the same to the last bit whether it is computed hop by hop
while samples arrive or at once from a recording, provided the caller keeps the last sample
at or before the first cell it asks for.

Nothing is extrapolated, and an interval longer than `max_gap_ns` is masked, never bridged.
A sample with a number that is not finite counts as missing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

MIN_GAP_NS = 100_000_000


@dataclass(frozen=True)
class Cells:
    """
    Consecutive grid cells: values (count, d), NaN where not valid; valid (count,) of bool.

    The caller knows the first cell's number.
    """

    values: np.ndarray
    valid: np.ndarray


@dataclass(frozen=True)
class _Pieces:
    """
    Cells cut at the sample times, so that a stream is linear (or constant) on each piece.

    `start_ns` and `length_ns` (m,) of int64; `interval` (m,) is the index of the last sample
    at or before the piece, -1 if none; `first` (count,) each cell's first piece.
    """

    start_ns: np.ndarray
    length_ns: np.ndarray
    interval: np.ndarray
    first: np.ndarray


def complete_cells(last_time_ns: int, period_ns: int) -> int:
    """Return the number of cells from the origin on that end at or before the time."""
    return max(0, last_time_ns // period_ns)


def default_max_gap_ns(times_ns: np.ndarray) -> int:
    """
    Return the longest interval to interpolate over: max(0.1 s, 3 median periods).

    Parameters
    ----------
    times_ns
        Sample times (n,) in nanoseconds; fewer than two give 0.1 s.

    """
    if len(times_ns) < 2:
        return MIN_GAP_NS
    return max(MIN_GAP_NS, int(3 * np.median(np.diff(times_ns))))


def cell_average(
    times_ns: np.ndarray,
    values: np.ndarray,
    first_cell: int,
    count: int,
    *,
    period_ns: int,
    max_gap_ns: int,
) -> Cells:
    """
    Average the linear interpolant of a sampled stream over each cell.

    Parameters
    ----------
    times_ns
        Sample times (n,), int64 nanoseconds from the origin, strictly increasing.
    values
        Samples (n, d), any unit.
    first_cell, count
        The cells to compute: first_cell ... first_cell + count - 1.
    period_ns
        Cell length in nanoseconds.
    max_gap_ns
        Longest interval between two samples that is interpolated over.

    Returns
    -------
    Cells
        A cell is valid if sample intervals no longer than `max_gap_ns` cover all of it.

    Raises
    ------
    ValueError
        If shapes do not fit, the period is not positive or times do not increase.

    """
    times, samples = _checked(times_ns, values, period_ns)
    if len(times) < 2 or count <= 0:
        return _all_missing(count, samples.shape[1])
    pieces = _cut(times, first_cell, count, period_ns)
    usable = _covered(times, pieces.interval, max_gap_ns)
    left = np.clip(pieces.interval, 0, len(times) - 2)
    # Twice the middle is an integer: no rounding before the one division.
    middle_twice = 2 * (pieces.start_ns - times[left]) + pieces.length_ns
    share = middle_twice / (2 * (times[left + 1] - times[left]))
    step = samples[left + 1] - samples[left]
    return _averaged(samples[left] + share[:, None] * step, usable, pieces, period_ns)


def cell_average_held(
    times_ns: np.ndarray,
    values: np.ndarray,
    first_cell: int,
    count: int,
    *,
    period_ns: int,
) -> Cells:
    """
    Average the zero-order-hold step function of a held stream over each cell.

    Each value holds from its time until the next one, without limit. The caller asks for a
    cell only when no further sample before its end can come.

    Parameters
    ----------
    times_ns
        Times (n,) of the changes, int64 nanoseconds from the origin, strictly increasing.
    values
        Values (n, d), any unit. A row with a number that is not finite is skipped: the
        value before it goes on.
    first_cell, count
        The cells to compute: first_cell ... first_cell + count - 1.
    period_ns
        Cell length in nanoseconds.

    Returns
    -------
    Cells
        A cell is valid if there is a value at or before its start.

    Raises
    ------
    ValueError
        If shapes do not fit, the period is not positive or times do not increase.

    """
    times, samples = _checked(times_ns, values, period_ns)
    if len(times) == 0 or count <= 0:
        return _all_missing(count, samples.shape[1])
    pieces = _cut(times, first_cell, count, period_ns)
    held = samples[np.maximum(pieces.interval, 0)]
    return _averaged(held, pieces.interval >= 0, pieces, period_ns)


def cell_slerp(
    times_ns: np.ndarray,
    quaternions: np.ndarray,
    first_cell: int,
    count: int,
    *,
    period_ns: int,
    max_gap_ns: int,
) -> Cells:
    """
    Interpolate orientations on the shorter great circle at the centre of each cell.

    Source: Shoemake 1985, "Animating rotation with quaternion curves", Computer Graphics
    19(3):245-254 (from memory).

    Parameters
    ----------
    times_ns
        Sample times (n,), int64 nanoseconds from the origin, strictly increasing.
    quaternions
        Orientations (n, 4), x, y, z, w, of any norm but zero; a zero one counts as missing.
    first_cell, count
        The cells to compute: first_cell ... first_cell + count - 1.
    period_ns
        Cell length in nanoseconds.
    max_gap_ns
        Longest interval between two samples that is interpolated over.

    Returns
    -------
    Cells
        Unit quaternions (count, 4). A cell is valid under the rule of `cell_average`, so
        that a pose's position and orientation are valid together.

    Raises
    ------
    ValueError
        If shapes do not fit, the period is not positive or times do not increase.

    """
    quaternions = np.asarray(quaternions, dtype=float)
    if quaternions.ndim != 2 or quaternions.shape[1] != 4:
        raise ValueError(f'quaternions must have shape (n, 4), got {quaternions.shape}')
    norms = np.linalg.norm(quaternions, axis=1, keepdims=True)
    units = np.divide(
        quaternions, norms, out=np.full_like(quaternions, np.nan), where=norms > 0.0
    )
    times, units = _checked(times_ns, units, period_ns)
    if len(times) < 2 or count <= 0:
        return _all_missing(count, 4)
    pieces = _cut(times, first_cell, count, period_ns)
    usable = _covered(times, pieces.interval, max_gap_ns)
    valid = np.logical_and.reduceat(usable, pieces.first)
    centre_twice = (2 * (first_cell + np.arange(count, dtype=np.int64)) + 1) * period_ns
    left = np.searchsorted(2 * times, centre_twice, side='right') - 1
    left = np.clip(left, 0, len(times) - 2)
    share = (centre_twice - 2 * times[left]) / (2 * (times[left + 1] - times[left]))
    result = _slerp(units[left], units[left + 1], share)
    result[~valid] = np.nan
    return Cells(result, valid)


def edge_velocity(cells: Cells, *, period_ns: int, previous: Cells | None = None) -> Cells:
    """
    Differentiate cell values: row j is (x_j - x_(j-1)) / T, at the time of cell j's start.

    Parameters
    ----------
    cells
        Consecutive cells (count, d).
    period_ns
        Cell length in nanoseconds.
    previous
        Cells directly before; only the last counts. Without it the first row is not valid.

    Returns
    -------
    Cells
        Velocities (count, d) in the cells' unit per second, valid where both cells are.

    """
    if previous is None or len(previous.valid) == 0:
        before, known = np.full((1, cells.values.shape[1]), np.nan), np.zeros(1, dtype=bool)
    else:
        before, known = previous.values[-1:], previous.valid[-1:]
    values = np.concatenate([before, cells.values])
    valid = np.concatenate([known, cells.valid])
    return Cells(np.diff(values, axis=0) / (period_ns * 1e-9), valid[1:] & valid[:-1])


def _checked(
    times_ns: np.ndarray, values: np.ndarray, period_ns: int
) -> tuple[np.ndarray, np.ndarray]:
    """Return times and values without the rows that are not finite."""
    times = np.asarray(times_ns, dtype=np.int64)
    samples = np.asarray(values, dtype=float)
    if times.ndim != 1 or samples.ndim != 2 or len(times) != len(samples):
        raise ValueError(
            f'expected times (n,) and values (n, d), got {times.shape} and {samples.shape}'
        )
    if period_ns <= 0:
        raise ValueError(f'the period must be positive, got {period_ns} ns')
    if np.any(times[1:] <= times[:-1]):
        row = int(np.argmax(times[1:] <= times[:-1])) + 1
        raise ValueError(f'times must increase, row {row} is at {times[row]} ns')
    finite = np.isfinite(samples).all(axis=1)
    return (times, samples) if finite.all() else (times[finite], samples[finite])


def _cut(times: np.ndarray, first_cell: int, count: int, period_ns: int) -> _Pieces:
    """Cut the cells at every sample time inside them."""
    edges = (first_cell + np.arange(max(count, 0) + 1, dtype=np.int64)) * period_ns
    inside = times[np.searchsorted(times, edges[0]):np.searchsorted(times, edges[-1])]
    cuts = np.union1d(edges, inside)
    start = cuts[:-1]
    return _Pieces(
        start,
        np.diff(cuts),
        np.searchsorted(times, start, side='right') - 1,
        np.searchsorted(start, edges[:-1]),
    )


def _covered(times: np.ndarray, interval: np.ndarray, max_gap_ns: int) -> np.ndarray:
    """Tell which pieces lie between two samples no more than the longest gap apart."""
    # The intervals before the first and after the last sample never count.
    short = np.concatenate([[False], np.diff(times) <= max_gap_ns, [False]])
    return short[interval + 1]


def _averaged(
    heights: np.ndarray, usable: np.ndarray, pieces: _Pieces, period_ns: int
) -> Cells:
    """Sum piece by piece within each cell; a cell is valid if all its pieces are usable."""
    # A running integral over the stream would be quicker, but its rounding would depend on
    # where the stream was cut, and live and post-run results would differ.
    areas = heights * pieces.length_ns[:, None]
    values = np.add.reduceat(areas, pieces.first, axis=0) / period_ns
    valid = np.logical_and.reduceat(usable, pieces.first)
    values[~valid] = np.nan
    return Cells(values, valid)


def _slerp(start: np.ndarray, end: np.ndarray, share: np.ndarray) -> np.ndarray:
    """Return unit quaternions (n, 4) at the share (n,) of the way, on the shorter arc."""
    cosine = np.sum(start * end, axis=1)
    end = np.where(cosine[:, None] < 0.0, -end, end)
    # Half chord and half sum: exact for close as well as for opposite quaternions.
    angle = 2.0 * np.arctan2(
        np.linalg.norm(end - start, axis=1), np.linalg.norm(end + start, axis=1)
    )
    # Below 1e-6 rad sin(a x) / sin(a) differs from x by less than 1e-12.
    small = angle < 1e-6
    sine = np.sin(np.where(small, 1.0, angle))
    before = np.where(small, 1.0 - share, np.sin((1.0 - share) * angle) / sine)
    after = np.where(small, share, np.sin(share * angle) / sine)
    mixed = before[:, None] * start + after[:, None] * end
    return mixed / np.linalg.norm(mixed, axis=1, keepdims=True)


def _all_missing(count: int, width: int) -> Cells:
    """Return cells without any value."""
    count = max(count, 0)
    return Cells(np.full((count, width), np.nan), np.zeros(count, dtype=bool))
