# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""One window of one arm: its streams brought onto the grid and into arm lengths."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.geometry import RobotGeometry
from teleop_eval.core.history import Track
from teleop_eval.core.resample import cell_average, cell_average_held, cell_slerp
from teleop_eval.core.streams import Items


@dataclass(frozen=True)
class Span:
    """Cells [first, first + count) of a grid of `period_ns` from `origin_ns`."""

    origin_ns: int
    period_ns: int
    first: int
    count: int

    @property
    def start_ns(self) -> int:
        """Return the time at which the first cell begins."""
        return self.origin_ns + self.first * self.period_ns

    @property
    def end_ns(self) -> int:
        """Return the time at which the last cell ends."""
        return self.origin_ns + (self.first + self.count) * self.period_ns

    @property
    def cell_starts_ns(self) -> np.ndarray:
        """Return the start (count,) of each cell."""
        return self.start_ns + np.arange(self.count, dtype=np.int64) * self.period_ns

    def cell_of(self, times_ns: np.ndarray) -> np.ndarray:
        """Return the index (n,) of the cell within the span that holds each time."""
        return (times_ns - self.start_ns) // self.period_ns


def on_grid(items: Items, span: Span, *, max_gap_ns: int, hold: bool = False) -> Track:
    """Return a stream's values averaged over the cells of the span."""
    times = items.times_ns - span.origin_ns
    if hold:
        return Track.of(cell_average_held(times, items.values, span.first, span.count,
                                          period_ns=span.period_ns))
    return Track.of(cell_average(times, items.values, span.first, span.count,
                                 period_ns=span.period_ns, max_gap_ns=max_gap_ns))


def turned_on_grid(items: Items, span: Span, *, max_gap_ns: int) -> Track | None:
    """Return a stream's orientations at the cell centres, None if it has none."""
    if items.orientations is None:
        return None
    return Track.of(cell_slerp(items.times_ns - span.origin_ns, items.orientations, span.first,
                               span.count, period_ns=span.period_ns, max_gap_ns=max_gap_ns))


def tool_tracks(prefix: str, joints: Track, columns: np.ndarray,
                robot: RobotGeometry) -> dict[str, Track]:
    """
    Return u_{prefix} and turn_{prefix} of a joint track.

    `columns` picks the chain's joints out of the track's.
    """
    filled = np.where(joints.valid[:, None], joints.values, 0.0)[:, columns]
    pose = robot.chain.forward(filled)
    return {
        f'u_{prefix}': Track.computed(robot.normalise(pose.positions, filled), joints.valid),
        f'turn_{prefix}': Track.computed(rotations.from_matrix(pose.rotations), joints.valid),
    }


def pose_command_tracks(items: Items, span: Span, *, max_gap_ns: int, hold: bool,
                        robot: RobotGeometry, robot_joints: np.ndarray) -> dict[str, Track]:
    """Return u_c and turn_c of a command that is a tool pose in the robot's base link."""
    position = on_grid(items, span, max_gap_ns=max_gap_ns, hold=hold)
    tracks = {'u_c': Track.computed(robot.normalise(position.values, robot_joints),
                                    position.valid)}
    turn = None if hold else turned_on_grid(items, span, max_gap_ns=max_gap_ns)
    if turn is not None:
        tracks['turn_c'] = turn
    return tracks
