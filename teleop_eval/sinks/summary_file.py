# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The file summary.json: same results, same bytes.

Keys are put in one fixed order and numbers are written with the shortest text that reads
back as the same number, so that two evaluations can be compared byte by byte. For the same
reason the file holds no time of writing and no path of this machine.
"""

from __future__ import annotations

import json
import math
import os
import platform
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from importlib import metadata
from pathlib import Path
from typing import Any

from teleop_eval import __version__
from teleop_eval.core.errors import OutputError
from teleop_eval.sinks.messages import clean_text

# Raise this number with every change that could mislead a program that reads the file: a
# key that is renamed or removed, a unit or a meaning that changes. A new key needs no raise.
SCHEMA_VERSION = 1

# The order in which a person wants to read; keys not named here follow, sorted.
_ORDER = {key: place for place, key in enumerate((
    'schema_version', 'tool', 'session', 'arms', 'notes', 'problems',
    'name', 'version', 'python', 'libraries',
    'condition', 'operator', 'start_ns', 'end_ns', 'duration_s', 'source',
    'time_base', 'grid', 'segments', 'geometry', 'inputs', 'mappings', 'candidates',
    'prediction', 'why_not', 'postures', 'orientation', 'caveats', 'advice',
    'base', 'topic', 'messages', 'rate_hz',
    'metrics', 'value', 'unit', 'ci95', 'n', 'samples', 'status', 'reason', 'details'))}


@dataclass(frozen=True)
class SessionFacts:
    """What a summary says of the session as a whole; times in integer nanoseconds."""

    name: str
    operator: str
    source: str
    start_ns: int | None
    end_ns: int | None
    condition: str = 'teleoperated'

    def to_dict(self) -> dict[str, object]:
        """Return the facts as plain types."""
        duration = None
        if self.start_ns is not None and self.end_ns is not None:
            duration = (self.end_ns - self.start_ns) / 1e9
        return {'name': self.name, 'condition': self.condition, 'operator': self.operator,
                'start_ns': self.start_ns, 'end_ns': self.end_ns, 'duration_s': duration,
                'source': self.source}


def document(result: Mapping[str, Any], facts: SessionFacts, *, notes: Sequence[str] = (),
             problems: Sequence[str] = ()) -> dict[str, Any]:
    """
    Return the whole summary.

    Parameters
    ----------
    result
        What the evaluator's `finish` returned; keys it sets itself are kept, its notes and
        problems come first, then what its inputs' transport ages say against the clocks.
    facts
        Facts of the session.
    notes, problems
        Further sentences; one that is there already is not repeated.

    """
    whole: dict[str, Any] = {'schema_version': SCHEMA_VERSION, 'tool': tool_versions()}
    whole.update(result)
    whole['session'] = {**facts.to_dict(), **dict(result.get('session', {}))}
    whole.setdefault('arms', {})
    for key, added in (('notes', notes), ('problems', [*clock_problems(whole['arms']),
                                                       *problems])):
        whole[key] = list(dict.fromkeys([*result.get(key, ()), *added]))
    return whole


def clock_problems(arms: Mapping[str, Any]) -> list[str]:
    """
    Return a sentence for each input whose header stamps come from a clock that is off.

    An arm that uses receive time uses no stamps, and says so in its notes.
    """
    found = []
    for name, arm in arms.items():
        if (arm.get('time_base') or {}).get('base') != 'stamp':
            continue
        for role, entry in arm.get('inputs', {}).items():
            caveats = {metric.get('reason') for metric in entry.get('metrics', {}).values()
                       if metric.get('status') == 'ok' and metric.get('reason')}
            found += [f'{name}: {role} ({entry["topic"]}): {caveat.rstrip(".")}.'
                      for caveat in sorted(caveats)]
    return found


def tool_versions() -> dict[str, Any]:
    """Return the versions on which the numbers may depend."""
    return {'name': 'teleop_eval', 'version': __version__,
            'python': platform.python_version(),
            'libraries': {name: metadata.version(name) for name in ('numpy', 'scipy')}}


def to_json(whole: Mapping[str, Any], *, indent: int | None = 1) -> str:
    """Return the summary as JSON text in its fixed order; numbers that are none are null."""
    text = json.dumps(_plain(whole), ensure_ascii=False, allow_nan=False, indent=indent)
    return text + '\n' if indent is not None else text


def write_summary(path: Path, whole: Mapping[str, Any]) -> None:
    """
    Write summary.json under a temporary name and rename it, so that no half file is left.

    Raises
    ------
    OutputError
        When the file cannot be written.

    """
    write_atomically(path, to_json(whole))


def write_atomically(path: Path, text: str) -> None:
    """
    Write a text file so that its name stands for the whole content or for nothing.

    Raises
    ------
    OutputError
        When the file cannot be written.

    """
    temporary = path.with_name(path.name + '.part')
    try:
        try:
            with open(temporary, 'w', encoding='utf-8', newline='') as stream:
                stream.write(text)
                stream.flush()
                os.fsync(stream.fileno())
            os.replace(temporary, path)
        except BaseException:
            temporary.unlink(missing_ok=True)
            raise
    except OSError as error:
        raise OutputError(f'{path} cannot be written: {error.strerror or error}.') from error


def _plain(value: Any) -> Any:
    """Return a value as JSON knows it, dictionaries in the file's order."""
    if isinstance(value, Mapping):
        named = {clean_text(str(key)): item for key, item in value.items()}
        return {key: _plain(named[key]) for key in sorted(named, key=_place)}
    if isinstance(value, str):
        return clean_text(value)
    if value is None or isinstance(value, bool | int):
        return value
    if isinstance(value, float):
        # Adding 0.0 turns -0.0, which two libraries may disagree on, into 0.0.
        return float(value) + 0.0 if math.isfinite(value) else None
    if hasattr(value, 'tolist'):
        return _plain(value.tolist())
    if isinstance(value, set | frozenset):
        value = sorted(value)
    return [_plain(item) for item in value]


def _place(key: str) -> tuple[int, str]:
    return _ORDER.get(key, len(_ORDER)), key
