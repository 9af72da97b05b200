# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What goes on while no sample comes at all: clutch, settling, late samples."""

from __future__ import annotations

import numpy as np
import pytest
import synthetic_session as syn


def test_engagements_during_silence_count_and_settle():
    """
    No sample from 10 to 20.2 s: the windows from 10.003 to 20.003 s are left out.

    Meanwhile the clutch closes twice; after the second time, at 19.605 s, it settles for 1 s.
    """
    motion = syn.wander()
    made = syn.session(10.0, motion=motion)
    made._messages += syn.session(30.0, motion=motion, start=20.2)._messages
    for when, value in ((0.0, True), (11.005, False), (13.005, True), (15.005, False),
                        (19.605, True)):
        made.flag(when, '/engaged', value)
    target = syn.evaluator(syn.arm_parameters(**syn.TASK, engaged__topic='/engaged'))
    windows = syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target))
    assert not [w for w in windows if syn.ns(10.1) < w.start_ns < syn.ns(19.9)]
    assert found['engagements']['value'] == 3.0
    first = next(w for w in windows if w.start_ns > syn.ns(19.9))
    # To 22.003 s from 20.603 s on, of which the data began at 20.2 s.
    assert first.metrics['tracking_error_rms_norm'].samples == pytest.approx(140, abs=1)
    assert found['tracking_error_rms_norm']['samples'] == pytest.approx(1000 + 940, abs=3)


def test_sample_for_a_window_left_out_is_late():
    """The window to 12.003 s passed without a sample; one stamped in it comes at 12.8 s."""
    motion = syn.wander()
    made = syn.session(10.0, motion=motion)
    made._messages += syn.session(30.0, motion=motion, start=12.1)._messages
    made.put(12.8, '/hand', syn.PoseSample(syn.ns(11.95), np.full(3, 0.1), None, 'op'))
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    syn.feed(target, made.messages())
    inputs = syn.closed(target)['arms']['right']['inputs']
    assert inputs['hand']['late'] == 1 and inputs['hand']['out_of_order'] == 0
