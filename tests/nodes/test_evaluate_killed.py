# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The live node, killed: its folder opens as left and lacks at most the last second.

The node runs as the command does, in a process and a ROS domain of its own, beside a publisher.
A busy machine may hold the node up for longer than a second, which is not the node's fault and
must not fail the test. So the node itself keeps an account on the disk, after every turn of its
loop: when the turn began and ended, and how many messages it had then handed to its folder. What
had been handed over by a turn that ended a second or more before the last turn *began* must be
there: in between, the node was awake and had its second.

That alone would pass a node that takes messages late, so the newest message that is there is
also held against the moment of the kill, on the clock that stamped it: a second, and one flush,
and for how long a thread of the node, which does nothing but note the time every 10 ms, could
not do so.
"""

from __future__ import annotations

import os
import random
import signal
import struct
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest
from geometry_msgs.msg import PoseStamped
from live_helpers import ros, wait_until, write_settings
from mcap.reader import make_reader
from rclpy.node import Node
from rclpy.publisher import Publisher
from rclpy.serialization import deserialize_message
from rosbags.highlevel import AnyReader
from sensor_msgs.msg import JointState

pytestmark = pytest.mark.timeout(200)

ROOT = Path(__file__).parents[2]
SECOND = 1_000_000_000
# The node's longest wait between two flushes; written here so that the promise cannot move
# with the node.
FLUSH = SECOND // 2
BEAT = 10_000_000
RATE_HZ = 100.0
BAGS = ('inputs', 'summary')

NODE = """
import os, struct, sys, threading, time
from teleop_eval.nodes import evaluate
from teleop_eval.nodes.evaluator_node import EvaluatorNode
from teleop_eval.sinks.bag_writer import BagWriter

turns, rows, beats = (os.open(path, os.O_WRONLY | os.O_CREAT | os.O_APPEND)
                      for path in sys.argv[1:4])
handed, fresh = {'inputs': 0, 'summary': 0}, []
write, step = BagWriter.write, EvaluatorNode.step

def counted(self, topic, log_ns, data):
    write(self, topic, log_ns, data)
    handed[self.folder.name] += 1
    if self.folder.name == 'inputs':
        fresh.append(struct.pack('<Q', log_ns))

def accounted(self):
    begun = time.monotonic_ns()
    more = step(self)
    os.write(rows, b''.join(fresh))
    fresh.clear()
    os.write(turns, struct.pack('<4Q', begun, time.monotonic_ns(), *handed.values()))
    return more

def beat():
    while True:
        os.write(beats, struct.pack('<Q', time.time_ns()))
        time.sleep(0.01)

BagWriter.write, EvaluatorNode.step = counted, accounted
threading.Thread(target=beat, daemon=True).start()
sys.exit(evaluate.main(sys.argv[4:]))
"""


@dataclass(frozen=True)
class Turn:
    """One turn of the node's loop, steady clock, ns; messages handed over so far, by bag."""

    begun: int
    ended: int
    inputs: int
    summary: int


class Victim:
    """The node in a process, with its account."""

    def __init__(self, folder: Path) -> None:
        self.session = folder / 'sessions' / 's'
        self._files = [folder / name for name in ('turns', 'rows', 'beats')]
        self.process = subprocess.Popen(
            [sys.executable, '-u', '-c', NODE, *map(str, self._files), '--ros-args',
             '--params-file', str(write_settings(folder)), '-p', 'session.name:=s'],
            env={**os.environ, 'PYTHONPATH': str(ROOT), 'OMP_NUM_THREADS': '1'},
            stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)

    def turns(self) -> list[Turn]:
        """Return the turns that have ended."""
        return [Turn(*numbers) for numbers in self._numbers(0, 4)]

    def ended_with(self, inputs: int) -> int | None:
        """Return when the first turn ended that had handed over so many inputs, None before."""
        return next((turn.ended for turn in self.turns() if turn.inputs >= inputs), None)

    def rows(self) -> list[int]:
        """Return the log times of the inputs handed over."""
        return [number for number, in self._numbers(1, 1)]

    def kill(self) -> int:
        """Kill the node and return when, on the clock of the log times."""
        assert self.process.poll() is None
        now = time.time_ns()
        self.process.kill()
        assert self.process.wait() == -signal.SIGKILL
        return now

    def held_up_ns(self, killed_ns: int) -> int:
        """Return for how long of its last three seconds the node could not even note a time."""
        beats = [beat for beat, in self._numbers(2, 1)]
        near = [beat for beat in beats if beat > killed_ns - 3 * SECOND]
        edges = [near[0] if len(near) == len(beats) else killed_ns - 3 * SECOND, *near, killed_ns]
        return sum(max(later - earlier - 2 * BEAT, 0)
                   for earlier, later in zip(edges, edges[1:], strict=False))

    def _numbers(self, which: int, each: int) -> list[tuple[int, ...]]:
        data = self._files[which].read_bytes() if self._files[which].exists() else b''
        return list(struct.iter_unpack(f'<{each}Q', data[:len(data) // (8 * each) * 8 * each]))


class Stack:
    """Publishes numbered messages and keeps their numbers."""

    def __init__(self, node: Node) -> None:
        self._hand: Publisher = node.create_publisher(PoseStamped, 'hand', 1000)
        self._robot: Publisher = node.create_publisher(JointState, 'robot_joints', 1000)
        self._node = node
        self.sent = 0

    def heard(self) -> bool:
        """Tell whether the node listens to both topics."""
        return bool(self._hand.get_subscription_count() and self._robot.get_subscription_count())

    def publish(self) -> None:
        """Publish the next number on both topics."""
        stamp = self._node.get_clock().now().to_msg()
        pose, joints = PoseStamped(), JointState(name=['j1', 'j2'])
        pose.header.stamp = joints.header.stamp = stamp
        pose.pose.position.x, pose.pose.orientation.w = float(self.sent), 1.0
        joints.position = [float(self.sent), 0.0]
        self._hand.publish(pose)
        self._robot.publish(joints)
        self.sent += 1

    def publish_until(self, condition: Callable[[], bool]) -> None:
        """Publish at the usual rate until a condition holds."""
        def step() -> None:
            self.publish()
            time.sleep(1.0 / RATE_HZ)
        wait_until(condition, step)


@pytest.fixture
def stack(domain: int) -> Iterator[Stack]:
    with ros(domain) as context:
        node = Node('stack', context=context)
        yield Stack(node)
        node.destroy_node()


@pytest.fixture
def victim(domain: int, tmp_path: Path) -> Iterator[Victim]:
    started = Victim(tmp_path)
    yield started
    started.process.kill()
    started.process.wait()


def content(bag: Path) -> list[tuple[int, str, bytes]]:
    """Return (log time, topic, data) of a bag as left, the same by both readers."""
    with (bag / f'{bag.name}_0.mcap').open('rb') as stream:
        found = [(message.log_time, channel.topic, message.data)
                 for _, channel, message in make_reader(stream).iter_messages()]
    with AnyReader([bag]) as reader:
        again = [(log_ns, connection.topic, bytes(data))
                 for connection, log_ns, data in reader.messages()]
    assert again == found
    return found


def check_as_left(victim: Victim, stack: Stack) -> None:
    """Compare what the killed node left with its account and with what was published."""
    turns, rows = victim.turns(), victim.rows()
    bags = {name: content(victim.session / name) for name in BAGS}
    earlier = [turn for turn in turns if turn.ended <= turns[-1].begun - SECOND]
    # A node that was held up since its first second owes nothing yet.
    assert len(bags['inputs']) >= max((turn.inputs for turn in earlier), default=0)
    assert len(bags['summary']) >= max((turn.summary for turn in earlier), default=0)
    # What is there is what was handed over, from the first one on, without a hole. The node
    # may have been killed before it had noted the last ones.
    there = [log_ns for log_ns, _, _ in bags['inputs']]
    assert there[:len(rows)] == rows[:len(there)]
    for topic, kind in (('/hand', PoseStamped), ('/robot_joints', JointState)):
        messages = [deserialize_message(data, kind)
                    for _, name, data in bags['inputs'] if name == topic]
        numbers = [message.pose.position.x if kind is PoseStamped else message.position[0]
                   for message in messages]
        assert numbers == sorted(set(numbers)) and numbers[-1] < stack.sent
    assert not (victim.session / 'summary.json').exists()


@pytest.mark.parametrize('seed', range(3))
def test_killed_at_a_random_moment_while_messages_come(
        victim: Victim, stack: Stack, seed: int) -> None:
    """Later than a second after the first message; not tied to the turns of the node's loop."""
    moment_ns = round(random.Random(seed).uniform(1.2, 2.8) * SECOND)
    wait_until(stack.heard)
    stack.publish_until(lambda: victim.ended_with(1) is not None)
    moment_ns += time.monotonic_ns()
    stack.publish_until(lambda: time.monotonic_ns() > moment_ns)
    killed_ns = victim.kill()
    check_as_left(victim, stack)
    newest_ns = content(victim.session / 'inputs')[-1][0]
    assert killed_ns - newest_ns <= SECOND + FLUSH + victim.held_up_ns(killed_ns)


@pytest.mark.parametrize('seed', range(2))
def test_killed_in_the_silence_after_messages(
        victim: Victim, stack: Stack, seed: int) -> None:
    """
    A burst shorter than the bag's own commit interval, then nothing: only a flush saves it.

    The publishers were there before the node listened, so none of their messages is lost.
    Killed between one and two seconds after the node took the last message.
    """
    wait_until(stack.heard)
    # A first message on its own makes the topics known; its commit starts the interval.
    stack.publish_until(lambda: victim.ended_with(1) is not None)
    for _ in range(8):
        stack.publish()
        time.sleep(1.0 / RATE_HZ)
    last_ns = wait_until(lambda: victim.ended_with(2 * stack.sent))
    moment_ns = last_ns + round(random.Random(seed).uniform(1.05, 2.0) * SECOND)
    # The node must have been awake since, or it could not have flushed.
    wait_until(lambda: victim.turns()[-1].begun > moment_ns)
    victim.kill()
    check_as_left(victim, stack)
    assert len(content(victim.session / 'inputs')) == 2 * stack.sent
