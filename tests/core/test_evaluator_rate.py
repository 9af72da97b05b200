# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Rate input, joystick clutch, velocity commands and anchored mappings in the evaluator."""

from __future__ import annotations

import numpy as np
import pytest
from synthetic_session import (
    REACH_M,
    arm_parameters,
    clock,
    closed,
    evaluator,
    feed,
    joints_for,
    metrics,
    ns,
    session,
    wander,
)
from synthetic_session import Feed as PlainFeed

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.samples import JoySample, PoseSample, TwistSample
from teleop_eval.core.settings import from_parameters

RATE = {'mappings__direct__kind': 'rate', 'active_mapping__fixed': 'direct',
        'operator__rate_topic': '/stick', 'operator__hand_topic': None}
SECONDS = 24.0


class Feed(PlainFeed):
    """Also with sticks and twists."""

    def twists(self, topic, times, values, *, frame='base'):
        """Add twists (n, 6)."""
        for t, row in zip(times, np.array(values, dtype=float), strict=True):
            self.put(t + 0.002, topic, TwistSample(ns(t), row[:3], row[3:], frame))
        return self

    def sticks(self, topic, times, axes, buttons=None):
        """Add joystick states: axes (n, k), buttons (n, m)."""
        for k, t in enumerate(times):
            self.put(t + 0.002, topic, JoySample(
                ns(t), np.array(axes[k], dtype=float),
                np.array([] if buttons is None else buttons[k], dtype=np.int64)))
        return self


def driven(rate_hz=100.0):
    """Return a feed of robot joints of which the tool wanders, its times and its velocities."""
    motion = wander(3, size=0.1)
    made, t = Feed(), clock(0.0, SECONDS, 125.0, phase=0.7)
    made.joints('/joints', t, joints_for(motion(t)))
    t = clock(0.0, SECONDS, rate_hz)
    step = 1e-4
    velocities = REACH_M * (motion(t + step) - motion(t - step)) / (2 * step)
    return made, t, np.column_stack([velocities, 0.0 * velocities])


def test_a_twist_that_is_the_tools_velocity_leaves_no_tracking_error() -> None:
    """The mapping has gain 1 and neither dead band nor cap: w_i is the robot's own velocity."""
    made, t, velocities = driven()
    one = evaluator(arm_parameters(**RATE))
    feed(one, made.twists('/stick', t, velocities).messages())
    found = metrics(closed(one))
    error = found['tracking_error_rms_norm_s']
    # Velocities of 0.1 to 0.3 arm lengths/s; what is left is the curvature within 8 ms.
    assert error['status'] == 'ok' and error['value'] < 2e-3, error
    assert one.problems == []


def test_gain_dead_band_and_cap_reach_the_metrics() -> None:
    """With gain 2 the ideal velocity is twice the robot's: the error is the robot's own speed."""
    made, t, velocities = driven()
    one = evaluator(arm_parameters(**RATE, mappings__direct__gain=2.0))
    feed(one, made.twists('/stick', t, velocities).messages())
    inside = (t > 2.0) & (t < SECONDS - 1.0)
    speed = np.sqrt(np.mean(np.sum(velocities[inside, :3] ** 2, axis=1))) / REACH_M
    assert metrics(closed(one))['tracking_error_rms_norm_s']['value'] == pytest.approx(
        speed, rel=0.03)


def test_joystick_axes_are_picked_and_missing_ones_named() -> None:
    """Axes 4, 3, 2 carry x, y, z; the sticks give -1 to 1 and the gain m/s."""
    made, t, velocities = driven()
    axes = np.zeros((len(t), 5))
    axes[:, 4], axes[:, 3], axes[:, 2] = (velocities[:, :3] / 0.5).T
    given = {'operator__joy_axes': [4, 3, 2, -1, -1, -1], 'mappings__direct__gain': 0.5}
    one = evaluator(arm_parameters(**RATE, **given))
    feed(one, made.sticks('/stick', t, axes).messages())
    assert metrics(closed(one))['tracking_error_rms_norm_s']['value'] < 2e-3
    lacking = evaluator(arm_parameters(**RATE, mappings__direct__gain=0.5))
    feed(lacking, Feed().sticks('/stick', t[:300], axes).messages())
    assert lacking.problems == [
        'right: rate_input (/stick): operator.joy_axes names axis 5, but a message has 5 axes, '
        'counted from 0; set operator.joy_axes to the axes for x, y, z, rx, ry, rz, with -1 for '
        'each that the stick lacks (300 times).']


def test_a_joystick_button_is_the_clutch() -> None:
    """Pressed from 5 to 17 s: 12 s engaged once, whatever else the stick says meanwhile."""
    made, t, velocities = driven()
    buttons = np.zeros((len(t), 3), dtype=int)
    buttons[:, 0] = np.arange(len(t)) % 2
    buttons[:, 2] = (t >= 5.0) & (t < 17.0)
    one = evaluator(arm_parameters(**RATE, engaged__topic='/stick', engaged__button=2))
    feed(one, made.sticks('/stick', t, velocities, buttons).messages())
    found = metrics(closed(one))
    assert found['engagements']['value'] == 1.0
    assert found['engaged_time_s']['value'] == pytest.approx(12.0, abs=0.05)
    odd = evaluator(arm_parameters(**RATE, engaged__topic='/stick', engaged__button=7))
    feed(odd, Feed().sticks('/stick', t[:10], velocities, buttons).messages())
    assert odd.problems == [
        'right: engaged (/stick): engaged.button is 7, but a message has 3 buttons, counted from '
        '0; correct it (10 times).']


def test_a_velocity_command_is_taken_as_one() -> None:
    """A command equal to the ideal velocity: no joint errors, and the budget's command is 0."""
    made, t, velocities = driven()
    made.twists('/stick', t, velocities).twists('/command', t, velocities)
    one = evaluator(arm_parameters(**RATE, command__topic='/command'))
    windows = feed(one, made.messages())
    found = metrics(closed(one))
    assert one.problems == [] and len(windows) > 8
    assert not any(metric.value is not None for window in windows
                   for name, metric in window.metrics.items() if name.startswith('joint_error'))
    assert found['joint_error_rms']['reason'] == 'the command is a tool velocity, not joints'
    assert found['latency_response_s']['status'] == 'ok'
    assert found['latency_response_s']['value'] == pytest.approx(0.0, abs=0.003)


def test_a_stick_that_falls_silent_is_named() -> None:
    """It comes until 4 s and the evaluation begins at 5 s, so no engaged cell has an input."""
    made, t, velocities = driven()
    one = evaluator(arm_parameters(**RATE, engaged__topic='/clutch'))
    made.flag(0.0, '/clutch', False).flag(6.0, '/clutch', True)
    feed(one, made.twists('/stick', t[t < 4.0], velocities[t < 4.0]).messages())
    found = metrics(closed(one))
    for name in ('tracking_error_rms_norm_s', 'turn_rate_error_rms_rad_s'):
        assert (found[name]['status'], found[name]['reason']) == (
            'insufficient', '/stick (rate_input) gave no sample while engaged'), name


def test_velocity_commands_under_a_pose_mapping_are_not_called_silent() -> None:
    """The robot rests, so no delay is seen; the command that comes is not to blame for that."""
    made = session(20.0, motion=lambda times: np.tile([0.5, 0.1, 0.1], (len(times), 1)))
    for moment in clock(0.0, 20.0, 100.0):
        made.put(moment + 0.002, '/command', TwistSample(
            ns(moment), np.array([0.1, 0.0, 0.0]), np.zeros(3), 'base'))
    one = evaluator(arm_parameters(mappings__direct__kind='task_space',
                                   active_mapping__fixed='direct', command__topic='/command'))
    windows = feed(one, made.messages())
    found = metrics(closed(one))
    assert found['budget_residual_rms_norm']['value'] is None
    assert found['budget_command_rms_norm']['reason'] == '/command gives no tool position'
    assert not [name for name, metric in found.items() if 'gave no sample' in metric['reason']]
    assert not [name for window in windows for name, metric in window.metrics.items()
                if 'gave no sample' in metric.reason]


@pytest.mark.parametrize(('topic', 'sample', 'words'), [
    ('/stick', PoseSample(ns(1), np.zeros(3), None, 'a'),
     'poses came where velocities or joystick states are expected'),
    ('/hand', TwistSample(ns(1), np.zeros(3), np.zeros(3), 'a'),
     'velocities can only be a rate input or commands'),
    ('/command', JoySample(ns(1), np.zeros(6), np.zeros(0, dtype=int)),
     'joystick states can only be a rate input'),
    ('/stick', TwistSample(ns(1), np.array([0.0, np.nan, 0.0]), np.array([np.inf, 0.0, 0.0]), ''),
     'y = nan, rx = inf came; messages with NaN or infinity are left out'),
    ('/command', PoseSample(ns(1), np.array([np.nan, 0.0, 0.0]), None, 'base'), 'x = nan came'),
])
def test_what_cannot_serve_is_one_sentence(topic, sample, words) -> None:
    one = evaluator(arm_parameters(**{**RATE, 'operator__hand_topic': '/hand'},
                                   command__topic='/command'))
    one.add(ns(1), topic, sample)
    [problem] = one.problems
    assert words in problem and f'({topic})' in problem


def test_twists_of_another_frame_are_told() -> None:
    one = evaluator(arm_parameters(**RATE))
    times = clock(0.0, 1.0, 100.0)
    made = Feed().twists('/stick', times[:50], np.zeros((50, 6)))
    feed(one, made.twists('/stick', times[50:], np.zeros((50, 6)), frame='tool').messages())
    assert one.problems == ["right: rate_input (/stick): frame_id changed from 'base' to 'tool'; "
                            'only messages in the first frame are used (50 times).']


def test_a_rate_mapping_without_its_topic_says_so() -> None:
    one = evaluator(arm_parameters(**{**RATE, 'operator__rate_topic': None}))
    feed(one, driven()[0].messages())
    found = metrics(closed(one))['tracking_error_rms_norm_s']
    assert (found['status'], found['reason']) == (
        'not_configured', "mapping 'direct' needs operator.rate_topic")


@pytest.mark.parametrize(('axes', 'words'), [
    ([0, 1, 2], 'needs 6 numbers, but has 3'), ([0, 1, 2, 3, 4, -2], 'is -2, outside its range'),
    ([0.0, 1.0, 2.0, 3.0, 4.0, 5.0], 'must be a list of whole numbers'),
    ([True] * 6, 'must be a list of whole numbers')])
def test_joystick_axes_are_whole_numbers(axes, words) -> None:
    with pytest.raises(ConfigError, match=f'operator.joy_axes {words}'):
        from_parameters(arm_parameters(**RATE, operator__joy_axes=axes))


def test_relative_follows_the_clutch_through_the_whole_evaluator() -> None:
    """
    The robot moves by half the hand's motion while engaged, and rests while the hand returns.

    Three engagements, at each of which hand and robot stand elsewhere: only a mapping anchored
    anew at each has no error.
    """
    motion = wander(5, size=0.1)
    shut = [(2.0, 8.0), (9.5, 15.0), (16.5, 23.0)]
    scale = 0.5

    def robot(times):
        """Return the normalised tool positions."""
        u = np.tile([0.45, 0.1, 0.15], (len(times), 1))
        for start, end in shut:
            held = np.clip(times, start, end)
            moved = 0.6 * (motion(held) - motion(np.full(len(times), start)))
            u += scale * moved / REACH_M
        return u
    made = Feed()
    t = clock(0.0, SECONDS, 100.0)
    made.poses('/hand', t, 0.6 * motion(t))
    t = clock(0.0, SECONDS, 125.0, phase=0.7)
    made.joints('/joints', t, joints_for(robot(t)))
    made.flag(0.1, '/clutch', False)
    for start, end in shut:
        made.flag(start, '/clutch', True).flag(end, '/clutch', False)
    given = {'mappings__direct__kind': 'relative', 'active_mapping__fixed': 'direct',
             'mappings__direct__scaling': 'metric', 'engaged__topic': '/clutch'}
    one = evaluator(arm_parameters(**given, mappings__direct__scale=scale))
    feed(one, made.messages())
    found = metrics(closed(one))
    assert found['engagements']['value'] == 3.0
    assert found['tracking_error_max_norm']['value'] < 1e-3
    wrong = evaluator(arm_parameters(**given, mappings__direct__scale=2 * scale))
    feed(wrong, made.messages())
    assert metrics(closed(wrong))['tracking_error_rms_norm']['value'] > 0.03


def test_unmodelled_leaves_the_latency_from_hand_to_tool() -> None:
    motion = wander(7)
    made = session(30.0, motion=motion, delay=0.15)
    one = evaluator(arm_parameters(mappings__vendor__kind='unmodelled'))
    feed(one, made.messages())
    found = metrics(closed(one), 'vendor')
    assert one.problems == []
    assert found['latency_s']['value'] == pytest.approx(0.15, abs=0.005)
    assert found['latency_s']['details']['space'] == 'hand_to_tool'
    for name in ('tracking_error_rms_norm', 'workspace_overlap'):
        assert (found[name]['status'], found[name]['reason']) == (
            'not_configured', "the stack's mapping is not modelled"), name
