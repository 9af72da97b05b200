# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The latency's line of /diagnostics: which delay it shows, and how long its level is held."""

from __future__ import annotations

import re

import numpy as np
import pytest
import synthetic_session as syn

from teleop_eval.core.results import LEVEL_ERROR, LEVEL_OK, LEVEL_WARN


def session(end, late, moving, *, rate=50.0):
    """Return hand and robot; the robot is `late` (s) and both move only while `moving`."""
    motion, made = syn.wander(), syn.Feed()

    def moved(times):
        """Return the motion, with a clock that stands while nothing shall move."""
        passed = np.zeros_like(times)
        for start, stop in moving:
            passed += np.clip(times, start, stop) - start
        return motion(passed)

    t = syn.clock(0.0, end, rate)
    made.poses('/hand', t, 0.6 * moved(t))
    t = syn.clock(0.0, end, rate, phase=0.6)
    return made.joints('/joints', t, syn.joints_for(moved(t - late(t))))


def latency_lines(made, **parameters):
    """Return (seconds, line) every second, and the receive times of windows with a value."""
    target = syn.evaluator(syn.arm_parameters(**{**syn.TASK, **parameters}))
    found, valid, next_s = [], [], 0
    for message in made.messages():
        target.add(*message)
        valid += [window.receive_ns for window in target.poll()
                  if window.metrics['latency_s'].value is not None]
        if message[0] >= syn.ns(next_s):
            found.append(((message[0] - syn.BASE_NS) / 1e9, target.diagnostics(message[0])[2]))
            next_s += 1
    return found, [(ns - syn.BASE_NS) / 1e9 for ns in valid]


def test_level_is_held_with_its_age_and_let_go_after_a_minute():
    """350 ms late until all motion ends at 24 s; the last value serves for 60 s."""
    lines, valid = latency_lines(session(100.0, lambda t: 0.35, [(0.0, 24.0)]))
    last_s = valid[-1]
    assert 24.0 < last_s < 34.0
    before = next(line for now_s, line in lines if now_s > 22.0)
    assert before.level == LEVEL_ERROR
    assert re.fullmatch(r'ideal command -> robot 35\d\.\d \+- \d\.\d ms; median of 3 windows '
                        r'35\d\.\d ms, ERROR from 300 ms', before.message)
    held = [(now_s, line) for now_s, line in lines if last_s + 2.5 < now_s <= last_s + 60.0]
    gone = [(now_s, line) for now_s, line in lines if now_s > last_s + 60.0]
    assert len(held) > 50 and len(gone) > 5
    for now_s, line in held:
        assert line.level == LEVEL_ERROR
        assert '300' not in line.message  # nothing of now is compared with the limit
        age = float(line.values['age of last value (s)'])
        assert age == pytest.approx(now_s - last_s, abs=0.1)
        shown = re.fullmatch(
            r'not observed now \((.*)\); last ideal command -> robot 35\d\.\d ms, '
            r'([\d.]+) s old; level held until it is 60 s old', line.message)
        assert shown and float(shown[2]) == pytest.approx(age, abs=0.5)
        assert 'move' in shown[1]
    for _, line in gone:
        assert line.level == LEVEL_OK
        assert re.fullmatch('unobservable: [a-z].*move.*', line.message)
        assert not re.search(r'ms|held|old', line.message)
        assert 'last value (s)' not in line.values


@pytest.mark.parametrize(('max_age_s', 'level'), [(60.0, LEVEL_ERROR), (10.0, LEVEL_WARN)])
def test_a_level_that_was_let_go_does_not_come_back_by_hysteresis(max_age_s, level):
    """
    350 ms, 25 s of rest, then 285 ms: within the hysteresis below 300 ms.

    While the old value serves the ERROR goes on; once it is too old 285 ms begins anew as WARN.
    """
    made = session(70.0, lambda t: np.where(t < 36.0, 0.35, 0.285), [(0.0, 24.0), (49.0, 70.0)])
    target = syn.evaluator({**syn.arm_parameters(**syn.TASK), 'latency.max_age_s': max_age_s})
    messages = made.messages()
    for message in messages:
        target.add(*message)
    line = target.diagnostics(messages[-1][0])[2]
    assert line.level == level
    assert 'median of 3 windows 28' in line.message
    assert ('ERROR until below 270 ms' if level == LEVEL_ERROR else 'WARN from 150 ms') in (
        line.message)


def test_level_is_held_until_three_windows_in_a_row():
    """After a rest the delay is small, but one value alone lowers no level."""
    made = session(60.0, lambda t: np.where(t < 30.0, 0.35, 0.05), [(0.0, 24.0), (40.0, 60.0)])
    lines, valid = latency_lines(made)
    again = [second for second in valid if second > 40.0]
    first = next(line for now_s, line in lines if now_s > again[0])
    assert first.level == LEVEL_ERROR
    assert re.fullmatch(r'ideal command -> robot \d+\.\d \+- \d\.\d ms; level held until '
                        '3 windows in a row tell the delay', first.message)
    third = next(line for now_s, line in lines if now_s > again[2])
    assert third.level == LEVEL_OK and 'held' not in third.message


def with_command(end, *, lag, response):
    """Return a session with a command `lag` after the hand and a robot `response` later."""
    motion = syn.wander()
    made = syn.session(end, motion=motion, delay=lag + response)
    t = syn.clock(0.0, end, 100.0, phase=0.8)
    return made.joints('/command', t, syn.joints_for(motion(t - lag)))


def line_of(made, **parameters):
    target = syn.evaluator(syn.arm_parameters(command__topic='/command', **parameters))
    messages = made.messages()
    for message in messages:
        target.add(*message)
    return target.diagnostics(messages[-1][0])[2]


@pytest.mark.parametrize('why', ['no operator', 'silent operator', 'mapping without its input'])
def test_without_an_ideal_command_the_line_follows_command_to_robot(why):
    """There is no ideal command to compare with, but the robot still follows its command late."""
    made = with_command(24.0, lag=0.04, response=0.2)
    if why == 'silent operator':
        made._messages = [one for one in made._messages if one[3] != '/hand']
    parameters = dict(syn.TASK)
    if why == 'no operator':
        parameters = {'operator__hand_topic': None}
    elif why == 'mapping without its input':
        parameters['mappings__direct__kind'] = 'joint_space'
        for name in syn.JOINTS:
            parameters[f'mappings__direct__joints__{name}__source'] = f'o_{name}'
    line = line_of(made, **parameters)
    assert line.level == LEVEL_WARN
    assert re.fullmatch(r'command -> robot (200\.\d|199\.\d) \+- \d\.\d ms; median of 3 windows '
                        r'(200\.\d|199\.\d) ms, WARN from 150 ms', line.message)


def test_of_a_late_chain_the_larger_part_is_named():
    line = line_of(with_command(24.0, lag=0.15, response=0.05), **syn.TASK)
    assert line.level == LEVEL_WARN
    assert re.search(r'^ideal command -> robot (200\.\d|199\.\d) .*; '
                     r'mostly ideal command -> command, (150\.\d|149\.\d) ms$', line.message)


def test_hand_to_tool_is_called_so():
    """Without a mapping model the two ends are compared as they are."""
    made = syn.session(24.0, motion=syn.wander(), delay=0.1)
    target = syn.evaluator(syn.arm_parameters())
    messages = made.messages()
    for message in messages:
        target.add(*message)
    line = target.diagnostics(messages[-1][0])[2]
    assert re.fullmatch(r'hand -> tool 100\.\d \+- \d\.\d ms \(the mapping is not modelled\)',
                        line.message)


def test_robot_alone_has_nothing_to_be_compared_with():
    t = syn.clock(0.0, 14.0, 100.0)
    made = syn.Feed().joints('/joints', t, syn.joints_for(syn.wander()(t)))
    target = syn.evaluator(syn.arm_parameters(operator__hand_topic=None))
    messages = made.messages()
    for message in messages:
        target.add(*message)
    line = target.diagnostics(messages[-1][0])[2]
    assert line.level == LEVEL_OK and line.message.startswith('nothing to compare: ')


def test_reasons_are_in_the_names_of_the_two_sides():
    """The robot creeps: the 'response' of the estimate is called the robot."""
    motion = syn.wander()
    made = syn.session(24.0, motion=motion, delay=0.1,
                       follow=lambda u: 0.4 * np.array([1.0, 0.2, 0.2]) + 1e-3 * u)
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    messages = made.messages()
    for message in messages:
        target.add(*message)
    line = target.diagnostics(messages[-1][0])[2]
    assert re.fullmatch(r'unobservable: the robot hardly moves: \d\.\d{4} arm lengths/s RMS in '
                        r'the band, 0\.0200 arm lengths/s are needed', line.message)
