# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Which cells go into delays, compensation and margins where clutch and mapping change."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
import synthetic_session as syn
from scipy.spatial.transform import Rotation

from teleop_eval.core import window_latency
from teleop_eval.core.delays import DelayNow, DelayStatistics
from teleop_eval.core.geometry import operator_geometry
from teleop_eval.core.latency import DelayEstimate

VALUE = DelayEstimate(
    delay_s=0.1, standard_error_s=0.001, correlation=0.99, status='ok', reason='', samples=900,
    speed_reference=0.1, speed_response=0.1, snr=99.0)
NONE = dataclasses.replace(VALUE, delay_s=None, standard_error_s=None, status='unobservable',
                           reason='The reference hardly moves: 0.0012 RMS.')
MAPPINGS = {'mappings__direct__kind': 'task_space', 'mappings__mirror__kind': 'task_space',
            'active_mapping__topic': '/mapping'}


def test_level_follows_three_valid_windows_in_a_row():
    now = DelayNow()
    for k, (estimate, value) in enumerate([
            (VALUE, None), (VALUE, None), (VALUE, 0.1), (NONE, None), (VALUE, None),
            (VALUE, None), (dataclasses.replace(VALUE, delay_s=0.3), 0.1)]):
        now.add(estimate, k * 2 * 10 ** 9)
        assert now.level_value == (None if value is None else pytest.approx(value))
    now.interrupt()
    assert now.level_value is None and now.estimate is None
    assert now.observed(13 * 10 ** 9, 60.0).age_s == pytest.approx(1.0)
    assert now.observed(73 * 10 ** 9, 60.0) is None


def test_negative_delay_is_clamped_for_compensation():
    now = DelayNow()
    now.add(dataclasses.replace(VALUE, delay_s=-0.02), 0)
    assert now.observed(0, 60.0).delay_s == 0.0


def test_reason_of_a_run_is_the_commonest_and_its_newest_words():
    found = DelayStatistics()
    for k in range(3):
        found.add(dataclasses.replace(NONE, reason=f'The reference hardly moves: 0.00{k} RMS.'),
                  k * 10 ** 9, k * 10 ** 9 + 10 ** 10, 'tool')
    found.add(dataclasses.replace(NONE, reason='Other.'), 0, 10 ** 10, 'tool')
    metric = found.metric(caveat='', reason='')
    assert metric.status == 'unobservable'
    assert '0.002 RMS' in metric.reason and '3 of 4 windows' in metric.reason


def test_correlation_is_told_of_boundaries_and_states(monkeypatch):
    """Reference: usable cells of this mapping only; response: all; stretches are numbered."""
    seen = []
    estimate = window_latency.estimate_delay

    def spy(reference, response, rate_hz, **more):
        seen.append(more)
        return estimate(reference, response, rate_hz, **more)

    monkeypatch.setattr(window_latency, 'estimate_delay', spy)
    made = syn.session(24.0, motion=syn.wander(), delay=0.1)
    made.text(0.0, '/mapping', 'direct').text(15.005, '/mapping', 'mirror')
    made.flag(0.0, '/engaged', True).flag(18.005, '/engaged', False)
    made.flag(19.005, '/engaged', True)
    target = syn.evaluator(syn.arm_parameters(**MAPPINGS, engaged__topic='/engaged'))
    syn.feed(target, made.messages())
    last = seen[-1]
    window = slice(*last['window'])
    reference, runs = last['valid_reference'][window], last['runs'][window]
    # From 12.003 to 22.003 s, of which the filters take 1.5 s to run in: direct to 15.003 s,
    # then mirror, settled from 16.003 s, open from 18.003 to 19.003 s, settled from 20.003 s.
    # A velocity needs two cells.
    wanted = np.zeros(1000, dtype=bool)
    wanted[401:600] = wanted[801:1000] = True
    assert reference.tolist() == wanted[150:].tolist()
    assert np.flatnonzero(np.diff(runs)).tolist() == [149, 449, 549]
    response = last['valid_response'][window]
    assert np.flatnonzero(~response).tolist() == [150, 450, 550]


def test_no_cell_is_compensated_for_two_mappings():
    """Without settling, the window of a change is shared out, never counted twice."""
    made = syn.session(34.0, motion=syn.wander(), delay=0.1)
    made.text(0.0, '/mapping', 'direct').text(13.105, '/mapping', 'mirror')
    made.text(26.605, '/mapping', 'direct')
    target = syn.evaluator(syn.arm_parameters(**MAPPINGS), **{'time.settling_s': 0.0})
    before = 0
    for message in made.messages():
        target.add(*message)
        for window in target.poll():
            accumulators = target.arms['right'].measurement.accumulators.values()
            now = sum(one.compensated.samples for one in accumulators)
            assert now - before <= 200
            if window.start_ns < syn.ns(26.605) < window.end_ns:
                # Both delays are known; the robot's side is later by the delay, which is
                # also what follows a boundary at least.
                assert now - before == pytest.approx(190, abs=2)
            before = now


def test_margin_is_that_of_the_mapping_in_use():
    """Back under the first mapping, still settling: the other one's cells say nothing."""
    made = syn.session(30.0, motion=syn.wander())
    made.text(0.0, '/mapping', 'direct').text(13.005, '/mapping', 'mirror')
    made.text(27.205, '/mapping', 'direct')
    target = syn.evaluator(syn.arm_parameters(**MAPPINGS))
    said = {}
    for message in made.messages():
        target.add(*message)
        for window in target.poll():
            said[round((window.end_ns - syn.BASE_NS) / 1e9)] = target.diagnostics(
                message[0])[3].message
    assert 'of its span from a limit' in said[26]
    assert said[28] == (
        'no limit margin: no engaged and settled sample in the last window')


def test_joint_error_at_a_delay_leaves_disengaged_commands_out():
    """While the clutch is open the robot does something else."""
    motion, made = syn.wander(3, centre=0.0, size=0.5, width=2), syn.Feed()
    t = syn.clock(0.0, 40.0, 100.0)
    made.joints('/command', t, motion(t), ('a', 'b'))
    t = syn.clock(0.0, 40.0, 100.0, phase=0.6)
    still = (t > 20.1) & (t < 24.0)
    made.joints('/joints', t, motion(t - 0.1) + 5.0 * still[:, None], ('a', 'b'))
    made.flag(0.0, '/engaged', True).flag(20.0, '/engaged', False).flag(25.0, '/engaged', True)
    target = syn.evaluator(syn.arm_parameters(**syn.BARE, engaged__topic='/engaged'))
    syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target), 'unmodelled')
    assert found['joint_error_compensated_max.a']['value'] < 0.05
    # 8 s to 20 s, moved by the delay, and from 26 s on.
    assert found['joint_error_compensated_rms.a']['samples'] == pytest.approx(
        1200 + 1400, abs=15)


def test_operator_positions_are_turned_into_robot_axes():
    """u_o = R (p_o - s_o) / L_o, by scipy's rotations."""
    axes = Rotation.from_euler('xyz', [0.4, -0.7, 2.1])
    settings = syn.from_parameters(syn.arm_parameters(
        operator__axes_xyzw=axes.as_quat().tolist(), operator__shoulder_m=[1.0, 2.0, 3.0],
        operator__arm_length_m=0.7)).arms['right'].operator
    points = np.random.default_rng(1).normal(size=(20, 3))
    assert operator_geometry(settings).normalise(points) == pytest.approx(
        axes.apply((points - [1.0, 2.0, 3.0]) / 0.7))
