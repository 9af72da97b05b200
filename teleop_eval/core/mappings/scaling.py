# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The scale from hand to tool motion, for the kinds that have one."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.mappings.settings import MappingSettings
from teleop_eval.core.parameters import DOUBLE, DOUBLES, STRING, parameter

if TYPE_CHECKING:
    from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry

NORMALIZED, METRIC = 'normalized', 'metric'


@dataclass(frozen=True)
class ScaleSettings(MappingSettings):
    """Settings of a kind that scales the hand's motion."""

    scaling: str = parameter(
        STRING, NORMALIZED, '"normalized" scales by the arm lengths (L_r/L_o), "metric" by scale '
        'alone.', choices=(NORMALIZED, METRIC))
    scale: float = parameter(
        DOUBLE, 1.0, 'Factor on the motion, m/m after the scaling above.', low=1e-3, high=1e3)
    scale_xyz: tuple[float, ...] | None = parameter(
        DOUBLES, None, "Factor along each axis of the robot's base, instead of scale.",
        size=3, low=-1e3, high=1e3)

    def fault(self, key: str) -> str:
        """Return the sentence on a scale given twice, else ''."""
        if self.scale_xyz is not None and self.scale != 1.0:
            return f'{key} has both scale and scale_xyz; keep one.'
        return ''

    @property
    def normalized(self) -> bool:
        """Tell whether the arm lengths enter."""
        return self.scaling == NORMALIZED


def scale_of(label: str, settings: ScaleSettings, operator: OperatorGeometry,
             robot: RobotGeometry) -> np.ndarray:
    """
    Return the factors (3,) along the axes of the robot's base.

    Raises
    ------
    ConfigError
        If the arm lengths are needed and the operator's is not known.

    """
    scale = np.array(settings.scale_xyz or (settings.scale,) * 3)
    if not settings.normalized:
        return scale
    if operator.length_m is None:
        raise ConfigError(
            f'mapping {label!r} scales by the arm lengths, but the operator has none; '
            'give operator.arm_length_m or stature_m, or scaling: metric.')
    return scale * (robot.reach.length_m / operator.length_m)
