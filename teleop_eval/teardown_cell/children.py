# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The processes of the cell: started together, watched, and none left behind."""

from __future__ import annotations

import contextlib
import os
import signal
import subprocess
import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

from teleop_eval.core.errors import TeleopEvalError

# The evaluator closes its files when it is told to end; the others end at once.
TERMINATE_S = 20.0


class ChildEndedError(TeleopEvalError):
    """A process of the cell ended before its time."""


class Children:
    """
    Processes by name; leaving the context ends all that still run.

    Each has a session of its own, so that a Ctrl-C in the terminal reaches only the process
    that started them, which then ends them in the right order.

    Parameters
    ----------
    logs
        Existing folder for what they print.
    environment
        Their environment.

    """

    def __init__(self, logs: Path, environment: Mapping[str, str]) -> None:
        """Keep the settings; nothing is started."""
        self._logs = logs
        self._environment = dict(environment)
        self._running: dict[str, subprocess.Popen[bytes]] = {}

    def __enter__(self) -> Children:
        """Return the processes."""
        return self

    def __exit__(self, *_: object) -> None:
        """End all processes that still run."""
        self.stop_all()

    def start(self, name: str, command: Sequence[str]) -> None:
        """Start a process; what it prints goes to a file."""
        with open(self._logs / f'{name}.log', 'wb') as log:
            self._running[name] = subprocess.Popen(
                command, env=self._environment, stdin=subprocess.DEVNULL, stdout=log,
                stderr=subprocess.STDOUT, start_new_session=True)

    def check(self) -> None:
        """
        Raise when a process has ended.

        Raises
        ------
        ChildEndedError
            Names the process, its status and the last line it printed.

        """
        for name, process in list(self._running.items()):
            status = process.poll()
            if status is not None:
                del self._running[name]
                raise ChildEndedError(self._ended(name, status))

    def finish(self, name: str, *, patience_s: float, hurry: Callable[[], bool]) -> None:
        """
        Ask a process to end by SIGINT and wait for it, until `hurry` says to wait no longer.

        Raises
        ------
        ChildEndedError
            If it ends with another status than 0 or does not end; in the latter case it is
            killed.

        """
        process = self._running.pop(name)
        _signal(process, signal.SIGINT)
        deadline = time.monotonic() + patience_s
        while process.poll() is None:
            if time.monotonic() > deadline or hurry():
                _signal(process, signal.SIGKILL)
                process.wait()
                raise ChildEndedError(
                    f'The process {name} had not ended yet and was killed; its last words: '
                    f'{self._last_line(name)}')
            time.sleep(0.05)
        status = process.returncode
        if status != 0:
            raise ChildEndedError(self._ended(name, status))

    def stop_all(self) -> None:
        """End all processes: SIGTERM, and SIGKILL for those that do not follow."""
        for process in self._running.values():
            _signal(process, signal.SIGTERM)
        deadline = time.monotonic() + TERMINATE_S
        for process in self._running.values():
            try:
                process.wait(max(deadline - time.monotonic(), 0.0))
            except subprocess.TimeoutExpired:
                _signal(process, signal.SIGKILL)
                process.wait()
        self._running.clear()

    def _ended(self, name: str, status: int) -> str:
        how = (f'by signal {-status}' if status < 0 else f'with status {status}')
        return (f'The process {name} of the cell ended {how} before its time; its last words: '
                f'{self._last_line(name)}')

    def _last_line(self, name: str) -> str:
        with contextlib.suppress(OSError):
            text = (self._logs / f'{name}.log').read_text('utf-8', errors='replace')
            lines = [line.strip() for line in text.splitlines() if line.strip()]
            if lines:
                return lines[-1]
        return '(none)'


def _signal(process: subprocess.Popen[bytes], number: signal.Signals) -> None:
    with contextlib.suppress(ProcessLookupError, PermissionError):
        # Its whole session: a process may have helpers of its own.
        os.killpg(process.pid, number)
