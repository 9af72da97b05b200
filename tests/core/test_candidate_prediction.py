# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
What is predicted for mapping B from a run under A, against a run under B.

The operator is scripted, so that nothing of the difference is adaptation.
"""

from __future__ import annotations

import numpy as np
import pytest
import synthetic_chain as chains
import synthetic_session as syn

from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.settings import from_parameters

SECONDS = 42.0
CLUTCH = ((1.0, 13.5), (15.2, 27.0), (29.0, 43.0))
SERVO = {'transport_s': 0.04, 'servo': (25.0, 0.8)}
# A carries the hand at 0.8; B at other scales, and from where A begins.
A = (0.8, 0.8, 0.8)
B = (0.6, 1.0, 0.9)


def motion_from_rest(times):
    """Return the script: still until the first engagement is over, then wandering."""
    start = syn.wander()(np.array([0.0]))
    part = np.clip((np.asarray(times) - 1.2) / 3.0, 0.0, 1.0)[:, None]
    return start + part ** 2 * (3.0 - 2.0 * part) * (syn.wander()(times) - start)


def b_chain(kind: str, servo: dict) -> chains.Chain:
    """Return the chain whose mapping B is, beginning where A's does."""
    hand = motion_from_rest(np.array([-2.0]))[0]
    offset = (np.array(A) - np.array(B)) * hand
    return chains.Chain(scale=B, offset=tuple(offset), relative=kind == 'relative',
                        clutch=CLUTCH, **servo)


def mapping_b(kind: str) -> dict:
    """Return the parameters of B as label 'other'."""
    found = {'mappings__other__kind': kind, 'mappings__other__scale_xyz': list(B)}
    if kind == 'task_space':
        found['mappings__other__robot_center_m'] = (
            syn.SHOULDER_M + syn.REACH_M * np.array(b_chain(kind, {}).offset)).tolist()
    return found


def evaluated(chain: chains.Chain, label: str, kind: str, *, candidates: bool) -> tuple:
    """Return one arm's summary and the chain's motion."""
    motion = chains.simulate(chain, motion_from_rest, SECONDS)
    flat = syn.arm_parameters(
        active_mapping__fixed=label, engaged__topic='/clutch', command__topic='/command',
        mappings__direct__kind='task_space', mappings__direct__scale=A[0], **mapping_b(kind))
    target = SessionEvaluator(from_parameters(flat), descriptions={'right': syn.urdf()},
                              candidates=candidates)
    syn.feed(target, chains.messages(chain, motion).messages())
    return syn.closed(target)['arms']['right'], motion


@pytest.fixture(scope='module', params=['task_space', 'relative'])
def kind(request):
    """Return the kind of mapping B."""
    return request.param


@pytest.fixture(scope='module', params=[{}, SERVO], ids=['ideal arm', 'servo'])
def both(request, kind):
    """Return the prediction for B from the run under A, the run under B, and its motion."""
    under_a, _ = evaluated(chains.Chain(scale=A, clutch=CLUTCH, **request.param), 'direct',
                           kind, candidates=True)
    under_b, motion = evaluated(b_chain(kind, request.param), 'other', kind, candidates=False)
    return under_a['candidates']['other'], under_b['mappings']['other']['metrics'], motion


def errors(motion: chains.Motion) -> tuple[float, float]:
    """Return RMS and largest distance of the robot from the ideal command, settled."""
    good = chains._settled(motion, 1.0)
    apart = np.linalg.norm(motion.robot - motion.ideal, axis=1)[good]
    return float(np.sqrt(np.mean(apart ** 2))), float(apart.max())


def test_the_predicted_path_is_the_path_driven(both):
    """Reach and workspace of the prediction are those of the run, but for the servo's error."""
    predicted, measured, motion = both
    assert predicted['why_not'] == ''
    _, largest = errors(motion)
    for name in ('reach_p50_norm', 'reach_p95_norm', 'reach_max_norm'):
        assert predicted['metrics'][name]['value'] == pytest.approx(
            measured[name]['value'], abs=largest + 5e-4), name
    assert predicted['metrics']['not_reached_share']['value'] == 0.0


def test_the_predicted_discrepancy_is_that_of_the_run(both):
    """|u_i - u_o| predicted against |u_r - u_o| driven, both over all settled time."""
    predicted, _, motion = both
    good = chains._settled(motion, 1.0)
    driven = np.linalg.norm((motion.robot - motion.operator)[good], axis=1)
    rms, largest = errors(motion)
    found = predicted['metrics']
    assert found['predicted_discrepancy_rms_norm']['value'] == pytest.approx(
        float(np.sqrt(np.mean(driven ** 2))), abs=rms + 1e-3)
    assert found['predicted_discrepancy_max_norm']['value'] == pytest.approx(
        float(driven.max()), abs=largest + 2e-3)
    assert found['predicted_discrepancy_rms_norm']['details']['predicted'] is True


def test_postures_and_limits_are_those_of_the_run(both):
    """The turret has one posture for each tool position: limits and dexterity agree."""
    predicted, measured, motion = both
    _, largest = errors(motion)
    # A joint's share of its span changes by at most this for a step of the tool.
    slack = 3.0 * largest + 5e-3
    for name in ('limit_margin_min', 'manipulability_p5', 'manipulability_min'):
        assert predicted['metrics'][name]['value'] == pytest.approx(
            measured[name]['value'], abs=slack), name


def test_an_unmodelled_mapping_is_not_predicted():
    """Nobody can predict what is not modelled; the others are."""
    chain = chains.Chain(scale=A)
    motion = chains.simulate(chain, syn.wander(), 20.0)
    flat = syn.arm_parameters(
        active_mapping__fixed='direct', mappings__direct__kind='task_space',
        mappings__direct__scale=A[0], mappings__stack__kind='unmodelled')
    target = SessionEvaluator(from_parameters(flat), descriptions={'right': syn.urdf()},
                              candidates=True)
    syn.feed(target, chains.messages(chain, motion, command=False).messages())
    found = syn.closed(target)['arms']['right']['candidates']
    assert 'not modelled' in found['stack']['why_not']
    assert found['stack']['metrics'] == {}
    assert found['direct']['metrics']['not_reached_share']['status'] == 'ok'


def test_what_the_arm_cannot_reach_is_reported():
    """A scale that leads out of reach: the share is that of the path beyond 1 arm length."""
    chain = chains.Chain(scale=A)
    motion = chains.simulate(chain, syn.wander(), 30.0)
    flat = syn.arm_parameters(
        active_mapping__fixed='direct', mappings__direct__kind='task_space',
        mappings__direct__scale=A[0], mappings__far__kind='task_space',
        mappings__far__scale=2.0)
    target = SessionEvaluator(from_parameters(flat), descriptions={'right': syn.urdf()},
                              candidates=True)
    syn.feed(target, chains.messages(chain, motion, command=False).messages())
    found = syn.closed(target)['arms']['right']['candidates']['far']['metrics']
    # The evaluator's cells begin 1 s after nothing: without a clutch all time counts.
    good = motion.times >= 0.0
    beyond = float(np.mean(np.linalg.norm(2.0 * motion.operator[good], axis=1) > 1.0))
    assert 0.2 < beyond < 0.9
    assert found['not_reached_share']['value'] == pytest.approx(beyond, abs=0.01)
    assert found['not_reached_share']['details']['miss_max_norm'] == pytest.approx(
        float(np.linalg.norm(2.0 * motion.operator[good], axis=1).max()) - 1.0, abs=0.01)
