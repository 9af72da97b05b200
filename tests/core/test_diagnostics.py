# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The lines of /diagnostics: what they say when there is no number of now, and their levels."""

from __future__ import annotations

import re

import numpy as np
import pytest
import synthetic_session as syn

from teleop_eval.core.evaluator import EVENT_TOPIC
from teleop_eval.core.results import LEVEL_ERROR, LEVEL_OK, LEVEL_STALE, LEVEL_WARN

CONCERNS = ('inputs', 'tracking', 'latency', 'workspace')
MEASURED = CONCERNS[1:]


def asked(target, now_s):
    """Return the lines by concern at a time; every message has to read well."""
    lines = {line.name.removeprefix('right: '): line for line in target.diagnostics(
        now_s if now_s > syn.BASE_NS else syn.ns(now_s))}
    assert tuple(lines) == CONCERNS
    for line in lines.values():
        assert line.message == line.message.strip() and line.message
        assert not re.search(r'\.[,;:)]|[.,;:]$|  ', line.message), line.message
    return lines


def fed(made, **parameters):
    """Return an evaluator that has taken a feed."""
    flat = {key: parameters.pop(key) for key in list(parameters) if '.' in key}
    target = syn.evaluator({**syn.arm_parameters(**{**syn.TASK, **parameters}), **flat})
    for message in made.messages():
        target.add(*message)
    return target


def test_running_well_is_numbers_and_nothing_else():
    lines = asked(fed(syn.session(30.0, motion=syn.wander(), delay=0.1)), 30.0)
    assert {line.level for line in lines.values()} == {LEVEL_OK}
    assert lines['inputs'].message == 'all inputs arrive'
    assert re.fullmatch(r'tracking error 0\.\d{3} arm lengths RMS, 0\.00\d with the delay '
                        r'taken out; mostly response delay: 0\.\d{3} arm lengths, 100 ms .*',
                        lines['tracking'].message)
    assert re.fullmatch(r'ideal command -> robot 100\.\d \+- 0\.\d ms', lines['latency'].message)
    assert re.fullmatch(r'\w+ is \d+\.\d% of its span from a limit', lines['workspace'].message)


def test_the_mapping_s_part_is_said_to_be_between_hand_and_tool():
    """It is none of the tracking error before it in the line, and can be larger than that."""
    made = syn.session(30.0, motion=syn.wander(), delay=0.1, follow=lambda u: 1.5 * u)
    line = asked(fed(made, mappings__direct__scale=1.5), 30.0)['tracking']
    found = re.fullmatch(r'tracking error (0\.\d{3}) arm lengths RMS, 0\.\d{3} with the delay '
                         r'taken out; between hand and tool mostly mapping: (0\.\d{3}) arm '
                         r'lengths', line.message)
    assert found, line.message
    # Half of the hand's distance from the shoulder, which is about 0.48 arm lengths.
    assert float(found[2]) == pytest.approx(0.24, abs=0.02)
    assert float(found[1]) < 0.5 * float(found[2])
    assert float(line.values['mapping RMS (arm lengths)']) == pytest.approx(
        float(found[2]), abs=6e-4)
    assert set(line.values) >= {'response delay RMS (arm lengths)', 'residual RMS (arm lengths)'}


@pytest.mark.parametrize(('settings', 'limits'), [
    ({}, {'tracking': 3.5, 'latency': 3.5, 'workspace': 3.5}),
    ({'time.window_s': 1.0, 'latency.hop_s': 3.0, 'time.lateness_s': 0.25,
      'thresholds.stale_s': 2.0}, {'tracking': 3.25, 'latency': 5.25, 'workspace': 3.25}),
])
def test_lines_become_stale_when_their_windows_stay_away(settings, limits):
    """The limit is the windows' distance, plus lateness, plus the silence borne of an input."""
    target, closed, latencies = fed(syn.Feed(), **settings), [], {}
    for message in syn.session(30.0, motion=syn.wander(), delay=0.1).messages():
        target.add(*message)
        for window in target.poll():
            closed.append(window.receive_ns)
            latencies.setdefault(window.metrics['latency_s'].value, window.receive_ns)
    last = {'tracking': closed[-1], 'workspace': closed[-1],
            'latency': list(latencies.values())[-1]}
    for concern, limit_s in limits.items():
        at = last[concern] + round(limit_s * 1e9)
        before, after = (asked(target, at)[concern], asked(target, at + 1_000_000)[concern])
        assert before.level == LEVEL_OK and 'no new window' not in before.message
        assert after.level == LEVEL_STALE
        age = f'{limit_s + 1e-3:.1f} s'
        assert after.message.startswith(f'no new window for {age}, all inputs are silent; last')
    late = asked(target, 100.0)
    assert {late[concern].level for concern in CONCERNS} == {LEVEL_STALE}
    for concern, number in (('tracking', r'last tracking error 0\.\d{3} arm lengths RMS'),
                            ('latency', r'last ideal command -> robot 100\.\d ms'),
                            ('workspace', r'last limit margin \d+\.\d% of the span of \w+')):
        age = round((syn.ns(100.0) - last[concern]) / 1e9)
        assert re.fullmatch(f'no new window for {age} s, all inputs are silent; {number}',
                            late[concern].message)
        # Numbers under the keys of now would be taken for those of now.
        assert all('age' in key or 'last' in key for key in late[concern].values)


def test_a_stale_latency_tells_the_age_of_a_value_older_than_its_window():
    """The robot stands still from 24 s on; then all inputs stop."""
    motion = syn.wander()
    target = fed(syn.session(44.0, motion=lambda t: motion(np.minimum(t, 24.0)), delay=0.1))
    line = asked(target, 50.0)['latency']
    assert line.level == LEVEL_STALE
    age = float(line.values['age of last value (s)'])
    assert 15.0 < age < 25.0
    assert line.message.endswith(f'last ideal command -> robot 100.0 ms, {age:.0f} s old')


def test_one_silent_input_is_named_and_the_others_go_on():
    """Windows still close without the hand, so that nothing is stale, but nothing is made up."""
    made = syn.session(40.0, motion=syn.wander(), delay=0.1)
    made._messages = [one for one in made._messages
                      if not (one[3] == '/hand' and one[0] > syn.ns(20.0))]
    lines = asked(fed(made), 40.0)
    assert lines['inputs'].level == LEVEL_STALE
    assert {lines[concern].level for concern in MEASURED} == {LEVEL_OK}
    assert lines['tracking'].message == 'no tracking error: /hand is silent'
    assert re.fullmatch(r'not observed now \(/hand is silent\); last ideal command -> robot '
                        r'100\.\d ms, \d+ s old', lines['latency'].message)
    assert 'of its span from a limit' in lines['workspace'].message


def test_robot_that_falls_silent():
    made = syn.session(40.0, motion=syn.wander(), delay=0.1)
    made._messages = [one for one in made._messages
                      if not (one[3] == '/joints' and one[0] > syn.ns(20.0))]
    lines = asked(fed(made), 40.0)
    assert lines['workspace'].message == 'no limit margin: /joints is silent'
    assert lines['tracking'].message == 'no tracking error: /joints is silent'


def test_a_disengaged_arm_is_not_stale_and_shows_no_old_number():
    made = syn.session(60.0, motion=syn.wander(), delay=0.1)
    made.flag(0.0, '/engaged', True).flag(21.0, '/engaged', False)
    made.flag(30.0, '/engaged', False).flag(50.0, '/engaged', True)
    target, said = fed(syn.Feed(), engaged__topic='/engaged'), {}
    for message in made.messages():
        target.add(*message)
        second = (message[0] - syn.BASE_NS) // 10 ** 9
        if second not in said:
            said[second] = asked(target, message[0])
    for second in range(22, 50):
        lines = said[second]
        assert {line.level for line in lines.values()} == {LEVEL_OK}
        for concern in ('tracking', 'workspace'):
            assert re.fullmatch(r'disengaged for [\d.]+ s', lines[concern].message)
            assert list(lines[concern].values) == ['disengaged for (s)']
            since = float(lines[concern].values['disengaged for (s)'])
            assert since == pytest.approx(second - 21.0, abs=0.1)
        assert re.fullmatch(r'disengaged for [\d.]+ s; last ideal command -> robot '
                            r'100\.\d ms, [\d.]+ s old', lines['latency'].message)
    assert said[40]['tracking'].message == 'disengaged for 19 s'
    assert said[50]['tracking'].message.startswith('no tracking error: no engaged')
    assert said[59]['tracking'].message.startswith('tracking error')
    # Silence while disengaged is silence all the same.
    late = asked(target, 70.0)
    assert {late[concern].level for concern in CONCERNS} == {LEVEL_STALE}


def test_a_clutch_that_never_spoke_and_one_that_was_open_before_a_reset():
    target = fed(syn.session(12.0, motion=syn.wander()), engaged__topic='/engaged')
    assert asked(target, 12.0)['tracking'].message == 'not engaged: no message on /engaged yet'
    made = syn.session(24.0, motion=syn.wander()).flag(4.0, '/engaged', False)
    made.text(10.0, EVENT_TOPIC, 'reset')
    target = fed(made, engaged__topic='/engaged')
    assert asked(target, 24.0)['tracking'].message == 'disengaged for 20 s'


def test_before_the_first_window_the_lines_say_what_they_wait_for():
    made = syn.session(9.0, motion=syn.wander(), start=1.0)
    made.text(0.5, '/description', syn.urdf())
    target = syn.evaluator(syn.arm_parameters(
        robot__description_file=None, robot__description_topic='/description',
        mappings__direct__kind='task_space', active_mapping__topic='/mapping'))
    wanted = [
        (0.4, 'waits for the robot description on /description'),
        (0.9, 'waits for the first message on /hand or /joints'),
        (3.003, 'waits for the end of the warm-up, 3.0 s to go'),
        (8.0, 'waits for the active mapping on /mapping'),
    ]
    messages = made.messages()
    for until_s, words in wanted:
        while messages[0][0] <= syn.ns(until_s):
            target.add(*messages.pop(0))
        lines = asked(target, until_s)
        for concern in MEASURED:
            assert (lines[concern].level, lines[concern].message) == (LEVEL_OK, words)
    target.add(syn.ns(8.0) + 1, '/mapping', syn.TextSample('direct'))
    assert asked(target, 8.1)['workspace'].message == 'waits for its first window of 2 s'


def test_inputs_of_which_none_can_be_used():
    target = fed(syn.Feed())
    target.arms['right'].intakes.clear()
    assert asked(target, 0.0)['tracking'].message == (
        'cannot begin: none of the inputs can be used')


def test_without_an_active_mapping_nothing_is_stale_and_nothing_is_measured():
    made = syn.session(50.0, motion=syn.wander(), delay=0.1)
    made.text(0.0, '/mapping', 'direct').text(20.0, '/mapping', '')
    made.text(40.5, '/mapping', 'direct')
    target, said = fed(syn.Feed(), active_mapping__fixed=None,
                       active_mapping__topic='/mapping'), {}
    for message in made.messages():
        target.add(*message)
        said[(message[0] - syn.BASE_NS) // 100_000_000] = asked(target, message[0])
    for concern in MEASURED:
        assert {said[tenth][concern].level for tenth in range(200, 500)} == {LEVEL_OK}
        assert said[300][concern].message == 'no mapping is active for 10 s'
        assert said[410][concern].message == 'waits for the first window under direct'
    assert said[440]['tracking'].message.startswith('tracking error')
    assert {asked(target, 60.0)[concern].level for concern in MEASURED} == {LEVEL_STALE}


def test_silence_without_an_active_mapping_is_stale():
    made = syn.session(30.0, motion=syn.wander()).text(0.0, '/mapping', 'direct')
    made.text(20.0, '/mapping', '').text(33.0, '/mapping', 'direct')
    target = fed(made, active_mapping__fixed=None, active_mapping__topic='/mapping')
    for now_s, level in ((33.4, LEVEL_OK), (33.6, LEVEL_STALE)):
        assert asked(target, now_s)['tracking'].level == level


def test_numbers_of_one_mapping_are_not_shown_for_the_next():
    made = syn.session(21.0, motion=syn.wander()).text(0.0, '/mapping', 'direct')
    made.text(20.5, '/mapping', 'other')
    target = fed(made, mappings__other__kind='task_space', active_mapping__fixed=None,
                 active_mapping__topic='/mapping')
    lines = asked(target, 21.0)
    assert {lines[c].message for c in MEASURED} == {'waits for the first window under other'}


def test_a_window_that_closes_after_the_switch_may_still_be_of_the_old_mapping():
    """The window to 20 s closes when a sample from after its end has come."""
    made = syn.session(21.0, motion=syn.wander()).text(0.0, '/mapping', 'direct')
    made.text(20.003, '/mapping', 'other')
    target = fed(syn.Feed(), mappings__other__kind='task_space', active_mapping__fixed=None,
                 active_mapping__topic='/mapping')
    late = []
    for message in made.messages():
        target.add(*message)
        late += [window for window in target.poll() if window.receive_ns > syn.ns(20.003)]
        if late:
            assert late[0].mapping == 'direct'
            assert asked(target, message[0])['tracking'].message == (
                'waits for the first window under other')
    assert late


def test_nothing_is_the_larger_part_of_nothing():
    lines = asked(fed(syn.session(24.0, motion=syn.wander())), 24.0)
    assert re.fullmatch(r'tracking error 0\.000 arm lengths RMS, 0\.000 with the delay taken out',
                        lines['tracking'].message)


def test_both_descriptions_are_waited_for():
    target = syn.evaluator(syn.arm_parameters(
        robot__description_file=None, robot__description_topic='/description',
        operator__description_topic='/human', operator__joints_topic='/operator',
        operator__base_link='base', operator__tip_link='tool', operator__hand_topic=None,
        operator__shoulder_m=None, operator__arm_length_m=None))
    both = 'waits for the robot description on /description and '
    one = 'the description of the operator side on /human'
    assert asked(target, 0.0)['tracking'].message == both + one
    target.add(syn.ns(0.1), '/description', syn.TextSample(syn.urdf()))
    assert asked(target, 0.1)['latency'].message == f'waits for {one}'


def test_silence_of_a_command_explains_only_what_needs_it():
    """Disengaged a moment ago and still settling; the command was silent all the time since."""
    motion = syn.wander()
    made, t = syn.session(31.0, motion=motion, delay=0.1), syn.clock(0.0, 12.0, 100.0)
    made.joints('/command', t, syn.joints_for(motion(t)))
    made.flag(0.0, '/engaged', True).flag(14.0, '/engaged', False).flag(30.5, '/engaged', True)
    lines = asked(fed(made, command__topic='/command', engaged__topic='/engaged'), 31.0)
    assert '/command is silent' in lines['inputs'].message
    assert lines['tracking'].message.startswith('no tracking error: no engaged')
    assert lines['latency'].message.startswith('not observed now (no engaged and settled sample')


def test_a_level_of_the_margin_ends_with_the_engagement():
    """From 8.3 s on the margin sinks from 5.4 to 5 %: no WARN begins there, but one goes on."""
    t = syn.clock(0.0, 17.0, 100.0)
    share = np.interp(t, [0.0, 8.05, 8.3, 17.0], [0.3, 0.04, 0.054, 0.0505])
    q = np.zeros((len(t), 6))
    q[:, 2] = syn.REACH_M - share * (syn.REACH_M - 0.05)
    for open_s, level in ((9.5, LEVEL_OK), (None, LEVEL_WARN)):
        made = syn.Feed().joints('/joints', t, q).flag(0.0, '/engaged', True)
        if open_s is not None:
            made.flag(open_s, '/engaged', False).flag(11.0, '/engaged', True)
        target = fed(syn.Feed(), operator__hand_topic=None, engaged__topic='/engaged')
        for message in made.messages():
            target.add(*message)
        assert asked(target, 17.0)['workspace'].level == level


def test_a_new_segment_is_the_reason_for_missing_windows():
    made = syn.session(30.0, motion=syn.wander())
    made.text(20.0, EVENT_TOPIC, 'segment')
    target, said = fed(syn.Feed()), {}
    for message in made.messages():
        target.add(*message)
        said[(message[0] - syn.BASE_NS) // 100_000_000] = asked(target, message[0])
    assert said[220]['tracking'].level == LEVEL_OK
    line = said[245]['tracking']
    assert line.level == LEVEL_STALE
    # The warm-up of 5 s began at 20 s, and the last message before 24.6 s asks.
    assert re.match(r'no new window for 4\.\d s, a new segment warms up, 0\.4 s to go; last '
                    'tracking error', line.message)
    assert said[260]['tracking'].level == LEVEL_OK


def test_levels_follow_the_messages_not_the_questions():
    """
    A latency of 310 ms is an ERROR, and 285 ms with 10 % of hysteresis still is one.

    Who asks for the first time at the end must see the same as who asked all the time.
    """
    motion, made = syn.wander(), syn.Feed()
    t = syn.clock(0.0, 50.0, 100.0)
    made.poses('/hand', t, 0.6 * motion(t))
    q = syn.joints_for(motion(t - np.where(t < 24.0, 0.31, 0.285)))
    made.joints('/joints', t, q)
    messages = made.messages()
    often, once = fed(syn.Feed()), fed(syn.Feed())
    for message in messages:
        often.add(*message)
        once.add(*message)
        asked(often, message[0])
    now_ns = messages[-1][0]
    lines = asked(once, now_ns)
    assert lines == asked(often, now_ns)
    assert lines['latency'].level == LEVEL_ERROR
    assert 'median of 3 windows 285.' in lines['latency'].message
    assert 'ERROR until below 270 ms' in lines['latency'].message


@pytest.mark.parametrize(('margin', 'level', 'words'), [
    (0.045, LEVEL_WARN, ' and approaching, WARN below 5.0%'),
    (0.0525, LEVEL_WARN, ' and approaching, WARN until above 5.5%'),
    (0.057, LEVEL_OK, ''),
])
def test_margin_says_what_holds_its_level(margin, level, words):
    """The boom comes within 4 % of its limit, goes back by a little more, and comes nearer."""
    t = syn.clock(0.0, 12.0, 100.0)
    share = np.interp(t, [0.0, 7.9, 8.0, 9.0, 9.95], [0.3, 0.04, 0.04, margin + 0.01, margin])
    q = np.zeros((len(t), 6))
    q[:, 2] = syn.REACH_M - share * (syn.REACH_M - 0.05)
    often, once = (fed(syn.Feed(), operator__hand_topic=None) for _ in range(2))
    said = {}
    for message in syn.Feed().joints('/joints', t, q).messages():
        often.add(*message)
        once.add(*message)
        for window in often.poll():
            end = round((window.end_ns - syn.BASE_NS) / 1e9)
            said[end] = asked(often, message[0])['workspace']
            if end == 10:
                assert asked(once, message[0])['workspace'] == said[10]
    assert said[8].level == LEVEL_WARN
    assert said[10].level == level
    shown = re.fullmatch(r'boom is (\d\.\d)% of its span from a limit' + re.escape(words),
                         said[10].message)
    assert shown and float(shown[1]) == pytest.approx(100.0 * margin, abs=0.06)


def test_arms_without_limits_say_so():
    text = re.sub('<limit [^>]*>', '', syn.urdf())
    text = text.replace('revolute', 'continuous')
    text = text.replace('"boom" type="prismatic"', '"boom" type="continuous"')
    text = text.replace('<child link="w1"/><origin xyz="0 0 0"/>',
                        '<child link="w1"/><origin xyz="0.7 0 0"/>')
    lines = asked(fed_with(text), 12.0)
    assert lines['workspace'].message == 'no limit margin: no joint of this arm has limits'
    target = syn.evaluator(syn.arm_parameters(**syn.BARE))
    t = syn.clock(0.0, 12.0, 100.0)
    syn.feed(target, syn.Feed().joints('/joints', t, np.zeros((len(t), 2)), ('a', 'b')).messages())
    assert asked(target, 12.0)['workspace'].message == (
        'no limit margin: this arm has no usable robot description')


def fed_with(urdf):
    """Return an evaluator of another robot, whose joints stand still."""
    target = syn.evaluator(syn.arm_parameters(**syn.TASK), urdf)
    t = syn.clock(0.0, 12.0, 100.0)
    made = syn.Feed().joints('/joints', t, np.zeros((len(t), 6)))
    syn.feed(target, made.messages())
    return target
