# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""A shoulder that moves: tracked by a topic of its own."""

from __future__ import annotations

import numpy as np
import pytest
import synthetic_session as syn
from numpy.testing import assert_allclose
from scipy.spatial.transform import Rotation

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.samples import PoseSample
from teleop_eval.core.settings import from_parameters

LENGTH, DELAY = 0.6, 0.1
MOVING = {**syn.TASK, 'operator__shoulder_m': None, 'operator__shoulder_topic': '/shoulder'}
_motion = syn.wander(2)
_lean = syn.wander(8, centre=(0.2, -0.3, 1.3), size=0.15, low=0.2, high=0.9)


def session(end=24.0, *, frame='op', rate=80.0, gaps=(), turned=False):
    """Return a hand that reaches from a leaning body, and a robot that follows the reaching."""
    made = syn.Feed()
    t = syn.clock(0.0, end, 100.0)
    made.poses('/hand', t, _lean(t) + LENGTH * _motion(t))
    t = syn.clock(0.0, end, rate, phase=0.6)
    turns = Rotation.random(len(t), random_state=1).as_quat()
    for now, at, turn in zip(t, _lean(t), turns, strict=True):
        if not any(start <= now < stop for start, stop in gaps):
            made.put(now + 0.003, '/shoulder',
                     PoseSample(syn.ns(now), at, turn if turned else None, frame))
    t = syn.clock(0.0, end, 125.0, phase=0.7)
    return made.joints('/joints', t, syn.joints_for(_motion(t - DELAY)))


def run(messages, **more):
    target = syn.evaluator(syn.arm_parameters(**{**MOVING, **more}))
    syn.feed(target, messages)
    return target, syn.closed(target)


@pytest.fixture(scope='module')
def moving():
    """Return summary and metrics of a session with a moving shoulder."""
    return run(session().messages())[1]


def test_the_hand_counts_from_the_shoulder_of_its_moment(moving):
    found = syn.metrics(moving)
    assert moving['problems'] == []
    assert abs(found['latency_s']['value'] - DELAY) < 1e-3
    assert found['tracking_error_compensated_rms_norm']['value'] < 2e-3
    radius = np.linalg.norm(_motion(np.arange(0.005, 24.0, 0.01)), axis=1)
    assert_allclose(found['reach_p50_norm_operator']['value'], np.median(radius), atol=0.003)
    geometry = moving['arms']['right']['geometry']
    assert (geometry['operator_shoulder_m'], geometry['operator_shoulder_moves']) == (None, True)
    assert moving['arms']['right']['inputs']['shoulder']['messages'] == 1920


def test_a_fixed_shoulder_blames_the_leaning_on_the_mapping():
    """The same session with the mean shoulder: the leaning and the delay are all its error."""
    mean = np.array([0.2, -0.3, 1.3])
    _, summary = run(session().messages(), operator__shoulder_topic=None,
                     operator__shoulder_m=mean.tolist())
    t = np.arange(0.005, 24.0, 0.01)
    off = _motion(t - DELAY) - _motion(t) - (_lean(t) - mean) / LENGTH
    rms = np.sqrt(np.mean(np.sum(off ** 2, axis=1)))
    assert rms > 0.2
    assert_allclose(syn.metrics(summary)['tracking_error_rms_norm']['value'], rms, rtol=0.01)


def test_the_orientation_of_the_shoulder_is_ignored(moving):
    _, turned = run(session(turned=True).messages())
    assert syn.metrics(turned) == syn.metrics(moving)


def test_a_gap_of_the_shoulder_is_masked():
    _, summary = run(session(gaps=((8.0, 9.5),)).messages())
    found = syn.metrics(summary)
    assert summary['arms']['right']['inputs']['shoulder']['gaps'] == 1
    assert found['tracking_error_compensated_rms_norm']['value'] < 2e-3
    whole = syn.metrics(run(session().messages())[1])
    fewer = (whole['tracking_error_rms_norm']['samples']
             - found['tracking_error_rms_norm']['samples'])
    assert 120 <= fewer <= 125  # 1.5 s of 80 Hz cells and the edges


def test_another_frame_is_a_problem_with_both_names_said_once():
    target, summary = run(session(frame='pelvis').messages())
    texts = [text for text in summary['problems'] if 'frame' in text]
    assert texts == ["right: the shoulder comes in the frame 'pelvis', but the hand in 'op'; "
                     'publish both in one frame.']
    found = syn.metrics(summary)
    for name in ('workspace_coverage_operator', 'reach_p95_norm_operator'):
        assert found[name]['status'] == 'insufficient'
        assert "frame 'pelvis'" in found[name]['reason']
    assert found['tracking_error_rms_norm']['status'] == 'insufficient'
    assert found['reach_p95_norm']['status'] == 'ok'


def test_without_any_message_of_the_shoulder_the_robot_is_still_evaluated():
    messages = [one for one in session().messages() if one[1] != '/shoulder']
    _, summary = run(messages)
    assert any('no message came on /shoulder (shoulder)' in text for text in summary['problems'])
    found = syn.metrics(summary)
    assert found['reach_p95_norm']['status'] == 'ok'
    assert found['workspace_coverage_operator']['value'] is None
    assert found['latency_s']['value'] is None


def test_a_shoulder_that_appears_late_begins_a_segment():
    late = [one for one in session(40.0).messages()
            if one[1] != '/shoulder' or one[0] > syn.ns(12.0)]
    target, summary = run(late)
    assert any('shoulder appeared' in text for text in target.notes)
    found = syn.metrics(summary)
    assert abs(found['latency_s']['value'] - DELAY) < 1e-3
    assert found['tracking_error_compensated_rms_norm']['value'] < 2e-3


def test_fixed_and_moving_shoulder_exclude_each_other():
    with pytest.raises(ConfigError, match='both shoulder_m and shoulder_topic; keep one'):
        from_parameters(syn.arm_parameters(**{**MOVING, 'operator__shoulder_m': [0.0, 0, 0]}))
