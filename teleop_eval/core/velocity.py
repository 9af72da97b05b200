# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Velocities on the grid, from the samples themselves.

The mean velocity over a cell is the way between the cell's two edges divided by its length,
exact for the linear interpolant of the samples, and valid at the cell's centre as the mean
position is.
"""

from __future__ import annotations

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.geometry import RobotGeometry
from teleop_eval.core.history import Track
from teleop_eval.core.streams import Items
from teleop_eval.core.window import Span


def at_edges(items: Items, span: Span, *, max_gap_ns: int, hold: bool = False) -> Track:
    """
    Return a stream's values at the edges of the span's cells (count + 1, d).

    Sampled streams are interpolated linearly over no more than `max_gap_ns`; a held one keeps
    its value.
    """
    edges = span.start_ns + np.arange(span.count + 1, dtype=np.int64) * span.period_ns
    times, values = items.times_ns, items.values
    if not len(times):
        return Track(np.full((len(edges), values.shape[1]), np.nan),
                     np.zeros(len(edges), dtype=bool))
    before = np.searchsorted(times, edges, side='right') - 1
    left = np.maximum(before, 0)
    if hold:
        return Track.computed(values[left], before >= 0)
    right = np.minimum(left + 1, len(times) - 1)
    length = times[right] - times[left]
    exact = times[left] == edges
    valid = (before >= 0) & (exact | ((length > 0) & (length <= max_gap_ns)))
    share = np.divide(edges - times[left], length, out=np.zeros(len(edges)), where=length > 0)
    return Track.computed(values[left] + share[:, None] * (values[right] - values[left]), valid)


def mean_velocity(edges: Track, period_s: float) -> Track:
    """Return the mean velocity over each cell (m, d) of values at its edges (m + 1, d)."""
    return Track.computed(np.diff(edges.values, axis=0) / period_s,
                          edges.valid[1:] & edges.valid[:-1])


def mean_turn_rate(orientations: np.ndarray, valid: np.ndarray, period_s: float) -> Track:
    """
    Return the mean turn rate over each cell (m, 3), rad/s in base axes.

    `orientations` (m + 1, 4) x, y, z, w at the cells' edges, with their `valid` (m + 1,).
    """
    kept = np.where(valid[:, None], orientations, [0.0, 0.0, 0.0, 1.0])
    steps = rotations.multiply(kept[1:], rotations.conjugate(kept[:-1]))
    return Track.computed(rotations.log(steps) / period_s, valid[1:] & valid[:-1])


def tool_velocity_tracks(prefix: str, joints: Track, columns: np.ndarray, robot: RobotGeometry,
                         period_s: float) -> dict[str, Track]:
    """
    Return w_{prefix}, arm lengths/s, and spin_{prefix}, rad/s, of joints at the cells' edges.

    Velocities are those of the tool in the base, not relative to a moving shoulder.
    """
    filled = np.where(joints.valid[:, None], joints.values, 0.0)[:, columns]
    pose = robot.chain.forward(filled)
    tool = Track.computed(pose.positions / robot.reach.length_m, joints.valid)
    return {f'w_{prefix}': mean_velocity(tool, period_s),
            f'spin_{prefix}': mean_turn_rate(
                rotations.from_matrix(pose.rotations), joints.valid, period_s)}
