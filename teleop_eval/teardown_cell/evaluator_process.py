# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Run the command `evaluate` so that it ends with the process that started it.

The evaluator itself is the usual one; a demonstration that is killed must not leave it behind.
"""

from __future__ import annotations

import os
import signal
import sys
import threading
import time

from teleop_eval.cli.main import main as command

LOOK_EVERY_S = 0.5


def end_with(parent: int) -> None:
    """Ask this process to end, as Ctrl-C does, once its parent is another one."""
    while os.getppid() == parent:
        time.sleep(LOOK_EVERY_S)
    os.kill(os.getpid(), signal.SIGINT)


def main(argv: list[str]) -> int:
    """Run `evaluate` with the arguments behind the parent's process id."""
    parent, *arguments = argv
    threading.Thread(target=end_with, args=(int(parent),), daemon=True).start()
    return command(['evaluate', *arguments])


if __name__ == '__main__':
    sys.exit(main(sys.argv[1:]))
