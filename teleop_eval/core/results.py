# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What the evaluator hands out while it runs."""

from __future__ import annotations

from dataclasses import dataclass

from teleop_eval.core.metric import Metric

# Levels of diagnostic_msgs/DiagnosticStatus.
LEVEL_OK, LEVEL_WARN, LEVEL_ERROR, LEVEL_STALE = 0, 1, 2, 3


@dataclass(frozen=True)
class WindowResult:
    """
    Metrics of one closed window of one arm.

    `start_ns` and `end_ns` are in the arm's time base; `receive_ns` is the receive time of
    the message that closed the window.
    """

    arm: str
    mapping: str
    start_ns: int
    end_ns: int
    receive_ns: int
    metrics: dict[str, Metric]


@dataclass(frozen=True)
class StatusLine:
    """One status of /diagnostics: keys of `values` carry the unit."""

    name: str
    level: int
    message: str
    values: dict[str, str]
