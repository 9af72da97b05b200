# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Exit statuses of the live command: those of `summarize` where the cause is the same."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from live_helpers import (
    HALF_CHAIN,
    PATIENCE_S,
    SETTINGS_YAML,
    ros,
    wait_until,
    write_settings,
)
from rclpy.duration import Duration
from rclpy.node import Node
from sensor_msgs.msg import JointState

from teleop_eval.nodes import evaluate

ROOT = Path(__file__).parents[2]
# The command, with a disk that refuses the recording from the given message on, for good or
# until the end of the session.
COMMAND = """
import sys
from teleop_eval.core.errors import OutputError
from teleop_eval.sinks.bag_writer import BagWriter
refuse_from, for_good = int(sys.argv[1]), sys.argv[2] == 'for good'
write, flush, count = BagWriter.write, BagWriter.flush, 0

def refused(bag):
    raise OutputError(f'Cannot write the recording {bag.folder}: no space is left; free some.')

def limited(bag, *arguments):
    global count
    count += 1
    if refuse_from and count > refuse_from:
        refused(bag)
    write(bag, *arguments)

def flushed(bag):
    if for_good and refuse_from and count > refuse_from:
        refused(bag)
    flush(bag)

BagWriter.write, BagWriter.flush = limited, flushed
from teleop_eval.cli.main import main
sys.exit(main(['evaluate', *sys.argv[3:]]))
"""
SAMPLE = JointState(name=['j1', 'j2'], position=[0.1, 0.2])
CUT = b'\x00\x01\x00\x00\x01\x00'


class Run:
    """One run of the command beside a publisher of robot joints."""

    def __init__(self, domain: int, folder: Path, messages: list[object],
                 refuse: tuple[int, str] = (0, ''), text: str = SETTINGS_YAML) -> None:
        settings = write_settings(folder, text)
        process = subprocess.Popen(
            [sys.executable, '-u', '-c', COMMAND, str(refuse[0]), refuse[1], '--ros-args',
             '--params-file', str(settings), '-p', 'session.name:=s'],
            env={**os.environ, 'PYTHONPATH': str(ROOT), 'OMP_NUM_THREADS': '1'},
            stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
        lines = []
        assert process.stderr is not None
        try:
            with ros(domain) as context:
                stack = Node('stack', context=context)
                joints = stack.create_publisher(JointState, 'robot_joints', 100)
                for line in process.stderr:
                    lines.append(line)
                    if '/robot_joints: found' in line:
                        break
                wait_until(joints.get_subscription_count)
                for message in messages:
                    joints.publish(message)
                    time.sleep(0.01)
                assert joints.wait_for_all_acked(Duration(seconds=PATIENCE_S))
                stack.destroy_node()
            process.send_signal(signal.SIGINT)
            self.shown, errors = process.communicate(timeout=120)
        finally:
            process.kill()
        self.errors = ''.join(lines) + errors
        self.status = process.returncode
        self.folder = folder / 'sessions' / 's'

    @property
    def sentences(self) -> list[str]:
        """Return what the command itself said, apart from its log."""
        start = 'teleop_eval evaluate: '
        return [line.removeprefix(start) for line in self.errors.splitlines()
                if line.startswith(start)]

    @property
    def problems(self) -> list[str]:
        """Return the problems of summary.json."""
        text = (self.folder / 'summary.json').read_text(encoding='utf-8')
        return list(json.loads(text)['problems'])


def test_a_write_that_fails_for_good_is_status_1(domain: int, tmp_path: Path) -> None:
    done = Run(domain, tmp_path, [SAMPLE] * 20, refuse=(10, 'for good'))
    assert done.status == 1, done.errors
    assert 'Traceback' not in done.errors
    assert done.sentences[-1].startswith('Cannot write the recording ')
    assert 'no space is left' in done.sentences[-1]


def test_problems_of_the_data_are_said_and_are_status_0(domain: int, tmp_path: Path) -> None:
    done = Run(domain, tmp_path, [SAMPLE] * 50 + [CUT] + [SAMPLE] * 50, text=HALF_CHAIN)
    assert done.status == 0, done.errors
    [refused] = [text for text in done.problems if 'cannot be decoded' in text]
    assert refused.startswith('1 of 101 messages on /robot_joints cannot be decoded and is left '
                              'out; it came ')
    # Said at the end as well: by then, what was logged on the way is far up.
    assert done.sentences == done.problems
    assert f'Results: {done.folder}' in done.shown


@pytest.mark.parametrize(('messages', 'words'), [
    ([], 'there is no message of /hand, /robot_joints'),
    ([CUT] * 5, 'none of the 5 messages on /hand, /robot_joints can be decoded')])
def test_nothing_evaluated_is_status_1(
        domain: int, tmp_path: Path, messages: list[object], words: str) -> None:
    done = Run(domain, tmp_path, messages)
    assert done.status == 1, done.errors
    assert [text for text in done.sentences if words in text] == [
        text for text in done.problems if text.startswith('Nothing was evaluated: ')] != []
    assert (done.folder / 'metrics.csv').is_file()


def test_no_number_under_any_mapping_is_status_1(domain: int, tmp_path: Path) -> None:
    """The same sound stream as above, but the topic that tells the mapping is silent."""
    silent = f'{HALF_CHAIN}        active_mapping: {{{{topic: mapping}}}}\n'
    done = Run(domain, tmp_path, [SAMPLE] * 100, text=silent)
    assert done.status == 1, done.errors
    assert done.sentences == done.problems
    [why] = [text for text in done.problems if text.startswith('Nothing was evaluated: ')]
    assert why == ('Nothing was evaluated: no mapping was active while the arm was evaluated; no '
                   'message came on mapping; correct that and evaluate again.')


def test_help_says_the_statuses(capsys: pytest.CaptureFixture[str]) -> None:
    assert evaluate.main(['--help']) == 0
    shown = capsys.readouterr().out
    assert 'exit status\n  0  ' in shown and '\n  1  ' in shown and '\n  2  usage' in shown
