# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What is known of one operator: from the settings, a description, and a calibration."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import replace

import numpy as np

from teleop_eval.core.arm_calibration import ArmCalibration
from teleop_eval.core.calibration_interval import CalibrationInterval, calibration_of
from teleop_eval.core.geometry import OperatorGeometry, operator_geometry
from teleop_eval.core.intake import Intake
from teleop_eval.core.operator_arm import OperatorArm, operator_arm
from teleop_eval.core.operator_settings import OperatorSettings
from teleop_eval.core.operator_tracks import joint_columns, shoulder_fault
from teleop_eval.core.streams import Row


class OperatorSide:
    """
    Holds the operator's geometry and what changes it during a run.

    Parameters
    ----------
    settings
        Of the operator.
    calibration
        One that began before, as when the evaluation is reset.

    Attributes
    ----------
    geometry
        As known by now.

    """

    def __init__(self, settings: OperatorSettings,
                 calibration: CalibrationInterval | None = None) -> None:
        self._settings = settings
        self._arm: OperatorArm | None = None
        self._shoulder_fault = ''
        self.calibration = calibration or calibration_of(settings)
        self.geometry = self._known()

    def _known(self) -> OperatorGeometry:
        known = operator_geometry(self._settings, self._arm)
        if self._shoulder_fault:
            known = replace(known, lacking=self._shoulder_fault)
        return known if self.calibration is None else self.calibration.applied(known)

    def describe(self, urdf: str, *, source: str) -> None:
        """
        Take the description of the operator's arm.

        Raises
        ------
        DescriptionError
            If it cannot be used.

        """
        self._arm = operator_arm(self._settings, urdf, source=source)
        self.geometry = self._known()

    def refuse_shoulder(self, fault: str) -> bool:
        """Note that the shoulder's messages cannot be used; return whether that is new."""
        new = fault != self._shoulder_fault
        self._shoulder_fault = fault
        if new:
            self.geometry = self._known()
        return new

    @property
    def pending(self) -> bool:
        """Tell whether a calibration may still give what is lacking."""
        return (self.calibration is not None and self.calibration.result is None
                and bool(self.geometry.missing))

    @property
    def uncalibrated(self) -> bool:
        """Tell whether a calibration is configured and not over."""
        return self.calibration is not None and self.calibration.result is None

    def over(self, role: str, receive_ns: int) -> bool:
        """Tell whether a message is the first after the sweeps of a calibration."""
        return self.calibration is not None and self.calibration.over(role, receive_ns)

    def take(self, role: str, receive_ns: int, rows: Iterable[Row]) -> None:
        """Keep what belongs to the sweeps."""
        if self.calibration is not None:
            self.calibration.take(role, receive_ns, rows)

    def fit(self, intakes: Mapping[str, Intake], joint_names: tuple[str, ...]) -> ArmCalibration:
        """Fit the sweeps; the geometry stays as it is until `apply`."""
        assert self.calibration is not None  # its interval is over
        columns = (np.zeros(0, dtype=np.int64) if self._arm is None else
                   joint_columns(self._arm, joint_names))
        return self.calibration.fit(
            self.geometry, columns, shoulder_fault=shoulder_fault(intakes, self._settings))

    def apply(self) -> None:
        """Let the geometry follow from what was fitted."""
        self.geometry = self._known()

    def calibration_summary(self) -> dict[str, object] | None:
        """Return the calibration as plain types, None where none is configured or over."""
        found = None if self.calibration is None else self.calibration.result
        if found is None:
            return None
        return {name: value.tolist() if isinstance(value, np.ndarray) else
                None if isinstance(value, float) and not math.isfinite(value) else value
                for name, value in vars(found).items()}

    def calibration_sentence(self) -> str:
        """Return why a calibration gave nothing, '' where none is configured."""
        return '' if self.calibration is None else self.calibration.sentence(self.geometry)
