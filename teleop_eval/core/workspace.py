# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Workspace use as metrics, on one scale for arms of different size.

A cube of edge 0.1 arm lengths counts if its centre lies inside reach (norm of the normalised
position at most 1). Visiting more takes time: coverage carries its engaged duration and the
coverage expected in shorter ones, by which sessions of unequal length are compared.
"""

from __future__ import annotations

import numpy as np
from scipy.spatial import ConvexHull

from teleop_eval.core.cell_grid import BOUND, CellGrid, VisitedCells
from teleop_eval.core.histogram import StreamingHistogram
from teleop_eval.core.metric import INSUFFICIENT, NOT_CONFIGURED, Metric, missing
from teleop_eval.core.reachable_cells import ReachableCells, ReachableSet, reachable_cells

__all__ = [
    'CellGrid', 'ReachableCells', 'ReachableSet', 'VisitedCells', 'coverage_at',
    'coverage_operator', 'coverage_robot', 'hull_volume', 'overlap', 'reach_metrics',
    'reachable_cells',
]

_CURVE_POINTS = 20
_NO_SAMPLES = 'No engaged sample with a valid position within 1.5 arm lengths was seen.'


def coverage_operator(visited: VisitedCells, *, engaged_s: float) -> Metric:
    """Return the visited share of the cubes of the unit ball (workspace_coverage_operator)."""
    return _coverage(visited, visited.grid.ball, engaged_s=engaged_s)


def coverage_robot(
    visited: VisitedCells, reachable: ReachableSet | None, *, engaged_s: float,
) -> Metric:
    """
    Return the visited share of the cubes the robot can reach (workspace_coverage_robot).

    Reachable is what was sampled, visited, or has 4 of 6 face neighbours reachable; None where
    the robot has no joint model.

    Raises
    ------
    ValueError
        If the two do not share one kind of grid.

    """
    if reachable is None:
        return missing(
            NOT_CONFIGURED, '1',
            'The reachable space follows from a robot description and joint positions, and '
            'this arm has none.')
    if visited.grid.edge != reachable.grid.edge:
        raise ValueError(
            f'cells of edge {visited.grid.edge!r} and {reachable.grid.edge!r} cannot be compared')
    details: dict[str, object] = {
        'reachable_samples': reachable.samples,
        'reachable_last_growth': reachable.last_growth,
    }
    if not reachable.complete:
        return missing(
            INSUFFICIENT, '1',
            f'The reachable space has not been sampled to the end yet ({reachable.samples} '
            'postures).', **details)
    cells = reachable.with_visited(visited.cells())
    return _coverage(visited, cells, engaged_s=engaged_s, details=details)


def coverage_at(coverage: Metric, duration_s: float) -> float | None:
    """
    Return a coverage rarefied to a shorter engaged duration, None beyond its own.

    Linear between the points of the metric's `rarefied` details; 0 at duration 0.
    """
    curve = coverage.details.get('rarefied')
    if coverage.value is None or not isinstance(curve, dict):
        return None
    durations = [0.0, *curve['duration_s']]
    if not 0.0 <= duration_s <= durations[-1] * (1.0 + 1e-9):
        return None
    return float(np.interp(duration_s, durations, [0.0, *curve['coverage']]))


def overlap(ideal: VisitedCells, robot: VisitedCells, *, engaged_s: float) -> Metric:
    """
    Return the cubes visited by both the ideal command and the robot / by either.

    The value is workspace_overlap. Only cubes inside reach count; how many of the ideal
    command lie beyond, where the robot cannot follow, is in the details.
    """
    if ideal.samples == 0 or robot.samples == 0:
        return missing(INSUFFICIENT, '1', _NO_SAMPLES, engaged_s=engaged_s)
    cells_ideal, cells_robot = ideal.cells_inside(), robot.cells_inside()
    common = np.intersect1d(cells_ideal, cells_robot).size
    either = cells_ideal.size + cells_robot.size - common
    details: dict[str, object] = {
        'engaged_s': engaged_s,
        'cells_ideal': int(cells_ideal.size),
        'cells_robot': int(cells_robot.size),
        'cells_common': int(common),
        'cells_ideal_beyond_reach': int(ideal.cells().size - cells_ideal.size),
        'share_ideal_beyond_bound': ideal.samples_beyond / ideal.samples,
    }
    if either == 0:
        return missing(
            INSUFFICIENT, '1', 'Neither the ideal command nor the robot was inside reach: check '
            'the shoulders and arm lengths.', **details)
    return Metric(
        common / either, '1', n=min(ideal.blocks, robot.blocks),
        samples=min(ideal.samples, robot.samples), details=details)


def hull_volume(visited: VisitedCells, *, engaged_s: float) -> Metric:
    """
    Return the volume of the convex hull of the visited cubes' centres (hull_volume_norm).

    In cubed arm lengths; the unit ball has 4.19. One far excursion counts in full and hollows
    are filled: read it beside the coverage.
    """
    unit = 'arm lengths^3'
    cells = visited.cells_inside()
    details: dict[str, object] = {'engaged_s': engaged_s, 'cells': int(cells.size)}
    if cells.size == 0:
        return missing(INSUFFICIENT, unit, _NO_SAMPLES, **details)
    centres = visited.grid.centres(cells)
    # Centres lie on a lattice: a rank is either full by a tenth of an arm length or not at all.
    if np.linalg.matrix_rank(centres - centres[0], tol=1e-6) < 3:
        return missing(
            INSUFFICIENT, unit, f'The {cells.size} visited cells lie in one plane, and a hull '
            'needs four that do not.', **details)
    return Metric(
        float(ConvexHull(centres).volume), unit, n=visited.blocks, samples=visited.samples,
        details=details)


def reach_metrics(
    norms: StreamingHistogram, *, blocks: int, engaged_s: float,
) -> dict[str, Metric]:
    """
    Return reach_p50_norm, reach_p95_norm and reach_max_norm.

    Parameters
    ----------
    norms
        Of |u|, the distance from the shoulder in arm lengths.
    blocks
        Number of independent blocks the samples come from.
    engaged_s
        Engaged time, s.

    """
    levels = {'reach_p50_norm': 50.0, 'reach_p95_norm': 95.0, 'reach_max_norm': 100.0}
    if norms.count == 0:
        return {name: missing(
            INSUFFICIENT, 'arm lengths', _NO_SAMPLES, engaged_s=engaged_s) for name in levels}
    return {name: Metric(
        norms.percentile(level), 'arm lengths', n=blocks, samples=norms.count,
        details={'engaged_s': engaged_s}) for name, level in levels.items()}


def _coverage(
    visited: VisitedCells, cells: np.ndarray, *, engaged_s: float,
    details: dict[str, object] | None = None,
) -> Metric:
    """Return the visited share of `cells` (k,), which lie inside reach."""
    seen = visited.cells()
    inside = visited.cells_inside()
    details = {
        'engaged_s': engaged_s,
        'cells_visited': int(inside.size),
        'cells_total': int(cells.size),
        'cells_visited_beyond_reach': int(seen.size - inside.size),
        'share_beyond_bound': visited.samples_beyond / max(visited.samples, 1),
        **(details or {}),
    }
    if seen.size == 0:
        return missing(INSUFFICIENT, '1', _NO_SAMPLES, **details)
    if cells.size == 0:
        return missing(
            INSUFFICIENT, '1', 'No cube of edge 0.1 arm lengths is reachable inside the joint '
            'limits.', **details)
    fractions = np.arange(1, _CURVE_POINTS + 1) / _CURVE_POINTS
    details['rarefied'] = {
        'duration_s': (fractions * visited.duration_s).tolist(),
        'coverage': (visited.rarefaction(fractions) / cells.size).tolist(),
    }
    note = ''
    if seen.size > inside.size or visited.samples_beyond:
        note = (
            f'{seen.size - inside.size} visited cells beyond reach and '
            f'{visited.samples_beyond} samples beyond {BOUND} arm lengths are left out.')
    return Metric(
        inside.size / cells.size, '1', n=visited.blocks, samples=visited.samples, reason=note,
        details=details)
