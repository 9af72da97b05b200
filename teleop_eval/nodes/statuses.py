# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Statuses of /diagnostics: the evaluator's, completed with what only the node knows."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import replace

from teleop_eval.core.inputs_status import ALL_ARRIVE
from teleop_eval.core.results import LEVEL_ERROR, LEVEL_OK, LEVEL_STALE, LEVEL_WARN, StatusLine
from teleop_eval.nodes.live_session import LiveSession

_TIMES = re.compile(r'(?<=[.?]) \(\d+ times\)\.$| \(\d+ times\)(?=\.$)')
LEVEL_WORDS = {LEVEL_OK: 'OK', LEVEL_WARN: 'WARN', LEVEL_ERROR: 'ERROR', LEVEL_STALE: 'STALE'}


def with_inputs(line: StatusLine, values: Mapping[str, str],
                problems: Sequence[str]) -> StatusLine:
    """Return an arm's status of inputs with the topics' own facts and problems."""
    merged = replace(line, values={**line.values, **values})
    if not problems:
        return merged
    words = [problem.removesuffix('.') for problem in problems]
    if line.message != ALL_ARRIVE:
        words.append(line.message)
    return replace(merged, level=LEVEL_ERROR, message='; '.join(words))


def waiting_inputs(arm: str, values: Mapping[str, str], problems: Sequence[str]) -> StatusLine:
    """Return an arm's status of inputs while no session runs."""
    return with_inputs(StatusLine(f'{arm}: inputs', LEVEL_OK, 'No session runs.', {}),
                       values, problems)


def session_line(session: LiveSession | None, *, recording: bool) -> StatusLine:
    """Return the status of the session itself."""
    if session is None:
        return StatusLine('session', LEVEL_OK, 'No session runs; call ~/start_session.',
                          {'state': 'stopped'})
    malformed = sum(session.malformed.values())
    values = {
        'state': 'running', 'folder': str(session.folder.path),
        'recording inputs': 'yes' if recording else 'no', 'messages': str(session.messages),
        'malformed messages': str(malformed), 'clock steps back': str(session.segments)}
    if session.write_problem:
        return StatusLine('session', LEVEL_ERROR, session.write_problem, values)
    if malformed:
        topics = ', '.join(sorted(session.malformed))
        what = 'message' if malformed == 1 else 'messages'
        return StatusLine('session', LEVEL_WARN,
                          f'{malformed} {what} could not be decoded ({topics}).', values)
    return StatusLine('session', LEVEL_OK, f'Session in {session.folder.path}.', values)


class Changes:
    """Finds what a person should be told: each new sentence once, each change of a level."""

    def __init__(self) -> None:
        self._levels: dict[str, int] = {}
        self._said: set[str] = set()

    def new(self, sentences: Sequence[str]) -> list[str]:
        """Return the sentences not said before."""
        fresh = {}
        for sentence in sentences:
            # How often something was met grows all the time, and is no news.
            what = _TIMES.sub('', sentence)
            if what not in self._said:
                fresh[what] = sentence
        self._said.update(fresh)
        return list(fresh.values())

    def levels(self, lines: Sequence[StatusLine]) -> list[StatusLine]:
        """Return the statuses whose level changed; at first sight only errors."""
        changed = []
        for line in lines:
            before = self._levels.get(line.name)
            self._levels[line.name] = line.level
            if line.level == LEVEL_ERROR if before is None else line.level != before:
                changed.append(line)
        return changed
