# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Periods of the node's loop, on a steady clock that no simulation stops."""

from __future__ import annotations


class Every:
    """
    Tells when a periodic task is due.

    A task that came late is not made up for: the next is a period after it was due, or now.
    """

    def __init__(self, period_s: float) -> None:
        self._period_ns = round(period_s * 1e9)
        self._next_ns: int | None = None

    def due(self, now_ns: int) -> bool:
        """Return whether the task is due at a reading of the steady clock, at first always."""
        if self._next_ns is not None and now_ns < self._next_ns:
            return False
        planned = now_ns if self._next_ns is None else self._next_ns
        self._next_ns = max(planned + self._period_ns, now_ns)
        return True
