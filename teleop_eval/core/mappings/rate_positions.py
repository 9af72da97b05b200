# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Poses that ideal velocities integrate to, anchored at the robot's own again and again."""

from __future__ import annotations

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.mappings.base import OperatorCells

# Cells are added up, and a whole number of them must reach a round time.
_ROUNDING_S = 1e-6
_UNKNOWN = np.full(3, np.nan)
_UNKNOWN_TURN = np.full(4, np.nan)


class RatePositions:
    """
    Follows the pose from window to window.

    It begins at the robot's pose at each engagement, taken to be at the edge of the stretch's
    first cell, and again every `anchor_s` at the robot's pose in that cell, since an integral
    drifts. From cell centre to cell centre the mean of both velocities counts. Where a velocity
    is not known, the pose is not known until it is anchored again.
    """

    def __init__(self, anchor_s: float) -> None:
        self._anchor_s = anchor_s
        self._stretch = -1
        self._since_s = 0.0
        self._cut = False
        self._position, self._turn = _UNKNOWN, _UNKNOWN_TURN
        self._last = np.full((2, 1, 3), np.nan)

    def restart(self) -> None:
        """Note that the next cell does not follow the last one."""
        self._cut = True

    def follow(self, cells: OperatorCells, velocities: np.ndarray,
               turn_rates: np.ndarray | None) -> tuple[np.ndarray, np.ndarray | None]:
        """
        Return positions (m, 3) and orientations (m, 4) of the next cells, NaN where unknown.

        Parameters
        ----------
        cells
            The window's cells.
        velocities, turn_rates
            Linear and angular velocity (m, 3) in the robot's base link.

        """
        assert cells.stretch is not None  # given to every anchored kind
        count, period_s = len(cells), cells.period_s
        rates = np.stack([velocities, np.full((count, 3), np.nan) if turn_rates is None
                          else turn_rates])
        before = np.concatenate([self._last, rates[:, :-1]], axis=1)
        steps = np.stack([0.5 * (before + rates), 0.5 * rates]) * period_s
        turn_steps = rotations.exp(steps[:, 1])
        positions, turns = np.full((count, 3), np.nan), np.full((count, 4), np.nan)
        for cell, stretch in enumerate(cells.stretch.tolist()):
            if stretch < 0:
                self._stretch = -1
                continue
            engaged = stretch != self._stretch
            self._since_s += period_s
            if engaged:
                self._begin(cells, stretch)
            elif self._cut or self._since_s >= self._anchor_s - _ROUNDING_S:
                if self._anchored(cells, cell):
                    positions[cell], turns[cell] = self._position, self._turn
                    continue
            half = int(engaged)
            self._position = self._position + steps[half, 0, cell]
            self._turn = rotations.multiply(turn_steps[half, cell], self._turn)
            positions[cell], turns[cell] = self._position, self._turn
        self._last = rates[:, -1:]
        return positions, turns if np.isfinite(turns).any() else None

    def _begin(self, cells: OperatorCells, stretch: int) -> None:
        """Begin at the robot's pose at engagement, if it is known."""
        self._stretch, self._since_s, self._cut = stretch, 0.5 * cells.period_s, False
        anchor = cells.anchors.get(stretch)
        position = None if anchor is None else anchor.robot_m
        turn = None if anchor is None else anchor.robot_xyzw
        self._position = _UNKNOWN if position is None else position
        self._turn = _UNKNOWN_TURN if turn is None else turn

    def _anchored(self, cells: OperatorCells, cell: int) -> bool:
        """Begin anew at the robot's measured pose; False where there is none."""
        known = cells.robot_m is not None and bool(np.isfinite(cells.robot_m[cell]).all())
        if known and cells.robot_m is not None:
            self._since_s, self._cut = 0.0, False
            self._position = cells.robot_m[cell]
            self._turn = (_UNKNOWN_TURN if cells.robot_xyzw is None else cells.robot_xyzw[cell])
        elif self._cut:
            self._position, self._turn = _UNKNOWN, _UNKNOWN_TURN
        return known
