# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Collect the operator's sweeps with the stretched arm, and fit them when they are over."""

from __future__ import annotations

import math
from collections.abc import Iterable

import numpy as np

from teleop_eval.core.arm_calibration import ArmCalibration, calibrate_arm
from teleop_eval.core.geometry import OperatorGeometry, calibrated_geometry
from teleop_eval.core.metric import INSUFFICIENT
from teleop_eval.core.operator_settings import OperatorSettings
from teleop_eval.core.streams import Row

# A minute at 1 kHz is kept whole; of more only every second, fourth ... row.
MOST_ROWS = 65_536


class ThinnedRows:
    """Times and values of rows in bounded memory: when full, every second one goes."""

    def __init__(self) -> None:
        self.times_ns: list[int] = []
        self.values: list[np.ndarray] = []
        self._stride = 1
        self._seen = 0

    def add(self, time_ns: int, value: np.ndarray) -> None:
        """Take a row; what is kept depends on the number of rows alone."""
        if self._seen % self._stride == 0:
            self.times_ns.append(time_ns)
            self.values.append(value)
            if len(self.times_ns) >= MOST_ROWS:
                del self.times_ns[1::2], self.values[1::2]
                self._stride *= 2
        self._seen += 1


class CalibrationInterval:
    """
    The interval of one arm, from its configuration to its result.

    Times are receive times, counted from the first usable message of the hand, or of the
    operator joints that it follows from.

    Attributes
    ----------
    result
        None until the interval is over.

    """

    def __init__(self, settings: OperatorSettings) -> None:
        assert settings.calibration_start_s is not None  # asked for
        assert settings.calibration_end_s is not None
        self._settings = settings
        self._start_ns = round(settings.calibration_start_s * 1e9)
        self._end_ns = round(settings.calibration_end_s * 1e9)
        self._first_ns: int | None = None
        self._rows = {settings.hand_role: ThinnedRows(), 'shoulder': ThinnedRows()}
        self.result: ArmCalibration | None = None

    @property
    def words(self) -> str:
        """Return the interval for a sentence."""
        return (f'the calibration from {self._settings.calibration_start_s:g} to '
                f'{self._settings.calibration_end_s:g} s')

    def over(self, role: str, receive_ns: int) -> bool:
        """Tell whether a message of a role comes after the end of an interval not yet fitted."""
        return (self.result is None and role == self._settings.hand_role
                and self._first_ns is not None and receive_ns - self._first_ns >= self._end_ns)

    def take(self, role: str, receive_ns: int, rows: Iterable[Row]) -> None:
        """Keep what belongs to the interval."""
        if self.result is not None or role not in self._rows:
            return
        if role == self._settings.hand_role and self._first_ns is None:
            self._first_ns = receive_ns
        if self._first_ns is None:
            return
        if self._start_ns <= receive_ns - self._first_ns < self._end_ns:
            for row in rows:
                self._rows[role].add(receive_ns, row[2])

    def fit(self, geometry: OperatorGeometry, columns: np.ndarray, *,
            shoulder_fault: str = '') -> ArmCalibration:
        """
        Fit what was collected, which ends the interval.

        Parameters
        ----------
        geometry
            Of the operator, for the chain that a hand may follow from.
        columns
            Where the chain's joints stand among the operator joints.
        shoulder_fault
            Why the shoulder's messages cannot be used, '' if they can.

        """
        hand = self._rows[self._settings.hand_role]
        times = np.array(hand.times_ns, dtype=np.int64)
        positions = np.array(hand.values, dtype=float)
        if len(times) and geometry.arm is not None:
            positions = geometry.arm.chain.positions(positions[:, columns])
        if shoulder_fault:
            self.result = ArmCalibration(INSUFFICIENT, shoulder_fault)
        elif self._settings.shoulder_topic and len(times):
            self.result = calibrate_arm(self._from_shoulder(times, positions))
        elif self._settings.hand_role == 'operator_joints' and geometry.arm is None:
            self.result = ArmCalibration(INSUFFICIENT, geometry.lacking)
        else:
            self.result = calibrate_arm(positions)
        self._rows = {}
        return self.result

    def _from_shoulder(self, times_ns: np.ndarray, positions: np.ndarray) -> np.ndarray:
        """Return hand minus shoulder (n, 3), the shoulder interpolated to the hand's times."""
        rows = self._rows['shoulder']
        if not rows.times_ns:
            return np.full(positions.shape, math.nan)
        known = np.array(rows.values, dtype=float)
        at = np.array(rows.times_ns, dtype=np.int64)
        seconds, known_s = (times_ns - at[0]) / 1e9, (at - at[0]) / 1e9
        shoulder = np.column_stack([
            np.interp(seconds, known_s, known[:, axis], math.nan, math.nan)
            for axis in range(3)])
        return positions - shoulder

    def applied(self, geometry: OperatorGeometry) -> OperatorGeometry:
        """Return the geometry with what is known of the interval by now."""
        if self.result is not None and self.result.accepted:
            return calibrated_geometry(
                geometry, self.result, tracked_shoulder=self._settings.shoulder_topic is not None)
        if not geometry.missing:
            return geometry
        why = (f'{self.words} is not over' if self.result is None else
               f'{self.words} was not accepted: {self.result.reason}')
        return OperatorGeometry(**{**vars(geometry), 'lacking': geometry.lacking or why})

    def sentence(self, geometry: OperatorGeometry) -> str:
        """Return what a user must know of an interval that gave nothing."""
        why = ('was not over when the input ended' if self.result is None else
               f'is not accepted: {self.result.reason}')
        rest = (f'without it the operator has no {geometry.missing.replace("operator.", "")}'
                if geometry.missing else 'shoulder and arm length stay as configured')
        return f'{self.words} {why}; {rest}.'


def calibration_of(settings: OperatorSettings) -> CalibrationInterval | None:
    """Return the configured interval, None if there is none."""
    return None if settings.calibration_start_s is None else CalibrationInterval(settings)
