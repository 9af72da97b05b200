# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The folder of one session: everything an evaluation leaves behind.

While the session runs, the bags and windows.csv grow with it, so that a process that is
killed leaves what it had measured. The end adds summary.json and metrics.csv.
"""

from __future__ import annotations

import functools
import math
import shutil
from collections.abc import Callable, Mapping, Sequence
from contextlib import suppress
from pathlib import Path
from typing import Any

from teleop_eval.core.errors import OutputError
from teleop_eval.core.results import StatusLine, WindowResult
from teleop_eval.core.settings import Settings
from teleop_eval.sinks import messages
from teleop_eval.sinks.bag_writer import BagWriter
from teleop_eval.sinks.csv_tables import WindowTable, write_metrics
from teleop_eval.sinks.session_config import session_config
from teleop_eval.sinks.summary_file import (
    SessionFacts,
    document,
    to_json,
    write_atomically,
    write_summary,
)

CONFIG_FILE = 'config.yaml'
SUMMARY_FILE = 'summary.json'
METRICS_FILE = 'metrics.csv'
WINDOWS_FILE = 'windows.csv'
SUMMARY_BAG = 'summary'
INPUTS_BAG = 'inputs'

_LATCHED = ({'durability': 'transient_local', 'depth': 1},)

# Two arms whose stamps differ from receive time by less than this share one clock; more
# than the largest lateness setting, far less than two clocks that nobody set.
_SAME_CLOCK_NS = 20_000_000_000


class SessionFolder:
    """
    Writer of one session's folder.

    Parameters
    ----------
    path
        Folder to make; it may exist when it is empty.
    settings, flat
        The settings and the dotted parameters they came from.
    source
        'live', or the recording's base name.
    record_inputs
        Also keep the messages handed to `input`.
    descriptions
        Robot description (URDF text) by arm, for those that came from a file: kept in the
        folder, so that it can be evaluated again on another machine.
    resolve
        Turns a configured topic into its full name, for the folder's config.yaml.
    published
        Turns a topic that the node publishes, '~/right/latency_s', into its full name; not
        given: as the node /teleop_eval would.
    node_name
        Name of the node, with which its statuses begin.
    simulated_time
        Whether receive times come from a simulated clock.

    Raises
    ------
    OutputError
        When the folder exists and holds something, or cannot be written.

    """

    def __init__(self, path: Path | str, settings: Settings, flat: Mapping[str, Any], *,
                 source: str, record_inputs: bool = False,
                 descriptions: Mapping[str, str] | None = None,
                 resolve: Callable[[str], str] | None = None,
                 published: Callable[[str], str] = messages.plain_name,
                 node_name: str = 'teleop_eval', simulated_time: bool = False) -> None:
        self.path = Path(path)
        self._settings = settings
        self._source = source
        self._first_ns: int | None = None
        self._last_ns: int | None = None
        self._published = functools.cache(published)
        self._node_name = node_name
        self._origins: dict[str, int] = {}
        self._clock: tuple[int, int] | None = None
        self._finished = False
        self._windows = WindowTable(self.path / WINDOWS_FILE)
        self._bags: dict[str, BagWriter] = {}
        self._topics: dict[str, dict[str, str]] = {SUMMARY_BAG: {}, INPUTS_BAG: {}}
        config = session_config(flat, descriptions or {}, resolve, name=CONFIG_FILE,
                                simulated_time=simulated_time)
        make_empty(self.path)
        try:
            for name, text in config.items():
                write_atomically(self.path / name, text)
            for name in (SUMMARY_BAG, INPUTS_BAG) if record_inputs else (SUMMARY_BAG,):
                self._bags[name] = BagWriter(self.path / name, custom_data={
                    'teleop_eval.source': messages.clean_text(source)})
        except OutputError:
            self._abandon(config)
            raise

    def announce_input(self, topic: str, type_name: str, *,
                       qos: Sequence[Mapping[str, object]] = (), definition: str = '') -> None:
        """
        Make a topic known to `inputs/` with its QoS, so that it can be played back as it was.

        Optional for standard types: `input` does it with the default QoS otherwise.

        Parameters
        ----------
        topic, type_name
            Full topic name and type, such as 'std_msgs/msg/String'.
        qos
            Offered profiles with rosbag2's keys, such as {'durability': 'transient_local'}.
        definition
            Definition text of a type that is not a standard one.

        Raises
        ------
        OutputError
            When the topic is known with another type.

        """
        if INPUTS_BAG in self._bags:
            self._announce(INPUTS_BAG, topic, type_name, qos=qos, definition=definition)

    def input(self, topic: str, type_name: str, receive_ns: int, data: bytes) -> None:
        """
        Keep one input message with the receive time that the evaluator was given.

        Does nothing but note the time when inputs are not recorded.

        Raises
        ------
        OutputError
            When the bag cannot be written.

        """
        self._seen(receive_ns)
        if INPUTS_BAG in self._bags:
            self._write(INPUTS_BAG, topic, type_name, receive_ns, data)

    def diagnostics(self, now_ns: int, lines: Sequence[StatusLine]) -> None:
        """
        Keep one set of diagnostics.

        Raises
        ------
        OutputError
            When the bag cannot be written.

        """
        self._seen(now_ns)
        self._publish(messages.DIAGNOSTICS_TOPIC, messages.DIAGNOSTIC_ARRAY, now_ns,
                      messages.diagnostic_array(now_ns, lines, prefix=self._node_name))

    def window(self, result: WindowResult) -> None:
        """
        Keep the metrics of one closed window, in the bag and in windows.csv.

        Raises
        ------
        OutputError
            When one of them cannot be written.

        """
        self._seen(result.receive_ns)
        origin = self._origin(result)
        self._windows.add(result, (result.start_ns - origin) / 1e9,
                          (result.end_ns - origin) / 1e9)
        for name, metric in result.metrics.items():
            value = math.nan if metric.value is None else metric.value
            self._publish(messages.metric_topic(result.arm, name), messages.FLOAT64,
                          result.receive_ns, messages.float64(value))

    def flush(self) -> None:
        """
        Hand everything written so far to the operating system.

        Raises
        ------
        OutputError
            When a bag cannot be written.

        """
        for bag in self._bags.values():
            bag.flush()

    def finish(self, summary: Mapping[str, Any], *, start_ns: int | None = None,
               end_ns: int | None = None, notes: Sequence[str] = (),
               problems: Sequence[str] = ()) -> dict[str, Any]:
        """
        Write what can only be written at the end, close the bags, return the whole summary.

        Parameters
        ----------
        summary
            What the evaluator's `finish` returned.
        start_ns, end_ns
            First and last receive time; not given: those of what was written here.
        notes, problems
            Sentences to add to the summary's own.

        Raises
        ------
        OutputError
            Names everything that could not be written; all the rest has been.

        """
        whole = self._document(summary, start_ns, end_ns, notes=notes, problems=problems)
        if self._finished:
            return whole
        self._finished = True
        steps: list[Callable[[], object]] = [
            lambda: write_summary(self.path / SUMMARY_FILE, whole),
            lambda: write_metrics(self.path / METRICS_FILE, whole),
            self._windows.close,
            lambda: self._publish(messages.SUMMARY_TOPIC, messages.STRING, self._last_ns or 0,
                                  messages.string(to_json(whole, indent=None)), qos=_LATCHED),
            *(bag.close for bag in self._bags.values())]
        failures = []
        for step in steps:
            try:
                step()
            except (OutputError, OSError) as error:
                failures.append(str(error).rstrip('.'))
        # A disk that recovered has taken all but these.
        failures += [bag.note.rstrip('.') for bag in self._bags.values() if bag.dropped]
        if failures:
            raise OutputError('; '.join(dict.fromkeys(failures)) + '.')
        return whole

    def _abandon(self, config: Mapping[str, str]) -> None:
        """Take back what a failed start has made, so that a second try finds it empty."""
        with suppress(OutputError, OSError):
            for bag in self._bags.values():
                bag.close()
        for name in config:
            (self.path / name).unlink(missing_ok=True)
        for name in (SUMMARY_BAG, INPUTS_BAG):
            shutil.rmtree(self.path / name, ignore_errors=True)

    def _document(self, summary: Mapping[str, Any], start_ns: int | None, end_ns: int | None, *,
                  notes: Sequence[str], problems: Sequence[str]) -> dict[str, Any]:
        session = self._settings.session
        # A live session is called as its folder is, since the name asked for may be taken; the
        # folder's name may differ between two evaluations of one recording.
        name = self.path.name if self._source == 'live' else session.name or self._source
        facts = SessionFacts(
            name=name, operator=session.operator, source=self._source,
            start_ns=self._first_ns if start_ns is None else start_ns,
            end_ns=self._last_ns if end_ns is None else end_ns)
        return document(summary, facts, notes=notes, problems=problems)

    def _publish(self, topic: str, type_name: str, log_ns: int, data: bytes, *,
                 qos: Sequence[Mapping[str, object]] = ()) -> None:
        """Write what the node publishes, under the name under which it does."""
        self._write(SUMMARY_BAG, self._published(topic), type_name, log_ns, data, qos=qos)

    def _write(self, bag: str, topic: str, type_name: str, log_ns: int, data: bytes, *,
               qos: Sequence[Mapping[str, object]] = ()) -> None:
        """Write a message, its topic made known to the bag first."""
        if self._topics[bag].get(topic) != type_name:
            self._announce(bag, topic, type_name, qos=qos)
        self._bags[bag].write(topic, log_ns, data)

    def _announce(self, bag: str, topic: str, type_name: str, *,
                  qos: Sequence[Mapping[str, object]], definition: str = '') -> None:
        self._bags[bag].add_topic(topic, type_name, qos=qos, definition=definition)
        self._topics[bag][topic] = type_name

    def _seen(self, receive_ns: int) -> None:
        if self._first_ns is None or receive_ns < self._first_ns:
            self._first_ns = receive_ns
        if self._last_ns is None or receive_ns > self._last_ns:
            self._last_ns = receive_ns

    def _origin(self, result: WindowResult) -> int:
        """
        Return the time from which an arm's windows count, in the arm's time base.

        It is the start of the session's first window, so that the rows of two arms line up;
        an arm whose stamps come from another clock counts from its own first window.
        """
        offset = result.receive_ns - result.end_ns
        if self._clock is None:
            self._clock = (result.start_ns, offset)
        if result.arm not in self._origins:
            same = abs(offset - self._clock[1]) < _SAME_CLOCK_NS
            self._origins[result.arm] = self._clock[0] if same else result.start_ns
        return self._origins[result.arm]


def make_empty(path: Path) -> None:
    """
    Make a folder, or take an empty one.

    Raises
    ------
    OutputError
        When it holds something already or cannot be made.

    """
    try:
        path.mkdir(parents=True, exist_ok=True)
        held = next(path.iterdir(), None)
    except FileExistsError as error:
        raise OutputError(f'{path} is a file; give the name of a new folder.') from error
    except (OSError, ValueError) as error:
        reason = getattr(error, 'strerror', None) or error
        raise OutputError(
            f'The folder {path} cannot be made: {reason}; choose another one.') from error
    if held is not None:
        raise OutputError(f'The folder {path} already holds {held.name}; give the name of a new '
                          'or empty folder, so that no result is overwritten.')
