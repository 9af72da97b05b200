# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""A session that was fed live, evaluated again from its own inputs: the same numbers."""

from __future__ import annotations

import importlib.util
import json
import sys
from pathlib import Path

import numpy as np
import pytest

from teleop_eval.cli.main import main
from teleop_eval.core.evaluator import EVENT_TOPIC, SessionEvaluator
from teleop_eval.core.settings import from_parameters
from teleop_eval.nodes.live_session import LiveSession
from teleop_eval.sinks import messages
from teleop_eval.sinks.session_folder import SessionFolder
from teleop_eval.sources.decode import make_decoder
from teleop_eval.sources.feed_order import Received
from teleop_eval.sources.parameter_file import load_parameters
from teleop_eval.sources.recording import open_recording


def _load(name):
    """Import a module that lies beside this file."""
    spec = importlib.util.spec_from_file_location(name, Path(__file__).with_name(f'{name}.py'))
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
    return module


synthetic = _load('synthetic_recording')
TYPES = {'/cell/robot_description': 'std_msgs/msg/String',
         '/cell/joint_states': 'sensor_msgs/msg/JointState',
         '/cell/operator/joint_states': 'sensor_msgs/msg/JointState',
         EVENT_TOPIC: 'std_msgs/msg/String'}


def live(made, path, *, disturb, simulated_time=False):
    """
    Run a session over the recording's messages in uneven batches, as the node drains them.

    `disturb` also lets the clock step back, resets the evaluation, and sends bytes that are no
    message.
    """
    flat = load_parameters(made.config)
    del flat['use_sim_time']
    settings = from_parameters(flat)

    def resolve(topic):
        return f'/cell/{topic}'

    folder = SessionFolder(path, settings, flat, source='live', record_inputs=True,
                           resolve=resolve, simulated_time=simulated_time)
    session = LiveSession(
        SessionEvaluator(settings, resolve=resolve, simulated_time=simulated_time), folder,
        event_topic=EVENT_TOPIC, type_name=TYPES.__getitem__,
        decoder=lambda topic: make_decoder(TYPES[topic]))
    rng = np.random.default_rng(3)
    batch = []
    with open_recording(made.path) as recording:
        for k, (log_ns, topic, data) in enumerate(recording.messages()):
            if topic not in TYPES:
                continue
            if disturb and k > 5000:
                log_ns -= 3_000_000_000
            if disturb and k == 4000:
                data = data[:30]
            batch.append(Received(log_ns, topic, k, data))
            if rng.random() < 0.1:
                if not disturb:
                    rng.shuffle(batch)
                session.add(batch)
                batch = []
            if disturb and k == 3000:
                session.event(log_ns, 'reset')
    session.add(batch)
    _, whole = session.finish(lambda summary: None)
    return whole


def leaves(value, path=()):
    """Return the plain values of nested containers by path."""
    if isinstance(value, dict):
        return {key: leaf for name, item in value.items()
                for key, leaf in leaves(item, (*path, name)).items()}
    if isinstance(value, (list, tuple)):
        return {key: leaf for place, item in enumerate(value)
                for key, leaf in leaves(item, (*path, place)).items()}
    return {path: value}


def comparable(summary):
    """Return all of the arms' part; of a topic the last part, since one name is resolved."""
    return {path: leaf.rpartition('/')[2] if path[-1] == 'topic' else leaf
            for path, leaf in leaves(summary['arms']).items()}


@pytest.mark.parametrize('disturb, simulated_time', [
    (False, False), (True, False), (False, True)])
def test_inputs_give_the_numbers_of_the_live_run(tmp_path, disturb, simulated_time):
    made = synthetic.make(tmp_path, seconds=40.0, namespace='/cell')
    first = live(made, tmp_path / 'session', disturb=disturb, simulated_time=simulated_time)
    status = main(['summarize', str(tmp_path / 'session'), '--out', str(tmp_path / 'again'),
                   '--no-progress'])
    assert status == 0
    again = json.loads((tmp_path / 'again' / 'summary.json').read_text('utf-8'))
    before, after = comparable(first), comparable(again)
    assert {path: (before.get(path), after.get(path)) for path in before.keys() | after.keys()
            if before.get(path) != after.get(path)} == {}
    assert len(before) > 100
    for key in ('start_ns', 'end_ns'):
        assert again['session'][key] == first['session'][key]
    metrics = again['arms']['right']['mappings']['direct']['metrics']
    assert metrics['tracking_error_rms_norm']['status'] == 'ok'
    live_rows = (tmp_path / 'session' / 'windows.csv').read_bytes()
    assert (tmp_path / 'again' / 'windows.csv').read_bytes() == live_rows
    if disturb:
        # What disturbs is told as a problem, in the same words.
        [refused] = [text for text in again['problems'] if 'left out' in text]
        assert refused in first['problems']
        assert '1 of ' in refused and 's after the start: ' in refused
        assert first['arms']['right']['segments'] == 2
    elif not simulated_time:
        assert metrics['latency_s']['value'] == pytest.approx(synthetic.DELAY_S, abs=0.002)


def test_events_are_plain_strings_in_the_inputs(tmp_path):
    """Anyone can read them: std_msgs/msg/String, by rosbags' own reader."""
    from rosbags.highlevel import AnyReader

    made = synthetic.make(tmp_path, seconds=40.0, namespace='/cell')
    live(made, tmp_path / 'session', disturb=True)
    with AnyReader([tmp_path / 'session' / 'inputs'],
                   default_typestore=synthetic.STORE) as reader:
        texts = [reader.deserialize(data, c.msgtype).data for c, _, data in reader.messages()
                 if c.topic == EVENT_TOPIC]
        times = [ns for _, ns, _ in reader.messages()]
    assert texts == ['reset', 'segment']
    assert all(b > a for a, b in zip(times, times[1:], strict=False))
    assert messages.STRING == TYPES[EVENT_TOPIC]
