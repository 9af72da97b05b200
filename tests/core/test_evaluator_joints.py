# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Joint error against the command, against brute force at the robot's own sample times."""

from __future__ import annotations

import numpy as np
import pytest
import synthetic_session as syn
from hypothesis import given, settings
from hypothesis import strategies as st

NAMES = ('a', 'b')


def bare(**more):
    """Return an evaluator of two joints without description."""
    return syn.evaluator(syn.arm_parameters(**{**syn.BARE, **more}))


def joint_errors(target, mapping='unmodelled'):
    """Return RMS (2,) of the single joints and the whole metrics."""
    found = syn.metrics(syn.closed(target), mapping)
    return np.array([found[f'joint_error_rms.{name}']['value'] for name in NAMES]), found


def brute(robot_t, robot, command_t, command, *, hold, gap, enabled=None):
    """Return the RMS error (2,) one sample at a time, straight from the definition."""
    squares = [[], []]
    for t, q in zip(robot_t, robot, strict=True):
        before = [k for k, c in enumerate(command_t) if c <= t]
        if not before:
            continue
        k = before[-1]
        if hold or command_t[k] == t:
            expected = command[k]
        elif k + 1 == len(command_t) or command_t[k + 1] - command_t[k] > gap:
            continue
        else:
            share = (t - command_t[k]) / (command_t[k + 1] - command_t[k])
            expected = command[k] + share * (command[k + 1] - command[k])
        for joint in range(2):
            if enabled is None or enabled[k][joint]:
                squares[joint].append((q[joint] - expected[joint]) ** 2)
    return np.array([np.sqrt(np.mean(one)) for one in squares])


def streams(seed=0, end=16.0):
    """Return unequal times and unrelated values of robot and command."""
    rng = np.random.default_rng(seed)
    robot_t = np.sort(rng.uniform(0.0, end, 1500))
    command_t = np.sort(rng.uniform(0.0, end, 400))
    robot_t, command_t = (np.unique(np.round(t, 6)) for t in (robot_t, command_t))
    return (robot_t, rng.normal(size=(len(robot_t), 2)),
            command_t, rng.normal(size=(len(command_t), 2)))


@pytest.mark.parametrize('hold', [False, True])
@pytest.mark.parametrize('masked', [False, True])
def test_joint_error_is_that_of_brute_force(hold, masked):
    robot_t, robot, command_t, command = streams()
    command_t, command = (one[(command_t < 6.0) | (command_t > 7.3)]
                          for one in (command_t, command))
    rng = np.random.default_rng(5)
    enabled = rng.random((len(command_t), 2)) < 0.7 if masked else None
    made = syn.Feed()
    made.joints('/joints', robot_t, robot, NAMES)
    made.joints('/command', command_t, command, NAMES, enabled=enabled)
    target = bare(**{'command__hold': hold})
    syn.feed(target, made.messages())
    found, metrics = joint_errors(target)
    gap = 1e9 if hold else max(0.1, 3 * np.median(np.diff(command_t[command_t <= 5.0])))
    first = min(robot_t[0], command_t[0])
    keep = robot_t >= first
    expected = brute(robot_t[keep], robot[keep], command_t, command, hold=hold, gap=gap,
                     enabled=enabled)
    assert found == pytest.approx(expected, rel=1e-9)
    assert metrics['joint_error_rms.a']['unit'] == 'rad or m'
    # Nobody knows whether the two may be added up.
    assert metrics['joint_error_rms']['status'] == 'not_configured'


def test_gap_of_the_robot_hides_nothing_and_adds_nothing():
    """A hole in the robot's samples: no error is made up in it, none beside it is lost."""
    t = syn.clock(0.0, 12.0, 100.0)
    hole = (t > 5.0) & (t < 6.5)
    made = syn.Feed()
    made.joints('/command', t, np.column_stack([np.sin(t), np.cos(t)]), NAMES)
    made.joints('/joints', t[~hole], np.column_stack([np.sin(t), np.cos(t)])[~hole] + 0.01, NAMES)
    target = bare()
    syn.feed(target, made.messages())
    found, metrics = joint_errors(target)
    assert found == pytest.approx([0.01, 0.01], rel=1e-9)
    assert metrics['joint_error_rms.a']['samples'] == np.count_nonzero(~hole)
    counts = target.summary()['arms']['right']['inputs']['robot_joints']
    assert counts['gaps'] == 1
    assert counts['gap_time_s'] == pytest.approx(1.5, abs=0.03)


def test_one_to_one_units_and_order():
    """Names in any order, further joints ignored, numbers of single joints converted."""
    t = syn.clock(0.0, 10.0, 50.0)
    q = np.column_stack([np.sin(t), np.cos(t)])
    made = syn.Feed()
    made.joints('/joints', t, np.column_stack([0 * t + 9, np.degrees(q[:, 1]), q[:, 0]]),
                ('gripper', 'b', 'a'))
    made.array('/command', t - 1e-4, np.column_stack([1e3 * q[:, 1], q[:, 0]]))
    target = bare(command__joint_order=['b', 'a'], command__hold=True,
                  command__joints__b__scale=1e-3, robot__joints__b__scale=np.pi / 180.0)
    syn.feed(target, made.messages())
    found, metrics = joint_errors(target)
    assert found == pytest.approx([0.0, 0.0], abs=1e-9)
    assert metrics['joint_error_max.b']['value'] == pytest.approx(0.0, abs=1e-9)
    # Held arrays have no say in the time base.
    assert target.summary()['arms']['right']['time_base']['base'] == 'stamp'


def test_total_is_over_the_commoner_unit():
    """Angles and lengths are never added up: five angles of 0.02, one boom of 0.5 m."""
    t = syn.clock(0.0, 10.0, 50.0)
    q = np.zeros((len(t), 6)) + [0.1, 0.2, 0.6, 0.0, 0.1, 0.2]
    made = syn.Feed()
    made.joints('/command', t, q, syn.JOINTS)
    made.joints('/joints', t, q + [0.02, 0.02, 0.5, 0.02, 0.02, 0.02], syn.JOINTS)
    target = syn.evaluator(syn.arm_parameters(command__topic='/command'))
    windows = syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target), 'unmodelled')
    assert found['joint_error_rms']['value'] == pytest.approx(0.02)
    assert found['joint_error_rms']['unit'] == 'rad'
    assert found['joint_error_rms.boom']['value'] == pytest.approx(0.5)
    assert found['joint_error_rms.boom']['unit'] == 'm'
    assert windows[0].metrics['joint_error_rms'].value == pytest.approx(0.02)


def test_response_delay_is_compensated_at_native_times():
    """Every robot sample counts, also those at a window's start that follow an older command."""
    delay = 0.4
    motion = syn.wander(3, centre=0.0, size=0.5, width=2)
    made = syn.Feed()
    t = syn.clock(0.0, 40.0, 200.0)
    made.joints('/command', t, motion(t), NAMES)
    t = syn.clock(0.0, 40.0, 150.0, phase=0.6)
    made.joints('/joints', t, motion(t - delay) + 0.02, NAMES)
    target = bare()
    windows = syn.feed(target, made.messages())
    found, metrics = joint_errors(target)
    assert metrics['latency_response_s']['value'] == pytest.approx(delay, abs=5e-4)
    assert metrics['latency_response_s']['details']['space'] == 'joints'
    for name in NAMES:
        error = metrics[f'joint_error_compensated_rms.{name}']
        assert error['value'] == pytest.approx(0.02, rel=0.05)
        # Known from the window that begins at 8 s on, 150 samples a second.
        assert error['samples'] == pytest.approx(32.0 * 150.0, abs=2)
    assert windows[-1].metrics['joint_error_compensated_rms'].samples == pytest.approx(
        2 * 2.0 * 150.0, abs=4)


def test_joint_without_limits_may_be_reported_within_one_turn():
    """A wrap from pi to -pi is no motion and no error."""
    description = syn.urdf().replace(
        '<joint name="wrist_x" type="revolute">', '<joint name="wrist_x" type="continuous">')
    delay, speed = 0.1, syn.wander(4, centre=0.0, size=1.0, width=6)

    def joints(times):
        q = 0.05 * speed(times) + [0.1, 0.2, 0.6, 0.0, 0.1, 0.0]
        q[:, 5] = 3.0 * times + speed(times)[:, 5]
        return q

    made, t = syn.Feed(), syn.clock(0.0, 30.0, 100.0)

    def wrapped(times):
        q = joints(times)
        q[:, 5] = (q[:, 5] + np.pi) % (2 * np.pi) - np.pi
        return q

    made.joints('/command', t, joints(t), syn.JOINTS)
    made.joints('/joints', t, wrapped(t - delay), syn.JOINTS)
    target = syn.evaluator(syn.arm_parameters(command__topic='/command'), description)
    syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target), 'unmodelled')
    assert found['joint_error_max.wrist_x']['value'] < 2.0
    assert found['joint_error_compensated_rms.wrist_x']['value'] < 0.01
    assert found['latency_response_s']['value'] == pytest.approx(delay, abs=1e-3)


@pytest.mark.parametrize('stamped', [True, False])
@pytest.mark.parametrize('robot_stamped', [True, False])
def test_trajectories_are_interpolated_and_replaced(stamped, robot_stamped):
    """
    A trajectory's points lie at stamp + time_from_start, with zero stamp from its receipt.

    The rest of the plan before is replaced from the new one's first point on.
    """
    transport, end = 0.002, 14.0
    made, plan = syn.Feed(), []
    rng = np.random.default_rng(2)
    for k in range(26):
        received = 0.503 + 0.5 * k
        offsets = [0.05, 0.35, 0.8, 1.3]
        values = rng.normal(size=(4, 2))
        start = received - 0.01 if stamped else None
        made.plan(received, '/command', start, offsets, values, NAMES)
        if robot_stamped:
            # On header stamps, a receipt is placed by the robot's stamp-to-receive offset.
            begin = start if stamped else received - transport
        else:
            begin = received
        first = begin + offsets[0]
        plan = [point for point in plan if point[0] < first - 1e-9]
        plan += [(begin + one, value) for one, value in zip(offsets, values, strict=True)]
    t = syn.clock(0.0, end, 100.0, phase=0.37)
    robot = rng.normal(size=(len(t), 2))
    made.joints('/joints', t, robot, NAMES, transport=transport, stamped=robot_stamped)
    target = bare()
    syn.feed(target, made.messages())
    found, metrics = joint_errors(target)
    table = np.array([point[1] for point in plan])
    times = np.array([point[0] for point in plan])
    axis = t if robot_stamped else t + transport
    inside = (axis >= times[0]) & (axis <= times[-1])
    errors = robot[inside] - np.column_stack([
        np.interp(axis[inside], times, table[:, joint]) for joint in range(2)])
    assert metrics['joint_error_rms.a']['samples'] == np.count_nonzero(inside)
    # Times are whole nanoseconds in one and floats in the other.
    assert found == pytest.approx(np.sqrt(np.mean(errors ** 2, axis=0)), rel=1e-5)
    base = target.summary()['arms']['right']['time_base']
    assert base['base'] == ('stamp' if robot_stamped else 'receive')


@pytest.mark.parametrize('ahead', [0.0, 0.3, 46.0])
def test_held_command_with_zero_stamps_goes_by_its_receipt(ahead):
    """
    Its receipt is placed on the stamps' axis, as long as that clock is near the receive clock.

    A clock further off than clock_tolerance_s (0.5 s) leads to receive time for all.
    """
    t = syn.clock(0.0, 12.0, 100.0)
    made = syn.Feed()
    made.joints('/joints', t, np.column_stack([t, -t]), NAMES, transport=0.004, ahead=ahead)
    steps = np.arange(0.5, 12.0, 1.0)
    made.joints('/command', steps, np.column_stack([steps, -steps]), NAMES, transport=0.004,
                stamped=False)
    target = bare(command__hold=True)
    syn.feed(target, made.messages())
    found, metrics = joint_errors(target)
    base = target.summary()['arms']['right']['time_base']
    if ahead < 0.5:
        assert base['base'] == 'stamp' and base['reason'] == ''
    else:
        assert base['base'] == 'receive' and 'command: all header stamps' in base['reason']
    inside = t[t >= 0.5]
    held = np.floor(inside - 0.5) + 0.5
    assert metrics['joint_error_rms.a']['samples'] == len(inside)
    assert found == pytest.approx(np.sqrt(np.mean((inside - held) ** 2)), rel=1e-4)
    assert target.summary()['arms']['right']['inputs']['command']['gaps'] == 0


def test_late_held_command_holds_from_the_next_window_on():
    """Dropping it would let the old value go on until the next command."""
    t = syn.clock(0.0, 12.0, 100.0)
    made = syn.Feed()
    made.joints('/joints', t, np.column_stack([0 * t, 0 * t]), NAMES)
    made.joints('/command', [0.1], [[1.0, 1.0]], NAMES)
    made.joints('/command', [6.0], [[0.0, 0.0]], NAMES, transport=3.0)
    target = bare(command__hold=True)
    syn.feed(target, made.messages())
    found, metrics = joint_errors(target)
    # It came at 9 s, when all windows up to 8.003 s were closed.
    inside = t[t >= 0.1]
    closed = 8.0 + t[0]
    assert found == pytest.approx(np.sqrt(np.mean((inside < closed) * 1.0)), rel=1e-3)
    assert target.summary()['arms']['right']['inputs']['command']['late'] == 1


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10 ** 6), st.booleans(), st.floats(0.5, 3.0))
def test_joint_error_does_not_depend_on_window_length(seed, hold, window_s):
    """Windows cut the run, they do not change it."""
    robot_t, robot, command_t, command = streams(seed, 8.0)
    made = syn.Feed()
    made.joints('/joints', robot_t, robot, NAMES)
    made.joints('/command', command_t, command, NAMES)
    found = []
    for window in (window_s, 2.0):
        target = syn.evaluator({
            **syn.arm_parameters(**{**syn.BARE, 'command__hold': hold}),
            'time.window_s': window, 'latency.window_s': 5 * window, 'latency.hop_s': window})
        syn.feed(target, made.messages())
        found.append(joint_errors(target)[0])
    assert found[0] == pytest.approx(found[1], rel=1e-9)
