# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Rate mapping: the tool's velocity follows a stick, or how far the hand is displaced."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.mappings.base import (
    HAND,
    RATE_INPUT,
    VELOCITY,
    Ideal,
    MappingModel,
    OperatorCells,
)
from teleop_eval.core.mappings.rate_positions import RatePositions
from teleop_eval.core.mappings.settings import MappingSettings
from teleop_eval.core.parameters import DOUBLE, DOUBLES, STRING, parameter

if TYPE_CHECKING:
    from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry

TOPIC, DISPLACEMENT = 'topic', 'displacement'


class RateMapping(MappingModel):
    """
    Velocity = cap(dead band(gain x R input)), linear and angular part alike.

    The input is what comes on operator.rate_topic, or the hand's displacement since engagement:
    p_o - p_o0 and the rotation vector of R_o R_o0^T. R turns it into robot axes. Dead band and
    cap act on the norm of the vector: the dead band takes its length off the velocity, so that
    the speed rises from 0 at its edge; the cap shortens the vector to the largest speed.
    """

    @dataclass(frozen=True)
    class Settings(MappingSettings):
        """Input, gains, dead bands, caps and how often integrated positions are anchored."""

        input: str = parameter(
            STRING, TOPIC, 'What sets the velocity: "topic" (operator.rate_topic) or '
            '"displacement" of the hand since engagement.', choices=(TOPIC, DISPLACEMENT))
        gain: float = parameter(
            DOUBLE, 1.0, 'Tool velocity in m/s per unit of input: m/s of a twist, full '
            'deflection of a stick, m of displacement.', low=0.0, high=1e3)
        gain_xyz: tuple[float, ...] | None = parameter(
            DOUBLES, None, "Gain along each axis of the robot's base, instead of gain.",
            size=3, low=-1e3, high=1e3)
        turn_gain: float = parameter(
            DOUBLE, 1.0, 'Turn rate of the tool in rad/s per unit of input: rad/s of a twist, '
            'full deflection of a stick, rad of displacement.', low=0.0, high=1e3)
        dead_band_mps: float = parameter(
            DOUBLE, 0.0, 'Speed taken off, so that a velocity below it commands none.',
            unit='m/s', low=0.0, high=10.0)
        turn_dead_band_rad_s: float = parameter(
            DOUBLE, 0.0, 'Turn rate taken off, so that one below it commands none.',
            unit='rad/s', low=0.0, high=10.0)
        max_speed_mps: float | None = parameter(
            DOUBLE, None, 'Largest speed commanded; not given: none.', unit='m/s',
            low=1e-3, high=100.0)
        max_turn_rate_rad_s: float | None = parameter(
            DOUBLE, None, 'Largest turn rate commanded; not given: none.', unit='rad/s',
            low=1e-3, high=100.0)
        anchor_s: float = parameter(
            DOUBLE, 5.0, "Time after which an integrated position begins anew at the robot's.",
            unit='s', low=0.1, high=600.0)

        def fault(self, key: str) -> str:
            """Return the sentence on a gain given twice, else ''."""
            if self.gain_xyz is not None and self.gain != 1.0:
                return f'{key} has both gain and gain_xyz; keep one.'
            return ''

    gives = VELOCITY
    anchored = True

    def __init__(self, label: str, settings: Settings, operator: OperatorGeometry,
                 robot: RobotGeometry) -> None:
        del label, robot
        self._axes = operator.axes
        self._settings = settings
        self._by_displacement = settings.input == DISPLACEMENT
        self.needs = HAND if self._by_displacement else RATE_INPUT
        self._gain = np.array(settings.gain_xyz or (settings.gain,) * 3)
        self._positions = RatePositions(settings.anchor_s)

    def restart(self) -> None:
        """Begin integrating anew."""
        self._positions.restart()

    def ideal(self, cells: OperatorCells) -> Ideal:
        """Return velocities (m, 3), turn rates (m, 3) and the pose that they integrate to."""
        one = self._settings
        linear, angular = (self._displaced(cells) if self._by_displacement
                           else self._from_topic(cells))
        raw = self._gain * rotations.rotate(self._axes, linear)
        velocities = shaped(raw, one.dead_band_mps, one.max_speed_mps)
        turn_rates = None
        if angular is not None:
            turn_rates = shaped(one.turn_gain * rotations.rotate(self._axes, angular),
                                one.turn_dead_band_rad_s, one.max_turn_rate_rad_s)
        positions, turns = self._positions.follow(cells, velocities, turn_rates)
        return Ideal(positions, turns, velocities_mps=velocities, turn_rates_rad_s=turn_rates,
                     raw_velocities_mps=raw)

    def _from_topic(self, cells: OperatorCells) -> tuple[np.ndarray, np.ndarray]:
        assert cells.rate_input is not None and cells.stretch is not None
        rows = np.where(cells.stretch[:, None] >= 0, cells.rate_input, np.nan)
        return rows[:, :3], rows[:, 3:]

    def _displaced(self, cells: OperatorCells) -> tuple[np.ndarray, np.ndarray | None]:
        """Return displacement (m, 3) and rotation vector (m, 3) since engagement."""
        assert cells.hand_m is not None and cells.stretch is not None
        moved, turned = np.full((len(cells), 3), np.nan), np.full((len(cells), 3), np.nan)
        for stretch, anchor in cells.anchors.items():
            here = cells.stretch == stretch
            if anchor.hand_m is not None:
                moved[here] = cells.hand_m[here] - anchor.hand_m
            if anchor.hand_xyzw is not None and cells.hand_xyzw is not None:
                turned[here] = rotations.log(rotations.multiply(
                    cells.hand_xyzw[here], rotations.conjugate(anchor.hand_xyzw)))
        return moved, turned if np.isfinite(turned).any() else None


def shaped(vectors: np.ndarray, dead_band: float, cap: float | None) -> np.ndarray:
    """Return vectors (m, 3), shortened by the dead band, then to the cap, by their norm."""
    norm = np.linalg.norm(vectors, axis=1, keepdims=True)
    wanted = np.maximum(norm - dead_band, 0.0)
    if cap is not None:
        wanted = np.minimum(wanted, cap)
    return vectors * (wanted / np.where(norm == 0.0, 1.0, norm))
