# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Buffers between arrival and the closing of a window, at their edges."""

from __future__ import annotations

import numpy as np
import pytest

from teleop_eval.core.closing import first_from, may_close, moved_clock
from teleop_eval.core.streams import HeldState, Items, SampledStream


def row(time_ns, value=0.0, *, receive_ns=None):
    return (time_ns if receive_ns is None else receive_ns, time_ns, np.array([value]), None, None)


def stream(times, *, offset_ns=0, held=False, planned=False, max_gap_ns=100):
    made = SampledStream('command', '/command', held=held)
    made.planned = planned
    made.freeze(by_stamp=True, offset_ns=offset_ns, max_gap_ns=max_gap_ns)
    for time_ns in times:
        made.add([row(time_ns, float(time_ns))])
    return made


def test_sample_at_the_watermark_is_in_time_and_one_before_is_late():
    made = stream([0, 50, 90])
    made.close(100)
    made.add([row(99)])
    assert made.counts.late == 1
    made.add([row(100)])
    assert made.counts.late == 1
    # The last one before the boundary stays, to interpolate across it.
    assert made.items(200).times_ns.tolist() == [90, 100]


def test_items_reach_one_sample_beyond_the_end():
    made = stream([0, 10, 20, 30, 40])
    assert made.items(20).times_ns.tolist() == [0, 10, 20]
    assert made.items(21).times_ns.tolist() == [0, 10, 20, 30]
    assert made.items(99).times_ns.tolist() == [0, 10, 20, 30, 40]
    assert stream([]).items(99).values.shape == (0, 0)


def test_a_gap_is_longer_than_the_longest_interval():
    made = stream([0, 100, 201])
    assert (made.counts.gaps, made.counts.gap_ns) == (1, 101)


def test_window_waits_up_to_the_deadline_and_no_longer():
    made = [stream([0, 100], offset_ns=-5), stream([0, 300], offset_ns=-5)]
    for receive_ns, closes in ((100 + 5 + 20, False), (100 + 5 + 21, True)):
        assert may_close([stream([0, 99], offset_ns=-5), made[1]], 100,
                         receive_ns=receive_ns, lateness_ns=20) is closes
    assert may_close(made, 100, receive_ns=0, lateness_ns=20)
    assert not may_close(made, 101, receive_ns=125, lateness_ns=20)


def test_first_sample_from_a_time():
    made = [stream([0, 50]), stream([20, 70])]
    assert first_from(made, 0) == 0
    assert first_from(made, 51) == 70
    assert first_from(made, 71) is None
    assert first_from([], 0) is None


@pytest.mark.parametrize('offsets, moved', [
    ((300, 300), ''), ((300, -150), ''), ((300, -250), 'a'), ((-100, 501), 'b'), ((0, 0), '')])
def test_clock_leaves_the_tolerance_alone_or_against_another(offsets, moved):
    made = []
    for role, offset in zip(('a', 'b'), offsets, strict=True):
        one = SampledStream(role, f'/{role}')
        one.freeze(by_stamp=True, offset_ns=0, max_gap_ns=10 ** 9)
        for k in range(6):
            one.add([row(1000 * k + offset, receive_ns=1000 * k)])
        made.append(one)
    found = moved_clock(made, -10 ** 6, 500e-9)
    assert found == '' if not moved else f'the clock of {moved} moved' in found
    assert moved_clock(made, 4500, 1e-9) == ''


def test_plan_replaces_the_rest_of_the_one_before():
    made = stream([], planned=True)
    made.add([row(10), row(20), row(30)])
    made.add([row(25, 1.0), row(35, 1.0)])
    assert made.items(99).times_ns.tolist() == [10, 20, 25, 35]
    made.close(22)
    # A plan that began before the watermark leads into the next window.
    made.add([row(15, 2.0), row(40, 2.0)])
    assert made.items(99).times_ns.tolist() == [15, 40]
    assert made.counts.late == 0
    made.add([row(60), row(50)])
    assert made.counts.out_of_order == 1


def test_point_of_a_new_plan_takes_the_place_of_the_one_at_its_time():
    made = stream([], planned=True)
    made.add([row(10), row(20), row(30)])
    made.add([row(20, 1.0), row(40, 1.0)])
    items = made.items(99)
    assert items.times_ns.tolist() == [10, 20, 40]
    assert items.values[:, 0].tolist() == [0.0, 1.0, 1.0]
    assert made.counts.out_of_order == 0


def test_late_held_value_holds_from_the_watermark_on():
    made = stream([0, 50], held=True)
    made.close(100)
    made.add([row(60, 1.0)])
    made.add([row(70, 2.0)])
    items = made.items(200)
    assert items.times_ns.tolist() == [50, 100] and items.values[-1] == [2.0]
    assert made.counts.late == 2
    made.add([row(130, 3.0)])
    made.add([row(120, 4.0)])
    assert made.counts.out_of_order == 1


def test_what_no_window_has_used_comes_along():
    made = stream([0, 50, 90, 110])
    made.close(100)
    assert [rows[0][1] for rows in made.remaining()] == [110]
    held = stream([0, 50, 90, 110], held=True)
    held.close(100)
    assert [rows[0][1] for rows in held.remaining()] == [90, 110]


def test_items_joined_and_cut():
    before = Items(np.array([0, 10, 20]), np.array([[0.0], [1.0], [2.0]]), None,
                   np.array([[True], [False], [True]]))
    later = Items(np.array([20, 30]), np.array([[9.0], [3.0]]), None, np.array([[True], [True]]))
    joined = before.followed_by(later)
    assert joined.times_ns.tolist() == [0, 10, 20, 30]
    assert joined.values[:, 0].tolist() == [0.0, 1.0, 9.0, 3.0]
    assert joined.enabled[:, 0].tolist() == [True, False, True, True]
    assert joined.since(15).times_ns.tolist() == [10, 20, 30]
    assert joined.since(20).times_ns.tolist() == [20, 30]
    assert joined.since(-5).times_ns.tolist() == [0, 10, 20, 30]
    empty = Items(np.zeros(0, dtype=np.int64), np.zeros((0, 1)), None, None)
    assert before.followed_by(empty) is before
    assert before.followed_by(Items(
        np.array([0]), np.array([[5.0]]), None, None)).times_ns.tolist() == [0]


def test_state_keeps_changes_only():
    state = HeldState('engaged', '/engaged')
    for time_ns, value in ((10, True), (20, True), (30, False), (40, False), (50, True)):
        state.add(time_ns, value, None)
    assert state.known() == [True, False, True]
    assert state.place(np.array([9, 10, 29, 30, 50])).tolist() == [0, 1, 1, 2, 3]
    assert state.changes(10, 50) == [10, 30]
    state.close(40)
    assert state.known() == [False, True]
    # A late change holds from the watermark on.
    state.add(35, False, 60)
    assert state.changes(0, 100) == [30, 50, 60] and state.counts.late == 1
    state.shift(1000)
    assert state.changes(0, 10 ** 6) == [1030, 1050, 1060] and state.latest is False
