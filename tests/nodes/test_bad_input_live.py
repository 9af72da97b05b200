# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Faulty inputs of the running node: said once, on /diagnostics too, and the session is complete.

The command runs as a process of its own; the faults come from here over real DDS.
"""

from __future__ import annotations

import json
import math
import os
import re
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest
from diagnostic_msgs.msg import DiagnosticArray
from geometry_msgs.msg import PoseStamped
from live_helpers import PATIENCE_S, ros, wait_until
from mcap.reader import make_reader
from rclpy.executors import SingleThreadedExecutor
from rclpy.node import Node
from rclpy.qos import DurabilityPolicy, QoSProfile
from sensor_msgs.msg import JointState
from std_msgs.msg import Float64MultiArray, String

from teleop_eval.sources.recording import open_recording

ROOT = Path(__file__).parents[2]
COMMAND = [sys.executable, '-u', '-m', 'teleop_eval', 'evaluate']
LATCHED = QoSProfile(depth=1, durability=DurabilityPolicy.TRANSIENT_LOCAL)
URDF = """<robot name="planar">
  <link name="base"/><link name="upper"/><link name="fore"/><link name="tool"/>
  <joint name="shoulder" type="revolute"><parent link="base"/><child link="upper"/>
    <axis xyz="0 0 1"/><limit lower="-3" upper="3" velocity="5" effort="1"/></joint>
  <joint name="elbow" type="revolute"><parent link="upper"/><child link="fore"/>
    <origin xyz="0.4 0 0"/><axis xyz="0 0 1"/>
    <limit lower="-3" upper="3" velocity="5" effort="1"/></joint>
  <joint name="wrist" type="fixed"><parent link="fore"/><child link="tool"/>
    <origin xyz="0.3 0 0"/></joint>
</robot>
"""
SETTINGS = """\
/**:
  ros__parameters:
    session:
      directory: {directory}
      name: s
      record_inputs: true
    arms:
      right:
        operator:
          hand_topic: hand
          shoulder_m: [0.0, 0.0, 0.0]
          arm_length_m: 0.7
        robot:
          joints_topic: joint_states
          description_topic: robot_description
          base_link: base
          tip_link: tool
        active_mapping: {{topic: mapping}}
        mappings:
          reach: {{kind: task_space, scaling: metric}}
"""


@dataclass
class Stack:
    """What a sound stack publishes; a test changes one part."""

    settings: str = SETTINGS
    description: str = URDF
    label: str = 'reach'
    hand_type: type = PoseStamped
    joint_names: tuple[str, ...] = ('shoulder', 'elbow')
    hand: Callable[[int], float] = field(default=lambda k: 0.5 + 0.1 * math.sin(0.1 * k))


@dataclass
class Outcome:
    """What the node said and left."""

    status: int
    errors: str
    folder: Path
    diagnostics: list[DiagnosticArray]
    sent: int

    @property
    def warnings(self) -> list[str]:
        """Return the sentences that were logged, without time and name."""
        found = [re.match(r'\[(WARN|ERROR)\] \[[^]]*\] \[[^]]*\]: (.*)', line)
                 for line in self.errors.splitlines()]
        return [match[2] for match in found if match]

    def statuses(self, name: str) -> list[tuple[int, str]]:
        """Return level and message of a status, in the order of their coming."""
        return [(status.level[0], status.message) for array in self.diagnostics
                for status in array.status if status.name.endswith(name)]

    @property
    def summary(self) -> dict[str, Any]:
        """Return summary.json after a look at all other files."""
        for bag in ('summary', 'inputs'):
            with (self.folder / bag / f'{bag}_0.mcap').open('rb') as stream:
                assert make_reader(stream).get_summary() is not None
            assert (self.folder / bag / 'metadata.yaml').is_file()
        for name in ('metrics.csv', 'windows.csv', 'config.yaml'):
            assert (self.folder / name).is_file()
        return json.loads((self.folder / 'summary.json').read_text(encoding='utf-8'))


def environment() -> dict[str, str]:
    return {**os.environ, 'PYTHONPATH': str(ROOT), 'OMP_NUM_THREADS': '1'}


class Session:
    """The node as a process beside a stack in this one."""

    def __init__(self, stack: Stack, domain: int, folder: Path) -> None:
        self.stack = stack
        self._folder = folder
        settings = folder / 'evaluate.yaml'
        settings.write_text(stack.settings.format(directory=folder / 'sessions'),
                            encoding='utf-8')
        self.process = subprocess.Popen(
            [*COMMAND, '--ros-args', '--params-file', str(settings)], env=environment(),
            stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True)
        self._errors: list[str] = []
        self._reader = threading.Thread(target=self._read, daemon=True)
        self._reader.start()
        self._domain = domain
        self.diagnostics: list[DiagnosticArray] = []

    def _read(self) -> None:
        assert self.process.stderr is not None
        self._errors.extend(iter(self.process.stderr.readline, ''))

    def run(self, *words: str) -> Outcome:
        """Publish until the words were logged and some windows are there, then stop."""
        with ros(self._domain) as context:
            node = Node('stack', context=context)
            executor = SingleThreadedExecutor(context=context)
            executor.add_node(node)
            sent = self._publish(node, executor, words)
            self.process.send_signal(signal.SIGINT)
            self.process.wait(timeout=120)
            self._reader.join(timeout=30)
            self._close()
            executor.shutdown()
            node.destroy_node()
        return Outcome(self.process.returncode, ''.join(self._errors),
                       self._folder / 'sessions' / 's', self.diagnostics, sent)

    def _close(self) -> None:
        assert self.process.stderr is not None
        self.process.stderr.close()

    def _publish(self, node: Node, executor: SingleThreadedExecutor,
                 words: tuple[str, ...]) -> int:
        stack = self.stack
        node.create_subscription(DiagnosticArray, '/diagnostics', self.diagnostics.append, 10)
        description = node.create_publisher(String, 'robot_description', LATCHED)
        mapping = node.create_publisher(String, 'mapping', LATCHED)
        hand = node.create_publisher(stack.hand_type, 'hand', 50)
        joints = node.create_publisher(JointState, 'joint_states', 50)
        description.publish(String(data=stack.description))
        mapping.publish(String(data=stack.label))
        usable = [joints] if stack.hand_type is not PoseStamped else [joints, hand]
        wait_until(lambda: all(one.get_subscription_count() for one in usable),
                   lambda: executor.spin_once(timeout_sec=0.01))
        start, number, enough = time.monotonic(), 0, 250
        while number < enough or not all(word in ''.join(self._errors) for word in words):
            assert number < 50 * PATIENCE_S, f'never said: {words}\n{"".join(self._errors)}'
            executor.spin_once(timeout_sec=0.0)
            self._send(node, hand, joints, number)
            number += 1
            time.sleep(max(0.0, start + number / 50.0 - time.monotonic()))
        for _ in range(30):  # the last second's diagnostics
            executor.spin_once(timeout_sec=0.05)
        return number

    def _send(self, node: Node, hand: Any, joints: Any, number: int) -> None:
        stamp = node.get_clock().now().to_msg()
        message = JointState(name=list(self.stack.joint_names))
        message.header.stamp = stamp
        message.position = [0.3 * math.sin(0.1 * number)] * len(self.stack.joint_names)
        joints.publish(message)
        if self.stack.hand_type is not PoseStamped:
            hand.publish(self.stack.hand_type())
            return
        pose = PoseStamped()
        pose.header.stamp, pose.header.frame_id = stamp, 'room'
        pose.pose.position.x = self.stack.hand(number)
        pose.pose.orientation.w = 1.0
        hand.publish(pose)


@pytest.fixture
def session(domain: int, tmp_path: Path) -> Iterator[Callable[[Stack], Session]]:
    """Return a function that starts the node; it is ended after the test."""
    started: list[Session] = []

    def start(stack: Stack) -> Session:
        started.append(Session(stack, domain, tmp_path))
        return started[-1]
    yield start
    for one in started:
        if one.process.poll() is None:
            one.process.kill()
            one.process.wait()


def nan_for_a_while(number: int) -> float:
    """Return a hand position that is missing for 0.3 s."""
    return math.nan if 100 <= number < 115 else 0.5 + 0.1 * math.sin(0.1 * number)


FAULTS = {
    'wrong type': (Stack(hand_type=Float64MultiArray), (
        '/hand has the type std_msgs/msg/Float64MultiArray', "hand of arm 'right'",
        'geometry_msgs/msg/PoseStamped', 'restart its publisher')),
    'missing joint': (Stack(joint_names=('shoulder', 'elbo')), (
        'right: robot_joints (joint_states): joint elbow is missing', 'has shoulder, elbo',
        'did you mean elbo?')),
    'unknown link': (Stack(settings=SETTINGS.replace('tip_link: tool', 'tip_link: tol')), (
        "right: robot_description: there is no link 'tol'", "did you mean 'tool'?")),
    'no description': (Stack(description='hello'), (
        'right: robot_description: the text is not XML', 'give a complete URDF')),
    'nan pose': (Stack(hand=nan_for_a_while), (
        'right: hand (hand): x = nan came', 'left out')),
    'unknown mapping': (Stack(label='rech'), (
        "active_mapping (mapping) is 'rech'", "did you mean 'reach'?")),
}


@pytest.mark.parametrize('name', FAULTS)
def test_a_fault_is_said_once_and_the_session_is_complete(
        session: Callable[[Stack], Session], name: str) -> None:
    stack, words = FAULTS[name]
    done = session(stack).run(*words)
    assert done.status == 0 and 'Traceback' not in done.errors
    said = [text for text in done.warnings if words[0] in text]
    assert len(said) == 1 and all(word in said[0] for word in words)
    faulty = [(level, message) for level, message in done.statuses('right: inputs')
              if words[0] in message]
    assert faulty and faulty[0][0] == 2  # ERROR at first
    assert all(word in faulty[0][1] for word in words)
    summary = done.summary
    assert [text for text in summary['problems'] if words[0] in text] == summary['problems']
    assert len(summary['problems']) == 1
    with open_recording(done.folder / 'inputs') as recording:
        kept = {topic: info.message_count for topic, info in recording.topics.items()}
    assert kept['/joint_states'] == done.sent
    assert kept.get('/hand', 0) == (done.sent if stack.hand_type is PoseStamped else 0)
    if name == 'nan pose':
        assert summary['arms']['right']['inputs']['hand']['non_finite'] == 15
        assert 1 in [level for level, _ in faulty]  # WARN once it has passed
    if name in ('wrong type', 'nan pose', 'unknown mapping'):
        metrics = summary['arms']['right']['mappings']
        assert any(metric['status'] == 'ok' for found in metrics.values()
                   for metric in found['metrics'].values())


def test_a_sound_stack_says_nothing(session: Callable[[Stack], Session]) -> None:
    """The sentences above are not said without their faults."""
    done = session(Stack()).run()
    assert done.status == 0
    assert [text for text in done.warnings if 'absent, waiting' not in text
            and 'STALE' not in text] == []
    assert done.summary['problems'] == []
    assert done.statuses('right: inputs')[0][0] in (0, 3)


@pytest.mark.parametrize(('old', 'new', 'words'), [
    ('shoulder_m: [0.0, 0.0, 0.0]', 'shoulder_m: [0, 0.0, 0.0]',
     ('line 11', 'mixes integer (0) and number (0.0)', 'decimal point')),
    ('arm_length_m', 'arm_lenght_m', ('arm_lenght_m; did you mean', 'arm_length_m?')),
    ('arm_length_m: 0.7', 'arm_length_m: 70.0', ('is 70 m', 'range 0.1 to 2 m')),
    ('      right:', '      Right Arm:', ("the name 'Right Arm'", 'rename it')),
    ('hand_topic: hand', 'hand_topic: "a b"', ("hand_topic is 'a b'", 'no topic name')),
    ('/**', '/other', ('no section is for the node /teleop_eval', "'/**:'")),
])
def test_a_bad_parameter_file_is_one_sentence_and_no_folder(
        domain: int, tmp_path: Path, old: str, new: str, words: tuple[str, ...]) -> None:
    path = tmp_path / 'evaluate.yaml'
    assert old in SETTINGS
    path.write_text(SETTINGS.format(directory=tmp_path / 'sessions').replace(old, new, 1),
                    encoding='utf-8')
    done = subprocess.run([*COMMAND, '--ros-args', '--params-file', str(path)],
                          env=environment(), capture_output=True, text=True, timeout=120,
                          check=False)
    assert (done.returncode, done.stdout) == (1, '')
    [line] = done.stderr.splitlines()
    assert line.startswith(f'teleop_eval evaluate: {path}')
    assert all(word in line for word in words), line
    assert not (tmp_path / 'sessions').exists()
