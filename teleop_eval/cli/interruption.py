# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Ctrl-C as a wish to stop, so that what has been read can still be written."""

from __future__ import annotations

import signal
import threading
from types import FrameType

_SIGNALS = (signal.SIGINT, signal.SIGTERM)


class Interruption:
    """
    Context in which the first SIGINT or SIGTERM only sets `wanted`.

    After it the signals work as before, so that a second Ctrl-C ends the process at once.
    Outside the main thread, where Python allows no handlers, nothing changes.
    """

    def __init__(self) -> None:
        self.wanted = False
        self._before: dict[int, object] = {}

    def __enter__(self) -> Interruption:
        """Take over the signals."""
        if threading.current_thread() is threading.main_thread():
            for number in _SIGNALS:
                self._before[number] = signal.signal(number, self._note)
        return self

    def __exit__(self, *_: object) -> None:
        """Give the signals back."""
        self._restore()

    def _note(self, number: int, frame: FrameType | None) -> None:
        self.wanted = True
        self._restore()

    def _restore(self) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)  # type: ignore[arg-type]
        self._before = {}
