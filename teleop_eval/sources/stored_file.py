# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What one data file of a recording offers, whatever its format."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass, replace
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
    `others` names further types (or encodings) under which the topic occurs too; messages of
    those are left out.
    """

    name: str
    type_name: str
    definition: str = ''
    definition_format: str = ''
    qos: tuple[Mapping[str, Any], ...] = ()
    message_count: int | None = None
    encoding: str = 'cdr'
    type_hash: str = ''
    others: tuple[str, ...] = ()

    def same_kind(self, other: TopicInfo) -> bool:
        """Tell whether type and encoding are the same, so that one decoder fits both."""
        return (self.type_name, self.encoding) == (other.type_name, other.encoding)

    def with_other(self, other: TopicInfo) -> TopicInfo:
        """Return the topic with the kinds of message named that occur on it elsewhere."""
        names = dict.fromkeys((*self.others, other.kind, *other.others))
        return replace(self, others=tuple(name for name in names if name != self.kind))

    @property
    def kind(self) -> str:
        """Return type and encoding as words."""
        return self.type_name if self.encoding == 'cdr' else f'{self.type_name} ({self.encoding})'

    def occurrences(self) -> str:
        """Return the types under which the topic occurs, as words of a sentence."""
        return ' and '.join(f'as {kind}' for kind in (self.kind, *self.others))


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
