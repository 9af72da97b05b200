# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Where clutch and mapping, which have no stamps, are placed among stamped streams."""

from __future__ import annotations

import pytest
import synthetic_session as syn

from teleop_eval.core.timebase import TimeBase


@pytest.mark.parametrize('offsets, common', [
    ({'a': 0, 'b': 10, 'c': 400}, 10), ({'a': 500, 'b': 10, 'c': -400}, 10),
    ({'a': 7, 'b': None}, 7), ({'a': None}, 0), ({}, 0)])
def test_common_offset_is_the_median(offsets, common):
    assert TimeBase('stamp', '', offsets).common_offset_ns == common
    assert TimeBase('receive', '', offsets).common_offset_ns == 0


def test_clutch_goes_by_the_median_offset_of_the_streams():
    """One of three clocks is 0.4 s behind: the clutch keeps to the two others."""
    made, t = syn.session(20.0, motion=syn.wander()), syn.clock(0.0, 20.0, 100.0, phase=0.8)
    made.joints('/command', t, syn.joints_for(syn.wander()(t)), ahead=-0.4)
    made.flag(0.0, '/engaged', True).flag(12.005, '/engaged', False)
    target = syn.evaluator(syn.arm_parameters(
        **syn.TASK, command__topic='/command', engaged__topic='/engaged'))
    syn.feed(target, made.messages())
    summary = syn.closed(target)
    assert summary['arms']['right']['time_base']['base'] == 'stamp'
    # Settled from 1 s on, to 12.003 s.
    assert syn.metrics(summary)['tracking_error_rms_norm']['samples'] == pytest.approx(
        1100, abs=2)
