# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""How this program is called from where the user stands, for commands that are shown."""

from __future__ import annotations

import os
import shlex
import shutil
import sys
from pathlib import Path

PROGRAM = 'teleop_eval'


def program_here() -> str:
    """
    Return the words with which a shell in the current folder starts this program.

    The program's name where it is on PATH, else the one beside this Python, else that of the
    ROS package, else the module. The path is relative: it shall work here, and only here.
    """
    if shutil.which(PROGRAM):
        return PROGRAM
    beside = Path(sys.executable).with_name(PROGRAM)
    if os.access(beside, os.X_OK):
        return shlex.quote(os.path.relpath(beside))
    if shutil.which('ros2'):
        return f'ros2 run {PROGRAM}'
    return f'{shlex.quote(_path_here(Path(sys.executable)))} -m {PROGRAM}'


def path_here(path: Path) -> str:
    """Return a path for a shell in the current folder, relative where it lies below it."""
    return shlex.quote(_path_here(path))


def _path_here(path: Path) -> str:
    below = os.path.relpath(path)
    return str(path) if below.startswith(os.pardir) else below
