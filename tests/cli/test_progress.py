# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Progress: lines in a log, a bar in a terminal, nothing where nothing can be said."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from teleop_eval.cli.progress import Progress

ROOT = Path(__file__).parents[2]


def test_lines_for_each_tenth_reached(capsys):
    with Progress('Reading x', 40) as progress:
        for done in (1, 3, 4, 5, 20, 39, 40, 41):
            progress.update(done)
    assert capsys.readouterr().err.splitlines() == [
        f'Reading x: {share} %' for share in (10, 50, 90, 100)]


@pytest.mark.parametrize('total, enabled', [(0, True), (-1, True), (40, False)])
def test_silent_where_no_share_can_be_told_or_none_is_wanted(capsys, total, enabled):
    with Progress('Reading x', total, enabled=enabled) as progress:
        progress.update(40)
    read = capsys.readouterr()
    assert (read.out, read.err) == ('', '')


def test_terminal_gets_a_bar_and_markup_is_only_text():
    pty = pytest.importorskip('pty', reason='needs a pseudo-terminal')
    master, slave = pty.openpty()
    code = ('from teleop_eval.cli.progress import Progress\n'
            'with Progress("Reading [red]x", 4) as progress:\n'
            '    for done in range(5):\n'
            '        progress.update(done)\n')
    process = subprocess.run(
        [sys.executable, '-c', code], stdout=subprocess.PIPE, stderr=slave, timeout=120,
        env={**os.environ, 'PYTHONPATH': str(ROOT), 'TERM': 'xterm', 'COLUMNS': '80'},
        check=False)
    os.close(slave)
    shown = os.read(master, 65536).decode()
    os.close(master)
    assert (process.returncode, process.stdout) == (0, b'')
    assert 'Reading [red]x' in shown and '100 %' in shown
