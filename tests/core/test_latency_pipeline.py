# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Latency through the whole evaluator: streams in, window results out.

The delay put in is exact by construction: the hand (or the operator's joints) is computed from
the same smooth motion as the robot's joints, `delay` seconds earlier. The arm is that of the
demonstration cell, whose link ratio is unlike a person's.

Every stream has noise on its values, irregular sampling times, noise on its stamps, lost samples
and gaps. Elsewhere, on the estimator alone: the bound on the spread, windows that are barely
excited, reaches with rests and a step of the delay (test_latency_montecarlo.py), each reason
word by word (test_latency.py).
"""

from __future__ import annotations

import heapq
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from operator import itemgetter

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from scipy.signal import butter, sosfiltfilt

from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.metric import OK, UNOBSERVABLE, Metric
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
# Shorter at 1 kHz, since the work goes with the number of samples: as independent as others.
FAST_WINDOW_S = 4.0
# What a driver takes to note the time of a sample: one standard deviation. At 1 kHz, together
# with the irregular sampling, some samples change places by it.
STAMP_NOISE_S = 0.0002

BASE = {
    'arms.a.robot.joints_topic': '/robot', 'arms.a.robot.description_file': 'arm.urdf',
    'arms.a.robot.base_link': 'teardown_arm_base', 'arms.a.robot.tip_link': 'teardown_arm_tool',
}


Motion = Callable[[np.ndarray], np.ndarray]


def smooth_motion(rng: np.random.Generator, seconds: float) -> Motion:
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


def stamped(rng: np.random.Generator, times: np.ndarray, noise_s: float) -> list[int]:
    """Return the stamps (n,) that a sensor with a poor clock gives to samples at these times."""
    return [START_NS + round(t * 1e9) for t in times + rng.normal(0.0, noise_s, len(times))]


def joint_space(delay_s: float) -> tuple[dict, Callable]:
    """Return the parameters of a joint-space mapping and the maker of the operator's samples."""
    flat = dict(BASE)
    flat['arms.a.operator.joints_topic'] = '/operator'
    flat['arms.a.mappings.direct.kind'] = 'joint_space'
    for name, source in zip(NAMES, SOURCES, strict=True):
        key = f'arms.a.mappings.direct.joints.{name}'
        flat |= {f'{key}.source': source, f'{key}.scale': GAIN, f'{key}.offset': OFFSET}

    def operator(times, stamps, motion, rng) -> Iterator[tuple[float, str, object]]:
        values = (motion(times + delay_s) - OFFSET) / GAIN
        values += rng.normal(0.0, 1e-3, values.shape)
        for t, stamp, row in zip(times.tolist(), stamps, values, strict=True):
            yield t, '/operator', JointSample(stamp, SOURCES, row, None)

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

    def operator(times, stamps, motion, rng) -> Iterator[tuple[float, str, object]]:
        tool = CHAIN.positions(motion(times + delay_s))
        hand = shoulder + (tool - centre) / 1.4 + rng.normal(0.0, 5e-4, tool.shape)
        for t, stamp, row in zip(times.tolist(), stamps, hand, strict=True):
            yield t, '/operator', PoseSample(stamp, row, None, 'base')

    return flat, operator


@dataclass(frozen=True)
class Pair:
    """What the operator and the robot do, in joint angles (n, 6) rad over seconds (n,)."""

    operator: Motion
    robot: Motion


def latencies(mapping: Callable, rate_hz: float, delay_s: float, pair: Pair, *,
              rng: np.random.Generator, windows: int = WINDOWS, window_s: float = WINDOW_S,
              stamp_noise_s: float = STAMP_NOISE_S) -> list[Metric]:
    """Return latency_s of every window of a whole run."""
    flat, operator = mapping(delay_s)
    # One window of each kind at a time: independent, and no work for what is not asked.
    flat |= {'time.window_s': window_s, 'latency.window_s': window_s, 'latency.hop_s': window_s}
    seconds = windows * window_s + 2.0

    def robot(times: np.ndarray, stamps: list[int]) -> Iterator[tuple[float, str, object]]:
        values = pair.robot(times) + rng.normal(0.0, 1e-3, (len(times), 6))
        for t, stamp, row in zip(times.tolist(), stamps, values, strict=True):
            yield t, '/robot', JointSample(stamp, NAMES, row, None)

    evaluator = SessionEvaluator(from_parameters(flat), descriptions={'a': URDF})
    seen, answered = (sample_times(rng, rate_hz, seconds) for _ in range(2))
    feed = heapq.merge(operator(seen, stamped(rng, seen, stamp_noise_s), pair.operator, rng),
                       robot(answered, stamped(rng, answered, stamp_noise_s)), key=itemgetter(0))
    last_ns = 0
    for t, topic, sample in feed:
        last_ns = max(START_NS + round(t * 1e9) + 500_000, last_ns + 1)
        evaluator.add(last_ns, topic, sample)
    # The grid is as fast as the streams, what they lose left out of account.
    assert 1e9 / evaluator.arms['a'].period_ns == pytest.approx(rate_hz, rel=0.03)
    return [window.metrics['latency_s'] for window in evaluator.poll()]


@pytest.mark.parametrize(('mapping', 'rate_hz', 'delay_s', 'window_s'), [
    (joint_space, 50.0, 0.0137, WINDOW_S),
    (joint_space, 200.0, 0.2172, WINDOW_S),
    (joint_space, 1000.0, 0.0874, FAST_WINDOW_S),
    (task_space, 50.0, 0.0, WINDOW_S),
    (task_space, 50.0, 0.4, WINDOW_S),
    (task_space, 200.0, 0.0613, WINDOW_S),
    (task_space, 1000.0, 0.3129, FAST_WINDOW_S),
])
def test_latency_is_unbiased_and_knows_its_error(mapping, rate_hz: float, delay_s: float,
                                                 window_s: float):
    """Bias under a tenth of a grid step, honest standard error, at least 95 % of the windows."""
    rng = np.random.default_rng(int(rate_hz + 1000 * delay_s))
    motion = smooth_motion(rng, WINDOWS * window_s + 4.0)
    found = latencies(mapping, rate_hz, delay_s, Pair(motion, motion), rng=rng,
                      window_s=window_s)
    assert len(found) >= 200
    given = [metric for metric in found if metric.status == OK]
    assert len(given) >= 0.95 * len(found)
    errors = np.array([metric.value for metric in given]) - delay_s
    claimed = np.array([metric.details['standard_error_s'] for metric in given])
    step_s = 1.0 / max(50.0, rate_hz)
    spread = errors.std(ddof=1)
    assert abs(errors.mean()) < 0.1 * step_s + 2.0 * spread / np.sqrt(len(errors))
    assert 0.7 < np.sqrt(np.mean(claimed ** 2)) / spread < 1.4


def test_standard_error_knows_of_stamps_that_are_off():
    """Stamps off by 1 ms at 50 Hz spread the delay more than the noise of the values does."""
    rng, delay_s = np.random.default_rng(5), 0.0613
    motion = smooth_motion(rng, WINDOWS * WINDOW_S + 4.0)
    found = latencies(joint_space, 50.0, delay_s, Pair(motion, motion), rng=rng,
                      stamp_noise_s=0.001)
    errors = np.array([metric.value for metric in found]) - delay_s
    claimed = np.array([metric.details['standard_error_s'] for metric in found])
    assert abs(errors.mean()) < 0.002
    assert 0.7 < np.sqrt(np.mean(claimed ** 2)) / errors.std(ddof=1) < 1.4


def still(times: np.ndarray) -> np.ndarray:
    """Return a posture that is held, joint angles (n, 6) rad."""
    return np.tile(CENTRE, (len(times), 1))


def waves(period_s: float, size: float) -> Motion:
    """Return a motion of all joints that repeats itself."""
    phases = np.array([0.0, 1.5, 0.7, 2.1, 3.0, 0.3])

    def motion(times: np.ndarray) -> np.ndarray:
        return CENTRE + size * np.sin(2.0 * np.pi * times[:, None] / period_s + phases)
    return motion


@pytest.mark.parametrize(('mapping', 'kind', 'words'), [
    (joint_space, 'still', ['hardly moves', 'too low']),
    (task_space, 'still', ['hardly moves', 'too low']),
    (joint_space, 'slow', ['too slow', 'hardly moves']),
    (task_space, 'slow', ['too slow', 'hardly moves']),
    (joint_space, 0.5, ['periodic', 'second peak']),
    (task_space, 0.8, ['periodic', 'second peak']),
    (joint_space, 1.2, ['periodic', 'second peak']),
    (joint_space, 'unrelated', ['Correlation too low']),
    (task_space, 'unrelated', ['Correlation too low']),
])
def test_what_tells_no_delay_gives_none_and_says_why(mapping, kind: str | float,
                                                     words: list[str]):
    """At most one of a hundred windows has a value; the others have the reason in words."""
    rng, windows = np.random.default_rng(17), 100
    seconds = windows * WINDOW_S + 4.0
    if kind == 'unrelated':
        pair = Pair(smooth_motion(rng, seconds), smooth_motion(rng, seconds))
    else:
        # Once in 40 s, by 0.15 rad: as slow as a change of posture.
        both = (still if kind == 'still' else waves(40.0, 0.15) if kind == 'slow'
                else waves(kind, 0.15))
        pair = Pair(both, both)
    found = latencies(mapping, 50.0, 0.1, pair, rng=rng, windows=windows)
    assert len(found) >= windows
    assert sum(metric.status == OK for metric in found) <= 0.01 * len(found)
    without = [metric for metric in found if metric.status != OK]
    assert {metric.status for metric in without} == {UNOBSERVABLE}
    assert all(metric.value is None and metric.reason.endswith('.') for metric in without)
    told = [metric for metric in without if any(word in metric.reason for word in words)]
    assert len(told) >= 0.9 * len(without), {metric.reason for metric in without}
