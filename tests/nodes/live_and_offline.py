# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Live sessions beside a publishing process, and their numbers against those of their inputs."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
from live_helpers import wait_until

from teleop_eval.resources import config_file
from teleop_eval.sinks.bag_writer import BagWriter
from teleop_eval.sources.recording import open_recording

JOINTS = ('column_pan', 'shoulder_lift', 'elbow_bend', 'forearm_turn', 'wrist_bend',
          'wrist_swing')


def record_session(folder: Path, text: str, publisher: str, seconds: float) -> Path:
    """
    Run the node beside a publishing process and return its session folder.

    `text` is the parameter file, `publisher` a script beside this one that takes the robot's
    URDF and the seconds to publish.
    """
    parameters = folder / 'evaluate.yaml'
    parameters.write_text(text)
    root = str(Path(__file__).parents[2])
    environment = {**os.environ, 'OMP_NUM_THREADS': '1', 'PYTHONPATH': os.pathsep.join(
        filter(None, [root, os.environ.get('PYTHONPATH')]))}
    node = subprocess.Popen(
        [sys.executable, '-m', 'teleop_eval', 'evaluate', '--ros-args', '--params-file',
         str(parameters)], env=environment, stdout=subprocess.PIPE, stderr=subprocess.STDOUT,
        text=True)
    try:
        published = subprocess.run(
            [sys.executable, str(Path(__file__).with_name(publisher)),
             str(config_file('teardown_arm.urdf')), str(seconds)],
            env=environment, capture_output=True, text=True, timeout=200)
        assert published.returncode == 0, published.stderr
        node.send_signal(signal.SIGINT)
        output, _ = node.communicate(timeout=100)
    finally:
        node.kill()
    assert node.returncode == 0, output
    (session,) = wait_until(lambda: list((folder / 'sessions').iterdir()))
    return session


def summary(session: Path) -> dict[str, Any]:
    """Return summary.json of a session folder."""
    found: dict[str, Any] = json.loads((session / 'summary.json').read_text())
    return found


def metrics(session: Path) -> dict[str, Any]:
    """Return every metric of a session folder by path."""
    found: dict[str, Any] = {}

    def collect(path: str, value: Any) -> None:
        if isinstance(value, dict) and 'status' in value and 'value' in value:
            found[path] = value
        elif isinstance(value, dict):
            for key, inner in value.items():
                collect(f'{path}/{key}', inner)

    collect('', summary(session)['arms'])
    return found


def differences(one: Any, other: Any, path: str = '') -> list[str]:
    """Return where two metrics differ by more than 1e-9 relative."""
    if isinstance(one, dict) and isinstance(other, dict):
        return [text for key in sorted({*one, *other})
                for text in differences(one.get(key), other.get(key), f'{path}/{key}')]
    if isinstance(one, list) and isinstance(other, list) and len(one) == len(other):
        return [text for k, (a, b) in enumerate(zip(one, other, strict=True))
                for text in differences(a, b, f'{path}[{k}]')]
    if isinstance(one, float) and isinstance(other, float):
        return [] if np.isclose(one, other, rtol=1e-9, atol=0.0) else [f'{path}: {one} {other}']
    return [] if one == other else [f'{path}: {one!r} {other!r}']


def altered(session: Path, copy: Path, *, share: float) -> Path:
    """
    Return a copy of a session in which one number of one joint state is another.

    It is the one before which this share of all joint states came.
    """
    shutil.copytree(session, copy)
    inputs = copy / 'inputs'
    with open_recording(inputs) as recording:
        rows = list(recording.messages())
        topics = dict(recording.topics)
    shutil.rmtree(inputs)
    states = [k for k, row in enumerate(rows) if row[1] == '/joint_states']
    chosen = states[int(share * len(states))]
    with BagWriter(inputs) as writer:
        for topic in topics.values():
            writer.add_topic(topic.name, topic.type_name)
        for k, (log_ns, topic, data) in enumerate(rows):
            if k == chosen:
                # The last 16 bytes are two empty arrays; before them stand the positions.
                place = data.rindex(np.array([len(JOINTS)], '<u4').tobytes()) + 4
                place += (-(place - 4)) % 8
                position = np.frombuffer(data, '<f8', 1, place)[0]
                data = data[:place] + np.float64(position + 0.05).tobytes() + data[place + 8:]
            writer.write(topic, log_ns, data)
    return copy
