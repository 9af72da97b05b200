# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Joint speed against velocity limits: closed forms, gaps, wrapped angles, missing limits."""

from __future__ import annotations

import math

import numpy as np
import pytest

from teleop_eval.core.joint_speed import MAX, P95, JointSpeedDemand

PERIOD = 0.02


def demand(limits: list[float], turning: list[bool] | None = None) -> JointSpeedDemand:
    turns = np.zeros(len(limits), dtype=bool) if turning is None else np.array(turning)
    names = tuple(f'q{index}' for index in range(len(limits)))
    return JointSpeedDemand(np.array(limits), turns, names=names, period_s=PERIOD)


def still(q: np.ndarray) -> np.ndarray:
    return np.zeros(len(q), dtype=np.int64)


def test_sines_have_their_closed_forms() -> None:
    # Mean speed over a step of A sin(w t): A w sinc(w T / 2) |cos|; p95 of |cos| is sin(.475 pi).
    time = np.arange(0.0, 200.0, PERIOD)
    w, amplitudes, limits = 2.0 * math.pi * 0.37, np.array([0.5, 0.8]), np.array([2.0, 4.0])
    q = amplitudes * np.sin(w * time)[:, None]
    speed = demand(limits.tolist())
    for window in np.array_split(q, 31):
        speed.add(window, still(window))
    found = speed.metrics()
    half = 0.5 * w * PERIOD
    peak = amplitudes * w * math.sin(half) / half / limits
    assert found[MAX].value == pytest.approx(peak[0], rel=1e-4)
    assert found[P95].value == pytest.approx(peak[0] * math.sin(0.475 * math.pi), rel=2e-3)
    assert found[MAX].details['joints'] == pytest.approx(
        {'q0': peak[0], 'q1': peak[1]}, rel=1e-4)
    assert found[MAX].details['joint'] == 'q0'
    assert found[MAX].samples == len(q) - 1
    assert found[MAX].n == 31


def test_the_demand_is_that_of_the_joint_nearest_its_limit() -> None:
    # One joint moves in the first half, the other in the second.
    move = np.concatenate([np.linspace(0.0, 1.0, 101), np.full(100, 1.0)])
    speed = demand([10.0, 5.0])
    q = np.stack([move, move[::-1]], axis=1)
    speed.add(q, still(q))
    assert speed.metrics()[P95].value == pytest.approx(0.1, rel=1e-9)
    assert speed.metrics()[P95].details['joint'] == 'q1'


@pytest.mark.parametrize('split', ['nothing', 'run', 'apart', 'gap', 'restart'])
def test_no_speed_is_taken_across_what_separates_cells(split: str) -> None:
    q = np.concatenate([np.full(50, 0.2), np.full(50, 0.9)])[:, None]
    q[:, 0] += 1e-3 * np.arange(100)
    run, apart = still(q), np.zeros(100, dtype=bool)
    if split == 'run':
        run[50:] = 1
    if split == 'apart':
        apart[50] = True
    if split == 'gap':
        q[50] = np.nan
    speed = demand([1.0])
    speed.add(q[:50], run[:50], apart=apart[:50])
    if split == 'restart':
        speed.restart()
    speed.add(q[50:], run[50:], apart=apart[50:])
    found = speed.metrics()[MAX]
    assert found.value == pytest.approx(0.701 / PERIOD if split == 'nothing' else 0.05)
    assert found.samples == {'nothing': 99, 'gap': 97}.get(split, 98)


def test_a_joint_without_limits_goes_the_shorter_way_round() -> None:
    angle = np.arange(0.0, 20.0, 0.04)
    wrapped = np.remainder(angle + math.pi, 2.0 * math.pi) - math.pi
    q = np.stack([wrapped, 0.0 * wrapped], axis=1)
    speed = demand([2.0, 2.0], [True, False])
    speed.add(q, still(q))
    assert speed.metrics()[MAX].value == pytest.approx(0.04 / PERIOD / 2.0)
    hinge = demand([2.0, 2.0])
    hinge.add(q, still(q))
    assert hinge.metrics()[MAX].number > 50.0


def test_joints_without_a_velocity_limit_are_named() -> None:
    q = np.cumsum(np.full((30, 3), [0.01, 0.5, 0.5]), axis=0)
    speed = demand([1.0, math.inf, 0.0])
    speed.add(q, still(q))
    found = speed.metrics()[MAX]
    assert found.value == pytest.approx(0.5)
    assert found.details['joints_without_limit'] == ['q1', 'q2']
    assert found.reason == 'No velocity limit is given for q1, q2.'
    none = demand([math.inf, 0.0])
    none.add(q[:, 1:], still(q))
    for name in (P95, MAX):
        assert none.metrics()[name].status == 'not_configured'
        assert 'no joint a velocity limit' in none.metrics()[name].reason


def test_too_little_is_insufficient() -> None:
    speed = demand([1.0])
    speed.add(np.empty((0, 1)), np.empty(0, dtype=np.int64))
    speed.add(np.array([[0.1]]), np.zeros(1, dtype=np.int64))
    assert speed.metrics()[P95].status == 'insufficient'
    with pytest.raises(ValueError, match='the period must be positive'):
        JointSpeedDemand(np.ones(1), np.zeros(1, dtype=bool), names=('q',), period_s=0.0)
