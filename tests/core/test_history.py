# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The kept cells of one arm: reading them at a delay, and their velocity across boundaries."""

from __future__ import annotations

import numpy as np
import pytest

from teleop_eval.core import rotations
from teleop_eval.core.history import History, Track

PERIOD_S = 0.01


def made(count=100, *, runs=None, usable=None, keep=1000):
    """Return a history of one quantity that grows by 0.5 a cell."""
    history = History(keep)
    values = 0.5 * np.arange(count)[:, None] + [0.0, 7.0]
    history.extend({'u': Track(values, np.ones(count, dtype=bool))},
                   np.ones(count, dtype=bool) if usable is None else usable,
                   np.zeros(count, dtype=np.int64) if runs is None else runs,
                   np.zeros(count, dtype=np.int64))
    return history


@pytest.mark.parametrize('shift', [0.0, 1.0, 2.5, 7.25])
def test_delayed_reads_between_cells(shift):
    found = made().delayed('u', 40, shift)
    assert found.valid.all()
    assert found.values[:, 0] == pytest.approx(0.5 * (np.arange(60, 100) - shift))


def test_delayed_is_valid_only_where_the_earlier_cells_were_usable():
    usable = np.ones(100, dtype=bool)
    usable[70] = False
    found = made(usable=usable).delayed('u', 40, 2.5)
    # Cells 72 and 73 would be read between 69 and 70, and between 70 and 71.
    assert np.flatnonzero(~found.valid).tolist() == [12, 13]
    found = made(usable=usable).delayed('u', 40, 3.0)
    assert np.flatnonzero(~found.valid).tolist() == [13]


def test_delayed_never_reads_across_a_boundary():
    runs = np.where(np.arange(100) < 70, 1, 2)
    found = made(runs=runs).delayed('u', 40, 2.5)
    # Cell 72 lies 2.5 cells after the middle of 69 and 70.
    assert np.flatnonzero(~found.valid).tolist() == [12]
    assert made(runs=runs).delayed('u', 40, 3.0).valid.all()


def test_delayed_reads_nothing_before_the_beginning():
    found = made(50).delayed('u', 50, 10.5)
    assert np.flatnonzero(found.valid).tolist() == list(range(11, 50))
    assert np.isnan(found.values[:11]).all()


def test_delayed_turns_go_along_the_shorter_arc():
    angles = np.linspace(0.0, 3.0, 100)
    turns = rotations.exp(angles[:, None] * [0.0, 0.0, 1.0])
    turns[::2] *= -1.0
    history, yes = History(1000), np.ones(100, dtype=bool)
    zeros = np.zeros(100, dtype=np.int64)
    history.extend({'turn': Track(turns, yes)}, yes, zeros, zeros)
    found = history.delayed('turn', 50, 3.5, turn=True)
    wanted = rotations.exp((angles[50:] - 3.5 * angles[1])[:, None] * [0.0, 0.0, 1.0])
    assert rotations.angle_between(found.values, wanted) == pytest.approx(0.0, abs=1e-7)


def test_velocity_is_missing_across_boundaries_and_gaps():
    runs = np.where(np.arange(100) < 70, 1, 2)
    usable = np.arange(100) != 30
    history = made(runs=runs, usable=usable)
    for usable_only, missing in ((True, [0, 30, 31, 70]), (False, [0, 70])):
        found = history.velocity('u', PERIOD_S, usable_only=usable_only)
        assert np.flatnonzero(~found.valid).tolist() == missing
        assert found.values[found.valid] == pytest.approx(
            np.tile([50.0, 50.0], (100 - len(missing), 1)))


def test_quantity_that_comes_and_goes():
    """Where it was not given it was not there, and the kept length is bounded."""
    history, count = History(250), 100
    for k in range(5):
        track = Track(np.full((count, 1), float(k)), np.ones(count, dtype=bool))
        zeros = np.zeros(count, dtype=np.int64)
        history.extend({} if k in (1, 3) else {'q': track}, np.ones(count, dtype=bool),
                       zeros, zeros)
    found = history.get('q')
    assert len(history) == len(found.valid) == 250
    assert found.valid.tolist() == [True] * 50 + [False] * 100 + [True] * 100
    assert history.get('other') is None and history.delayed('other', 10, 0.0) is None


@pytest.mark.parametrize('shift, first', [(0.0, 50), (3.0, 53), (2.5, 53), (2.01, 53), (2.0, 52)])
def test_delayed_label_is_that_of_the_earlier_cell(shift, first):
    """Read between two cells, a value is under a mapping only from the earlier one on."""
    history, count = made(), 100
    history.label = np.where(np.arange(count) < 50, 1, 2)
    found = history.label_delayed(80, shift)
    assert np.flatnonzero(np.diff(found)).tolist() == [first - 20 - 1]
    # It goes with where `delayed` finds a value.
    history.run = history.label
    crossing = np.flatnonzero(~history.delayed('u', 80, shift).valid)
    assert (found[crossing] == 1).all()


def test_delayed_label_before_the_beginning_is_none():
    history = made(50)
    history.label = np.full(50, 3)
    assert history.label_delayed(50, 10.5).tolist() == [-1] * 11 + [3] * 39
