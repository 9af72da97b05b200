# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Recordings as SIGKILL leaves them, opened by the `mcap` package and by rosbags.

Each folder is read as it was left, and again as a copy. Nothing repairs it in between.
"""

from __future__ import annotations

import json
import os
import random
import shutil
import struct
import subprocess
import sys
import time
from pathlib import Path

import pytest
from mcap.reader import make_reader
from mcap.records import Message as McapMessage
from mcap.stream_reader import StreamReader
from rosbags.highlevel import AnyReader

from teleop_eval.core.errors import RecordingError
from teleop_eval.sources.recording import open_recording

ROOT = Path(__file__).parents[2]
SECOND = 1_000_000_000

# A child that records numbered messages in real time. It puts on the disk, in a file beside the
# folder, when it offered each number and when the writer had accepted it.
RECORD = """
import os, struct, sys, time
from pathlib import Path
from teleop_eval.sinks.bag_writer import BagWriter

folder = Path(sys.argv[1])
writer = BagWriter(folder)
writer.add_topic('/count', 'std_msgs/msg/UInt64')
writer.add_topic('/other', 'std_msgs/msg/UInt64')
side = os.open(sys.argv[2], os.O_WRONLY | os.O_CREAT | os.O_APPEND)
number = 0
while True:
    accepted = b''
    for _ in range(10):
        offered = time.monotonic_ns()
        for topic in ('/count', '/other'):
            writer.write(topic, offered, b'\\x00\\x01\\x00\\x00' + struct.pack('<Q', number))
        accepted += struct.pack('<QQ', offered, time.monotonic_ns())
        number += 1
    os.write(side, accepted)
    os.fsync(side)
    time.sleep(0.01)
"""

# A process that forks one child per system call of a recording, and lets each child kill
# itself right before that call (tear = 0) or after a part of it (tear = 1): a kernel may stop
# a write at the border of two memory pages when the process is being killed.
KILL_EVERYWHERE = """
import json, os, signal, struct, sys
from pathlib import Path
from teleop_eval.sinks import mcap_file
from teleop_eval.sinks.bag_writer import BagWriter

mcap_file._MIN_SPACE, mcap_file._INDEX_SPACE = 4000, 1500
target = Path(sys.argv[1])
calls, state = [0], {'offered': 0, 'committed': 0, 'made': False}

def guard(name, at, tear, folder):
    real = getattr(os, name)
    def call(*args):
        calls[0] += 1
        if calls[0] == at:
            if tear:
                inside = 0 if name != 'pwrite' else 4096 - args[2] % 4096
                if not 0 < inside < len(args[1]):
                    os._exit(8)  # nothing to tear: the kill before the next call covers it
                real(args[0], args[1][:inside], args[2])
            (folder.parent / (folder.name + '.json')).write_text(json.dumps(state))
            os.kill(os.getpid(), signal.SIGKILL)
        return real(*args)
    setattr(os, name, call)

def record(folder):
    writer = BagWriter(folder, commit_interval_s=1e9)
    state['made'] = True
    writer.add_topic('/count', 'std_msgs/msg/UInt64')
    writer.add_topic('/other', 'std_msgs/msg/UInt64')
    for part in range(5):
        if part == 3:
            writer.add_topic('/late', 'std_msgs/msg/UInt64')
        for number in range(60 * part, 60 * part + 60):
            for topic in ('/count', '/other'):
                writer.write(topic, 1000 + number,
                             b'\\x00\\x01\\x00\\x00' + struct.pack('<Q', number))
        state['offered'] = 60 * part + 60
        writer.flush()
        state['committed'] = 60 * part + 60
    writer.close()

def child(at, tear):
    folder = target / f'kill{at}_{tear}'
    pid = os.fork()
    if pid == 0:
        for name in ('pwrite', 'ftruncate', 'replace'):
            guard(name, at, tear, folder)
        record(folder)
        os._exit(7)
    return os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])

# The first topic makes the table of message types; the children inherit it.
with BagWriter(target / 'warm') as warm:
    warm.add_topic('/count', 'std_msgs/msg/UInt64')
at = 1
while child(at, 0) == -signal.SIGKILL:
    child(at, 1)
    at += 1
print(at - 1)
"""


def numbers(messages: list[tuple[str, bytes]], topic: str) -> list[int]:
    return [struct.unpack_from('<Q', data, 4)[0] for name, data in messages if name == topic]


def readings(folder: Path) -> dict[str, list[tuple[str, bytes]]]:
    """Read a folder with every reader: those of the specification, a linear one and ours."""
    found = {}
    path = next(folder.glob('*.mcap'))
    with path.open('rb') as stream:
        found['mcap'] = [(c.topic, m.data) for _, c, m in make_reader(stream).iter_messages()]
    with AnyReader([folder]) as reader:
        found['rosbags'] = [(c.topic, bytes(data)) for c, _, data in reader.messages()]
    with path.open('rb') as stream:
        topics, linear = {}, []
        for item in StreamReader(stream, validate_crcs=True).records:
            if isinstance(item, McapMessage):
                linear.append((topics[item.channel_id], item.data))
            elif hasattr(item, 'message_encoding'):
                topics[item.id] = item.topic
        found['linear'] = linear
    with open_recording(folder) as recording:
        found['ours'] = [(topic, data) for _, topic, data in recording.messages()]
        assert recording.notes == []
    return found


def copied(folder: Path) -> Path:
    # The data file bears the folder's name, so the copy's folder keeps it too.
    copy = folder.parent / 'copies' / folder.name
    shutil.copytree(folder, copy)
    return copy


def start(script: str, *args: Path) -> subprocess.Popen:
    environment = {**os.environ, 'PYTHONPATH': str(ROOT)}
    return subprocess.Popen(
        [sys.executable, '-c', script, *map(str, args)], env=environment, stdout=subprocess.PIPE
    )


def side_values(path: Path) -> list[tuple[int, int]]:
    """Return when each number was offered and when it was accepted."""
    data = path.read_bytes() if path.exists() else b''
    return list(struct.iter_unpack('<QQ', data[: len(data) // 16 * 16]))


def test_killed_at_random_moments(tmp_path):
    """Ten recorders are killed later than 1 s after their start."""
    chance = random.Random(7)
    waiting, done = [], []
    for number in range(10):
        folder, side = tmp_path / f'bag{number}', tmp_path / f'side{number}'
        waiting.append((start(RECORD, folder, side), folder, side, chance.uniform(1.1, 3.0)))
    children = [item[0] for item in waiting]
    try:
        while waiting:
            time.sleep(0.01)
            for item in list(waiting):
                child, folder, side, delay = item
                assert child.poll() is None
                times = side_values(side)
                # The delay is measured on the child's own stamps.
                if times and times[-1][0] - times[0][0] >= delay * SECOND:
                    child.kill()
                    waiting.remove(item)
                    done.append((folder, side))
    finally:
        for child in children:
            child.kill()
            child.wait()
            child.stdout.close()
    for folder, side in done:
        accepted = side_values(side)
        for place in (copied(folder), folder):
            for name, messages in readings(place).items():
                for topic in ('/count', '/other'):
                    found = numbers(messages, topic)
                    assert found == list(range(len(found))), (name, place)
                    lost = accepted[len(found) :]
                    if lost:
                        # From the first lost one's acceptance to the last one's offer: how
                        # long the child itself was held up does not count.
                        assert lost[-1][0] - lost[0][1] <= SECOND, (name, place)
            with AnyReader([place]) as reader:
                assert reader.message_count > 0


def test_killed_between_any_two_writes(tmp_path):
    """Every system call that changes the folder, from its making to its closing."""
    child = start(KILL_EVERYWHERE, tmp_path)
    output, _ = child.communicate()
    calls = int(output)
    assert child.returncode == 0 and calls > 30
    checked = 0
    for folder in sorted(tmp_path.glob('kill*_?')):
        state_file = tmp_path / (folder.name + '.json')
        if not state_file.exists():  # the child came to its end
            continue
        state = json.loads(state_file.read_text())
        if not state['made']:
            # Killed in the constructor: nothing was accepted, nothing may be invented.
            try:
                with open_recording(folder) as recording:
                    assert list(recording.messages()) == []
            except RecordingError as error:
                assert 'is empty' in str(error) or 'holds no' in str(error)
            continue
        # Copying all of them would add nothing but time.
        for place in (copied(folder), folder) if checked % 8 == 0 else (folder,):
            for name, messages in readings(place).items():
                found = numbers(messages, '/count')
                assert found == list(range(len(found))), (folder.name, name)
                assert numbers(messages, '/other') == found, (folder.name, name)
                assert state['committed'] <= len(found) <= state['offered'], (folder.name, name)
        checked += 1
    assert checked > 30


@pytest.mark.parametrize('moment', range(4))
def test_killed_within_the_first_second(tmp_path, moment):
    """No promise of content then, but whatever is there is right."""
    folder, side = tmp_path / 'bag', tmp_path / 'side'
    child = start(RECORD, folder, side)
    wanted = (folder, folder / 'bag_0.mcap', folder / 'metadata.yaml', side)[moment]
    try:
        while not wanted.exists() or (moment == 3 and not wanted.stat().st_size):
            assert child.poll() is None
            time.sleep(0.001)
    finally:
        child.kill()
        child.wait()
        child.stdout.close()
    if moment < 2:
        try:
            with open_recording(folder) as recording:
                found = numbers([(m.topic, m.data) for m in recording.messages()], '/count')
        except RecordingError:
            return
        assert found == list(range(len(found)))
        return
    for messages in readings(folder).values():
        found = numbers(messages, '/count')
        assert found == list(range(len(found)))
