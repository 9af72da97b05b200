# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Progress on standard error: a bar in a terminal, a line each 10 % in a log file."""

from __future__ import annotations

import sys
from typing import Any


class Progress:
    """
    Context that shows how much of `total` is done.

    Parameters
    ----------
    text
        What is going on.
    total
        Amount of work; 0 or less shows nothing, since no share can be told.
    enabled
        False shows nothing.

    """

    def __init__(self, text: str, total: int, *, enabled: bool = True) -> None:
        self._text = text
        self._total = total
        self._tenths = 0
        self._bar: Any = None
        self._task: Any = None
        self._plain = enabled and total > 0
        if self._plain and sys.stderr.isatty():
            self._make_bar()

    def __enter__(self) -> Progress:
        """Start the bar."""
        if self._bar is not None:
            self._bar.start()
        return self

    def __exit__(self, *_: object) -> None:
        """Leave the terminal as it was."""
        if self._bar is not None:
            self._bar.stop()

    def update(self, done: int) -> None:
        """Show that `done` of the total is done."""
        if self._bar is not None:
            self._bar.update(self._task, completed=min(done, self._total))
        elif self._plain:
            tenths = min(10, 10 * done // self._total)
            if tenths > self._tenths:
                self._tenths = tenths
                print(f'{self._text}: {10 * tenths} %', file=sys.stderr, flush=True)

    def _make_bar(self) -> None:
        """Use rich where it is installed; plain lines serve as well."""
        try:
            from rich.console import Console
            from rich.progress import BarColumn, TextColumn, TimeRemainingColumn
            from rich.progress import Progress as Bar
        except ImportError:
            return
        self._bar = Bar(
            TextColumn('{task.description}', markup=False), BarColumn(),
            TextColumn('{task.percentage:>3.0f} %'), TimeRemainingColumn(),
            console=Console(stderr=True), transient=True)
        self._task = self._bar.add_task(self._text, total=self._total)
