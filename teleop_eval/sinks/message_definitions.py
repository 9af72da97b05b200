# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Definitions and hashes of the standard message types, from the table of `rosbags`."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache


@dataclass(frozen=True)
class MessageDefinition:
    """Definition text of a type with all it depends on, and its RIHS01 hash (REP 2016)."""

    text: str
    type_hash: str


@cache
def standard_definition(type_name: str) -> MessageDefinition | None:
    """Look up a type such as `std_msgs/msg/String`; None where it is not a standard one."""
    store = _typestore()
    if store is None or type_name not in store.fielddefs:
        return None
    text, _ = store.generate_msgdef(type_name, ros_version=2)
    return MessageDefinition(text, store.hash_rihs01(type_name))


@cache
def _typestore():  # noqa: ANN202 (a rosbags class that cannot be named without rosbags)
    try:
        from rosbags.typesys import Stores, get_typestore
    except ImportError:
        return None
    return get_typestore(getattr(Stores, 'ROS2_KILTED', Stores.LATEST))
