# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Who is foreign, and what keeps a process of the cell on this machine."""

from __future__ import annotations

import pytest

from teleop_eval.core.errors import UsageError
from teleop_eval.teardown_cell import guard


@pytest.mark.parametrize('node', [
    ('driver', '/'), ('driver', '/real_robot'), ('arm', '/teardown_cell_2'),
    ('arm', '/other/teardown_cell'), ('teardown_cell', '/'), ('_hidden', '/')])
def test_everything_outside_the_namespace_is_foreign(node):
    assert guard.foreign_nodes([('arm', '/teardown_cell'), node]) == [guard.full_name(*node)]


@pytest.mark.parametrize('node', [
    ('arm', '/teardown_cell'), ('x', '/teardown_cell/sub'), ('_ros2cli_3217', '/'),
    ('_ros2cli_daemon_77_abc', '/')])
def test_the_cell_and_the_command_line_are_not(node):
    assert guard.foreign_nodes([node]) == []


def test_the_refusal_says_who_where_and_what_to_do():
    nodes = [('driver', '/real_robot'), ('b', '/'), ('arm', '/teardown_cell')]
    with pytest.raises(guard.CellRefusedError) as refused:
        guard.refuse_foreign(nodes, 42)
    text = str(refused.value)
    assert 'domain 42' in text and '/b, /real_robot/driver' in text and '--domain' in text
    assert refused.value.exit_status == 1
    assert '\n' not in text


def test_many_foreign_nodes_are_counted():
    with pytest.raises(guard.CellRefusedError, match='and 7 more'):
        guard.refuse_foreign([(f'node_{index}', '/') for index in range(12)], 42)


def test_a_second_cell_is_refused():
    alone = [('demo', '/teardown_cell')]
    guard.refuse_second_cell(alone, '/teardown_cell/demo', 42)
    with pytest.raises(guard.CellRefusedError, match='/teardown_cell/arm'):
        guard.refuse_second_cell([*alone, ('arm', '/teardown_cell')],
                                 '/teardown_cell/demo', 42)
    with pytest.raises(guard.CellRefusedError, match='/teardown_cell/demo'):
        guard.refuse_second_cell([*alone, *alone], '/teardown_cell/demo', 42)


def test_discovery_is_limited_to_this_machine():
    environment = {
        'ROS_AUTOMATIC_DISCOVERY_RANGE': 'SUBNET', 'ROS_STATIC_PEERS': 'robot.example',
        'ROS_DISCOVERY_SERVER': 'robot.example:11811', 'ROS_LOCALHOST_ONLY': '0',
        'FASTRTPS_DEFAULT_PROFILES_FILE': 'wide.xml', 'ROS_DOMAIN_ID': '0',
        'RMW_IMPLEMENTATION': 'rmw_fastrtps_cpp', 'PATH': '/bin'}
    guard.isolate(environment, 42)
    assert environment == {
        'ROS_AUTOMATIC_DISCOVERY_RANGE': 'LOCALHOST', 'ROS_DOMAIN_ID': '42',
        'RMW_IMPLEMENTATION': 'rmw_fastrtps_cpp', 'PATH': '/bin'}


def test_old_distributions_are_confined_in_their_own_way():
    environment = {'ROS_DISTRO': 'humble'}
    guard.isolate(environment, 42)
    assert environment['ROS_LOCALHOST_ONLY'] == '1'


@pytest.mark.parametrize('domain', [0, -1, 102, 232])
def test_a_domain_that_is_not_its_own_is_a_usage_error(domain):
    with pytest.raises(UsageError, match='1 to 101'):
        guard.isolate({}, domain)


def test_looking_around_goes_on_until_the_end_and_stops_when_told():
    calls = []
    guard.look_around(lambda: calls.append(1), lambda: False, seconds=0.35)
    assert len(calls) >= 3
    calls.clear()
    guard.look_around(lambda: calls.append(1), lambda: True, seconds=60.0)
    assert len(calls) == 1
