# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Whether the numbers of a foreign mapping kind can be those of an ideal command."""

from __future__ import annotations

import numpy as np

from teleop_eval.core.mappings.base import (
    HAND,
    OPERATOR_JOINTS,
    RATE_INPUT,
    VELOCITY,
    Ideal,
    MappingModel,
    OperatorCells,
)

# No arm is so large or so quick, in m, rad, m/s or rad/s; what is summed of less stays finite.
LARGEST = 1e6
# So long a kind may need to begin; the hand-to-tool rotation is estimated from as much.
PATIENCE_S = 10.0
ARRAYS = ('positions_m', 'orientations', 'joints', 'velocities_mps', 'turn_rates_rad_s',
          'raw_velocities_mps')
# A quaternion whose norm is off by more was not just rounded.
_UNIT_TOLERANCE = 0.01
_INPUTS = {HAND: 'hand_m', OPERATOR_JOINTS: 'joints', RATE_INPUT: 'rate_input'}


def value_fault(ideal: Ideal) -> str:
    """Return which numbers cannot be right, '' if all can; NaN says that nothing is known."""
    for name in ARRAYS:
        value = getattr(ideal, name)
        if value is None:
            continue
        if np.isinf(value).any():
            return f'ideal() returned infinity in {name}, where NaN stands for what is not known'
        with np.errstate(invalid='ignore'):
            if (np.abs(value) > LARGEST).any():
                return f'ideal() returned numbers beyond {LARGEST:.0e} in {name}'
    if ideal.orientations is not None:
        norms = np.linalg.norm(ideal.orientations, axis=1)
        if (np.abs(norms[np.isfinite(norms)] - 1.0) > _UNIT_TOLERANCE).any():
            return 'ideal() returned orientations that are no unit quaternions'
    return ''


class NothingGiven:
    """Follows for how long a kind has given nothing although its input was there."""

    def __init__(self) -> None:
        self._seconds = 0.0

    def fault(self, model: MappingModel, ideal: Ideal, cells: OperatorCells) -> str:
        """Return that there was nothing but NaN for too long, '' if there was anything."""
        there = _with_input(model, cells)
        if not there.any():
            return ''
        names = ['velocities_mps' if model.gives == VELOCITY else 'positions_m', 'joints']
        empty = [name for name in names if (value := getattr(ideal, name)) is not None
                 and not np.isfinite(value[there]).all(axis=1).any()]
        if not empty:
            self._seconds = 0.0
            return ''
        self._seconds += int(np.count_nonzero(there)) * cells.period_s
        if self._seconds < PATIENCE_S:
            return ''
        turns = '' if model.needs != HAND or cells.hand_xyzw is not None else (
            ', whose messages have no orientation')
        return (f'ideal() returned nothing but NaN in {empty[0]} for {PATIENCE_S:g} s or more of '
                f'engaged motion with its input, {model.needs}{turns}')


def _with_input(model: MappingModel, cells: OperatorCells) -> np.ndarray:
    """Tell of which cells (m,) a kind has what it needs."""
    given = getattr(cells, _INPUTS[model.needs])
    nothing = np.zeros(len(cells), dtype=bool)
    if given is None or cells.stretch is None:
        return nothing
    there = np.asarray(np.isfinite(given).all(axis=1) & (cells.stretch >= 0))
    if model.anchored:
        anchored = [number for number, anchor in cells.anchors.items()
                    if anchor.robot_m is not None
                    and (model.needs != HAND or anchor.hand_m is not None)]
        there &= np.isin(cells.stretch, anchored)
    return there
