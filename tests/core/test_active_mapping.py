# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Which mapping is active must follow from the settings: a topic, a label, or the only one."""

from __future__ import annotations

import pytest
import synthetic_session as syn

from teleop_eval.core.arm_setup import fixed_label
from teleop_eval.core.errors import ConfigError

TWO = {'mappings__reach__kind': 'task_space', 'mappings__mirror__kind': 'task_space'}


def test_two_mappings_of_which_none_is_named_are_refused():
    with pytest.raises(ConfigError) as caught:
        syn.from_parameters(syn.arm_parameters(**TWO), where='evaluate.yaml')
    sentence = str(caught.value)
    for words in ('evaluate.yaml: arms.right', 'mirror, reach', 'say which is active',
                  'arms.right.active_mapping.topic', 'arms.right.active_mapping.fixed'):
        assert words in sentence


@pytest.mark.parametrize('more, label', [
    ({**TWO, 'active_mapping__topic': '/m'}, None),
    ({**TWO, 'active_mapping__fixed': 'mirror'}, 'mirror'),
    ({'mappings__reach__kind': 'task_space'}, 'reach'),
    ({}, 'unmodelled'),
])
def test_active_mapping_follows_from_the_settings(more, label):
    arm = syn.from_parameters(syn.arm_parameters(**more)).arms['right']
    assert fixed_label(arm) == label
