# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Parameters of the node: overrides in, descriptors and checked settings out."""

from __future__ import annotations

import math
from typing import Any

import pytest
from live_helpers import ros
from rclpy.node import Node
from rclpy.parameter import Parameter

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.parameters import describe
from teleop_eval.core.settings import Settings
from teleop_eval.nodes.declared_parameters import check_change, declare, flat_overrides

FLAT = {'arms.right.robot.joints_topic': 'j', 'arms.right.robot.joint_names': ['a'],
        'time.window_s': 2, 'arms.right.operator.shoulder_m': [0, 0, 1],
        'arms.right.mappings.a.kind': 'task_space', 'arms.right.mappings.b.kind': 'relative',
        'arms.right.mappings.c.kind': 'rate', 'arms.right.mappings.c.gain_xyz': [1, 2, 3],
        'arms.right.mappings.d.kind': 'joint_space',
        'arms.right.mappings.d.joints.j.source': 'k', 'arms.right.mappings.e.kind': 'unmodelled',
        'arms.right.active_mapping.topic': 'm'}


class Overridden(Node):
    """A node that shows its overrides."""

    def flat(self) -> dict[str, Any]:
        return flat_overrides(self._parameter_overrides)


def test_overrides_become_plain_values(domain: int) -> None:
    given = ['a.b:=1', 'c:=[]', 'd:=.nan', 'e:=[1, 2]', 'f:=[p, q]', 'g:=text', 'h:=true',
             'i:=[0.5, 1.5]', 'use_sim_time:=false', 'qos_overrides./x.publisher.depth:=3',
             'start_type_description_service:=false']
    with ros(domain, '--ros-args', *[word for rule in given for word in ('-p', rule)]) as context:
        flat = Overridden('x', context=context).flat()
    assert math.isnan(flat.pop('d'))
    assert flat == {'a.b': 1, 'c': [], 'e': [1, 2], 'f': ['p', 'q'], 'g': 'text', 'h': True,
                    'i': [0.5, 1.5]}
    assert isinstance(flat['i'], list)


def test_every_parameter_is_declared_with_a_descriptor(domain: int) -> None:
    with ros(domain) as context:
        node = Node('x', context=context)
        declared = declare(node, FLAT, where='file')
        for name, described in describe(Settings, FLAT):
            shown = node.describe_parameter(name)
            assert shown.description.startswith(described.text)
            assert described.unit in shown.description
            assert shown.read_only == (not name.startswith('thresholds.'))
            assert shown.type == node.get_parameter(name).type_.value
        window = node.describe_parameter('time.window_s').floating_point_range[0]
        assert (window.from_value, window.to_value) == (0.5, 60.0)
        assert node.get_parameter('time.window_s').value == 2.0
        assert list(node.get_parameter('arms.right.operator.shoulder_m').value) == [0.0, 0.0, 1.0]
        assert math.isnan(node.get_parameter('time.grid_rate_hz').value)
        of = node.get_parameters_by_prefix('arms.right.mappings.c')
        assert list(of['gain_xyz'].value) == [1.0, 2.0, 3.0] and of['anchor_s'].value == 5.0
        assert 'scaling' not in of and node.has_parameter('arms.right.mappings.b.frame')
        assert set(node.get_parameters_by_prefix('arms.right.mappings.e')) == {'kind'}
        axes = node.get_parameter('arms.right.operator.joy_axes').value
        assert list(axes) == [0, 1, 2, 3, 4, 5]
        assert '10 to 1000' in node.describe_parameter('time.grid_rate_hz').additional_constraints
    assert declared.settings.arms['right'].operator.shoulder_m == (0.0, 0.0, 1.0)


def test_an_unknown_name_is_one_sentence(domain: int) -> None:
    with ros(domain) as context, pytest.raises(ConfigError, match='did you mean time.window_s?'):
        declare(Node('x', context=context), {**FLAT, 'time.windw_s': 2.0}, where='file')


def test_thresholds_may_change_within_their_range() -> None:
    def change(name: str, value: Any) -> tuple[bool, str]:
        result = check_change(FLAT, [Parameter(name, value=value)])
        return result.successful, result.reason
    assert change('thresholds.latency_warn_s', 0.2) == (True, '')
    assert change('thresholds.latency_warn_s', 0.5) == (
        False, 'the parameters: thresholds.latency_error_s (0.3 s) is below '
        'thresholds.latency_warn_s (0.5 s); exchange or change them.')
    refused, reason = change('time.window_s', 3.0)
    assert not refused and reason.startswith('time.window_s cannot change while the node runs')
    assert not change('use_sim_time', True)[0]
