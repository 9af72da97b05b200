# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Which cells of a window the budget is made of."""

from __future__ import annotations

import numpy as np
import pytest

from teleop_eval.core.delays import Observed
from teleop_eval.core.history import History, Track
from teleop_eval.core.window import Span
from teleop_eval.core.window_budget import POSITION, window_budget

PERIOD_NS = 10_000_000
COUNT, BOUNDARY = 100, 40


class Known:
    """Delays that were observed; every track has been there."""

    def __init__(self, **delays_s: float) -> None:
        self._delays_s = delays_s

    def has(self, name):
        return True

    def in_use(self, now_ns, label, names=()):
        return Observed(self._delays_s[names[0]], 1.0)


def history_with_a_boundary():
    """Return two windows; before cell 40 of the second the mapping's anchor was elsewhere."""
    history = History(2 * COUNT)
    ones = np.ones(COUNT, dtype=bool)
    for run, values in ((np.zeros(COUNT), np.zeros(COUNT)),
                        ((np.arange(COUNT) >= BOUNDARY) * 1.0,
                         (np.arange(COUNT) >= BOUNDARY) * 5.0)):
        track = Track(np.tile(values[:, None], (1, 3)), ones)
        history.extend({name: track for name in ('u_o', 'u_i', 'u_c', 'u_r')}, ones,
                       run.astype(np.int64), np.zeros(COUNT, dtype=np.int64))
    return history


@pytest.mark.parametrize(('a', 'b', 'lost'), [
    (0.0, 0.3, 30), (0.3, 0.0, 30), (0.1, 0.255, 26), (0.0, 0.0, 0)])
def test_no_term_reaches_back_over_a_boundary(a, b, lost):
    """
    A delay that has just been observed can be longer than what was settled.

    All that moves is a jump of 5 arm lengths at the boundary. A cell whose delayed partner
    lies before it would tell that jump as a delay; b = 25.5 cells needs the 26th one too.
    """
    span = Span(0, PERIOD_NS, COUNT, COUNT)
    found = window_budget(
        history_with_a_boundary(), Known(latency_command_s=a, latency_response_s=b), span, 0,
        np.ones(COUNT, dtype=bool), POSITION, PERIOD_NS / 1e9)
    for name, metric in found.metrics.items():
        assert metric.samples == COUNT - lost, name
        assert metric.value == pytest.approx(0.0, abs=1e-12), name
