# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Prove that what colcon installed is complete and runs.

usage: check_install.py SOURCE PREFIX WORKSPACE_PREFIX
"""

from __future__ import annotations

import filecmp
import os
import shlex
import subprocess
import sys
import tempfile
from pathlib import Path

PACKAGE = 'teleop_eval'


def main() -> str:
    """Return what is wrong, or nothing."""
    source, prefix, workspace = (Path(argument).absolute() for argument in sys.argv[1:4])
    share, lib = prefix / 'share' / PACKAGE, prefix / 'lib' / PACKAGE
    pairs = {share / 'package.xml': source / 'package.xml'}
    pairs |= {share / folder / path.name: path for folder in ('launch', 'config')
              for path in (source / folder).iterdir() if path.is_file()}
    commands = {lib / path.name: path for path in (source / 'resource' / 'run').iterdir()
                if path.is_file()}
    for installed, original in (pairs | commands).items():
        if not installed.is_file() or not filecmp.cmp(installed, original, shallow=False):
            return f'{installed} is not a copy of {original}'
    if set(lib.iterdir()) != set(commands):
        return f'{lib} holds other files than {source}/resource/run'
    marker = prefix / 'share' / 'ament_index' / 'resource_index' / 'packages' / PACKAGE
    if not marker.is_file():
        return f'{marker} is missing'

    with tempfile.TemporaryDirectory() as elsewhere:
        for command in commands:
            if not os.access(command, os.X_OK):
                return f'{command} is not executable'
            text = sourced(workspace, [str(command), '--help'], elsewhere)
            if f'{PACKAGE} {command.name}' not in text:
                return f'{command} --help printed {text!r}'
        code = (f'import os, rclpy, {PACKAGE}; print({PACKAGE}.__file__, rclpy.__file__, '
                'os.environ["AMENT_PREFIX_PATH"], sep="\\n")')
        package, rclpy, index = sourced(
            workspace, [sys.executable, '-c', code], elsewhere).splitlines()
    # Linked installations import from the build folder beside the installation.
    if not Path(package).absolute().is_relative_to(workspace.parent):
        return f'{package} is imported, not what is below {workspace.parent}'
    if not rclpy.startswith(sys.prefix):
        return f'{rclpy} is imported, not the one below {sys.prefix}'
    if str(prefix) not in index.split(os.pathsep):
        return f'AMENT_PREFIX_PATH is {index!r}, without {prefix}'
    print(f'{len(pairs)} files and {len(commands)} commands installed; all commands run with '
          f'{sys.executable}')
    return ''


def sourced(workspace: Path, command: list[str], folder: str) -> str:
    """Return what a command prints in a shell that sourced the workspace."""
    script = f'. {shlex.quote(str(workspace))}/setup.bash && exec {shlex.join(command)}'
    done = subprocess.run(['bash', '-c', script], cwd=folder, capture_output=True, text=True)
    if done.returncode or done.stderr:
        sys.exit(f'check_install: {shlex.join(command)} ended with {done.returncode}:\n'
                 f'{done.stderr}')
    return done.stdout


if __name__ == '__main__':
    problem = main()
    sys.exit(f'check_install: {problem}' if problem else 0)
