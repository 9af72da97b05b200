# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
One session: the ordered stream goes to the recording and to the evaluator, alike.

Nothing here reads a clock or knows ROS, so that the same stream gives the same session.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any, Protocol

from teleop_eval.core.errors import InputError, OutputError, TeleopEvalError
from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.outcome import unevaluated
from teleop_eval.core.results import StatusLine, WindowResult
from teleop_eval.core.samples import Sample
from teleop_eval.sinks import messages
from teleop_eval.sources.feed_order import FeedOrder, Received
from teleop_eval.sources.malformed import malformed_sentence, nothing_sentence

Decoder = Callable[[bytes], Sample]
SEGMENT, RESET = 'segment', 'reset'


class Folder(Protocol):
    """What a session needs of its folder."""

    path: Path

    def input(self, topic: str, type_name: str, receive_ns: int, data: bytes) -> None:
        """Keep one input message."""

    def window(self, result: WindowResult) -> None:
        """Keep one window."""

    def diagnostics(self, now_ns: int, lines: Sequence[StatusLine]) -> None:
        """Keep one set of statuses."""

    def flush(self) -> None:
        """Hand everything to the operating system."""

    def finish(self, summary: Mapping[str, Any], *, start_ns: int | None, end_ns: int | None,
               notes: Sequence[str], problems: Sequence[str]) -> dict[str, Any]:
        """Write what comes at the end and return the whole summary."""


@dataclass(slots=True)
class _Stream:
    """What is known of one topic of the session."""

    type_name: str
    decode: Decoder
    messages: int = 0
    malformed: int = 0
    first_failure: str = ''
    first_failure_ns: int = 0


class LiveSession:
    """
    A running session.

    Parameters
    ----------
    evaluator, folder
        Where the stream goes.
    event_topic
        Topic under which events stand in the stream.
    type_name
        Returns the message type of a topic.
    decoder
        Returns the decoder of a topic; called once for each.

    """

    def __init__(self, evaluator: SessionEvaluator, folder: Folder, *, event_topic: str,
                 type_name: Callable[[str], str], decoder: Callable[[str], Decoder]) -> None:
        self.evaluator = evaluator
        self.folder = folder
        self.messages = 0
        self.problems: list[str] = []
        self.write_problem = ''
        self.unevaluated = ''
        self.first_ns: int | None = None
        self.last_ns: int | None = None
        self._event_topic = event_topic
        self._type_name = type_name
        self._decoder = decoder
        self._known: dict[str, _Stream] = {}
        self._feed = FeedOrder(event_topic, messages.string(SEGMENT))

    def start(self, now_ns: int, latched: Sequence[Received]) -> None:
        """Begin with the messages that were latched before and are valid now."""
        self._feed_all(self._feed.order([item._replace(receive_ns=now_ns) for item in latched]))

    def add(self, batch: Sequence[Received], cut_ns: int | None = None) -> list[WindowResult]:
        """Take a drained batch; return the windows that it closed."""
        self._feed_all(self._feed.order(batch, cut_ns=cut_ns))
        return self._windows()

    def event(self, now_ns: int, text: str) -> None:
        """Put an event into the stream, as if it had been received now."""
        self._feed_all(self._feed.order(
            [Received(now_ns, self._event_topic, 0, messages.string(text))]))

    def feed_time_ns(self, clock_ns: int) -> int:
        """Return a reading of the receive clock as time of the stream."""
        return self._feed.feed_time_ns(clock_ns)

    @property
    def segments(self) -> int:
        """Return how often the receive clock stepped back."""
        return self._feed.segments

    @property
    def malformed(self) -> dict[str, int]:
        """Return the number of messages that could not be decoded, by topic."""
        return {topic: stream.malformed for topic, stream in self._known.items()
                if stream.malformed}

    def malformed_sentences(self) -> list[str]:
        """Return a sentence for each topic with messages that could not be decoded."""
        return [malformed_sentence(
            topic, count=stream.malformed, total=stream.messages,
            first_s=(stream.first_failure_ns - (self.first_ns or 0)) / 1e9,
            reason=stream.first_failure)
            for topic, stream in self._known.items() if stream.malformed]

    def nothing(self, measured: Collection[str]) -> str:
        """Return a sentence if no sample of these topics could be used, '' if one was."""
        streams = [stream for topic, stream in self._known.items() if topic in measured]
        received = sum(stream.messages for stream in streams)
        refused = sum(stream.malformed for stream in streams)
        return '' if received > refused else nothing_sentence(measured, received=received)

    def first_failures(self) -> list[str]:
        """Return why the first such message of each topic could not be decoded."""
        return [f'{topic}: {stream.first_failure}' for topic, stream in self._known.items()
                if stream.malformed]

    def keep_diagnostics(self, now_ns: int, lines: Sequence[StatusLine]) -> None:
        """Write one set of statuses into the folder."""
        self._write(lambda: self.folder.diagnostics(now_ns, lines))

    def flush(self) -> None:
        """Hand everything to the operating system; a full disk is said and tried again."""
        if self._write(self.folder.flush):
            self.write_problem = ''

    def finish(self, complete: Callable[[dict[str, Any]], None], *,
               measured: Collection[str] = (), problems: Sequence[str] = (),
               explained: Collection[str] = ()) -> tuple[list[WindowResult], dict[str, Any]]:
        """
        Finish evaluator and files; `unevaluated` then says why there is no number, if so.

        Parameters
        ----------
        complete
            Puts into the evaluator's summary what only the caller knows.
        measured
            Topics that carry what is measured.
        problems
            Sentences for the summary.
        explained
            Topics whose silence is explained by one of them.

        Returns
        -------
        list of WindowResult
            The last windows.
        dict
            The whole summary.

        """
        self._feed_all(self._feed.order([]))
        refused = {topic for topic, stream in self._known.items()
                   if stream.malformed == stream.messages > 0}
        summary = self.evaluator.finish(explained=refused | set(explained))
        last = self._windows()
        complete(summary)
        self.unevaluated = (
            self.nothing(measured) if measured else '') or unevaluated(summary)
        whole: dict[str, Any]
        try:
            whole = self.folder.finish(
                summary, start_ns=self.first_ns, end_ns=self.last_ns,
                notes=(), problems=[*self.problems, *self.malformed_sentences(), *problems,
                                      *filter(None, [self.unevaluated])])
        except OutputError as error:
            self._failed(error)
            whole = summary
        return last, whole

    def _windows(self) -> list[WindowResult]:
        closed = self.evaluator.poll()
        for result in closed:
            self._write(partial(self.folder.window, result))
        return closed

    def _feed_all(self, ordered: Sequence[Received]) -> None:
        keep, add, known = self.folder.input, self.evaluator.add, self._known
        for receive_ns, topic, _, data in ordered:
            stream = known.get(topic)
            if stream is None:
                stream = known[topic] = self._learn(topic)
            stream.messages += 1
            try:
                keep(topic, stream.type_name, receive_ns, data)
            except OutputError as error:
                self._failed(error)
            try:
                sample = stream.decode(data)
            except TeleopEvalError as error:
                if not stream.malformed:
                    stream.first_failure, stream.first_failure_ns = str(error), receive_ns
                stream.malformed += 1
                continue
            add(receive_ns, topic, sample)
        if ordered:
            self.messages += len(ordered)
            self.last_ns = ordered[-1].receive_ns
            if self.first_ns is None:
                self.first_ns = ordered[0].receive_ns

    def _learn(self, topic: str) -> _Stream:
        if topic == self._event_topic:
            return _Stream(messages.STRING, self._decoder(topic))
        type_name = self._type_name(topic)
        try:
            return _Stream(type_name, self._decoder(topic))
        except InputError as error:
            return _Stream(type_name, _refusal(str(error)))

    def _write(self, action: Callable[[], object]) -> bool:
        try:
            action()
        except OutputError as error:
            self._failed(error)
            return False
        return True

    def _failed(self, error: OutputError) -> None:
        if not self.write_problem:
            self.problems.append(str(error))
        self.write_problem = str(error)


def _refusal(text: str) -> Decoder:
    """Return a decoder of messages that nothing can decode: each counts as malformed."""
    def refuse(_: bytes) -> Sample:
        raise InputError(text)
    return refuse
