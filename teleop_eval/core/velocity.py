# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Velocities on the grid, from the samples themselves.

The mean velocity over a cell is the way between the cell's two edges divided by its length,
exact for the linear interpolant of the samples, and valid at the cell's centre as the mean
position is.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.geometry import RobotGeometry
from teleop_eval.core.history import Track
from teleop_eval.core.intake import Intake
from teleop_eval.core.streams import Items
from teleop_eval.core.window import Span, on_grid


def at_edges(items: Items, span: Span, *, max_gap_ns: int) -> Track:
    """
    Return a stream's values at the edges of the span's cells (count + 1, d).

    They are interpolated linearly over no more than `max_gap_ns`.
    """
    edges = span.start_ns + np.arange(span.count + 1, dtype=np.int64) * span.period_ns
    times, values = items.times_ns, items.values
    if not len(times):
        return Track(np.full((len(edges), values.shape[1]), np.nan),
                     np.zeros(len(edges), dtype=bool))
    before = np.searchsorted(times, edges, side='right') - 1
    left = np.maximum(before, 0)
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


def velocity_tracks(inputs: Mapping[str, Intake], span: Span, robot: RobotGeometry,
                    *, hold: bool) -> dict[str, Track]:
    """
    Return w_r, w_c and spin_r, spin_c of one window, as far as the inputs tell them.

    `hold` is the command's. Positions that are held have none: between steps they stand still.
    """
    tracks: dict[str, Track] = {}
    for role, prefix, held in (('robot_joints', 'r', False), ('command', 'c', hold)):
        intake = inputs.get(role)
        if intake is None:
            continue
        stream, period_s = intake.stream, span.period_ns / 1e9
        items = stream.items(span.end_ns)
        if intake.velocities:
            # Velocities as they are commanded: nothing to differentiate.
            mean = on_grid(items, span, max_gap_ns=stream.max_gap_ns, hold=held)
            tracks[f'w_{prefix}'] = Track.computed(
                mean.values[:, :3] / robot.reach.length_m, mean.valid)
            tracks[f'spin_{prefix}'] = Track.computed(mean.values[:, 3:], mean.valid)
            continue
        if held:
            continue
        edges = at_edges(items, span, max_gap_ns=stream.max_gap_ns)
        if intake.posed:
            tracks[f'w_{prefix}'] = mean_velocity(
                Track.computed(edges.values / robot.reach.length_m, edges.valid), period_s)
            continue
        assert intake.matcher is not None  # joints always have one
        order = [intake.matcher.names.index(name) for name in robot.chain.joint_names]
        tracks |= tool_velocity_tracks(prefix, edges, np.array(order, dtype=np.int64), robot,
                                       period_s)
    return tracks
