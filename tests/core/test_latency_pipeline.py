# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Latency through the whole evaluator: streams in, window results out.

The delay put in is exact by construction: the hand (or the operator's joints) is computed from
the same smooth motion as the robot's joints, `delay` seconds earlier. The arm is that of the
demonstration cell, whose link ratio is unlike a person's.
"""

from __future__ import annotations

import heapq
from collections.abc import Callable, Iterator

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from scipy.signal import butter, sosfiltfilt

from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.metric import OK
from teleop_eval.core.samples import JointSample, PoseSample
from teleop_eval.core.settings import from_parameters
from teleop_eval.core.urdf import parse_urdf
from teleop_eval.resources import config_file

URDF = config_file('teardown_arm.urdf').read_text()
CHAIN = SerialChain.from_description(parse_urdf(URDF), 'teardown_arm_base', 'teardown_arm_tool')
NAMES = CHAIN.joint_names
SOURCES = tuple(f'operator_{name}' for name in NAMES)
GAIN, OFFSET = 0.8, 0.05
CENTRE = np.array([0.1, 0.4, -0.9, 0.0, 0.3, 0.0])
START_NS = 1_700_000_000_000_000_000
WINDOWS = 205
WINDOW_S = 10.0

BASE = {
    'arms.a.robot.joints_topic': '/robot', 'arms.a.robot.description_file': 'arm.urdf',
    'arms.a.robot.base_link': 'teardown_arm_base', 'arms.a.robot.tip_link': 'teardown_arm_tool',
    # One window of each kind every 10 s: independent, and no work for what is not asked.
    'time.window_s': WINDOW_S, 'latency.window_s': WINDOW_S, 'latency.hop_s': WINDOW_S,
}


def smooth_motion(rng: np.random.Generator, seconds: float) -> Callable[[np.ndarray], np.ndarray]:
    """Return joint angles (n, 6) of 0.2 to 2 Hz as a function of time (n,), rad."""
    rate = 50.0
    white = rng.standard_normal((int(seconds * rate) + 500, 6))
    moving = sosfiltfilt(butter(4, (0.2, 2.0), 'bandpass', fs=rate, output='sos'), white, axis=0)
    moving *= 0.15 / moving.std()
    return CubicSpline(np.arange(len(moving)) / rate - 4.0, CENTRE + moving)


def sample_times(rng: np.random.Generator, rate_hz: float, seconds: float) -> np.ndarray:
    """Return irregular times (n,) with 2 % of the samples and some stretches of 0.3 s missing."""
    times = (np.arange(int(seconds * rate_hz)) + rng.uniform(-0.3, 0.3, int(
        seconds * rate_hz))) / rate_hz
    kept = rng.random(len(times)) > 0.02
    for begin in np.arange(7.0, seconds, 23.0):
        kept &= (times < begin) | (times > begin + 0.3)
    return times[kept]


def joint_space(delay_s: float) -> tuple[dict, Callable]:
    """Return the parameters of a joint-space mapping and the maker of the operator's samples."""
    flat = dict(BASE)
    flat['arms.a.operator.joints_topic'] = '/operator'
    flat['arms.a.mappings.direct.kind'] = 'joint_space'
    for name, source in zip(NAMES, SOURCES, strict=True):
        key = f'arms.a.mappings.direct.joints.{name}'
        flat |= {f'{key}.source': source, f'{key}.scale': GAIN, f'{key}.offset': OFFSET}

    def operator(times, motion, rng) -> Iterator[tuple[float, str, object]]:
        values = (motion(times + delay_s) - OFFSET) / GAIN
        values += rng.normal(0.0, 1e-3, values.shape)
        for t, row in zip(times.tolist(), values, strict=True):
            yield t, '/operator', JointSample(START_NS + round(t * 1e9), SOURCES, row, None)

    return flat, operator


def task_space(delay_s: float) -> tuple[dict, Callable]:
    """Return the parameters of a task-space mapping and the maker of the hand's samples."""
    shoulder, length, centre = np.array([0.1, -0.2, 1.4]), 0.6, np.array([0.2, 0.1, 0.5])
    flat = dict(BASE)
    flat |= {
        'arms.a.operator.hand_topic': '/operator', 'arms.a.operator.shoulder_m': shoulder.tolist(),
        'arms.a.operator.arm_length_m': length, 'arms.a.mappings.reach.kind': 'task_space',
        'arms.a.mappings.reach.scaling': 'metric', 'arms.a.mappings.reach.scale': 1.4,
        'arms.a.mappings.reach.robot_center_m': centre.tolist(),
    }

    def operator(times, motion, rng) -> Iterator[tuple[float, str, object]]:
        tool = CHAIN.positions(motion(times + delay_s))
        hand = shoulder + (tool - centre) / 1.4 + rng.normal(0.0, 5e-4, tool.shape)
        for t, row in zip(times.tolist(), hand, strict=True):
            yield t, '/operator', PoseSample(START_NS + round(t * 1e9), row, None, 'base')

    return flat, operator


def estimates(mapping: Callable, rate_hz: float, delay_s: float, seed: int) -> np.ndarray:
    """Return (delay, standard error) of every window, NaN where there is no value."""
    rng = np.random.default_rng(seed)
    seconds = WINDOWS * WINDOW_S + 2.0
    motion = smooth_motion(rng, seconds + 2.0)
    flat, operator = mapping(delay_s)

    def robot(times: np.ndarray) -> Iterator[tuple[float, str, object]]:
        values = motion(times) + rng.normal(0.0, 1e-3, (len(times), 6))
        for t, row in zip(times.tolist(), values, strict=True):
            yield t, '/robot', JointSample(START_NS + round(t * 1e9), NAMES, row, None)

    evaluator = SessionEvaluator(from_parameters(flat), descriptions={'a': URDF})
    feed = heapq.merge(operator(sample_times(rng, rate_hz, seconds), motion, rng),
                       robot(sample_times(rng, rate_hz, seconds)), key=lambda item: item[0])
    last_ns = 0
    for t, topic, sample in feed:
        last_ns = max(START_NS + round(t * 1e9) + 500_000, last_ns + 1)
        evaluator.add(last_ns, topic, sample)
    found = []
    for window in evaluator.poll():
        metric = window.metrics['latency_s']
        found.append((metric.value, metric.details['standard_error_s'])
                     if metric.status == OK else (np.nan, np.nan))
    return np.array(found)


@pytest.mark.parametrize(('mapping', 'rate_hz', 'delay_s'), [
    (joint_space, 50.0, 0.0137),
    (joint_space, 200.0, 0.2172),
    (task_space, 50.0, 0.4),
    (task_space, 200.0, 0.0613),
])
def test_latency_is_unbiased_and_knows_its_error(mapping, rate_hz: float, delay_s: float):
    """Bias under a tenth of a grid step, honest standard error, at least 95 % of the windows."""
    found = estimates(mapping, rate_hz, delay_s, seed=int(rate_hz + 1000 * delay_s))
    assert len(found) >= 200
    given = np.isfinite(found[:, 0])
    assert given.mean() >= 0.95
    errors = found[given, 0] - delay_s
    step_s = 1.0 / max(50.0, rate_hz)
    spread = errors.std(ddof=1)
    assert abs(errors.mean()) < 0.1 * step_s + 2.0 * spread / np.sqrt(len(errors))
    assert 0.7 < np.sqrt(np.mean(found[given, 1] ** 2)) / spread < 1.4
