# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The command as a process: signals finish the files, errors are one sentence."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from live_helpers import HALF_CHAIN, PATIENCE_S, ros, wait_until, write_settings
from mcap.reader import make_reader
from rclpy.duration import Duration
from rclpy.node import Node
from sensor_msgs.msg import JointState

from teleop_eval.core.errors import ConfigError, UsageError
from teleop_eval.nodes import evaluate

ROOT = Path(__file__).parents[2]
COMMAND = [sys.executable, '-u', '-m', 'teleop_eval', 'evaluate']


def environment() -> dict[str, str]:
    return {**os.environ, 'PYTHONPATH': str(ROOT), 'OMP_NUM_THREADS': '1'}


def heed_hangup() -> None:
    """Undo in a child that this test run may ignore SIGHUP, as under nohup, which is inherited."""
    signal.signal(signal.SIGHUP, signal.SIG_DFL)


@pytest.fixture
def started(domain: int, tmp_path: Path) -> Iterator[subprocess.Popen[str]]:
    settings = write_settings(tmp_path, HALF_CHAIN)
    process = subprocess.Popen(
        [*COMMAND, '--ros-args', '--params-file', str(settings), '-p', 'session.name:=s'],
        env=environment(), stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        preexec_fn=heed_hangup)
    assert process.stderr is not None
    with ros(domain) as context:
        stack = Node('stack', context=context)
        joints = stack.create_publisher(JointState, 'robot_joints', 100)
        for line in process.stderr:
            if '/robot_joints: found' in line:
                break
        wait_until(joints.get_subscription_count)
        # Without any number there is nothing to finish.
        for _ in range(100):
            joints.publish(JointState(name=['j1', 'j2'], position=[0.0, 0.0]))
            time.sleep(0.01)
        assert joints.wait_for_all_acked(Duration(seconds=PATIENCE_S))
        stack.destroy_node()
    yield process
    process.kill()
    process.communicate()


def folder_is_complete(folder: Path) -> None:
    summary = json.loads((folder / 'summary.json').read_text(encoding='utf-8'))
    assert 'right' in summary['arms']
    for bag in ('summary', 'inputs'):
        with (folder / bag / f'{bag}_0.mcap').open('rb') as stream:
            assert make_reader(stream).get_summary() is not None
        assert (folder / bag / 'metadata.yaml').is_file()
    assert (folder / 'metrics.csv').is_file()


@pytest.mark.parametrize('number', [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_a_signal_finishes_the_folder(
        started: subprocess.Popen[str], tmp_path: Path, number: int) -> None:
    started.send_signal(number)
    shown, errors = started.communicate(timeout=120)
    assert started.returncode == 0, errors
    folder = tmp_path / 'sessions' / 's'
    folder_is_complete(folder)
    assert f'Results: {folder}' in shown
    assert 'Traceback' not in errors


def test_further_signals_do_not_lose_the_files(
        started: subprocess.Popen[str], tmp_path: Path) -> None:
    for number in (signal.SIGINT, signal.SIGINT, signal.SIGTERM, signal.SIGINT):
        started.send_signal(number)
    _, errors = started.communicate(timeout=120)
    assert started.returncode == 0, errors
    folder_is_complete(tmp_path / 'sessions' / 's')
    assert 'Traceback' not in errors


def run(*arguments: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run([*COMMAND, *arguments], env=environment(), capture_output=True,
                          text=True, timeout=120, check=False)


def test_an_unknown_parameter_is_one_sentence_and_status_1(domain: int, tmp_path: Path) -> None:
    settings = write_settings(tmp_path)
    done = run('--ros-args', '--params-file', str(settings), '-p', 'time.windw_s:=2.0')
    assert done.returncode == 1
    assert done.stderr.splitlines() == [
        f'teleop_eval evaluate: {settings}: there is no parameter time.windw_s; did you mean '
        'time.window_s?']
    assert done.stdout == ''
    assert not (tmp_path / 'sessions').exists()


def test_an_unwritable_directory_is_one_sentence_and_status_1(
        domain: int, tmp_path: Path) -> None:
    settings = write_settings(tmp_path)
    (tmp_path / 'file').write_text('', encoding='utf-8')
    done = run('--ros-args', '--params-file', str(settings), '-p',
               f'session.directory:={tmp_path / "file"}')
    assert done.returncode == 1
    sentence = done.stderr.splitlines()[-1]
    assert sentence.startswith(f'teleop_eval evaluate: The folder {tmp_path / "file"}')
    assert 'Traceback' not in done.stderr


@pytest.mark.parametrize(('text', 'sentence'), [
    ('/**:\n  ros__parameters:\n    a: [1, 2.0]\n', 'line 3: the list .* mixes integer'),
    ('/other:\n  ros__parameters:\n    a: 1\n', 'no section is for the node /teleop_eval'),
    ('', 'no arm is configured'),
])
def test_a_bad_parameter_file_names_place_and_remedy(
        domain: int, tmp_path: Path, text: str, sentence: str) -> None:
    path = tmp_path / 'bad.yaml'
    path.write_text(text, encoding='utf-8')
    with pytest.raises(ConfigError, match=sentence):
        evaluate.main(['--ros-args', '--params-file', str(path)])


def test_the_namespace_of_the_command_line_counts(domain: int, tmp_path: Path) -> None:
    path = tmp_path / 'named.yaml'
    path.write_text('/cell/teleop_eval:\n  ros__parameters:\n    tine: 1\n', encoding='utf-8')
    with pytest.raises(ConfigError, match='there is no parameter tine'):
        evaluate.main(['--ros-args', '-r', '__ns:=/cell', '--params-file', str(path)])


@pytest.mark.parametrize('arguments', [
    ['--ros-args', '-p', 'a:=[1, x]'], ['--ros-args', '-p'], ['--ros-args', '-r', 'nonsense']])
def test_arguments_that_ros_refuses_are_one_sentence(
        domain: int, arguments: list[str]) -> None:
    with pytest.raises(ConfigError, match='ROS cannot use the arguments') as caught:
        evaluate.main(arguments)
    assert '/src/' not in str(caught.value) and '\n' not in str(caught.value)


def test_an_unknown_argument_is_a_usage_error(domain: int) -> None:
    with pytest.raises(UsageError, match="There is no argument '--recrod'"):
        evaluate.main(['--recrod'])


def test_help_needs_no_ros_arguments(capsys: pytest.CaptureFixture[str]) -> None:
    assert evaluate.main(['--help']) == 0
    shown = capsys.readouterr().out
    assert 'example:' in shown and 'no safety function' in shown
