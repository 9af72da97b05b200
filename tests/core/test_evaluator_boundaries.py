# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Clutch, settling and changes of mapping: which cells count, for whom, to the cell."""

from __future__ import annotations

import numpy as np
import pytest
import synthetic_session as syn
from hypothesis import given, settings
from hypothesis import strategies as st

from teleop_eval.core.boundaries import Boundaries
from teleop_eval.core.streams import HeldState
from teleop_eval.core.window import Span

CELL_NS, SETTLING_NS = 10_000_000, 1_000_000_000
MAPPINGS = {'mappings__direct__kind': 'task_space', 'mappings__mirror__kind': 'task_space',
            'mappings__mirror__scale': 0.5, 'active_mapping__topic': '/mapping'}


def run(made, **parameters):
    """Return summary, windows and the evaluator."""
    target = syn.evaluator(syn.arm_parameters(**parameters))
    windows = syn.feed(target, made.messages())
    return syn.closed(target), windows, target


def brute_cells(cells, engaged_changes, mapping_changes):
    """
    Return per cell (engaged, usable, stretch, label) straight from the rule.

    A cell counts if it is engaged and under one mapping from its start to its end, and no
    boundary lies less than the settling time before it.
    """
    def at(changes, t, default):
        value = default
        for when, what in changes:
            if when <= t:
                value = what
        return value

    def real(changes, default):
        found, before = [], default
        for when, what in changes:
            if what != before:
                found.append(when)
            before = what
        return found

    edges = sorted(set(real(engaged_changes, None) + real(mapping_changes, None)))
    result = []
    for k in range(cells):
        start, end = k * CELL_NS, (k + 1) * CELL_NS
        inside = any(start < edge < end for edge in edges)
        engaged = at(engaged_changes, start, False) is True and not inside
        label = at(mapping_changes, start, None)
        before = [edge for edge in edges if edge <= start]
        settled = not before or start - before[-1] >= SETTLING_NS
        result.append((engaged, engaged and settled and label is not None,
                       len([edge for edge in edges if edge <= start]), label))
    return result


times = st.lists(st.integers(0, 7_990), max_size=8, unique=True).map(
    lambda found: [t * 1_000_000 for t in sorted(found)])


@settings(max_examples=80, deadline=None)
@given(times, times, st.data())
def test_cells_by_brute_force(clutch_times, mapping_times, data):
    clutch = [(t, data.draw(st.booleans())) for t in clutch_times]
    mapping = [(t, data.draw(st.sampled_from(['a', 'b', 'c']))) for t in mapping_times]
    engaged, active = HeldState('engaged', '/e'), HeldState('active_mapping', '/m')
    boundaries = Boundaries(engaged, active, None)
    for state, changes in ((engaged, clutch), (active, mapping)):
        for when, what in changes:
            state.add(when, what, None)
    found, begun = [], []
    for window in range(4):
        span = Span(0, CELL_NS, 200 * window, 200)
        states = boundaries.states(span, settling_ns=SETTLING_NS)
        names = [None if k < 0 else boundaries.labels[k] for k in states.label]
        found += zip(states.engaged.tolist(), states.usable.tolist(), states.run.tolist(),
                     names, strict=True)
        begun += [boundaries.labels[k] for k in states.engagements]
        for state in (engaged, active):
            state.close(span.end_ns)
    expected = brute_cells(800, clutch, mapping)
    assert [one[:2] + one[3:] for one in found] == [one[:2] + one[3:] for one in expected]
    # Stretches are numbered in any way, but change where they must.
    for k in range(1, 800):
        assert (found[k][2] != found[k - 1][2]) == (expected[k][2] != expected[k - 1][2])
    rises = [when for (when, what), before in zip(
        clutch, [False] + [what for _, what in clutch], strict=False) if what and not before]
    labelled = [t for t in rises if any(when < 8_000_000_000 for when, _ in mapping)]
    assert len(begun) == len(labelled)
    for rise, label in zip(labelled, begun, strict=True) if len(mapping) == 1 else ():
        assert label == mapping[0][1] and rise >= 0


def clutch_feed(changes, end=30.0, **more):
    made = syn.session(end, motion=syn.wander(), **more)
    for when, value in changes:
        made.flag(when, '/engaged', value)
    return made


def test_disengaged_and_settling_time_are_left_out_to_the_cell():
    """Grid 100 Hz from 0.003 s; stamp minus receive time is -2 ms for the clutch as well."""
    changes = [(0.001, False), (5.005, True), (12.005, False), (15.005, True), (21.005, False)]
    summary, windows, _ = run(clutch_feed(changes), **syn.TASK, engaged__topic='/engaged')
    found = syn.metrics(summary)
    # Engagements lie on cell edges: 5.003 s and so on.
    assert found['engaged_time_s']['value'] == pytest.approx(7.0 + 6.0)
    assert found['engaged_time_s']['samples'] == 1300
    assert found['tracking_error_rms_norm']['samples'] == 600 + 500
    assert found['engagements']['value'] == 2.0
    assert found['engagement_rate_per_min']['value'] == pytest.approx(2 * 60.0 / 13.0)
    empty = [w for w in windows if w.start_ns > syn.ns(22.0)]
    assert empty
    for window in empty:
        assert window.metrics['tracking_error_rms_norm'].status == 'insufficient'


def test_clutch_inside_a_cell_spoils_that_cell():
    changes = [(0.001, False), (5.009, True), (12.001, False)]
    summary, _, _ = run(clutch_feed(changes), **syn.TASK, engaged__topic='/engaged')
    found = syn.metrics(summary)
    # Engaged from 5.007 to 11.999 s: whole cells from 5.013 to 11.993 s, settled from 6.013 s.
    assert found['engaged_time_s']['samples'] == 698
    assert found['tracking_error_rms_norm']['samples'] == 598


@pytest.mark.parametrize('settling', [0.0, 0.5, 3.0])
def test_settling_time_is_a_parameter(settling):
    made = clutch_feed([(0.001, False), (5.005, True)], 15.003)
    target = syn.evaluator(syn.arm_parameters(**syn.TASK, engaged__topic='/engaged'),
                           **{'time.settling_s': settling})
    syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target))
    assert found['tracking_error_rms_norm']['samples'] == pytest.approx(
        1000 - 100 * settling, abs=2)


def test_settling_lasts_at_least_as_long_as_the_delay():
    """Observed delay 0.8 s, settling 0.2 s: after an engagement 0.8 s are left out."""
    made = clutch_feed([(0.001, True), (20.005, False), (21.005, True)], 30.0, delay=0.8)
    target = syn.evaluator(syn.arm_parameters(**syn.TASK, engaged__topic='/engaged'),
                           **{'time.settling_s': 0.2})
    windows = syn.feed(target, made.messages())
    syn.closed(target)
    again = next(w for w in windows if w.start_ns <= syn.ns(21.0) < w.end_ns)
    # In this window: 1.0 s disengaged, then 0.8 s of settling.
    assert again.metrics['tracking_error_rms_norm'].samples == pytest.approx(20, abs=1)


def test_engaged_from_the_start_is_one_engagement():
    """Whether the latched message comes just before or just after the first sample."""
    for when in (-0.5, 0.0, 0.001):
        summary, _, _ = run(clutch_feed([(when, True)], 12.0), **syn.TASK,
                            engaged__topic='/engaged')
        assert syn.metrics(summary)['engagements']['value'] == 1.0
    summary, _, _ = run(clutch_feed([(when, False)], 12.0), **syn.TASK, engaged__topic='/engaged')
    assert syn.metrics(summary)['engagements']['value'] == 0.0
    assert syn.metrics(summary)['engagement_rate_per_min']['status'] == 'insufficient'
    assert syn.metrics(summary)['tracking_error_rms_norm']['status'] == 'insufficient'


def test_clutch_that_never_came_is_said():
    summary, _, _ = run(syn.session(12.0, motion=syn.wander()), **syn.TASK,
                        engaged__topic='/engaged')
    assert any('/engaged' in text and 'engaged' in text for text in summary['problems'])


def test_repeated_states_are_no_changes():
    """A clutch published at 50 Hz is engaged once."""
    made = syn.session(12.0, motion=syn.wander())
    for k in range(600):
        made.flag(0.02 * k, '/engaged', True)
        made.text(0.02 * k, '/mapping', 'direct')
    summary, _, target = run(made, **MAPPINGS, engaged__topic='/engaged')
    found = syn.metrics(summary)
    assert found['engagements']['value'] == 1.0
    assert found['tracking_error_rms_norm']['samples'] > 1090
    assert len(target.arms['right'].states['engaged'].known()) == 1


def test_robot_side_is_shifted_by_the_delay():
    """
    What the robot still does after the clutch opens belongs to the motion before it.

    With delay D, engaged for 6 s at a time: settled motion of the operator is followed by the
    robot D later, and all of it counts.
    """
    delay, changes = 0.5, [(0.001, True)]
    for k in range(4):
        changes += [(20.005 + 8.0 * k, False), (22.005 + 8.0 * k, True)]
    made = clutch_feed(changes, 52.0, delay=delay)
    summary, windows, _ = run(made, **syn.TASK, engaged__topic='/engaged')
    found = syn.metrics(summary)
    for window in windows:
        if window.start_ns > syn.ns(12.0):
            compensated = window.metrics['tracking_error_compensated_rms_norm']
            assert compensated.status != 'ok' or compensated.value < 5e-3
    # 1000 cells from 10 to 20 s, then 5 s a time, each moved by the delay, and 1 s of the end.
    # From 8 s on the delay is known; the latency window needs 10 s.
    raw = found['tracking_error_rms_norm']['samples']
    assert found['tracking_error_compensated_rms_norm']['samples'] == pytest.approx(
        raw - 800, abs=5)


def test_correlation_never_spans_a_boundary():
    """Engaged 3 s at a time, the robot jumps while the clutch is open: the delay is still told."""
    motion, made, delay = syn.wander(), syn.Feed(), 0.1
    t = syn.clock(0.0, 60.0, 100.0)
    made.poses('/hand', t, 0.6 * motion(t))
    t = syn.clock(0.0, 60.0, 125.0, phase=0.6)
    offset = 0.2 * np.column_stack([np.floor(t / 6.0) % 2, np.floor(t / 6.0) % 3 - 1, 0 * t])
    made.joints('/joints', t, syn.joints_for(motion(t - delay) + offset))
    for k in range(10):
        made.flag(6.0 * k + 0.3, '/engaged', True).flag(6.0 * k + 5.8, '/engaged', False)
    summary, windows, _ = run(made, **syn.TASK, engaged__topic='/engaged')
    latency = syn.metrics(summary)['latency_s']
    assert latency['status'] == 'ok'
    assert latency['value'] == pytest.approx(delay, abs=2e-3)
    estimates = [w.metrics['latency_s'].value for w in windows
                 if w.metrics['latency_s'].value is not None]
    assert estimates == pytest.approx([delay] * len(estimates), abs=3e-3)


def switching(end, times_labels, *, scale=0.5):
    """Return a session in which 'mirror' moves the robot half as far as 'direct'."""
    motion, made = syn.wander(), syn.Feed()
    t = syn.clock(0.0, end, 100.0)
    made.poses('/hand', t, 0.6 * motion(t))
    t = syn.clock(0.0, end, 100.0, phase=0.6)
    names = np.full(len(t), '', dtype=object)
    for when, label in times_labels:
        made.text(when, '/mapping', label)
        # While it settles the robot goes over to the new mapping.
        names[t >= when + 0.1] = label
    factor = np.where(names == 'mirror', scale, 1.0)
    made.joints('/joints', t, syn.joints_for(factor[:, None] * motion(t)))
    return made


def test_each_mapping_gets_its_own_time():
    summary, windows, _ = run(
        switching(40.0, [(0.001, 'direct'), (13.005, 'mirror'), (27.005, 'direct')]), **MAPPINGS)
    direct, mirror = syn.metrics(summary), syn.metrics(summary, 'mirror')
    assert direct['engaged_time_s']['value'] == pytest.approx(13.0 + 13.0, abs=0.03)
    assert mirror['engaged_time_s']['value'] == pytest.approx(14.0)
    assert mirror['tracking_error_rms_norm']['samples'] == 1300
    assert direct['tracking_error_rms_norm']['samples'] == pytest.approx(1300 + 1200, abs=3)
    # Either is followed exactly, so an error would be the other one's time.
    for found in (direct, mirror):
        assert found['tracking_error_max_norm']['value'] < 2e-3
    assert {w.mapping for w in windows} == {'direct', 'mirror'}
    crossing = next(w for w in windows if w.start_ns < syn.ns(13.0) < w.end_ns)
    assert crossing.mapping == 'mirror'
    assert list(summary['arms']['right']['mappings']) == ['direct', 'mirror']


def test_mapping_switched_many_times_a_minute():
    changes = [(0.001 + 2.5 * k, ('direct', 'mirror')[k % 2]) for k in range(24)]
    summary, windows, target = run(switching(60.0, changes), **MAPPINGS)
    direct, mirror = syn.metrics(summary), syn.metrics(summary, 'mirror')
    for found in (direct, mirror):
        # 12 turns of 2.5 s, of which 1 s settles.
        assert found['tracking_error_rms_norm']['samples'] == pytest.approx(12 * 150, abs=120)
        assert found['tracking_error_max_norm']['value'] < 2e-3
        assert found['engaged_time_s']['value'] == pytest.approx(30.0, abs=0.3)
    for window in windows:
        for metric in window.metrics.values():
            assert metric.status == 'ok' or metric.reason
    assert len(target.arms['right'].boundaries.labels) == 2


def test_delay_of_a_mapping_serves_when_it_comes_back():
    """Within latency.max_age_s, the delay observed under a mapping serves it again."""
    changes = [(0.001, 'direct'), (14.005, 'mirror'), (20.005, 'direct')]
    summary, windows, _ = run(switching(30.0, changes), **MAPPINGS)
    back = [w for w in windows if syn.ns(22.0) <= w.start_ns < syn.ns(24.0)]
    compensated = back[0].metrics['tracking_error_compensated_rms_norm']
    assert compensated.status == 'ok'
    assert compensated.details['delay_age_s'] > 5.0
    between = [w for w in windows if syn.ns(16.0) <= w.start_ns < syn.ns(18.0)]
    assert between[0].mapping == 'mirror'
    assert between[0].metrics['tracking_error_compensated_rms_norm'].status != 'ok'


def test_unknown_label_is_measured_without_a_model():
    made = syn.session(24.0, motion=syn.wander(), delay=0.1)
    made.text(0.0, '/mapping', 'secret')
    summary, windows, _ = run(made, **MAPPINGS)
    found = syn.metrics(summary, 'secret')
    assert found['tracking_error_rms_norm']['status'] == 'not_configured'
    assert 'secret' in found['tracking_error_rms_norm']['reason']
    assert found['workspace_overlap']['status'] == 'not_configured'
    assert found['latency_s']['value'] == pytest.approx(0.1, abs=1e-3)
    assert found['latency_s']['details']['space'] == 'hand_to_tool'
    assert found['reach_p50_norm']['status'] == 'ok'
    assert {w.mapping for w in windows} == {'secret'}


def test_no_label_means_no_window():
    made = syn.session(12.0, motion=syn.wander())
    made.text(6.0, '/mapping', 'direct')
    summary, windows, _ = run(made, **MAPPINGS)
    assert windows[0].end_ns > syn.ns(6.0)
    assert syn.metrics(summary)['tracking_error_rms_norm']['samples'] == pytest.approx(
        500, abs=3)
    summary, windows, _ = run(syn.session(12.0, motion=syn.wander()), **MAPPINGS)
    assert windows == [] and summary['arms']['right']['mappings'] == {}
    assert any('/mapping' in text for text in summary['problems'])


def test_empty_label_ends_the_mapping():
    made = syn.session(20.0, motion=syn.wander())
    made.text(0.0, '/mapping', 'direct').text(8.005, '/mapping', '').text(
        14.005, '/mapping', 'direct')
    summary, _, _ = run(made, **MAPPINGS)
    assert syn.metrics(summary)['engaged_time_s']['value'] == pytest.approx(14.0, abs=0.03)


def test_reset_keeps_mapping_and_clutch_in_force():
    """They are latched: no new message comes after a reset."""
    from teleop_eval.core.evaluator import EVENT_TOPIC
    made = syn.session(26.0, motion=syn.wander(), delay=0.1)
    made.text(0.0, '/mapping', 'direct').flag(0.0, '/engaged', True)
    made.text(10.0, EVENT_TOPIC, 'reset')
    summary, windows, _ = run(made, **MAPPINGS, engaged__topic='/engaged')
    found = syn.metrics(summary)
    assert found['engaged_time_s']['value'] == pytest.approx(16.0, abs=0.03)
    assert found['engagements']['value'] == 1.0
    assert summary['arms']['right']['segments'] == 1
    assert any('reset' in note for note in summary['notes'])
    assert summary['arms']['right']['inputs']['hand']['messages'] == 1600
    # Windows closed before it were not lost.
    assert min(w.start_ns for w in windows) < syn.ns(1.0)
