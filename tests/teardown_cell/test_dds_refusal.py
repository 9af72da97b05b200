# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The cell keeps to itself: over real DDS, with a foreign node in another process."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from pathlib import Path

import pytest

from teleop_eval.core.errors import UsageError
from teleop_eval.teardown_cell.run import main

PATIENCE_S = 90


def run(module: str, *arguments: object) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, '-m', module, *map(str, arguments)], capture_output=True, text=True,
        timeout=PATIENCE_S, check=False)


@pytest.mark.parametrize('discovery', ['LOCALHOST', None])
def test_the_demo_refuses_beside_a_foreign_node(
        cell_domain: int, foreign_node, tmp_path: Path, discovery: str | None) -> None:
    foreign_node(discovery=discovery)
    done = run('teleop_eval', 'demo', '--domain', cell_domain, '--out', tmp_path / 'out')
    assert done.returncode == 1
    sentence = done.stderr.strip()
    assert sentence.startswith('teleop_eval demo: ') and '\n' not in sentence
    assert '/real_robot/driver' in sentence and '--domain' in sentence
    assert list((tmp_path / 'out').iterdir()) == []


@pytest.mark.parametrize('name', ['mapping', 'arm'])
def test_a_commanding_node_refuses_by_itself(
        cell_domain: int, foreign_node, name: str) -> None:
    foreign_node(namespace='/')
    done = run(f'teleop_eval.teardown_cell.{name}_node', '--domain', cell_domain)
    assert done.returncode == 1
    assert done.stderr.strip().startswith(f'teardown_cell {name}: ')
    assert '/driver' in done.stderr and '\n' not in done.stderr.strip()


def test_a_commanding_node_stops_when_a_foreign_node_appears_later(
        cell_domain: int, foreign_node) -> None:
    arm = subprocess.Popen(
        [sys.executable, '-m', 'teleop_eval.teardown_cell.arm_node', '--domain',
         str(cell_domain)], stderr=subprocess.PIPE, text=True)
    try:
        time.sleep(8.0)
        assert arm.poll() is None, 'alone it runs'
        foreign_node()
        _, said = arm.communicate(timeout=PATIENCE_S)
    finally:
        arm.kill()
        arm.wait()
    assert arm.returncode == 1
    assert '/real_robot/driver' in said


def test_a_second_cell_in_the_domain_is_refused(
        cell_domain: int, foreign_node, tmp_path: Path) -> None:
    foreign_node(name='arm', namespace='/teardown_cell')
    done = run('teleop_eval', 'demo', '--domain', cell_domain, '--out', tmp_path)
    assert done.returncode == 1
    assert '/teardown_cell/arm' in done.stderr and 'Another teardown cell' in done.stderr


@pytest.mark.parametrize(('arguments', 'said'), [
    (['--domain', '0'], '1 to 101'), (['--seconds', '3'], '20'), (['--seconds', 'nan'], '20'),
    (['--seed', '-1'], '--seed')])
def test_usage_errors(arguments: list[str], said: str) -> None:
    before = dict(os.environ)
    with pytest.raises(UsageError, match=said) as refused:
        main(arguments)
    assert refused.value.exit_status == 2
    assert dict(os.environ) == before


def test_an_unknown_option_is_a_usage_error(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as left:
        main(['--no-such-option'])
    assert left.value.code == 2
    assert 'unrecognized' in capsys.readouterr().err


def test_help_has_an_example(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as left:
        main(['--help'])
    assert left.value.code == 0
    assert 'teleop_eval demo --seconds' in capsys.readouterr().out


def test_an_output_folder_that_cannot_be_made_is_one_sentence(
        cell_domain: int, tmp_path: Path) -> None:
    (tmp_path / 'file').write_text('')
    done = run('teleop_eval', 'demo', '--domain', cell_domain, '--out', tmp_path / 'file' / 'x')
    assert done.returncode == 1
    assert done.stderr.startswith('teleop_eval demo: ') and 'Traceback' not in done.stderr
