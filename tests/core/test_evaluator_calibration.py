# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""A calibration interval in a session: what it gives, and what its refusal leaves."""

from __future__ import annotations

import json
import math
from pathlib import Path

import numpy as np
import pytest
import synthetic_session as syn
from numpy.testing import assert_allclose

from teleop_eval.core.arm_calibration import calibrate_arm
from teleop_eval.core.errors import ConfigError
from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.samples import PoseSample, TextSample
from teleop_eval.core.settings import from_parameters

SHOULDER_M, LENGTH_M, DELAY = np.array([0.15, -0.22, 1.35]), 0.63, 0.1
SWEEPS = (3.0, 33.0)
BARE = {**syn.TASK, 'operator__shoulder_m': None, 'operator__arm_length_m': None,
        'operator__calibration_start_s': SWEEPS[0], 'operator__calibration_end_s': SWEEPS[1]}
_motion = syn.wander(2)


def stretched(times):
    """Return directions (n, 3) of sweeps sideways, up and down."""
    side, rise = 0.9 * np.sin(2 * np.pi * times / 7.3), 0.7 * np.sin(2 * np.pi * times / 4.1)
    return np.column_stack(
        [np.cos(rise) * np.cos(side), np.cos(rise) * np.sin(side), np.sin(rise)])


def hand_at(times, *, sweeping=True):
    """Return the normalised hand (n, 3): sweeps in the interval, reaching outside."""
    inside = (times >= SWEEPS[0]) & (times < SWEEPS[1] + 0.01)
    return np.where((inside & sweeping)[:, None], stretched(times), _motion(times))


def session(end=70.0, *, sweeping=True, noise=0.001, shoulder=None, first=0.0):
    made = syn.Feed()
    t = syn.clock(first, end, 100.0)
    wobble = np.random.default_rng(3).normal(size=(len(t), 3)) * noise
    body = 0.0 if shoulder is None else shoulder(t)
    made.poses('/hand', t, SHOULDER_M + body + LENGTH_M * hand_at(t - first, sweeping=sweeping)
               + wobble)
    if shoulder is not None:
        t = syn.clock(first, end, 80.0, phase=0.6)
        made.poses('/shoulder', t, SHOULDER_M + shoulder(t))
    t = syn.clock(first, end, 125.0, phase=0.7)
    return made.joints('/joints', t, syn.joints_for(_motion(t - first - DELAY)))


def run(messages, **more):
    target = syn.evaluator(syn.arm_parameters(**{**BARE, **more}))
    syn.feed(target, messages)
    return target, syn.closed(target)


@pytest.fixture(scope='module')
def calibrated():
    """Return evaluator and summary of a session with good sweeps."""
    return run(session().messages())


def test_sweeps_give_shoulder_and_length_and_the_metrics_begin_after_them(calibrated):
    target, summary = calibrated
    geometry, found = summary['arms']['right']['geometry'], syn.metrics(summary)
    assert summary['problems'] == []
    assert_allclose(geometry['operator_shoulder_m'], SHOULDER_M, atol=3e-4)
    assert_allclose(geometry['operator_arm_length_m'], LENGTH_M, atol=3e-4)
    assert abs(found['latency_s']['value'] - DELAY) < 1e-3
    assert found['tracking_error_compensated_rms_norm']['value'] < 4e-3
    assert found['workspace_coverage_operator']['status'] == 'ok'
    # 70 s less 33 s of sweeps and a new warm-up's first cells.
    assert 36.0 < found['engaged_time_s']['value'] < 37.5
    assert summary['arms']['right']['inputs']['hand']['messages'] == 7000


def test_residual_spread_length_and_uncertainty_are_told(calibrated):
    target, summary = calibrated
    geometry = summary['arms']['right']['geometry']
    sweeps = geometry['operator_calibration']
    assert sweeps['status'] == 'ok' and sweeps['samples'] == 3000
    assert_allclose(sweeps['residual'], 0.001 / LENGTH_M, rtol=0.05)
    assert 0.0 < sweeps['length_sd_m'] < 5e-4
    assert_allclose(geometry['operator_scale_uncertainty'],
                    sweeps['length_sd_m'] / sweeps['length_m'])
    note = (f"operator arm length 0.630 +- {sweeps['length_sd_m']:.3f} m from the calibration "
            f"(0.16% off a sphere, {sweeps['spread_deg']:.0f} deg apart, 3000 of 3000 positions)")
    assert any(text.startswith(note) for text in geometry['notes'])
    assert any(note in text for text in target.notes)
    assert any('the operator was calibrated; the metrics begin here' in text
               for text in target.notes)
    uncertain = syn.metrics(summary)['tracking_error_compensated_rms_norm']['details']
    assert uncertain['scale_uncertainty'] == geometry['operator_scale_uncertainty']
    json.dumps(summary, allow_nan=False)


def test_the_fit_is_that_of_the_positions_of_the_interval(calibrated):
    """The interval counts from the first message of the hand, by receive times."""
    hand = [(at, one) for at, topic, one in session().messages() if topic == '/hand']
    first = hand[0][0]
    inside = [one.position for at, one in hand
              if SWEEPS[0] * 1e9 <= at - first < SWEEPS[1] * 1e9]
    alone = calibrate_arm(inside)
    found = calibrated[1]['arms']['right']['geometry']
    assert found['operator_arm_length_m'] == alone.length_m
    assert found['operator_shoulder_m'] == alone.shoulder_m.tolist()


def test_after_the_sweeps_it_is_as_if_shoulder_and_length_had_been_given(calibrated):
    """A session that begins where the interval ends, with the geometry that was found."""
    geometry = calibrated[1]['arms']['right']['geometry']
    messages = session().messages()
    first = next(at for at, topic, _ in messages if topic == '/hand')
    cut = next(i for i, (at, topic, _) in enumerate(messages)
               if topic == '/hand' and at - first >= SWEEPS[1] * 1e9)
    _, given = run(messages[cut:], operator__shoulder_m=geometry['operator_shoulder_m'],
                   operator__arm_length_m=geometry['operator_arm_length_m'],
                   operator__arm_length_sd_m=geometry['operator_calibration']['length_sd_m'],
                   operator__calibration_start_s=None, operator__calibration_end_s=None)
    mine, other = syn.metrics(calibrated[1]), syn.metrics(given)
    for name in set(mine) - {'transport_age_s'}:
        assert mine[name]['status'] == other[name]['status'], name
        if mine[name]['value'] is not None:
            assert_allclose(mine[name]['value'], other[name]['value'], rtol=1e-9, err_msg=name)


def test_looking_on_changes_nothing(calibrated):
    """Diagnostics and summaries in between, as a live node makes them."""
    target = syn.evaluator(syn.arm_parameters(**BARE))
    for number, message in enumerate(session().messages()):
        target.add(*message)
        if number % 500 == 0:
            target.diagnostics(message[0])
            target.summary()
            target.poll()
    assert syn.closed(target) == calibrated[1]


def test_before_the_end_of_the_interval_the_reason_is_the_interval():
    target = syn.evaluator(syn.arm_parameters(**BARE))
    syn.feed(target, [one for one in session(25.0).messages()])
    found = syn.metrics(target.summary())
    for name in ('workspace_coverage_operator', 'tracking_error_rms_norm'):
        assert found[name]['status'] == 'insufficient'
        assert found[name]['reason'] == 'the calibration from 3 to 33 s is not over'
    assert target.problems == []
    summary = syn.closed(target)
    assert ('right: the calibration from 3 to 33 s was not over when the input ended; without it '
            'the operator has no shoulder_m and arm_length_m (or stature_m).'
            in summary['problems'])


def test_task_motion_is_refused_with_its_numbers_and_the_rest_goes_on():
    target, summary = run(session(sweeping=False).messages())
    texts = [text for text in summary['problems'] if 'calibration' in text]
    assert len(texts) == 1
    assert 'right: the calibration from 3 to 33 s is not accepted: the positions lie ' in texts[0]
    assert '% (RMS) off a sphere, but less than 1.5% is needed' in texts[0]
    assert 'the operator has no shoulder_m and arm_length_m' in texts[0]
    found = syn.metrics(summary)
    for name in ('workspace_coverage_operator', 'tracking_error_rms_norm'):
        assert found[name]['status'] == 'insufficient'
        assert 'off a sphere' in found[name]['reason']
    assert found['reach_p95_norm']['status'] == 'ok'
    assert summary['arms']['right']['geometry']['operator_calibration']['residual'] > 0.015
    # No mapping could be made: that is said once, now that nothing can help any more.
    assert sum('needs a centre' in text for text in summary['problems']) == 1


def test_what_is_configured_stays_when_the_sweeps_are_refused():
    target, summary = run(
        session(sweeping=False).messages(), operator__shoulder_m=SHOULDER_M.tolist(),
        operator__arm_length_m=LENGTH_M)
    assert any(text.endswith('shoulder and arm length stay as configured.')
               for text in summary['problems'])
    found = syn.metrics(summary)
    assert found['tracking_error_compensated_rms_norm']['value'] < 4e-3
    assert found['engaged_time_s']['value'] > 69.0
    assert summary['arms']['right']['geometry']['operator_arm_length_m'] == LENGTH_M


def test_accepted_sweeps_replace_what_is_configured():
    _, summary = run(session().messages(), operator__shoulder_m=[0.0, 0.0, 0.0],
                     operator__stature_m=1.75)
    geometry = summary['arms']['right']['geometry']
    assert_allclose(geometry['operator_shoulder_m'], SHOULDER_M, atol=3e-4)
    assert_allclose(geometry['operator_arm_length_m'], LENGTH_M, atol=3e-4)
    assert geometry['operator_scale_uncertainty'] < 0.01


def test_a_tracked_shoulder_goes_on_to_move_and_gets_the_length():
    """The body leans during the sweeps: only hand minus shoulder lies on a sphere."""
    lean = syn.wander(8, centre=(0.0, 0.0, 0.0), size=0.15, low=0.2, high=0.9)
    messages = session(shoulder=lean).messages()
    _, summary = run(messages, operator__shoulder_topic='/shoulder')
    geometry, found = summary['arms']['right']['geometry'], syn.metrics(summary)
    assert summary['problems'] == []
    assert_allclose(geometry['operator_arm_length_m'], LENGTH_M, atol=1e-3)
    assert (geometry['operator_shoulder_m'], geometry['operator_shoulder_moves']) == (None, True)
    assert any('its centre lies 0.00' in text for text in geometry['notes'])
    assert found['tracking_error_compensated_rms_norm']['value'] < 4e-3
    _, alone = run([one for one in messages if one[1] != '/shoulder'])
    assert alone['arms']['right']['geometry']['operator_calibration']['residual'] > 0.015


def test_a_tracked_shoulder_in_another_frame_gives_no_length():
    lean = syn.wander(8, centre=(0.0, 0.0, 0.0), size=0.15, low=0.2, high=0.9)
    messages = [(at, topic, PoseSample(one.stamp_ns, one.position, None, 'pelvis')
                 if topic == '/shoulder' else one)
                for at, topic, one in session(shoulder=lean).messages()]
    _, summary = run(messages, operator__shoulder_topic='/shoulder')
    assert any("is not accepted: the shoulder comes in the frame 'pelvis'" in text
               for text in summary['problems'])
    assert summary['arms']['right']['geometry']['operator_arm_length_m'] is None


def test_a_reset_keeps_the_calibration(calibrated):
    target = syn.evaluator(syn.arm_parameters(**BARE))
    made = session()
    made.put(20.0, '/teleop_eval/session_event', TextSample('reset'))  # amid the sweeps
    made.put(45.0, '/teleop_eval/session_event', TextSample('reset'))
    syn.feed(target, made.messages())
    summary = syn.closed(target)
    geometry = summary['arms']['right']['geometry']
    known = calibrated[1]['arms']['right']['geometry']
    for name in ('operator_shoulder_m', 'operator_arm_length_m', 'operator_calibration'):
        assert geometry[name] == known[name], name
    found = syn.metrics(summary)
    assert 24.0 < found['engaged_time_s']['value'] < 26.0
    assert found['tracking_error_compensated_rms_norm']['value'] < 4e-3


def test_the_reachable_hand_of_a_linkage_can_be_calibrated_too():
    """The wearer turns a stretched arm about a shoulder that is not the linkage's."""
    path = Path(__file__).parents[2] / 'config' / 'wearable_linkage.urdf'
    settings = from_parameters(syn.arm_parameters(**{
        **BARE, 'operator__hand_topic': None, 'operator__joints_topic': '/suit',
        'operator__description_file': 'wearable_linkage.urdf',
        'operator__base_link': 'back_plate', 'operator__tip_link': 'hand_grip'}))
    target = SessionEvaluator(settings, descriptions={
        'right': syn.urdf(), 'right.operator': path.read_text(encoding='utf-8')})
    chain = target.arms['right'].operator.arm.chain
    centre, length = np.array([0.09, -0.19, 0.02]), 0.50
    t = np.arange(0.0, 40.0, 0.02)
    wanted = centre + length * stretched(t) * [1.0, 0.8, 0.8] / np.linalg.norm(
        stretched(t) * [1.0, 0.8, 0.8], axis=1)[:, None]
    q = np.array([0.0, 0.0, 0.0, -0.9, 0.03, 0.0, 0.0, 0.0])
    made = syn.Feed()
    for now, point in zip(t, wanted, strict=True):
        for _ in range(20 if now == 0.0 else 4):  # Newton from the posture before, 3 joints
            slope = chain.jacobian(q[None])[0, :3]
            slope[:, [2, 4, 5, 6, 7]] = 0.0
            q = q + np.linalg.pinv(slope) @ (point - chain.positions(q[None])[0])
        assert_allclose(chain.positions(q[None])[0], point, atol=1e-9)
        made.joints('/suit', [now], [q], chain.joint_names)
    made.joints('/joints', t, syn.joints_for(_motion(t)))
    syn.feed(target, made.messages())
    geometry = syn.closed(target)['arms']['right']['geometry']
    assert_allclose(geometry['operator_shoulder_m'], centre, atol=1e-5)
    assert_allclose(geometry['operator_arm_length_m'], length, atol=1e-5)


def test_memory_is_bounded_and_thinning_keeps_the_sphere():
    from teleop_eval.core import calibration_interval as module
    rows = module.ThinnedRows()
    for number in range(3 * module.MOST_ROWS):
        rows.add(number, np.array([number, 0.0, 0.0]))
    assert module.MOST_ROWS // 2 <= len(rows.times_ns) < module.MOST_ROWS
    assert set(np.diff(rows.times_ns)) == {4} and rows.times_ns[0] == 0
    assert [value[0] for value in rows.values] == rows.times_ns


@pytest.mark.parametrize(('more', 'words'), [
    ({'operator__calibration_end_s': None}, 'calibration_end_s is missing'),
    ({'operator__calibration_start_s': None}, 'calibration_start_s is missing'),
    ({'operator__calibration_end_s': 3.0}, 'calibration_end_s is 3 s.*must come later'),
    ({'operator__calibration_end_s': 700.0}, 'by at most 600 s'),
    ({'operator__hand_topic': None}, 'calibration_start_s needs the hand'),
])
def test_an_interval_that_cannot_be_is_one_sentence(more, words):
    with pytest.raises(ConfigError, match=words):
        from_parameters(syn.arm_parameters(**{**BARE, **more}))


def test_an_angle_of_sweeps_that_is_too_small_is_told():
    made = syn.Feed()
    t = syn.clock(0.0, 50.0, 100.0)
    narrow = stretched(t) * [1.0, 0.3, 0.3]
    narrow /= np.linalg.norm(narrow, axis=1)[:, None]
    made.poses('/hand', t, SHOULDER_M + LENGTH_M * narrow)
    made.joints('/joints', t, syn.joints_for(_motion(t)))
    _, summary = run(made.messages())
    spread = summary['arms']['right']['geometry']['operator_calibration']['spread_deg']
    assert 30.0 < spread < 60.0 and math.isfinite(spread)
    assert any(f'the sweeps span {spread:.0f} deg, but more than 60 deg are needed' in text
               for text in summary['problems'])


def test_what_was_wrong_during_the_sweeps_is_still_told_after_them():
    messages = session(50.0).messages()
    at = next(i for i, (_, topic, _) in enumerate(messages) if topic == '/hand' and i > 2000)
    receive_ns, topic, one = messages[at]
    messages[at] = (receive_ns, topic, PoseSample(
        one.stamp_ns, np.array([np.nan, 0.0, 0.0]), None, 'op'))
    _, summary = run(messages)
    assert summary['arms']['right']['geometry']['operator_calibration']['samples'] == 2999
    assert any('hand (/hand): x = nan came' in text for text in summary['problems'])
