# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The metadata.yaml of a rosbag2 folder, any version.

References
----------
github.com/ros2/rosbag2, `rosbag2_storage`: `bag_metadata.hpp`, `yaml.hpp`. Compression came
with version 3, QoS with 4, files with 5, custom data with 6, type hashes with 7. Keys may
stand in any order and later ones may be missing.

"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path, PurePosixPath
from typing import Any

import yaml

from teleop_eval.sources.qos_profiles import read_qos

NEWEST_VERSION = 9
_MAX_BYTES = 32 << 20
_UNUSABLE = (
    OSError, yaml.YAMLError, RecursionError, ValueError, TypeError, KeyError, AttributeError
)


@dataclass(frozen=True)
class StatedTopic:
    """What metadata.yaml says of a topic."""

    type_name: str
    encoding: str
    qos: tuple[Mapping[str, Any], ...]
    message_count: int


@dataclass(frozen=True)
class BagMetadata:
    """What metadata.yaml says; empty where there is none or it cannot be understood."""

    version: int = 0
    files: tuple[str, ...] = ()
    compression_format: str = ''
    compression_mode: str = ''
    topics: Mapping[str, StatedTopic] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

    @property
    def counts(self) -> dict[str, int]:
        """Messages by topic."""
        return {name: topic.message_count for name, topic in self.topics.items()}


def read_bag_metadata(folder: Path) -> BagMetadata:
    """Read the metadata of a folder; what is wrong with it becomes a note."""
    path = folder / 'metadata.yaml'
    if not path.is_file():
        return BagMetadata(notes=(f'{folder.name} has no metadata.yaml; its files are read.',))
    try:
        if path.stat().st_size > _MAX_BYTES:
            raise ValueError(f'it has more than {_MAX_BYTES >> 20} MiB')
        document = yaml.load(  # noqa: S506 (a safe loader, in C where there is one)
            path.read_text(encoding='utf-8'), getattr(yaml, 'CSafeLoader', yaml.SafeLoader)
        )
        return _interpret(document)
    except _UNUSABLE as error:
        reason = ' '.join(str(error).split())[:200]
        return BagMetadata(
            notes=(
                f'metadata.yaml of {folder.name} is not usable ({reason}); its data files are '
                'read.',
            )
        )


def _interpret(document: Any) -> BagMetadata:
    if not isinstance(document, dict) or 'rosbag2_bagfile_information' not in document:
        raise ValueError('it has no rosbag2_bagfile_information')
    info = document['rosbag2_bagfile_information']
    if not isinstance(info, dict):
        raise ValueError('rosbag2_bagfile_information is no map')
    version = int(info.get('version') or 0)
    notes = []
    if version > NEWEST_VERSION:
        notes.append(
            f'metadata.yaml has version {version}, newer than {NEWEST_VERSION}; it is read as '
            f'version {NEWEST_VERSION}.'
        )
    topics = {}
    for entry in info.get('topics_with_message_count') or ():
        topic = entry['topic_metadata']
        topics[str(topic['name'])] = StatedTopic(
            str(topic.get('type', '')),
            str(topic.get('serialization_format') or 'cdr'),
            read_qos(topic.get('offered_qos_profiles')),
            int(entry.get('message_count') or 0),
        )
    mode = str(info.get('compression_mode') or '').lower()
    return BagMetadata(
        version,
        # Early versions named files relative to the folder's parent.
        tuple(PurePosixPath(str(name)).name for name in info.get('relative_file_paths') or ()),
        str(info.get('compression_format') or '').lower(),
        '' if mode == 'none' else mode,
        topics,
        tuple(notes),
    )
