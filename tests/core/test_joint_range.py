# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Use of the joint limits, against the arcsine law of a sine and plain numpy."""

import json
import math

import numpy as np
import pytest

from teleop_eval.core.joint_range import JointRangeUse

RANGE, MARGIN, SHARE = 'joint_range_use', 'limit_margin_min', 'limit_share'


def used(q, lower, upper, continuous=None, *, windows=25, names=None):
    q = np.asarray(q, dtype=float)
    free = np.zeros(len(lower), dtype=bool) if continuous is None else continuous
    use = JointRangeUse(np.array(lower), np.array(upper), np.array(free), names=names)
    for window in np.array_split(q, windows):
        use.add(window)
    return use


def sine(amplitude, n=50000):
    """Return a whole period, whose percentiles follow the arcsine law."""
    return amplitude * np.sin((np.arange(n) + 0.5) / n * 2.0 * np.pi)


def test_sine_has_its_closed_forms():
    # Percentile p of A sin: A sin(pi (p - 1/2)); |A sin| >= c for a share (2/pi) acos(c / A).
    use = used(sine(0.98)[:, None], [-1.0], [1.0])
    joint = use.joint_metrics()['joint_0']
    assert joint[RANGE].value == pytest.approx(0.98 * math.sin(0.45 * math.pi), abs=2e-3)
    assert joint[MARGIN].value == pytest.approx(0.02 / 2.0, abs=1e-6)
    # Four crossings of the threshold, each at most one sample of 50000 off.
    assert joint[SHARE].value == pytest.approx(2 / math.pi * math.acos(0.9 / 0.98), abs=8e-5)
    assert joint[RANGE].samples == 50000 and joint[RANGE].n == 25
    arm = use.metrics()
    for name in (RANGE, MARGIN, SHARE):
        assert arm[name].value == pytest.approx(joint[name].value)
    assert arm[SHARE].details['joint'] == 'joint_0'


def test_against_plain_numpy_with_revolute_and_prismatic_joints():
    rng = np.random.default_rng(4)
    lower, upper = np.array([-2.9, -1.0, 0.0]), np.array([2.9, 2.5, 0.4])
    q = np.stack([np.clip(rng.normal(0.0, 0.8, 8000), -2.8, 2.8),
                  rng.uniform(0.0, 2.2, 8000), rng.beta(5, 1.2, 8000) * 0.39], axis=1)
    names = ('swing', 'lift', 'slide')
    use = used(q, lower, upper, names=names)
    span = upper - lower
    expected = (np.percentile(q, 95, axis=0) - np.percentile(q, 5, axis=0)) / span
    gap = np.minimum(q - lower, upper - q) / span
    joints = use.joint_metrics()
    for i, name in enumerate(names):
        assert joints[name][RANGE].value == pytest.approx(expected[i], abs=2e-3)
        assert joints[name][MARGIN].value == pytest.approx(gap[:, i].min(), rel=1e-9)
        assert joints[name][SHARE].value == pytest.approx((gap[:, i] <= 0.05).mean(), rel=1e-12)
    arm = use.metrics()
    assert arm[RANGE].value == pytest.approx(expected.mean(), abs=2e-3)
    assert arm[RANGE].details['least_used'] == names[int(expected.argmin())]
    assert arm[RANGE].details['most_used'] == names[int(expected.argmax())]
    assert arm[MARGIN].value == pytest.approx(gap.min(), rel=1e-9)
    assert arm[MARGIN].details['joint'] == names[int(gap.min(axis=0).argmin())]
    near = (gap <= 0.05).any(axis=1)
    assert arm[SHARE].value == pytest.approx(near.mean(), rel=1e-12)
    assert arm[SHARE].details['joint'] == 'slide'
    low, high = arm[SHARE].ci95
    assert 0.0 <= low < near.mean() < high <= 1.0


def test_still_joint_in_the_middle_has_the_largest_margin():
    joint = used(np.full((40, 1), 0.5), [0.0], [1.0]).joint_metrics()['joint_0']
    assert joint[MARGIN].value == 0.5
    assert joint[RANGE].value == pytest.approx(0.0, abs=1e-3)
    assert joint[SHARE].value == 0.0


@pytest.mark.parametrize('position, share', [(0.5, 0.0), (0.99, 1.0)])
def test_share_that_never_changes_tells_no_interval(position, share):
    arm = used(np.full((3000, 1), position), [0.0], [1.0], windows=30).metrics()[SHARE]
    assert (arm.value, arm.ci95, arm.n, arm.status) == (share, None, 30, 'ok')
    assert 'all blocks are alike' in arm.reason
    q = np.full((3000, 1), position)
    q[1500:1520] = 1.49 - position
    arm = used(q, [0.0], [1.0], windows=30).metrics()[SHARE]
    assert arm.ci95 is not None and arm.reason == ''


def test_overshoot_is_clipped_and_reported_with_the_joint_at_fault():
    q = np.zeros((100, 3))
    q[50] = [1.002, -1.02, 0.0]
    arm = used(q, [-1.0] * 3, [1.0] * 3, names=('a', 'b', 'c')).metrics()
    margin = arm[MARGIN]
    assert margin.value == 0.0
    assert margin.details['overshoot'] == pytest.approx(0.01)
    assert margin.details['joint'] == 'b' and margin.details['limit'] == 'lower'
    assert margin.details['joints_beyond'] == ['a', 'b']
    assert margin.reason == "Joint 'b': The joint went 1.000% of its limit span beyond a limit."
    assert arm[SHARE].value == pytest.approx(0.01)


def test_continuous_joints_have_no_limits_but_an_arc():
    turns = np.linspace(0.0, 40.0, 4000)
    q = np.stack([sine(0.5, 4000), turns, np.linspace(3.0, 3.4, 4000)], axis=1)
    use = used(q, [-1.0, -np.inf, -3.0], [1.0, np.inf, 3.0], [False, True, True])
    joints = use.joint_metrics()
    for name in (RANGE, MARGIN, SHARE):
        assert joints['joint_1'][name].status == 'not_configured'
        assert joints['joint_1'][name].reason == 'A continuous joint has no limits.'
    # Wrapped about the seam at pi: the arc is short although the readings are far apart.
    arc = joints['joint_2'][RANGE].details['arc_90_rad']
    assert arc == pytest.approx(0.9 * 0.4, abs=0.02)
    assert joints['joint_1'][RANGE].details['arc_90_rad'] > 5.0
    arm = use.metrics()
    assert arm[RANGE].details['joints'].keys() == {'joint_0'}
    assert arm[RANGE].value == joints['joint_0'][RANGE].value


def test_an_arm_without_limits_is_not_configured():
    use = used(np.zeros((50, 2)), [0.3, -np.inf], [0.3, np.inf])
    assert {metric.status for metric in use.metrics().values()} == {'not_configured'}
    assert 'equals its upper one' in use.joint_metrics()['joint_0'][RANGE].reason


def test_missing_positions_are_left_out_joint_by_joint():
    rng = np.random.default_rng(0)
    q = rng.uniform(-0.5, 0.5, (300, 2))
    q[::3, 0] = np.nan
    q[5] = np.nan
    use = used(q, [-1.0, -1.0], [1.0, 1.0])
    joints = use.joint_metrics()
    assert joints['joint_0'][RANGE].samples == np.count_nonzero(np.isfinite(q[:, 0]))
    assert list(use.skipped) == [101, 1]
    assert use.metrics()[RANGE].samples == 299
    column = q[np.isfinite(q[:, 0]), 0]
    assert joints['joint_0'][MARGIN].value == pytest.approx((1 - np.abs(column).max()) / 2)


def test_too_little_data_is_insufficient():
    for q in (np.zeros((0, 1)), np.zeros((19, 1)), np.full((100, 1), np.nan)):
        use = used(q, [-1.0], [1.0], windows=3)
        for metric in (*use.metrics().values(), *use.joint_metrics()['joint_0'].values()):
            assert (metric.status, metric.value) == ('insufficient', None)
            assert metric.reason.endswith('.')
    assert used(np.zeros((20, 1)), [-1.0], [1.0], windows=3).metrics()[RANGE].status == 'ok'


def test_windows_do_not_matter_but_for_the_interval():
    q = np.random.default_rng(2).normal(0.0, 0.4, (1000, 2))
    one, many = (used(q, [-1.0] * 2, [1.0] * 2, windows=k) for k in (1, 200))
    for name in (RANGE, MARGIN):
        assert one.metrics()[name].value == many.metrics()[name].value
    assert one.metrics()[SHARE].value == pytest.approx(many.metrics()[SHARE].value, rel=1e-12)
    assert one.metrics()[SHARE].ci95 is None and many.metrics()[SHARE].ci95 is not None


def test_metrics_are_plain_documents():
    use = used(np.random.default_rng(1).normal(0.0, 0.6, (400, 2)), [-1.0] * 2, [1.0] * 2)
    for metric in (*use.metrics().values(), *use.joint_metrics()['joint_1'].values()):
        assert json.loads(json.dumps(metric.to_dict()))['value'] == metric.value


def test_misuse_is_refused():
    with pytest.raises(ValueError, match="'b' has a lower limit 2.0 above its upper one 1.0"):
        JointRangeUse(np.array([0.0, 2.0]), np.array([1.0, 1.0]), np.zeros(2, bool),
                      names=('a', 'b'))
    with pytest.raises(ValueError, match='one length'):
        JointRangeUse(np.zeros(2), np.ones(3), np.zeros(2, bool))
    with pytest.raises(ValueError, match=r'\(m, 1\) are needed, got shape \(3, 2\)'):
        used(np.zeros((3, 2)), [0.0], [1.0], windows=1)
