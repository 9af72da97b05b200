# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What the node adds to the statuses of the evaluator."""

from __future__ import annotations

from teleop_eval.core.inputs_status import ALL_ARRIVE
from teleop_eval.core.results import LEVEL_ERROR, LEVEL_OK, LEVEL_STALE, StatusLine
from teleop_eval.nodes.statuses import waiting_inputs, with_inputs

WRONG = '/hand has the wrong type.'


def test_facts_of_the_topics_stand_beside_those_of_the_evaluator() -> None:
    line = StatusLine('right: inputs', LEVEL_OK, ALL_ARRIVE, {'hand age (s)': '0.01'})
    found = with_inputs(line, {'hand publishers': '1'}, [])
    assert found == StatusLine('right: inputs', LEVEL_OK, ALL_ARRIVE,
                               {'hand age (s)': '0.01', 'hand publishers': '1'})


def test_a_problem_is_not_followed_by_its_contrary() -> None:
    line = StatusLine('right: inputs', LEVEL_OK, ALL_ARRIVE, {})
    found = with_inputs(line, {}, [WRONG])
    assert (found.level, found.message) == (LEVEL_ERROR, '/hand has the wrong type')


def test_a_problem_and_a_silence_are_two_clauses_of_one_message() -> None:
    line = StatusLine('right: inputs', LEVEL_STALE, 'no message yet on /hand', {})
    found = with_inputs(line, {}, [WRONG, 'Other.'])
    assert found.level == LEVEL_ERROR
    assert found.message == '/hand has the wrong type; Other; no message yet on /hand'


def test_without_a_session_problems_are_shown_too() -> None:
    assert waiting_inputs('right', {}, []).message == 'No session runs.'
    assert waiting_inputs('right', {}, [WRONG]).message == (
        '/hand has the wrong type; No session runs.')
