# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Clocks: which time base is chosen, when it is given up, and what a step of a clock costs."""

from __future__ import annotations

import numpy as np
import pytest
import synthetic_session as syn

from teleop_eval.core.evaluator import EVENT_TOPIC

NAMES = ('a', 'b')


def run(made, text=None, **parameters):
    """Return summary and windows of the turret in task space."""
    target = syn.evaluator(syn.arm_parameters(**{**syn.TASK, **parameters}), text)
    windows = syn.feed(target, made.messages())
    return syn.closed(target), windows


def two_streams(end=12.0, *, hand=None, robot=None, motion=None, delay=0.0):
    """Return hand and robot with clocks of their own, as keywords of Feed.poses and joints."""
    motion, made = motion or syn.wander(), syn.Feed()
    t = syn.clock(0.0, end, 100.0)
    made.poses('/hand', t, 0.6 * motion(t), **(hand or {}))
    t = syn.clock(0.0, end, 125.0, phase=0.6)
    made.joints('/joints', t, syn.joints_for(motion(t - delay)), **(robot or {}))
    return made


def base_of(summary):
    return summary['arms']['right']['time_base']


@pytest.mark.parametrize('ahead', [46.0, -46.0, 3600.0 * 10])
def test_common_offset_is_no_fault(ahead):
    """All streams stamped by one clock that is 46 s off: header stamps are used."""
    summary, windows = run(two_streams(hand={'ahead': ahead}, robot={'ahead': ahead}))
    base = base_of(summary)
    assert (base['base'], base['reason']) == ('stamp', '')
    assert base['offsets_s']['hand'] == pytest.approx(ahead - 0.002, abs=1e-6)
    assert windows[0].start_ns == pytest.approx(syn.ns(ahead + 0.003), abs=1e7)
    assert syn.metrics(summary)['tracking_error_rms_norm']['value'] < 1e-3


@pytest.mark.parametrize('apart, base', [(0.45, 'stamp'), (-0.45, 'stamp'), (0.55, 'receive'),
                                         (-46.0, 'receive')])
def test_offset_between_streams_against_the_tolerance(apart, base):
    summary, _ = run(two_streams(robot={'ahead': apart}))
    found = base_of(summary)
    assert found['base'] == base
    offsets = found['offsets_s']
    assert offsets['robot_joints'] - offsets['hand'] == pytest.approx(apart, abs=1e-6)
    error = syn.metrics(summary)['tracking_error_rms_norm']['value']
    if base == 'receive':
        assert 'robot_joints' in found['reason'] and 'hand' in found['reason']
        assert 'clock_tolerance_s (0.5 s)' in found['reason']
        assert any('receive time' in note for note in summary['notes'])
        assert error < 1e-3
    else:
        # Trusted stamps that lie show as a delay.
        assert error > 0.01


def test_tolerance_is_a_parameter():
    made = two_streams(robot={'ahead': 0.2})
    target = syn.evaluator(syn.arm_parameters(**syn.TASK), **{'time.clock_tolerance_s': 0.1})
    syn.feed(target, made.messages())
    assert base_of(syn.closed(target))['base'] == 'receive'


def test_one_stream_without_stamps_moves_all_to_receive_time():
    made = two_streams(26.0, robot={'stamped': False}, delay=0.1)
    summary, _ = run(made)
    assert base_of(summary)['base'] == 'receive'
    assert 'robot_joints: all header stamps are zero' in base_of(summary)['reason']
    assert base_of(summary)['offsets_s']['robot_joints'] is None
    latency = syn.metrics(summary)['latency_s']
    assert latency['value'] == pytest.approx(0.1, abs=1e-3)
    # Receive-based values say so.
    assert 'receive-based' in latency['reason']
    compensated = syn.metrics(summary)['tracking_error_compensated_rms_norm']
    assert 'receive-based' in compensated['reason']
    ages = summary['arms']['right']['inputs']['robot_joints']['metrics']
    assert ages['transport_age_s']['status'] == 'unobservable'
    assert 'zero' in ages['transport_age_s']['reason']


def test_bare_arrays_as_a_sampled_command_have_no_stamps():
    t = syn.clock(0.0, 10.0, 50.0)
    made = syn.Feed().joints('/joints', t, np.column_stack([t, t]), NAMES)
    made.array('/command', t + 0.001, np.column_stack([t, t]))
    target = syn.evaluator(syn.arm_parameters(**syn.BARE))
    syn.feed(target, made.messages())
    summary = syn.closed(target)
    assert base_of(summary)['base'] == 'receive'
    assert 'command' in base_of(summary)['reason']


@pytest.mark.parametrize('step', [7, 10 ** 9])
def test_stamps_that_do_not_advance(step):
    """A driver that stamps once and publishes for ever."""
    motion, made = syn.wander(), two_streams(0.0)
    t = syn.clock(0.0, 12.0, 100.0)
    made.poses('/hand', t, 0.6 * motion(t))
    for k, one in enumerate(t):
        made.put(one + 0.002, '/joints', syn.JointSample(
            syn.ns(t[k // step]), syn.JOINTS, syn.joints_for(motion(t[k:k + 1]))[0], None))
    summary, _ = run(made)
    assert base_of(summary)['base'] == 'receive'
    assert 'do not advance' in base_of(summary)['reason']
    assert syn.metrics(summary)['tracking_error_rms_norm']['value'] < 1e-3


def test_two_messages_with_one_stamp_do_not_break_the_start():
    made = syn.Feed()
    for when in (0.0, 0.01):
        made.put(when, '/joints', syn.JointSample(syn.ns(0.0), NAMES, np.zeros(2), None))
    target = syn.evaluator(syn.arm_parameters(**syn.BARE))
    syn.feed(target, made.messages())
    assert base_of(syn.closed(target))['base'] == 'receive'


def test_duplicate_stamps_are_dropped_and_counted():
    made = two_streams(12.0)
    doubled = two_streams(12.0, robot={'transport': 0.004})
    made._messages += [one for one in doubled._messages if one[3] == '/joints']
    summary, _ = run(made)
    counts = summary['arms']['right']['inputs']['robot_joints']
    assert counts['messages'] == 3000
    assert counts['out_of_order'] == 1500
    assert syn.metrics(summary)['tracking_error_rms_norm']['value'] < 1e-3


@pytest.mark.parametrize('jump', [0.7, -0.7, 46.0])
def test_clock_that_leaves_the_tolerance_begins_a_segment(jump):
    """The robot's computer sets its clock at 20 s: then receive time serves, and is said to."""
    motion, made, delay = syn.wander(), syn.Feed(), 0.1
    t = syn.clock(0.0, 60.0, 100.0)
    made.poses('/hand', t, 0.6 * motion(t))
    t = syn.clock(0.0, 60.0, 125.0, phase=0.6)
    q = syn.joints_for(motion(t - delay))
    made.joints('/joints', t[t < 20.0], q[t < 20.0])
    made.joints('/joints', t[t >= 20.0], q[t >= 20.0], ahead=jump)
    summary, windows = run(made)
    arm = summary['arms']['right']
    assert arm['segments'] == 2
    assert base_of(summary)['base'] == 'receive'
    assert any('new segment' in note and 'robot_joints' in note for note in summary['notes'])
    found = syn.metrics(summary)
    assert found['latency_s']['value'] == pytest.approx(delay, abs=2e-3)
    assert found['latency_s']['n'] >= 4
    assert 'receive-based' in found['latency_s']['reason']
    # What came before is kept, what came after is used: little of 60 s is lost.
    assert found['engaged_time_s']['value'] > 56.0
    # No window mixes the two clocks for long: at most one is seen before the step is known.
    errors = [w.metrics['tracking_error_rms_norm'].value for w in windows
              if w.metrics['tracking_error_rms_norm'].value is not None]
    assert np.count_nonzero(np.array(errors) > 0.1) <= 2


def test_all_clocks_moving_together_begin_a_segment_too():
    """The frozen stamp-to-receive offset tells how long to wait: it must be right."""
    made = two_streams(20.0)
    later = two_streams(40.0, hand={'ahead': 2.0}, robot={'ahead': 2.0})
    made._messages += [one for one in later._messages if one[0] > syn.ns(20.01)]
    summary, windows = run(made)
    assert summary['arms']['right']['segments'] == 2
    assert base_of(summary)['base'] == 'stamp'
    assert base_of(summary)['offsets_s']['hand'] == pytest.approx(1.998, abs=1e-6)
    assert syn.metrics(summary)['tracking_error_max_norm']['value'] < 2e-3


def test_stamps_stepping_back_begin_a_segment_and_keep_what_was():
    """A simulation restarts, or a clock is set back by 2 s."""
    made = two_streams(21.3)
    later = two_streams(42.0, hand={'ahead': -2.0}, robot={'ahead': -2.0})
    made._messages += [one for one in later._messages if one[0] > syn.ns(21.304)]
    summary, windows = run(made)
    arm = summary['arms']['right']
    assert arm['segments'] == 2
    assert base_of(summary)['base'] == 'stamp'
    assert any('stepped back' in note for note in summary['notes'])
    found = syn.metrics(summary)
    # Up to the step and from the step on, nothing is lost but the cells at the edges.
    assert found['engaged_time_s']['value'] == pytest.approx(42.0, abs=0.05)
    assert found['tracking_error_rms_norm']['samples'] == pytest.approx(4200, abs=6)
    assert found['tracking_error_max_norm']['value'] < 2e-3
    receives = [w.receive_ns for w in windows]
    assert receives == sorted(receives)


def test_step_back_during_the_warm_up_drops_what_was():
    made = two_streams(3.0)
    later = two_streams(20.0, hand={'ahead': -60.0}, robot={'ahead': -60.0})
    made._messages += [one for one in later._messages if one[0] > syn.ns(3.01)]
    summary, windows = run(made)
    assert summary['arms']['right']['segments'] == 1
    assert base_of(summary)['offsets_s']['hand'] == pytest.approx(-60.002, abs=1e-6)
    assert min(w.start_ns for w in windows) > syn.ns(3.0 - 60.0)
    assert syn.metrics(summary)['tracking_error_max_norm']['value'] < 2e-3


@pytest.mark.parametrize('both', [True, False])
def test_jump_ahead_by_ten_hours_is_quick(both):
    """It costs no window for each two seconds of the ten hours: 18 000 of them."""
    ahead = 36_000.0
    made = two_streams(20.0)
    later = two_streams(40.0, robot={'ahead': ahead}, hand={'ahead': ahead if both else 0.0})
    made._messages += [one for one in later._messages if one[0] > syn.ns(20.01)]
    summary, windows = run(made)
    assert len(windows) <= 22
    assert summary['arms']['right']['segments'] == 2
    assert base_of(summary)['base'] == ('stamp' if both else 'receive')
    assert syn.metrics(summary)['tracking_error_rms_norm']['samples'] > 3300


def test_last_stamp_far_ahead_makes_finish_no_slower():
    made = two_streams(12.0)
    made.put(12.5, '/joints', syn.JointSample(
        syn.ns(36_000.0), syn.JOINTS, np.zeros(6) + 0.2, None))
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    windows = syn.feed(target, made.messages())
    syn.closed(target)
    windows += target.poll()
    assert 6 <= len(windows) <= 8
    assert windows[-1].end_ns > syn.ns(36_000.0)


def test_single_wild_stamp_does_not_kill_the_stream():
    made = two_streams(30.0)
    made.put(10.0041, '/joints', syn.JointSample(
        syn.ns(3600.0), syn.JOINTS, syn.joints_for(syn.wander()(np.array([10.0])))[0], None))
    summary, _ = run(made)
    found = syn.metrics(summary)
    assert found['tracking_error_rms_norm']['samples'] > 2700
    assert found['tracking_error_max_norm']['value'] < 2e-3


def test_step_of_the_receive_clock_keeps_what_was():
    """The feeder says that the receive clock stepped back; receive times go on increasing."""
    made = two_streams(30.0)
    made.text(13.1, EVENT_TOPIC, 'segment')
    summary, windows = run(made)
    assert summary['arms']['right']['segments'] == 2
    found = syn.metrics(summary)
    assert found['engaged_time_s']['value'] == pytest.approx(30.0, abs=0.05)
    assert found['tracking_error_rms_norm']['samples'] == pytest.approx(3000, abs=8)
    assert found['latency_s']['status'] == 'ok'


def test_step_of_the_receive_clock_during_the_warm_up():
    made = two_streams(20.0)
    made.text(3.0, EVENT_TOPIC, 'segment')
    summary, windows = run(made)
    assert summary['arms']['right']['segments'] == 1
    assert windows[0].start_ns == pytest.approx(syn.ns(3.0), abs=2e7)


def test_stream_that_appears_late_joins():
    """The robot is switched on 12 s after the hand tracker."""
    motion, made = syn.wander(), syn.Feed()
    t = syn.clock(0.0, 40.0, 100.0)
    made.poses('/hand', t, 0.6 * motion(t))
    late = t[t > 12.0]
    made.joints('/joints', late, syn.joints_for(motion(late - 0.1)))
    summary, windows = run(made)
    assert summary['arms']['right']['segments'] == 2
    assert any('robot_joints appeared' in note for note in summary['notes'])
    found = syn.metrics(summary)
    assert found['latency_s']['value'] == pytest.approx(0.1, abs=1e-3)
    assert found['tracking_error_rms_norm']['samples'] == pytest.approx(2800, abs=5)
    # The operator's own metrics began with the operator.
    assert found['reach_p50_norm_operator']['samples'] == pytest.approx(4000, abs=8)


@pytest.mark.parametrize('hold', [True, False])
def test_held_command_that_appears_late(hold):
    t = syn.clock(0.0, 30.0, 100.0)
    made = syn.Feed().joints('/joints', t, np.ones((len(t), 2)), NAMES)
    if hold:
        made.joints('/command', [11.0], [[0.0, 0.0]], NAMES)
    else:
        made.joints('/command', t[t > 11.0], np.zeros((len(t[t > 11.0]), 2)), NAMES)
    target = syn.evaluator(syn.arm_parameters(**syn.BARE, **{'command__hold': hold}))
    syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target), 'unmodelled')
    assert found['joint_error_rms.a']['value'] == pytest.approx(1.0)
    assert found['joint_error_rms.a']['samples'] == pytest.approx(1900, abs=3)


def test_held_command_outlives_a_segment():
    """What holds goes on when a clock steps."""
    t = syn.clock(0.0, 30.0, 100.0)
    made = syn.Feed().joints('/command', [0.1], [[0.0, 0.0]], NAMES)
    made.joints('/joints', t[t < 12.0], np.ones((1200, 2)), NAMES)
    made.joints('/joints', t[t > 12.0], np.ones((1800, 2)), NAMES, ahead=-5.0)
    target = syn.evaluator(syn.arm_parameters(**syn.BARE, command__hold=True))
    syn.feed(target, made.messages())
    summary = syn.closed(target)
    assert summary['arms']['right']['segments'] == 2
    found = syn.metrics(summary, 'unmodelled')
    assert found['joint_error_rms.a']['samples'] == pytest.approx(2990, abs=4)


def described(end, when, **more):
    """Return hand and robot, with the latched description received at a time."""
    made = two_streams(end, delay=0.1)
    if when is not None:
        made.text(when, '/robot_description', syn.urdf())
    return made


TOPIC = {'robot__description_file': None, 'robot__description_topic': '/robot_description'}


@pytest.mark.parametrize('when', [-1.0, 0.0, 4.0, 20.0])
def test_description_that_comes_within_the_waiting_time_loses_nothing(when):
    summary, windows = run(described(40.0, when), **TOPIC)
    assert summary['problems'] == []
    assert summary['arms']['right']['segments'] == 1
    found = syn.metrics(summary)
    assert found['engaged_time_s']['value'] == pytest.approx(40.0, abs=0.02)
    assert found['latency_s']['value'] == pytest.approx(0.1, abs=1e-3)


def test_description_that_comes_later_begins_the_metrics():
    summary, windows = run(described(80.0, 45.0), **TOPIC)
    assert any('no robot description came' in text for text in summary['problems'])
    found = syn.metrics(summary)
    assert found['tracking_error_rms_norm']['status'] == 'ok'
    assert found['engaged_time_s']['value'] == pytest.approx(35.0, abs=0.1)
    assert found['latency_s']['value'] == pytest.approx(0.1, abs=1e-3)
    assert found['manipulability_min']['status'] == 'ok'
    assert summary['arms']['right']['inputs']['hand']['messages'] == 8000
    assert any('the metrics begin here' in note for note in summary['notes'])


def test_description_that_never_comes():
    summary, _ = run(described(40.0, None), **TOPIC)
    found = syn.metrics(summary)
    assert any('/robot_description' in text for text in summary['problems'])
    assert found['tracking_error_rms_norm']['status'] == 'not_configured'
    assert 'description' in found['tracking_error_rms_norm']['reason']
    short, _ = run(described(8.0, None), **TOPIC)
    assert any('/robot_description' in text for text in short['problems'])
    assert syn.metrics(short)['engaged_time_s']['value'] == pytest.approx(8.0, abs=0.05)


def test_late_description_with_named_joints_and_a_command():
    """Joints known by name were measured before; then their units become known."""
    made = described(70.0, 40.0)
    t = syn.clock(0.0, 70.0, 100.0)
    made.joints('/command', t, syn.joints_for(syn.wander()(t)))
    summary, _ = run(made, **TOPIC, command__topic='/command',
                     robot__joint_names=list(syn.JOINTS))
    found = syn.metrics(summary)
    assert found['joint_error_rms.boom']['unit'] == 'm'
    assert found['latency_response_s']['value'] == pytest.approx(0.1, abs=1e-3)


def test_reset_with_a_latched_description_goes_on_at_once():
    made = described(30.0, 0.0)
    made.text(12.0, EVENT_TOPIC, 'reset')
    summary, windows = run(made, **TOPIC)
    assert summary['problems'] == []
    assert syn.metrics(summary)['engaged_time_s']['value'] == pytest.approx(18.0, abs=0.02)
    assert any(syn.ns(13.0) < w.end_ns < syn.ns(20.0) for w in windows)


def test_second_description_is_not_used():
    made = described(12.0, 0.0)
    made.text(6.0, '/robot_description', syn.urdf(lift=True))
    made.text(7.0, '/robot_description', syn.urdf())
    summary, _ = run(made, **TOPIC)
    assert summary['arms']['right']['segments'] == 1
    assert sum('another robot description' in note for note in summary['notes']) == 1


def test_grid_is_the_slowest_sampled_streams_rate():
    for rates, grid in (((100.0, 125.0), 100.0), ((500.0, 60.0), 60.0), ((30.0, 125.0), 50.0),
                        ((2000.0, 2000.0), 1000.0)):
        made = syn.session(6.0, motion=syn.wander(), hand_rate=rates[0], robot_rate=rates[1])
        summary, _ = run(made)
        assert summary['arms']['right']['grid']['rate_hz'] == pytest.approx(grid, rel=1e-6)


def test_two_early_messages_do_not_set_the_grid():
    """A burst of two, then silence until the stack is up: the rate comes from the stack."""
    made = two_streams(40.0)
    made._messages = [one for one in made._messages if one[0] > syn.ns(20.0)]
    made.put(0.5, '/hand', syn.PoseSample(syn.ns(0.4995), np.zeros(3), None, 'op'))
    summary, windows = run(made)
    assert summary['arms']['right']['grid']['rate_hz'] == pytest.approx(100.0)
    assert len(windows) <= 12
    assert syn.metrics(summary)['tracking_error_max_norm']['value'] < 2e-3
