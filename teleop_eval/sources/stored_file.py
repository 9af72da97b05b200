# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What one data file of a recording offers, whatever its format."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass
from typing import Any, NamedTuple, Protocol


class Loss(str):
    """A note on messages that are lost, so that all results are those of the rest."""

    __slots__ = ()


class Message(NamedTuple):
    """One serialized message and when it was logged, in nanoseconds since the epoch."""

    log_ns: int
    topic: str
    data: bytes


@dataclass(frozen=True)
class TopicInfo:
    """
    One topic of a recording.

    `definition` is the text of the type's definition with `definition_format` `ros2msg` or
    `ros2idl`, both empty where the recording has none. `qos` holds the offered profiles with
    policies as names. `message_count` is None where counting would mean reading everything.
    """

    name: str
    type_name: str
    definition: str = ''
    definition_format: str = ''
    qos: tuple[Mapping[str, Any], ...] = ()
    message_count: int | None = None
    encoding: str = 'cdr'
    type_hash: str = ''


class StoredFile(Protocol):
    """
    One data file: its topics, span and messages.

    `notes` grows while messages are read: one sentence for each thing left out.
    """

    topics: dict[str, TopicInfo]
    start_ns: int | None
    end_ns: int | None
    message_count: int | None
    notes: list[str]

    def batches(self, topics: Collection[str]) -> Iterator[list[Message]]:
        """Yield the messages of these topics in log-time order, some at a time."""
        ...


def definition_format(encoding: str) -> str:
    """Name the format of a definition text, empty where it is none we know."""
    return {'ros2msg': 'ros2msg', 'ros2idl': 'ros2idl', 'omgidl': 'ros2idl'}.get(encoding, '')


def add_note(notes: list[str], note: str) -> None:
    """Add a note once, however often the recording is read."""
    if note not in notes:
        notes.append(note)
