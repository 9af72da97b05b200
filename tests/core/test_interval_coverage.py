# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Do the 95 % intervals of 200 runs cover? Every metric that carries one, on its own accumulator.

Bandwidth and phase delay have theirs in test_frequency_metrics.py. Truths are closed forms, or
taken from the arrays of an independent run of 4 to 8 hours, whose own error is below 0.13 of
that of a run measured. Each run of 1 minute has some 26 engaged windows, 20 being the least
that carry an interval. Seeds are fixed and were not chosen. `sweep_intervals.py` covers more.

200 runs tell a coverage to 1.5 % (one standard error at 95 %). What must lie between 90 and 98 %
is therefore the coverage of each metric over the motions together; that of 200 runs may differ
from the same bounds by what 200 runs of a coverage at the bound do in all but 1 in 1000 cases.
"""

from __future__ import annotations

import functools
import math

import numpy as np
import pytest
import random_runs
from scipy.stats import binom, rayleigh

from teleop_eval.core import candidates
from teleop_eval.core.candidates import CandidateAccumulator
from teleop_eval.core.delays import DelayStatistics
from teleop_eval.core.geometry import RobotGeometry
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.mappings.base import Ideal
from teleop_eval.core.reach import Reach, find_shoulder
from teleop_eval.core.urdf import parse_urdf

RUNS = 200
LOW, HIGH = 0.90, 0.98
EVERY_METRIC = {
    'tracking_error_rms_norm', 'tracking_error_rms_m', 'tracking_error_compensated_rms_norm',
    'orientation_error_rms_rad', 'turn_rate_error_rms_rad_s', 'joint_error_rms',
    *(f'joint_error_rms.{name}' for name in random_runs.JOINTS), 'discrepancy_rms_norm',
    *(f'budget_{term}_{what}' for term in random_runs.TERMS for what in ('rms_norm', 'share')),
    'limit_share'}


def inside(metrics, truth):
    """Return for each metric with an interval whether it holds the truth."""
    return [bool(metric.ci95[0] <= truth <= metric.ci95[1])
            for metric in metrics if metric.ci95 is not None]


def check(hits, *, least=0.95):
    """Assert the bounds as far as so many runs can tell, and that nearly all have an interval."""
    assert len(hits) >= least * RUNS
    assert binom.ppf(0.001, len(hits), LOW) <= sum(hits) <= binom.ppf(0.999, len(hits), HIGH), (
        f'{sum(hits)} of {len(hits)}')


@functools.cache
def accumulated(motion, minutes, hours, seed):
    """Return for each metric of 200 runs under a clutch whether their intervals cover."""
    long = random_runs.make(np.random.default_rng([seed, 1]), motion, 8, hours * 60.0 / 8)
    truth = random_runs.Population(long).truth()
    runs = random_runs.make(np.random.default_rng([seed, 2]), motion, RUNS, minutes)
    found = [random_runs.metrics(runs, run) for run in range(RUNS)]
    assert set(truth) == EVERY_METRIC
    return {name: inside([one[name] for one in found], value) for name, value in truth.items()}


MOTIONS = ('wander 3 s', 'reach and pause')


@pytest.mark.parametrize('motion', MOTIONS)
def test_intervals_of_a_minute_cover(motion):
    for name, hits in accumulated(motion, 1.0, 4.0, 21).items():
        try:
            check(hits)
        except AssertionError as error:
            raise AssertionError(f'{motion}, {name}: {error}') from error


def test_intervals_of_a_minute_cover_over_the_motions():
    for name in EVERY_METRIC:
        hits = [hit for motion in MOTIONS for hit in accumulated(motion, 1.0, 4.0, 21)[name]]
        assert LOW <= np.mean(hits) <= HIGH, (name, np.mean(hits))


def test_the_population_has_its_closed_forms():
    """The long run against what is known of it by hand: mapping and compensation of a delay."""
    runs = random_runs.make(np.random.default_rng(5), 'wander 1 s', 4, 30.0, clutch=False)
    truth = random_runs.Population(runs).truth()
    # Scale errors 0.1, -0.05, 0.05 of a motion of 0.2 RMS per axis, an offset, tracker noise.
    mapping = (0.1**2 + 0.05**2 + 0.05**2) * 0.2**2 + 0.02**2 + 0.01**2 + 3.0 * 0.001**2
    assert truth['budget_mapping_rms_norm'] == pytest.approx(math.sqrt(mapping), rel=0.02)
    assert sum(truth[f'budget_{term}_share'] for term in random_runs.TERMS) == pytest.approx(1.0)
    near = np.abs(runs.joints) >= random_runs.NEAR['wander']
    assert truth['limit_share'] == pytest.approx(np.mean(near.any(axis=-1)), abs=0.01)
    turns = np.linalg.norm(runs.turn, axis=-1)
    assert truth['orientation_error_rms_rad'] == pytest.approx(
        math.sqrt(np.mean(turns**2)), rel=0.01)


def delay_metric(pair):
    """Return latency_s of a run, from every window of 10 s."""
    statistics = DelayStatistics()
    for number, estimate in enumerate(random_runs.window_delays(pair)):
        statistics.add(estimate, number * 10**10, (number + 1) * 10**10, 'tool')
    return statistics.metric(caveat='', reason='')


def test_intervals_of_the_latency_cover_a_pure_delay():
    # 220 s are 22 windows, of which the exact pair of ranks would hold the median with 98.3 %.
    found = [delay_metric(random_runs.delayed_pair(
        np.random.default_rng([23, run]), 'wander 1 s', 220.0 / 60.0, delay_s=0.1))
        for run in range(RUNS)]
    check(inside(found, 0.1), least=0.9)
    assert all(metric.n >= 20 for metric in found if metric.ci95 is not None)


def test_intervals_of_the_latency_cover_that_of_a_servo():
    # A servo has no single delay: the truth is the median over 1500 windows.
    servo = {'delay_s': 0.06, 'servo_hz': 2.5}
    long = delay_metric(random_runs.delayed_pair(
        np.random.default_rng(24), 'reach', 250.0, **servo))
    assert long.n > 1450
    found = [delay_metric(random_runs.delayed_pair(
        np.random.default_rng([24, run]), 'reach', 200.0 / 60.0, **servo))
        for run in range(RUNS)]
    check(inside(found, long.value), least=0.85)


L1, L2 = 0.3, 0.25
LIMIT, JOINT_RMS, HAND_RMS = 1.0, 0.6, 0.3
# Two links in the plane; the limits matter where joints are given, hardly where poses are.
URDF = """<robot name="r"><link name="l0"/><link name="l1"/><link name="l2"/><link name="tip"/>
<joint name="q0" type="revolute"><parent link="l0"/><child link="l1"/><axis xyz="0 0 1"/>{limit}
</joint><joint name="q1" type="revolute"><parent link="l1"/><child link="l2"/>
<origin xyz="0.3 0 0"/><axis xyz="0 0 1"/>{limit}</joint><joint name="end" type="fixed">
<parent link="l2"/><child link="tip"/><origin xyz="0.25 0 0"/></joint></robot>"""


def planar(limit):
    text = URDF.format(limit=f'<limit lower="-{limit}" upper="{limit}" effort="1" velocity="2"/>')
    chain = SerialChain.from_description(parse_urdf(text), 'l0', 'tip')
    return RobotGeometry(chain, find_shoulder(chain), Reach(
        L1 + L2, np.zeros(2), 0, L1 + L2, 0, ''), frozenset())


def predicted(robot, ideal, operator, *, cells):
    """Return the predictions of one run, fed in windows of so many cells."""
    between = ideal.joints is not None
    candidate = CandidateAccumulator(
        robot, period_s=2.0 / cells, between_joints=between, with_orientation=False)
    for first in range(0, len(operator), cells):
        part = slice(first, first + cells)
        candidate.add(Ideal(ideal.positions_m[part],
                            joints=ideal.joints[part] if between else None),
                      usable=np.ones(len(operator[part]), dtype=bool),
                      run=np.zeros(len(operator[part]), dtype=np.int64),
                      robot_joints=np.zeros((len(operator[part]), 2)), operator=operator[part])
    return candidate.metrics(None)


def test_intervals_of_predictions_cover_for_a_mapping_between_joints():
    # Share beyond the limits in closed form; the hand wanders 0.1 in the mean and 0.1 RMS per
    # axis beside the tool, so the predicted discrepancy is sqrt(0.01 + 3 0.01).
    robot, rng = planar(LIMIT), np.random.default_rng(25)
    tau = 0.7
    joints = random_runs.wander(rng, RUNS, 3000, tau_s=tau, width=2, rms=JOINT_RMS)[:, ::4]
    beside = 0.1 * np.eye(3)[0] + random_runs.wander(
        rng, RUNS, 3000, tau_s=tau, rms=0.1)[:, ::4]
    found = []
    for run in range(RUNS):
        position = robot.chain.forward(joints[run]).positions
        u = robot.normalise(position, joints[run])
        found.append(predicted(
            robot, Ideal(position, joints=joints[run]), u + beside[run], cells=25))
    beyond = math.erfc(LIMIT / JOINT_RMS / math.sqrt(2.0))
    check(inside([one['limit_violation_share'] for one in found], 1.0 - (1.0 - beyond) ** 2))
    check(inside([one['predicted_discrepancy_rms_norm'] for one in found], 0.2))


def hands(rng, runs):
    """Return targets (runs, 240, 3) in the plane of the arm, at 4 Hz."""
    found = random_runs.wander(rng, runs, 3000, tau_s=0.7, rms=HAND_RMS)[:, ::12]
    return found[:, :240] * np.array([1.0, 1.0, 0.0])


def test_intervals_of_the_share_not_reached_cover(monkeypatch):
    """With the closed form of two links for the search, which takes 5 ms a cell."""
    monkeypatch.setattr(candidates, 'PathSolver', random_runs.planar_solver(L1, L2))
    robot = planar(3.14159)
    found = [predicted(robot, Ideal(hand), hand, cells=8)['not_reached_share']
             for hand in hands(np.random.default_rng(26), RUNS)]
    # The distance of a Gaussian in the plane is Rayleigh's.
    reached = np.diff(rayleigh.cdf([L1 - L2, L1 + L2], scale=HAND_RMS))[0]
    check(inside(found, 1.0 - reached))


def test_the_search_loses_what_the_closed_form_loses(monkeypatch):
    robot, hand = planar(3.14159), hands(np.random.default_rng(26), 1)[0]
    searched = predicted(robot, Ideal(hand), hand, cells=8)['not_reached_share']
    monkeypatch.setattr(candidates, 'PathSolver', random_runs.planar_solver(L1, L2))
    told = predicted(robot, Ideal(hand), hand, cells=8)['not_reached_share']
    assert 0.0 < told.value < 1.0
    assert searched.value == pytest.approx(told.value, abs=2.0 / 240.0)
    assert searched.ci95 == pytest.approx(told.ci95, abs=0.02)
