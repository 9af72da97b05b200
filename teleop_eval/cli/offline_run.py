# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Feed a recording to the evaluator in the order in which the live node would."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from functools import partial
from itertools import islice
from operator import itemgetter
from pathlib import Path
from typing import Any

from teleop_eval.cli.interruption import Interruption
from teleop_eval.cli.progress import Progress
from teleop_eval.cli.recorded_inputs import RecordedInputs
from teleop_eval.core.errors import InputError, OutputError, TeleopEvalError
from teleop_eval.core.evaluator import EVENT_TOPIC, SessionEvaluator
from teleop_eval.core.outcome import unevaluated
from teleop_eval.core.settings import Settings
from teleop_eval.sinks import messages
from teleop_eval.sinks.session_folder import SessionFolder
from teleop_eval.sources.decode import SUPPORTED, make_decoder
from teleop_eval.sources.feed_order import FeedOrder, Received
from teleop_eval.sources.recording import Recording, open_recording

# Messages that are sorted together; it keeps the cost of a batch small against that of its
# messages. Equal times are never parted, so the number does not reach the results.
_BATCH = 256
_TOPIC = itemgetter(1)
_DIAGNOSTICS_NS = 1_000_000_000


@dataclass(frozen=True)
class Outcome:
    """
    The whole summary and where it is.

    `complete` tells that the recording was read to the end of what can be read of it, and that
    something was measured; problems of the data do not count.
    """

    folder: Path
    summary: dict[str, Any]
    complete: bool


class OfflineRun:
    """
    One evaluation of one recording.

    Parameters
    ----------
    recording
        Folder or file with the messages.
    settings, flat
        The settings and the dotted parameters they came from.
    source
        The recording's base name, for the summary.
    out
        Session folder to make.
    descriptions
        Robot description by arm, for those that come from a file.
    resolve
        Turns a configured topic into its full name.
    progress
        Whether to show progress.
    simulated_time
        Whether receive times came from a simulated clock.
    candidates
        Whether to predict every configured mapping.

    """

    def __init__(self, recording: Path, settings: Settings, flat: Mapping[str, Any], *,
                 source: str, out: Path, descriptions: Mapping[str, str],
                 resolve: Callable[[str], str], progress: bool,
                 simulated_time: bool = False, candidates: bool = False) -> None:
        self._path = recording
        self._settings = settings
        self._flat = flat
        self._source = source
        self._out = out
        self._descriptions = descriptions
        self._resolve = resolve
        self._progress = progress
        self._simulated_time = simulated_time
        self._candidates = candidates
        self._first_ns: int | None = None
        self._last_ns: int | None = None
        self._next_diagnostics_ns = 0
        self._failure: OutputError | None = None

    def run(self) -> Outcome:
        """
        Evaluate and write; what stops the reading on the way is among the summary's problems.

        Raises
        ------
        TeleopEvalError
            When nothing can be evaluated or a result cannot be written.

        """
        evaluator = SessionEvaluator(
            self._settings, descriptions=self._descriptions, resolve=self._resolve,
            simulated_time=self._simulated_time, candidates=self._candidates)
        with open_recording(self._path) as recording:
            inputs = RecordedInputs(
                recording, evaluator.routes, event_topic=EVENT_TOPIC, supported=SUPPORTED,
                make_decoder=make_decoder)
            folder = SessionFolder(
                self._out, self._settings, self._flat, source=self._source,
                descriptions=self._descriptions, resolve=self._resolve,
                published=self._resolve, simulated_time=self._simulated_time)
            failures: list[str] = []
            with Interruption() as interruption:
                try:
                    self._feed(recording, inputs, evaluator, folder, interruption)
                except TeleopEvalError as error:
                    failures.append(f'Reading stopped: {error}')
                if interruption.wanted:
                    failures.append(self._interrupted(recording))
                elif nothing := inputs.nothing():
                    failures.append(nothing)
                losses = recording.losses
                summary = evaluator.finish(explained=inputs.explained())
                if not failures and (nothing := unevaluated(summary)):
                    failures.append(nothing)
                whole = self._finish(
                    evaluator, folder, summary,
                    problems=[*inputs.problems, *failures, *losses, *inputs.malformed()],
                    notes=[note for note in recording.notes
                           if note not in losses and not inputs.is_said(note)])
            return Outcome(folder.path, whole, complete=not failures)

    def _feed(self, recording: Recording, inputs: RecordedInputs, evaluator: SessionEvaluator,
              folder: SessionFolder, interruption: Interruption) -> None:
        order = FeedOrder(EVENT_TOPIC, messages.string('segment'))
        total = sum(recording.topics[name].message_count or 0
                    for name in inputs.topics if name in recording.topics)
        done, decoders = 0, inputs.decoders
        with Progress(f'Reading {self._path.name}', total, enabled=self._progress) as progress:
            for batch in _batches(recording, inputs):
                # Messages of the last time wait for others of that time in the next batch.
                cut_ns = batch[-1].receive_ns - 1 if batch else None
                for receive_ns, topic, _, data in order.order(batch, cut_ns=cut_ns):
                    if self._first_ns is None:
                        self._first_ns = receive_ns
                    self._last_ns = receive_ns
                    try:
                        sample = decoders[topic](data)
                    except InputError as error:
                        inputs.refuse(topic, error, (receive_ns - self._first_ns) / 1e9)
                        continue
                    evaluator.add(receive_ns, topic, sample)
                    if receive_ns >= self._next_diagnostics_ns:
                        self._second(receive_ns, evaluator, folder)
                inputs.read.update(map(_TOPIC, batch))
                done += len(batch)
                self._windows(evaluator, folder)
                progress.update(done)
                if interruption.wanted:
                    return

    def _second(self, receive_ns: int, evaluator: SessionEvaluator,
                folder: SessionFolder) -> None:
        """Write the diagnostics that the live node would publish once a second."""
        if self._next_diagnostics_ns:
            self._windows(evaluator, folder)
            lines = evaluator.diagnostics(receive_ns)
            self._write(lambda: folder.diagnostics(receive_ns, lines))
        self._next_diagnostics_ns = receive_ns + _DIAGNOSTICS_NS

    def _windows(self, evaluator: SessionEvaluator, folder: SessionFolder) -> None:
        for window in evaluator.poll():
            self._write(partial(folder.window, window))

    def _write(self, action: Callable[[], object]) -> None:
        """Go on when a write fails: the summary, which comes last, may still be written."""
        try:
            action()
        except OutputError as error:
            self._failure = self._failure or error

    def _finish(self, evaluator: SessionEvaluator, folder: SessionFolder,
                summary: dict[str, Any], *, problems: list[str],
                notes: list[str]) -> dict[str, Any]:
        """
        Write what there is, whatever went wrong before; return the whole summary.

        `summary` is the evaluator's, which is finished.

        Raises
        ------
        OutputError
            When something could not be written, now or on the way.

        """
        self._windows(evaluator, folder)
        try:
            whole = folder.finish(
                summary, start_ns=self._first_ns, end_ns=self._last_ns,
                notes=[*notes, *evaluator.notes], problems=[*problems, *evaluator.problems])
        except OutputError as error:
            raise self._failure or error from error
        if self._failure is not None:
            raise self._failure
        return whole

    def _interrupted(self, recording: Recording) -> str:
        read, whole = 0.0, 0.0
        if recording.start_ns is not None and recording.end_ns is not None:
            whole = (recording.end_ns - recording.start_ns) / 1e9
            read = ((self._last_ns or recording.start_ns) - recording.start_ns) / 1e9
        return (f'Interrupted after {read:.1f} s of the {whole:.1f} s recording; the results '
                'are those of the part that was read.')


def _batches(recording: Recording, inputs: RecordedInputs) -> Iterator[list[Received]]:
    """
    Yield the messages some at a time, numbered so that equal times keep their order.

    The last batch is empty: it lets go of what waited for more.
    """
    numbered = enumerate(recording.messages(inputs.topics))
    while True:
        batch = [Received(log_ns, topic, number, data)
                 for number, (log_ns, topic, data) in islice(numbered, _BATCH)]
        yield batch
        if not batch:
            return
