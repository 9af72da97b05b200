# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Live node and recordings know a kind of message for every input of the evaluator."""

from __future__ import annotations

from teleop_eval.cli.recorded_inputs import KIND_OF_ROLE
from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.parameters import describe
from teleop_eval.core.settings import Settings, from_parameters
from teleop_eval.nodes.topic_match import LATCHED_ROLES, ROLE_KINDS, ROLE_WORDS
from teleop_eval.sources.decode import SUPPORTED

# Inputs that exclude each other are configured for different arms.
BASE = {'robot.joints_topic': '/joints', 'robot.base_link': 'a', 'robot.tip_link': 'b',
        'robot.description_topic': '/robot', 'command.topic': '/command',
        'engaged.topic': '/engaged', 'active_mapping.topic': '/mapping',
        'operator.joints_topic': '/suit', 'operator.shoulder_topic': '/shoulder'}
BY_HAND = {**BASE, 'operator.hand_topic': '/hand', 'operator.rate_topic': '/rate'}
BY_JOINTS = {**BASE, 'operator.description_topic': '/human', 'operator.base_link': 'a',
             'operator.tip_link': 'b'}


def roles() -> set[str]:
    flat = {f'arms.{arm}.{key}': value for arm, keys in (('one', BY_HAND), ('two', BY_JOINTS))
            for key, value in keys.items()}
    known = {name.split('.', 2)[2] for name, _ in describe(Settings, flat)
             if name.startswith('arms.') and name.endswith('topic')}
    assert known == {key for key in (*BY_HAND, *BY_JOINTS) if key.endswith('topic')}
    found = SessionEvaluator(from_parameters(flat))
    return {route.role for routes in found.routes.values() for route in routes}


def test_every_role_has_its_kind_and_its_words_everywhere() -> None:
    found = roles()
    assert {'hand', 'shoulder', 'operator_joints', 'operator_description'} <= found
    assert set(ROLE_KINDS) == set(ROLE_WORDS) == set(KIND_OF_ROLE) == found
    assert ROLE_KINDS == KIND_OF_ROLE
    assert set(ROLE_KINDS.values()) <= set(SUPPORTED)
    assert LATCHED_ROLES <= found
