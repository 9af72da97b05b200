# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The property that users check first: live numbers are the recording's numbers."""

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
import pytest
from live_helpers import wait_until

from teleop_eval.cli.main import main
from teleop_eval.resources import config_file
from teleop_eval.sinks.bag_writer import BagWriter
from teleop_eval.sources.recording import open_recording

SECONDS = 34.0
JOINTS = ('column_pan', 'shoulder_lift', 'elbow_bend', 'forearm_turn', 'wrist_bend',
          'wrist_swing')

PARAMETERS = """\
/**:
  ros__parameters:
    session:
      directory: {directory}
      record_inputs: true
    arms:
      right:
        operator:
          hand_topic: hand
          joints_topic: operator_joints
          shoulder_m: [0.0, 0.0, 0.4]
          arm_length_m: 0.6
        robot:
          joints_topic: joint_states
          description_topic: robot_description
          base_link: teardown_arm_base
          tip_link: teardown_arm_tool
        command: {{topic: command}}
        engaged: {{topic: engaged}}
        active_mapping: {{topic: mapping}}
        mappings:
          direct:
            kind: joint_space
            joints:
{joints}
          reach: {{kind: task_space}}
"""


def record_session(folder: Path) -> Path:
    """Run the node beside a publishing process and return its session folder."""
    sources = '\n'.join(f'              {joint}: {{source: o_{joint}}}' for joint in JOINTS)
    parameters = folder / 'evaluate.yaml'
    parameters.write_text(PARAMETERS.format(directory=folder / 'sessions', joints=sources))
    root = str(Path(__file__).parents[2])
    environment = {**os.environ, 'OMP_NUM_THREADS': '1', 'PYTHONPATH': os.pathsep.join(
        filter(None, [root, os.environ.get('PYTHONPATH')]))}
    node = subprocess.Popen(
        [sys.executable, '-m', 'teleop_eval', 'evaluate', '--ros-args', '--params-file',
         str(parameters)], env=environment, stdout=subprocess.PIPE, stderr=subprocess.STDOUT,
        text=True)
    try:
        publisher = subprocess.run(
            [sys.executable, str(Path(__file__).with_name('publish_motion.py')),
             str(config_file('teardown_arm.urdf')), str(SECONDS)],
            env=environment, capture_output=True, text=True, timeout=200)
        assert publisher.returncode == 0, publisher.stderr
        node.send_signal(signal.SIGINT)
        output, _ = node.communicate(timeout=100)
    finally:
        node.kill()
    assert node.returncode == 0, output
    (session,) = wait_until(lambda: list((folder / 'sessions').iterdir()))
    return session


def metrics(session: Path) -> dict[str, Any]:
    """Return every metric of a session folder by path."""
    summary = json.loads((session / 'summary.json').read_text())
    found: dict[str, Any] = {}

    def collect(path: str, value: Any) -> None:
        if isinstance(value, dict) and 'status' in value and 'value' in value:
            found[path] = value
        elif isinstance(value, dict):
            for key, inner in value.items():
                collect(f'{path}/{key}', inner)

    collect('', summary['arms'])
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


def altered(session: Path, copy: Path) -> Path:
    """Return a copy of a session in which one number of one joint state is another."""
    shutil.copytree(session, copy)
    inputs = copy / 'inputs'
    with open_recording(inputs) as recording:
        rows = list(recording.messages())
        topics = dict(recording.topics)
    shutil.rmtree(inputs)
    chosen = [k for k, row in enumerate(rows) if row[1] == '/joint_states'][1500]
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


@pytest.mark.timeout(400)
def test_live_numbers_equal_those_of_the_recorded_inputs(domain: int, tmp_path: Path):
    """Every metric to 1e-9 relative; and the comparison notices one altered sample."""
    session = record_session(tmp_path)
    live = metrics(session)
    values = {path.rsplit('/', 1)[-1]: metric['value'] for path, metric in live.items()}
    # The run is worth comparing: both mappings, delays, workspace and clutch gave numbers.
    for wanted in ('latency_s', 'tracking_error_compensated_rms_norm', 'workspace_overlap',
                   'engagements', 'joint_error_rms'):
        assert values[wanted] is not None, live
    assert {path.split('/')[3] for path in live if '/mappings/' in path} == {'direct', 'reach'}

    again = tmp_path / 'again'
    status = main(['summarize', str(session), '--out', str(again), '--no-progress'])
    assert status == 0
    assert differences(live, metrics(again)) == []

    copy = altered(session, tmp_path / 'altered')
    main(['summarize', str(copy), '--out', str(tmp_path / 'changed'), '--no-progress'])
    changed = differences(live, metrics(tmp_path / 'changed'))
    assert any('joint_error_max' in text or 'joint_error_rms' in text for text in changed)
