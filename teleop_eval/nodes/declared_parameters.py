# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Turn a node's parameter overrides into settings, and declare each with a descriptor."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from rcl_interfaces.msg import FloatingPointRange, ParameterDescriptor, SetParametersResult
from rclpy.node import Node
from rclpy.parameter import Parameter as RosParameter

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.parameters import (
    BOOL,
    DOUBLE,
    DOUBLES,
    INTEGER,
    INTEGERS,
    STRING,
    STRINGS,
    Parameter,
    describe,
)
from teleop_eval.core.settings import Settings, from_parameters

# rclpy's own parameters, which may stand in the same file.
ROS_PARAMETERS = ('use_sim_time', 'start_type_description_service')
ROS_PREFIXES = ('qos_overrides.',)
# What may change while a session runs: levels of display, never the measurement.
CHANGEABLE = 'thresholds.'

_TYPES = {
    BOOL: RosParameter.Type.BOOL,
    INTEGER: RosParameter.Type.INTEGER,
    DOUBLE: RosParameter.Type.DOUBLE,
    STRING: RosParameter.Type.STRING,
    DOUBLES: RosParameter.Type.DOUBLE_ARRAY,
    STRINGS: RosParameter.Type.STRING_ARRAY,
    INTEGERS: RosParameter.Type.INTEGER_ARRAY,
}
# ROS parameters always have a value; these stand for "not given".
_NOT_GIVEN = {BOOL: False, INTEGER: 0, DOUBLE: math.nan, STRING: '', DOUBLES: [], STRINGS: [],
              INTEGERS: []}


@dataclass(frozen=True)
class Declared:
    """Settings and the flat parameters that they came from."""

    settings: Settings
    flat: dict[str, Any]


def flat_overrides(overrides: Mapping[str, RosParameter]) -> dict[str, Any]:
    """Return plain values by dotted name, rclpy's own parameters left out."""
    flat: dict[str, Any] = {}
    for name, given in overrides.items():
        if name in ROS_PARAMETERS or name.startswith(ROS_PREFIXES):
            continue
        # rcl gives an empty list no type, and rclpy then no value.
        empty_list = given.type_ == RosParameter.Type.NOT_SET
        value = [] if empty_list else given.value
        flat[name] = value if isinstance(value, (bool, int, float, str)) else list(value)
    return flat


def declare(node: Node, flat: Mapping[str, Any], *, where: str) -> Declared:
    """
    Check all parameters and declare each with unit, range and meaning.

    Raises
    ------
    ConfigError
        With one sentence that names the parameter, its value and the remedy.

    """
    settings = from_parameters(flat, where=where)
    for name, described in describe(Settings, flat):
        # The override is replaced by its checked value: an integer given for a number would
        # be refused by the declared type, which rcl tells apart and people do not.
        node.declare_parameter(name, _ros_value(described, flat.get(name)),
                               descriptor(name, described), ignore_override=True)
    return Declared(settings, dict(flat))


def descriptor(name: str, described: Parameter) -> ParameterDescriptor:
    """Return the descriptor of one parameter."""
    optional = described.default is None
    limits = '' if described.low is None and described.high is None else (
        f'{_bound(described.low)} to {_bound(described.high)}')
    constraints = ['one of ' + ', '.join(described.choices)] if described.choices else []
    if described.size is not None:
        constraints.append(f'{described.size} numbers')
    if limits:
        constraints.append(limits)
    if optional:
        shown = {DOUBLE: '.nan', STRING: "''"}.get(described.kind, '[]')
        constraints.append(f'{shown} = not given')
    message = ParameterDescriptor(
        name=name, type=_TYPES[described.kind].value,
        description=described.text + (f' [{described.unit}]' if described.unit else ''),
        additional_constraints='; '.join(constraints),
        read_only=not name.startswith(CHANGEABLE))
    if described.kind == DOUBLE and not optional and limits:
        # ROS checks NaN, which stands for "not given", against a range too.
        message.floating_point_range = [FloatingPointRange(
            from_value=-math.inf if described.low is None else described.low,
            to_value=math.inf if described.high is None else described.high)]
    return message


def check_change(flat: Mapping[str, Any],
                 changes: Sequence[RosParameter]) -> SetParametersResult:
    """Return whether parameters may change at run time, with the reason when not."""
    changed = dict(flat)
    for change in changes:
        if not change.name.startswith(CHANGEABLE):
            return SetParametersResult(successful=False, reason=(
                f'{change.name} cannot change while the node runs, since one session has one '
                'configuration; change the parameter file and start anew.'))
        changed[change.name] = change.value
    try:
        from_parameters(changed)
    except ConfigError as error:
        return SetParametersResult(successful=False, reason=str(error))
    return SetParametersResult(successful=True)


def _ros_value(described: Parameter, given: Any) -> Any:
    value = described.default if given is None else given
    if value is None:
        return _NOT_GIVEN[described.kind]
    if described.kind == DOUBLE:
        return float(value)
    if described.kind == DOUBLES:
        return [float(number) for number in value]
    return list(value) if described.kind in (STRINGS, INTEGERS) else value


def _bound(number: float | None) -> str:
    return 'any' if number is None else f'{number:g}'
