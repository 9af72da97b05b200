# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The command that is shown works where the user stands."""

from __future__ import annotations

import os
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

from teleop_eval.cli.called import path_here, program_here

ROOT = Path(__file__).parents[2]


@pytest.fixture
def place(tmp_path, monkeypatch):
    """Return a project's folder with an environment in it, nothing of it on PATH."""
    binaries = tmp_path / 'my project' / '.venv' / 'bin'
    binaries.mkdir(parents=True)
    (binaries / 'python').symlink_to(sys.executable)
    monkeypatch.setattr(sys, 'executable', str(binaries / 'python'))
    monkeypatch.setenv('PATH', '/usr/bin:/bin')
    monkeypatch.chdir(tmp_path / 'my project')
    return tmp_path


def script(path):
    """Make a program that says with which arguments it was called."""
    path.write_text('#!/bin/sh\necho called "$@"\n')
    path.chmod(0o755)
    return path


def works(command, **kwargs):
    """Tell whether a shell in the current folder finds the program."""
    done = subprocess.run(f'{command} summarize', shell=True, capture_output=True, text=True,
                          check=False, **kwargs)
    return done.stdout.split()[-1:] == ['summarize']


def test_the_program_of_the_environment_is_named_from_here(place):
    script(place / 'my project' / '.venv' / 'bin' / 'teleop_eval')
    assert program_here() == '.venv/bin/teleop_eval'
    assert works(program_here())


def test_from_another_folder_too(place, monkeypatch):
    script(place / 'my project' / '.venv' / 'bin' / 'teleop_eval')
    (place / 'elsewhere').mkdir()
    monkeypatch.chdir(place / 'elsewhere')
    assert program_here() == "'../my project/.venv/bin/teleop_eval'"
    assert works(program_here())


def test_on_path_the_name_is_enough(place, monkeypatch):
    script(place / 'my project' / '.venv' / 'bin' / 'teleop_eval')
    monkeypatch.setenv('PATH', f'{place}/my project/.venv/bin:/bin')
    assert program_here() == 'teleop_eval'
    assert works(program_here())


def test_in_a_ros_installation_ros2_runs_it(place, monkeypatch):
    (place / 'ros').mkdir()
    script(place / 'ros' / 'ros2')
    monkeypatch.setenv('PATH', f'{place}/ros:/bin')
    assert program_here() == 'ros2 run teleop_eval'
    assert works(program_here())


def test_else_python_runs_the_module(place):
    assert program_here() == '.venv/bin/python -m teleop_eval'
    done = subprocess.run([*shlex.split(program_here()), '--version'], capture_output=True,
                          text=True, check=False, env={'PYTHONPATH': str(ROOT), 'PATH': ''})
    assert (done.returncode, done.stderr) == (0, '')


def test_a_folder_below_is_named_from_here_and_any_other_in_full(place):
    assert path_here(Path.cwd() / 'out' / 'a b') == "'out/a b'"
    assert path_here(place / 'elsewhere') == os.path.join(place, 'elsewhere')
