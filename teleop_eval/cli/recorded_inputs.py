# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Match the configured topics with those of a recording, and decode their messages."""

from __future__ import annotations

import difflib
from collections import Counter
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

from teleop_eval.core.errors import InputError, RecordingError, TeleopEvalError
from teleop_eval.core.samples import Sample
from teleop_eval.core.sentences import listed
from teleop_eval.sinks import messages
from teleop_eval.sources.decode import full_type_name
from teleop_eval.sources.malformed import malformed_sentence, nothing_sentence
from teleop_eval.sources.recording import Recording, TopicInfo, several_types

Decoder = Callable[[bytes], Sample]

# What the decoders call the kinds of message that serve each role of a topic.
KIND_OF_ROLE = {
    'hand': 'pose', 'shoulder': 'pose', 'rate_input': 'rate', 'operator_joints': 'joints',
    'robot_joints': 'joints', 'command': 'command', 'engaged': 'bool', 'active_mapping': 'text',
    'description': 'text', 'operator_description': 'text'}
# Kinds that carry what is measured; the others only say how to take it.
MEASURED = ('pose', 'joints', 'rate', 'command')
# Kinds that messages of any other type may serve as, by the fields of their definition.
_ANY_NAME = ('joints', 'command')
_OR_FIELDS = ', or a type with name[] and position[] whose definition is recorded'


class RouteLike(Protocol):
    """What is read of an evaluator's route."""

    @property
    def arm(self) -> str:
        """Name of the arm."""

    @property
    def role(self) -> str:
        """What the topic is to the arm."""

    @property
    def enabled_field(self) -> str | None:
        """Boolean array of the message that switches joints on."""


@dataclass
class _Failures:
    """Messages of one topic that could not be decoded; time and reason are the first one's."""

    first_s: float
    reason: str
    count: int = 0


class RecordedInputs:
    """
    The recording's topics that an evaluation reads, each with its decoder.

    Parameters
    ----------
    recording
        The open recording.
    routes
        By full topic name, what the topic is used for.
    event_topic
        Topic of session events, read where the recording has it.
    supported
        Message types by kind; see KIND_OF_ROLE.
    make_decoder
        `sources.decode.make_decoder`.

    Attributes
    ----------
    topics
        Topics to read.
    decoders
        By topic: bytes to a sample, or InputError.
    read
        Number of messages read so far, by topic; the reader counts.
    problems
        A sentence for each configured topic that the recording lacks or that cannot serve.

    Raises
    ------
    InputError
        When none of the topics that the recording has can serve.
    RecordingError
        When the recording has none of the topics, or no message of them.

    """

    def __init__(self, recording: Recording, routes: Mapping[str, Sequence[RouteLike]], *,
                 event_topic: str, supported: Mapping[str, Iterable[str]],
                 make_decoder: Callable[..., Decoder]) -> None:
        self.problems: list[str] = []
        self.decoders: dict[str, Decoder] = {}
        self.read: Counter[str] = Counter()
        self._failures: dict[str, _Failures] = {}
        absent = [topic for topic in routes if topic not in recording.topics]
        for topic in [topic for topic in routes if topic in recording.topics]:
            try:
                self.decoders[topic] = _decoder(
                    recording.topics[topic], routes[topic], recording, supported, make_decoder)
            except InputError as error:
                self.problems.append(str(error))
        if not self.decoders:
            raise (InputError(' '.join(self.problems)) if self.problems
                   else RecordingError(_nothing(recording, routes)))
        if not any(recording.topics[topic].message_count != 0 for topic in self.decoders):
            raise RecordingError(
                f'The recording {recording.path} holds no message of the configured topics '
                f'({listed(self.decoders)}); record while they are published.')
        self._measured = [topic for topic, uses in routes.items() if any(
            KIND_OF_ROLE[route.role] in MEASURED for route in uses)]
        self._several = [several_types(recording, recording.topics[topic])
                         for topic in routes if topic in recording.topics]
        self._silent = routes.keys() - self.decoders
        if recording.losses and len(absent) > 1:
            self.problems.append(f'What is left of {recording.path.name} holds nothing of '
                                 f'{listed(absent)}.')
        else:
            self.problems += [_absence(topic, routes[topic], recording) for topic in absent]
        events = recording.topics.get(event_topic)
        self.topics = tuple(self.decoders)
        if events is not None and events.type_name == messages.STRING:
            self.topics += (event_topic,)
        # The order of the feed makes such events itself, also where none was recorded.
        self.decoders[event_topic] = make_decoder(messages.STRING)

    def refuse(self, topic: str, error: TeleopEvalError, time_s: float) -> None:
        """Count a message that its decoder refused, so long after the first message of all."""
        self._failures.setdefault(topic, _Failures(time_s, str(error))).count += 1

    def explained(self) -> set[str]:
        """Return the topics of which nothing can come and on which a sentence says why."""
        return self._silent | {topic for topic, found in self._failures.items()
                               if found.count == self.read[topic]}

    def malformed(self) -> list[str]:
        """Return a sentence for each topic with messages that could not be decoded."""
        return [malformed_sentence(topic, count=found.count, total=self.read[topic],
                                   first_s=found.first_s, reason=found.reason)
                for topic, found in self._failures.items()]

    def nothing(self) -> str:
        """Return a sentence where no measured sample could be read, '' elsewhere."""
        received = sum(self.read[topic] for topic in self._measured)
        refused = sum(found.count for topic, found in self._failures.items()
                      if topic in self._measured)
        return '' if received > refused else nothing_sentence(
            self._measured, received=received)

    def is_said(self, note: str) -> bool:
        """Tell whether a note of the recording only repeats one of the problems."""
        return any(note.startswith(text) for text in self._several)


def _decoder(info: TopicInfo, uses: Sequence[RouteLike], recording: Recording,
             supported: Mapping[str, Iterable[str]],
             make_decoder: Callable[..., Decoder]) -> Decoder:
    """
    Return the decoder of a topic.

    Raises
    ------
    InputError
        When the topic cannot serve.

    """
    _check(info, uses, recording, supported)
    enabled_field = _enabled_field(info.name, uses)
    try:
        return make_decoder(
            info.type_name, definition=info.definition,
            definition_format=info.definition_format or 'ros2msg', enabled_field=enabled_field)
    except InputError as error:
        raise InputError(f'Topic {info.name} of {recording.path}: {error}') from error


def _enabled_field(topic: str, uses: Sequence[RouteLike]) -> str:
    fields = sorted({route.enabled_field for route in uses if route.enabled_field})
    if len(fields) > 1:
        raise InputError(
            f'Topic {topic} is configured with the enabled_field values {" and ".join(fields)}; '
            'give one.')
    return fields[0] if fields else ''


def _check(info: TopicInfo, uses: Sequence[RouteLike], recording: Recording,
           supported: Mapping[str, Iterable[str]]) -> None:
    """
    Refuse a topic that cannot serve.

    Raises
    ------
    InputError
        Several types on the topic, an encoding other than CDR, a type its use cannot read.

    """
    if info.others:
        raise InputError(
            f'{several_types(recording, info)}, so it is not evaluated; one topic must have one '
            'type, so name another topic, or stop the other publisher and record again.')
    if info.encoding != 'cdr':
        raise InputError(
            f'Topic {info.name} of {recording.path} has the encoding {info.encoding!r}; only '
            'cdr, which ROS 2 writes, can be read.')
    try:
        type_name = full_type_name(info.type_name)
    except InputError as error:
        raise InputError(f'Topic {info.name} of {recording.path}: {error}') from error
    for route in uses:
        kind = KIND_OF_ROLE[route.role]
        expected = sorted(supported[kind])
        by_fields = kind in _ANY_NAME and type_name not in _all_types(supported)
        if type_name not in expected and not (by_fields and info.definition):
            raise InputError(
                f'Topic {info.name} is configured as {_use(route)}, but has the type '
                f'{type_name}, which cannot serve as that; expected is '
                f'{" or ".join(expected)}{_OR_FIELDS if kind in _ANY_NAME else ""}.')


def _all_types(supported: Mapping[str, Iterable[str]]) -> set[str]:
    """Return the types whose meaning is known; any other may serve by its fields."""
    return {type_name for types in supported.values() for type_name in types}


def _absence(topic: str, uses: Sequence[RouteLike], recording: Recording) -> str:
    near = nearest(topic, recording.topics)
    hint = f'the nearest there are {", ".join(near)}' if near else 'none there is like it'
    return (f'Topic {topic} ({" and ".join(_use(route) for route in uses)}) is not in the '
            f'recording {recording.path.name}; {hint}.')


def _nothing(recording: Recording, routes: Mapping[str, Sequence[RouteLike]]) -> str:
    held = listed(sorted(recording.topics)) or 'no topic at all'
    return (f'The recording {recording.path} has none of the configured topics '
            f'({listed(sorted(routes))}); it has {held}; check the names and --namespace.')


def _use(route: RouteLike) -> str:
    return f'{route.role.replace("_", " ")} of arm {route.arm}'


def nearest(topic: str, names: Iterable[str]) -> list[str]:
    """Return up to three names like a topic: those that end the same, then similar ones."""
    names = sorted(names)
    last = topic.rpartition('/')[2]
    found = [name for name in names if name.rpartition('/')[2] == last]
    found += difflib.get_close_matches(topic, names, n=3, cutoff=0.5)
    return list(dict.fromkeys(found))[:3]
