# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Levels with hysteresis, so that a value near its threshold does not flicker."""

from __future__ import annotations

from teleop_eval.core.results import LEVEL_ERROR, LEVEL_OK, LEVEL_WARN


class RisingLevel:
    """
    Level of a quantity that is worse the larger it is.

    It rises at once and falls only when the value is the hysteresis share below the
    threshold that raised it.
    """

    def __init__(self) -> None:
        self.level = LEVEL_OK

    def update(self, value: float, *, warn: float, error: float, hysteresis: float) -> int:
        """Return the level after seeing a value in the thresholds' unit."""
        if value >= error:
            self.level = LEVEL_ERROR
        elif value >= warn:
            if self.level != LEVEL_ERROR or value < error * (1.0 - hysteresis):
                self.level = LEVEL_WARN
        elif self.level == LEVEL_ERROR and value >= error * (1.0 - hysteresis):
            pass
        elif self.level == LEVEL_OK or value < warn * (1.0 - hysteresis):
            self.level = LEVEL_OK
        else:
            self.level = LEVEL_WARN
        return self.level


class MarginLevel:
    """
    Level of a margin to a limit: WARN below the threshold, only while it shrinks.

    Once raised it stays until the margin is the hysteresis share above the threshold, or
    the joint has moved away from the limit.
    """

    def __init__(self) -> None:
        self.level = LEVEL_OK

    def update(self, margin: float, *, approaching: bool, warn: float, hysteresis: float) -> int:
        """Return the level after seeing a margin, a share of the limit span."""
        if margin < warn and approaching:
            self.level = LEVEL_WARN
        elif margin >= warn * (1.0 + hysteresis) or not approaching:
            self.level = LEVEL_OK
        return self.level
