# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Which cells go into delays, compensation and margins where clutch and mapping change."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
import synthetic_session as syn
from scipy import stats
from scipy.spatial.transform import Rotation

from teleop_eval.core import window_latency
from teleop_eval.core.delays import DelayNow, DelayStatistics
from teleop_eval.core.geometry import operator_geometry
from teleop_eval.core.latency import DelayEstimate, Sides

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
    # Up to what the delay lets through: 1 s of settling after 25 s, seen 0.1 s later.
    still = (t > 20.1) & (t < 26.08)
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


def test_sliding_joints_are_weighed_by_the_arm_length(monkeypatch):
    """1.25 m of the boom are to the correlation as 1 rad: L_r is 1.25 m."""
    seen = []
    estimate = window_latency.estimate_delay

    def spy(reference, response, rate_hz, **more):
        seen.append((reference, response, more['sides']))
        return estimate(reference, response, rate_hz, **more)

    monkeypatch.setattr(window_latency, 'estimate_delay', spy)
    t = syn.clock(0.0, 14.0, 100.0)
    boom = 0.6 + 0.2 * np.sin(t)
    q = np.column_stack([0.3 * np.sin(t), 0 * t, boom, 0 * t, 0 * t, 0 * t])
    made = syn.Feed().joints('/command', t, q).joints('/joints', t + 1e-4, q)
    target = syn.evaluator(syn.arm_parameters(
        operator__hand_topic=None, command__topic='/command'))
    syn.feed(target, made.messages())
    reach = target.arms['right'].robot.reach.length_m
    assert reach == pytest.approx(syn.REACH_M, rel=1e-3)
    for side in seen[-1][:2]:
        speeds = np.nanmax(np.abs(side), axis=0)
        assert speeds[0] == pytest.approx(0.3, rel=0.01)
        assert speeds[2] == pytest.approx(0.2 / reach, rel=0.01)
    assert seen[-1][2] == Sides('command', 'robot', 'rad/s or arm lengths/s')


@pytest.mark.parametrize('parameters, mapping, names, unit', [
    (dict(syn.TASK), 'direct', ('ideal command', 'robot'), 'arm lengths/s'),
    ({}, 'unmodelled', ('hand', 'robot'), 'arm lengths/s')])
def test_reason_of_a_still_side_names_it_and_its_unit(parameters, mapping, names, unit):
    """Hand or robot creeps."""
    motion = syn.wander(size=0.12)
    creep = syn.wander(size=0.0005)
    for still in (0, 1):
        made = syn.Feed()
        t = syn.clock(0.0, 14.0, 100.0)
        made.poses('/hand', t, 0.6 * (creep if still == 0 else motion)(t))
        made.joints('/joints', t, syn.joints_for((creep if still == 1 else motion)(t)))
        target = syn.evaluator(syn.arm_parameters(**parameters))
        syn.feed(target, made.messages())
        reason = syn.metrics(syn.closed(target), mapping)['latency_s']['reason']
        assert reason.startswith(f'The {names[still]} hardly moves: 0.00')
        assert f' {unit} RMS in the band, 0.0200 {unit} are needed (in ' in reason


def test_standard_error_of_a_run_is_that_of_its_median():
    """With 20 windows from them, with fewer not at all; single windows' errors have their name."""
    rng = np.random.default_rng(3)
    ordered = np.sort(0.1 + 0.004 * rng.normal(size=30))
    # High and low in turns: no correlation that would widen the interval.
    delays = np.stack([ordered[:15], ordered[:14:-1]], axis=1).ravel()
    found = DelayStatistics()
    for k, delay in enumerate(delays):
        if k == 19:
            few = found.metric(caveat='', reason='')
        found.add(dataclasses.replace(VALUE, delay_s=delay), k * 10 ** 10, (k + 1) * 10 ** 10,
                  'tool')
    assert few.details['standard_error_s'] is None and few.ci95 is None
    assert few.details['window_standard_error_s'] == pytest.approx(0.001)
    metric = found.metric(caveat='', reason='')
    assert metric.details['window_standard_error_s'] == pytest.approx(0.001)
    # Of 30 values, 10th to 21st hold the median with 95.7 %, 11th to 20th with 90.1 %;
    # interpolated to 95 % as Hettmansperger and Sheather 1986 do.
    wide, narrow = 1.0 - 2.0 * stats.binom.cdf([9, 10], 30, 0.5)
    part = (wide - 0.95) / (wide - narrow)
    share = 20.0 * part / (10.0 + 10.0 * part)
    low, high = (1.0 - share) * ordered[[9, 20]] + share * ordered[[10, 19]]
    assert metric.ci95 == pytest.approx((low, high), rel=1e-9)
    # A standard error takes account of neighbours that cancel, too.
    error = metric.details['standard_error_s']
    assert 0.0 < error < (high - low) / 2.0 / stats.norm.ppf(0.975)


def test_delays_all_alike_tell_no_interval():
    found = DelayStatistics()
    for k in range(25):
        found.add(VALUE, k * 10 ** 10, (k + 1) * 10 ** 10, 'tool')
    metric = found.metric(caveat='receive-based', reason='')
    assert metric.ci95 is None and metric.details['standard_error_s'] is None
    assert metric.reason == (
        'receive-based; no interval: all blocks are alike and show no spread')
