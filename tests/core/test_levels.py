# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Levels with hysteresis, exhaustively over values around the thresholds."""

from __future__ import annotations

import itertools

from teleop_eval.core.levels import MarginLevel, RisingLevel
from teleop_eval.core.results import LEVEL_ERROR, LEVEL_OK, LEVEL_WARN

WARN, ERROR = 0.15, 0.30


def expected_rising(level, value, hysteresis):
    """
    Return the level by the rule in one sentence.

    A level is reached at its threshold and kept until the value is the hysteresis share below
    that threshold.
    """
    for candidate, threshold in ((LEVEL_ERROR, ERROR), (LEVEL_WARN, WARN)):
        keeps = level >= candidate and value >= threshold * (1.0 - hysteresis)
        if value >= threshold or keeps:
            return candidate
    return LEVEL_OK


def test_rising_level_over_all_short_sequences():
    values = (0.0, 0.13, 0.136, 0.15, 0.2, 0.26, 0.271, 0.2999, 0.3, 0.5)
    for hysteresis in (0.0, 0.1):
        for sequence in itertools.product(values, repeat=4):
            level, before = RisingLevel(), LEVEL_OK
            for value in sequence:
                wanted = expected_rising(before, value, hysteresis)
                found = level.update(value, warn=WARN, error=ERROR, hysteresis=hysteresis)
                assert found == wanted, (sequence, value)
                # Seeing the same value again changes nothing.
                assert level.update(
                    value, warn=WARN, error=ERROR, hysteresis=hysteresis) == wanted
                before = wanted


def test_wide_hysteresis_and_close_thresholds():
    """With 90 % of hysteresis an error is left at 0.03 only."""
    level = RisingLevel()
    found = [level.update(value, warn=WARN, error=ERROR, hysteresis=0.9)
             for value in (0.4, 0.1, 0.031, 0.029, 0.02, 0.014)]
    assert found == [LEVEL_ERROR, LEVEL_ERROR, LEVEL_ERROR, LEVEL_WARN, LEVEL_WARN, LEVEL_OK]


def test_margin_level_over_all_short_sequences():
    warn, hysteresis = 0.05, 0.1
    values = [(margin, approaching) for margin in (0.0, 0.0499, 0.05, 0.0549, 0.055, 0.2)
              for approaching in (True, False)]
    for sequence in itertools.product(values, repeat=3):
        level, before = MarginLevel(), LEVEL_OK
        for margin, approaching in sequence:
            raised = margin < warn and approaching
            kept = before == LEVEL_WARN and approaching and margin < warn * (1 + hysteresis)
            wanted = LEVEL_WARN if raised or kept else LEVEL_OK
            assert level.update(margin, approaching=approaching, warn=warn,
                                hysteresis=hysteresis) == wanted
            before = wanted
