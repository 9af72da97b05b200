# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The prediction for a rate mapping: its own path, not the one that was driven."""

from __future__ import annotations

import numpy as np
import pytest
import synthetic_session as syn

from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.samples import TwistSample
from teleop_eval.core.settings import from_parameters

SECONDS, START, SPEED = 24.0, np.array([0.3, 0.1, 0.1]), 0.02


def test_a_predicted_rate_mapping_is_not_anchored_at_the_robot_that_was_driven():
    """The arm stands still, the stick is pushed all the time: the path is a straight line."""
    flat = syn.arm_parameters(
        operator__rate_topic='/stick', operator__hand_topic=None,
        active_mapping__fixed='vendor', mappings__vendor__kind='unmodelled',
        mappings__stick__kind='rate', mappings__stick__gain=0.5)
    target = SessionEvaluator(from_parameters(flat), descriptions={'right': syn.urdf()},
                              candidates=True)
    made = syn.Feed()
    for t in syn.clock(0.0, SECONDS, 100.0):
        made.put(t + 0.002, '/stick', TwistSample(
            syn.ns(t), np.array([2.0 * SPEED, 0.0, 0.0]), np.zeros(3), 'base'))
    t = syn.clock(0.0, SECONDS, 100.0, phase=0.7)
    made.joints('/joints', t, syn.joints_for(np.tile(START, (len(t), 1))))
    syn.feed(target, made.messages())
    found = syn.closed(target)['arms']['right']['candidates']['stick']
    assert found['why_not'] == ''
    end = START + np.array([SPEED * SECONDS / syn.REACH_M, 0.0, 0.0])
    assert found['metrics']['reach_max_norm']['value'] == pytest.approx(
        np.linalg.norm(end), abs=0.002)
    # It is judged by velocities, and nothing is taken away by dead band or cap.
    assert found['metrics']['predicted_discrepancy_rms_norm_s']['value'] < 1e-9
    assert found['metrics']['predicted_discrepancy_rms_norm']['status'] == 'not_configured'


def test_a_stick_at_rest_asks_nothing_while_another_mapping_drives():
    """The arm is driven about by another mapping; the predicted tool stands where it began."""
    flat = syn.arm_parameters(
        operator__rate_topic='/stick', operator__hand_topic=None,
        active_mapping__fixed='vendor', mappings__vendor__kind='unmodelled',
        mappings__stick__kind='rate', mappings__stick__gain=0.5)
    target = SessionEvaluator(from_parameters(flat), descriptions={'right': syn.urdf()},
                              candidates=True)
    made = syn.Feed()
    for t in syn.clock(0.0, SECONDS, 100.0):
        made.put(t + 0.002, '/stick', TwistSample(syn.ns(t), np.zeros(3), np.zeros(3), 'base'))
    t = syn.clock(0.0, SECONDS, 100.0, phase=0.7)
    made.joints('/joints', t, syn.joints_for(syn.wander()(t)))
    syn.feed(target, made.messages())
    found = syn.closed(target)['arms']['right']['candidates']['stick']['metrics']
    assert found['joint_speed_demand_max']['value'] < 1e-6
    assert found['reach_max_norm']['value'] == pytest.approx(
        found['reach_p50_norm']['value'], abs=1e-9)
    assert found['not_reached_share']['value'] == 0.0
