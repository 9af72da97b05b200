# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The metadata.yaml of a rosbag2 folder, version 9.

References
----------
github.com/ros2/rosbag2, `rosbag2_storage`: `bag_metadata.hpp`, `yaml.hpp`, `qos.cpp`. From
version 9 on `offered_qos_profiles` is a list whose policies are names.

"""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

VERSION = 9

# Characters that JSON leaves as they are and YAML does not take (YAML 1.1, section 4.1).
_NOT_IN_YAML = re.compile('[\x7f-\x9f\u2028\u2029\ud800-\udfff\ufeff\ufffe\uffff]')

_INFINITE = {'sec': 9223372036, 'nsec': 854775807}
_QOS_DEFAULTS: dict[str, object] = {
    'history': 'keep_last',
    'depth': 10,
    'reliability': 'reliable',
    'durability': 'volatile',
    'deadline': _INFINITE,
    'lifespan': _INFINITE,
    'liveliness': 'automatic',
    'liveliness_lease_duration': _INFINITE,
    'avoid_ros_namespace_conventions': False,
}


@dataclass(frozen=True)
class BagTopic:
    """What rosbag2 wants to know of a topic; `qos` is a YAML list in flow style."""

    name: str
    type_name: str
    type_hash: str
    qos: str


@dataclass(frozen=True)
class BagTotals:
    """Totals of the recording; stamps are log times in nanoseconds."""

    start_ns: int
    duration_ns: int
    messages: int


def qos_text(profiles: Sequence[Mapping[str, object]]) -> str:
    """Write QoS profiles as rosbag2 does, with rosbag2's default for what is not given."""
    return flow([{**_QOS_DEFAULTS, **profile} for profile in profiles])


def flow(value: object) -> str:
    """Write a value as YAML in flow style: JSON is a subset of it."""
    text = json.dumps(value, ensure_ascii=False)
    return _NOT_IN_YAML.sub(lambda match: f'\\u{ord(match.group()):04x}', text)


def metadata_text(
    *,
    file_name: str,
    totals: BagTotals,
    topics: Sequence[tuple[BagTopic, int]],
    custom_data: Mapping[str, str],
) -> str:
    """
    Write the content of metadata.yaml, without its root key.

    Parameters
    ----------
    file_name
        Data file, relative to the folder.
    totals
        Start, duration and number of messages.
    topics
        Each topic with its number of messages.
    custom_data
        Free texts by name.

    Returns
    -------
    str
        YAML lines, unindented.

    """
    span = [
        f'duration:\n  nanoseconds: {totals.duration_ns}',
        f'starting_time:\n  nanoseconds_since_epoch: {totals.start_ns}',
        f'message_count: {totals.messages}',
    ]
    lines = [f'version: {VERSION}', 'storage_identifier: mcap', *span]
    lines.append('topics_with_message_count:' + ('' if topics else ' []'))
    for topic, count in topics:
        lines += [
            '  - topic_metadata:',
            f'      name: {flow(topic.name)}',
            f'      type: {flow(topic.type_name)}',
            '      serialization_format: cdr',
            f'      offered_qos_profiles: {topic.qos}',
            f'      type_description_hash: {flow(topic.type_hash)}',
            f'    message_count: {count}',
        ]
    lines += ['compression_format: ""', 'compression_mode: ""']
    lines += [f'relative_file_paths:\n  - {flow(file_name)}', 'files:']
    lines.append(f'  - path: {flow(file_name)}')
    lines += ['    ' + line for part in span for line in part.split('\n')]
    lines += [f'custom_data: {flow(dict(custom_data))}', 'ros_distro: ""']
    return '\n'.join(lines) + '\n'


def metadata_document(content: str) -> str:
    """Put metadata under the root key of the file."""
    indented = ''.join(f'  {line}\n' for line in content.splitlines())
    return 'rosbag2_bagfile_information:\n' + indented
