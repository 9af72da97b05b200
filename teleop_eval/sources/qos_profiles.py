# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Offered QoS profiles as the versions of rosbag2 write them.

References
----------
github.com/ros2/rosbag2, `qos.cpp`: metadata up to version 8 holds one text with YAML and
policies as the integers of `rmw/types.h`, version 9 a list and policies as names.

"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import yaml

_NAMES = {
    'history': ('system_default', 'keep_last', 'keep_all', 'unknown'),
    'reliability': (
        'system_default', 'reliable', 'best_effort', 'unknown', 'best_available',
    ),
    'durability': (
        'system_default', 'transient_local', 'volatile', 'unknown', 'best_available',
    ),
    'liveliness': (
        'system_default', 'automatic', 'manual_by_node', 'manual_by_topic', 'unknown',
        'best_available',
    ),
}


def read_qos(value: object) -> tuple[Mapping[str, Any], ...]:
    """Read offered profiles; empty where they are missing or cannot be understood."""
    if isinstance(value, str):
        try:
            value = yaml.safe_load(value)
        except (yaml.YAMLError, RecursionError, ValueError):
            return ()
    if not isinstance(value, list):
        return ()
    return tuple(_named(profile) for profile in value if isinstance(profile, dict))


def _named(profile: dict[str, Any]) -> dict[str, Any]:
    named = dict(profile)
    for policy, names in _NAMES.items():
        given = named.get(policy)
        if isinstance(given, int) and not isinstance(given, bool):
            named[policy] = names[given] if 0 <= given < len(names) else 'unknown'
        elif isinstance(given, str):
            named[policy] = given.lower()
    return named
