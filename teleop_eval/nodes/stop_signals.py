# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Signals that end the node, under its own control.

rclpy's handlers shut the context down at once: nothing could be published any more, and
files would be finished after the fact. Here a signal only asks the loop to end.
"""

from __future__ import annotations

import os
import signal
import sys
from types import FrameType, TracebackType
from typing import Any

SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
_PLEASE_WAIT = b'\nThe files are being finished; please wait.\n'


class StopSignals:
    """Context in which SIGINT, SIGTERM and SIGHUP set `requested` and do nothing else."""

    def __init__(self) -> None:
        self.requested = False
        self._before: dict[int, Any] = {}

    def __enter__(self) -> StopSignals:
        """Install the handlers."""
        for number in SIGNALS:
            before = signal.getsignal(number)
            # Under nohup a closed terminal must not end the session.
            if number == signal.SIGHUP and before == signal.SIG_IGN:
                continue
            self._before[number] = signal.signal(number, self._handle)
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None,
                 trace: TracebackType | None) -> None:
        """Put the former handlers back."""
        for number, before in self._before.items():
            signal.signal(number, before if before is not None else signal.SIG_DFL)

    def _handle(self, number: int, frame: FrameType | None) -> None:
        if self.requested:
            try:  # not print: the signal may have interrupted a print
                os.write(sys.stderr.fileno(), _PLEASE_WAIT)
            except (OSError, ValueError):
                pass  # the terminal is gone, which is what SIGHUP says
        self.requested = True
