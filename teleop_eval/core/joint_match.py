# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Picking the wanted joints out of messages, by name and in any order."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from teleop_eval.core.operator_settings import UnitSettings
from teleop_eval.core.samples import JointSample, TrajectorySample

TURN = 2.0 * math.pi


class JointMatcher:
    """
    Columns of the wanted joints in a message's joints; extra joints are ignored.

    Attributes
    ----------
    names
        Wanted joints (n,), in the order of the values given back.
    turning
        Columns of joints without limits, which some drivers report within one turn: their
        values are made to run on beyond it, lest the wrap look like motion.

    """

    def __init__(self, names: tuple[str, ...], units: Mapping[str, UnitSettings], *,
                 turning: frozenset[str] = frozenset()) -> None:
        self.names = names
        self.turning = np.flatnonzero([name in turning for name in names])
        self._turns = bool(len(self.turning))
        self._last = np.full(len(self.turning), np.nan)
        self.scale = np.array([units[name].scale if name in units else 1.0 for name in names])
        self._scaled = bool(np.any(self.scale != 1.0))
        self._known: tuple[str, ...] | None = None
        self._columns = np.zeros(0, dtype=np.int64)
        self.missing: tuple[str, ...] = ()
        self.foreign = False

    def find(self, names: tuple[str, ...]) -> np.ndarray | None:
        """
        Return the columns (n,) of the wanted joints, None if some are missing.

        `missing` then names them; `foreign` tells that none of the wanted ones is there, as
        in the messages of a gripper on the same topic.
        """
        if names is not self._known and names != self._known:
            place = {name: column for column, name in enumerate(names)}
            self._columns = np.array(
                [place.get(name, -1) for name in self.names], dtype=np.int64)
            self.missing = tuple(name for name in self.names if name not in place)
            self.foreign = len(self.missing) == len(self.names)
        self._known = names
        return None if self.missing else self._columns

    def values(self, sample: JointSample, columns: np.ndarray) -> np.ndarray:
        """Return positions (n,) in rad or m of the columns found."""
        values = sample.positions[columns]
        if self._scaled:
            values = values * self.scale
        return self.continued(values) if self._turns else values

    def continued(self, values: np.ndarray) -> np.ndarray:
        """Return positions (n,) in rad or m, whole turns away from the ones before."""
        if not self._turns:
            return values
        angles = values[self.turning]
        turns = np.round((self._last - angles) / TURN)
        angles = angles + TURN * np.where(np.isfinite(turns), turns, 0.0)
        self._last = np.where(np.isfinite(angles), angles, self._last)
        values = values.copy()
        values[self.turning] = angles
        return values

    def points(self, sample: TrajectorySample, columns: np.ndarray) -> np.ndarray:
        """Return a trajectory's positions (k, n) in rad or m of the columns found."""
        points = sample.positions[:, columns] * self.scale
        return np.array([self.continued(point) for point in points]).reshape(points.shape)
