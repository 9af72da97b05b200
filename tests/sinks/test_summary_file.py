# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""summary.json: one order, one spelling of each number, whole or not there."""

from __future__ import annotations

import json
import math
import random

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from teleop_eval import __version__
from teleop_eval.core.errors import OutputError
from teleop_eval.sinks import summary_file
from teleop_eval.sinks.summary_file import SessionFacts

FACTS = SessionFacts(name='s', operator='p01', source='live', start_ns=10**18,
                     end_ns=10**18 + 2_500_000_000)


def shuffled(value, seed):
    """Return the same value with the keys of its dictionaries in another order."""
    if not isinstance(value, dict):
        return value
    keys = list(value)
    random.Random(seed).shuffle(keys)
    return {key: shuffled(value[key], seed + 1) for key in keys}


@given(st.integers(0, 10**6))
def test_order_of_keys_does_not_reach_the_file(seed):
    value = {'schema_version': 1, 'arms': {
        'right': {'mappings': {'b': {'metrics': {'m': {'value': 0.1, 'unit': 'm', 'z': 1}}},
                               'a': {}}}, 'left': {}}, 'notes': ['n'], 'zeta': 1, 'alpha': 2}
    assert summary_file.to_json(shuffled(value, seed)) == summary_file.to_json(value)


def test_reader_finds_the_documented_order():
    whole = summary_file.document({'arms': {}}, FACTS, notes=['a', 'b', 'a'])
    text = summary_file.to_json(whole)
    read = json.loads(text)
    assert list(read) == ['schema_version', 'tool', 'session', 'arms', 'notes', 'problems']
    assert read['schema_version'] == summary_file.SCHEMA_VERSION == 1
    assert read['tool']['version'] == __version__
    assert read['tool']['libraries']['numpy'] == np.__version__
    assert read['session'] == {
        'name': 's', 'condition': 'teleoperated', 'operator': 'p01', 'start_ns': 10**18,
        'end_ns': 10**18 + 2_500_000_000, 'duration_s': 2.5, 'source': 'live'}
    assert read['notes'] == ['a', 'b']


def test_what_the_evaluator_says_of_the_session_wins():
    whole = summary_file.document(
        {'session': {'condition': 'unaided'}, 'notes': ['x'], 'problems': ['p']}, FACTS,
        notes=['y'], problems=['p'])
    assert whole['session']['condition'] == 'unaided'
    assert whole['session']['operator'] == 'p01'
    assert (whole['notes'], whole['problems']) == (['x', 'y'], ['p'])


def arm_with_age(base, reason, *, status='ok'):
    """Return an arm's part with one input whose transport age has a caveat."""
    age = {'value': -0.02, 'status': status, 'reason': reason}
    return {'time_base': {'base': base}, 'inputs': {
        'hand': {'topic': '/hand', 'metrics': {'transport_age_s': age,
                                               'transport_age_min_s': age}},
        'engaged': {'topic': '/clutch'}}}


def test_a_clock_that_is_off_is_a_problem_of_the_session():
    arms = {'right': arm_with_age('stamp', 'the clocks are not synchronised'),
            'left': arm_with_age('stamp', '')}
    whole = summary_file.document({'arms': arms, 'problems': ['a.']}, FACTS, problems=['z.'])
    assert whole['problems'] == [
        'a.', 'right: hand (/hand): the clocks are not synchronised.', 'z.']


@pytest.mark.parametrize('arm', [
    arm_with_age('receive', 'the clocks are not synchronised'),
    arm_with_age('stamp', 'header stamps are zero', status='unobservable'),
    {'time_base': {'base': 'stamp'}}, {}])
def test_stamps_that_nobody_uses_are_no_problem(arm):
    assert summary_file.document({'arms': {'right': arm}}, FACTS)['problems'] == []


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_numbers_read_back_exactly(value):
    assert json.loads(summary_file.to_json({'v': value}))['v'] == value


def test_numbers_that_are_none_are_null_and_numpy_is_plain():
    text = summary_file.to_json({
        'nan': math.nan, 'inf': np.float64(math.inf), 'zero': -0.0, 'array': np.arange(2.0),
        'integer': np.int64(3), 'flag': np.bool_(True), 'pair': (1, 2), 'set': {'b', 'a'}})
    assert json.loads(text) == {'nan': None, 'inf': None, 'zero': 0.0, 'array': [0.0, 1.0],
                                'integer': 3, 'flag': True, 'pair': [1, 2], 'set': ['a', 'b']}
    assert '-0' not in text


def test_hostile_names_survive(tmp_path):
    path = tmp_path / 'summary.json'
    summary_file.write_summary(path, {'arms': {'"\ud800\x00\n': 'é'}})
    assert json.loads(path.read_text(encoding='utf-8')) == {'arms': {'"\\ud800\\x00\n': 'é'}}
    assert [file.name for file in tmp_path.iterdir()] == ['summary.json']


def test_failure_leaves_the_old_file_and_no_half_one(tmp_path):
    path = tmp_path / 'summary.json'
    summary_file.write_summary(path, {'a': 1})
    before = path.read_bytes()

    class Broken:
        """Stands for a value that cannot be written."""

    with pytest.raises(TypeError):
        summary_file.write_summary(path, {'a': Broken()})
    assert path.read_bytes() == before
    (tmp_path / 'folder').mkdir()
    with pytest.raises(OutputError, match=r'folder cannot be written: .*directory'):
        summary_file.write_summary(tmp_path / 'folder', {'a': 1})
    assert sorted(file.name for file in tmp_path.iterdir()) == ['folder', 'summary.json']
