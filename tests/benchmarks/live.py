# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Live CPU: the node against bare do-nothing subscribers on the same messages.

Two arms of three 1 kHz streams come from one process as serialized bytes. The bare
subscriber deserializes them under the events executor, the cheapest public one, and does
nothing. Node and subscriber run in turn, each for the same time; CPU is user plus system time
from /proc, counted after the warm-up.
"""

from __future__ import annotations

import json
import os
import signal
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from tests.benchmarks.streams import parameters

PREFIXES = ('/arm0', '/arm1')
SECONDS = float(os.environ.get('BENCH_SECONDS', '20'))
ROUNDS = int(os.environ.get('BENCH_ROUNDS', '5'))
WARM_UP_S = 8.0
DOMAIN = '93'

_PUBLISHER = """\
import sys, time
import rclpy
from geometry_msgs.msg import PoseStamped
from sensor_msgs.msg import JointState
from tests.benchmarks.streams import arm_messages, START_NS
rclpy.init()
node = rclpy.create_node('source')
kinds = {'hand': PoseStamped, 'command': JointState, 'joint_states': JointState}
prefixes = sys.argv[1].split(',')
topics = {f'{p}/{n}': node.create_publisher(k, f'{p}/{n}', 1000)
          for p in prefixes for n, k in kinds.items()}
now = time.time_ns()
streams = [arm_messages(1e6, 1000.0, first_ns=now, prefix=p) for p in prefixes]
start = time.monotonic()
k = 0
while True:
    for stream in streams:
        for _ in range(3):
            _, topic, data = next(stream)
            topics[topic].publish(data)
    k += 1
    ahead = start + k * 1e-3 - time.monotonic()
    if ahead > 0:
        time.sleep(ahead)
"""

_BARE = """\
import sys, signal
import rclpy
from rclpy.experimental import EventsExecutor
from rclpy.signals import SignalHandlerOptions
from geometry_msgs.msg import PoseStamped
from sensor_msgs.msg import JointState
rclpy.init(signal_handler_options=SignalHandlerOptions.NO)
node = rclpy.create_node('bare')
count = [0]
def nothing(message):
    count[0] += 1
for p in sys.argv[1].split(','):
    node.create_subscription(PoseStamped, f'{p}/hand', nothing, 1000)
    node.create_subscription(JointState, f'{p}/command', nothing, 1000)
    node.create_subscription(JointState, f'{p}/joint_states', nothing, 1000)
executor = EventsExecutor()
executor.add_node(node)
running = [True]
signal.signal(signal.SIGINT, lambda *_: running.__setitem__(0, False))
while running[0]:
    executor.spin_once(timeout_sec=0.1)
print('COUNT', count[0])
"""


def cpu_s(pid: int) -> float:
    """Return user plus system time of a process, seconds."""
    fields = Path(f'/proc/{pid}/stat').read_text().rsplit(')', 1)[1].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf('SC_CLK_TCK')


def measure(command: list[str], environment: dict[str, str]) -> tuple[float, str]:
    """Return the share of a core that a process needs after its warm-up, and its output."""
    process = subprocess.Popen(command, env=environment, stdout=subprocess.PIPE,
                               stderr=subprocess.DEVNULL, text=True)
    try:
        time.sleep(WARM_UP_S)
        before, begin = cpu_s(process.pid), time.monotonic()
        time.sleep(SECONDS)
        share = (cpu_s(process.pid) - before) / (time.monotonic() - begin)
    finally:
        process.send_signal(signal.SIGINT)
        try:
            output, _ = process.communicate(timeout=60)
        except subprocess.TimeoutExpired:
            process.kill()
            output, _ = process.communicate()
    return share, output


def received(output: str, sessions: Path | None) -> str:
    """Return how many messages the process got, and how many the node knows it lost."""
    if sessions is None:
        return f'{output.rsplit("COUNT", 1)[-1].strip()} messages'
    newest = max(sessions.iterdir(), key=lambda path: path.stat().st_mtime)
    summary = json.loads((newest / 'summary.json').read_text())
    inputs = [one for arm in summary['arms'].values() for one in arm['inputs'].values()]
    return (f'{sum(one["messages"] for one in inputs)} messages, '
            f'{sum(one.get("lost") or 0 for one in inputs)} lost')


def main(*, full: bool = False) -> None:
    """Print the node's CPU over the bare subscriber's; there is one size, the target's."""
    print(f'two arms of three 1 kHz streams, {ROUNDS} rounds of {SECONDS:g} s each, alternating '
          '(target: 5 rounds)', flush=True)
    environment = {**os.environ, 'ROS_DOMAIN_ID': DOMAIN, 'OMP_NUM_THREADS': '1',
                   'ROS_AUTOMATIC_DISCOVERY_RANGE': 'LOCALHOST',
                   'PYTHONPATH': str(Path(__file__).parents[2])}
    source = subprocess.Popen([sys.executable, '-c', _PUBLISHER, ','.join(PREFIXES)],
                              env=environment)
    shares: dict[str, list[float]] = {'bare': [], 'node': [], 'node, recording inputs': []}
    try:
        with tempfile.TemporaryDirectory() as scratch:
            commands = {'bare': [sys.executable, '-c', _BARE, ','.join(PREFIXES)]}
            for name, record in (('node', False), ('node, recording inputs', True)):
                folder = Path(scratch) / str(record)
                folder.mkdir()
                config = parameters(folder, PREFIXES, record=record)
                commands[name] = [sys.executable, '-m', 'teleop_eval', 'evaluate', '--ros-args',
                                  '--params-file', str(config)]
            folders = {'node': Path(scratch) / 'False' / 'sessions',
                       'node, recording inputs': Path(scratch) / 'True' / 'sessions'}
            for _ in range(ROUNDS):
                for name, command in commands.items():
                    share, output = measure(command, environment)
                    shares[name].append(share)
                    print(f'  {name}: {share:.3f} of a core, '
                          f'{received(output, folders.get(name))}', flush=True)
    finally:
        source.kill()
        source.wait()
    bare = statistics.median(shares['bare'])
    print(f'bare subscribers {bare:.3f} of a core (median of {ROUNDS}, {SECONDS:g} s each)')
    for name in ('node', 'node, recording inputs'):
        own = statistics.median(shares[name])
        print(f'{name} {own:.3f} of a core, ratio {own / bare:.2f} (target 1)')
