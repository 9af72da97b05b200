# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Run the real command on a recording with a fault, and look at what it said and kept."""

from __future__ import annotations

import json
import re
import sys
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

# Import mode importlib puts no test folder on the path; the helpers beside the tests need it.
sys.path.insert(0, str(Path(__file__).parent))

import faulty_recording as faulty  # noqa: E402

from teleop_eval.cli.main import main  # noqa: E402

PREFIX = 'teleop_eval summarize: '


@dataclass(frozen=True)
class Done:
    """What a run of the command left."""

    status: int
    out: str
    err: str
    folder: Path

    @property
    def sentences(self) -> list[str]:
        """Return the lines on standard error, each checked to be a readable sentence."""
        lines = self.err.splitlines()
        for line in lines:
            assert line.startswith(PREFIX), line
            text = line.removeprefix(PREFIX)
            assert text.isprintable() and text[-1] in '.?' and len(text) < 700, text
            assert not re.search(r'[a-z)]\. [A-Z]', text), f'more than one sentence: {text}'
            assert 'Error' not in text and 'None' not in text and '()' not in text, text
        return [line.removeprefix(PREFIX) for line in lines]

    def sentence(self, *words: str) -> str:
        """Return the only sentence, which has all these words."""
        assert len(self.sentences) == 1, self.err
        [text] = self.sentences
        assert [word for word in words if word not in text] == [], text
        return text

    @property
    def summary(self) -> dict[str, Any]:
        """Return summary.json; the folder must have all the other files too."""
        for name in ('metrics.csv', 'windows.csv', 'config.yaml', 'summary/metadata.yaml'):
            assert (self.folder / name).is_file(), name
        return json.loads((self.folder / 'summary.json').read_text(encoding='utf-8'))

    def metrics(self, arm: str = 'right') -> dict[str, Any]:
        """Return the metrics of an arm by mapping and name, as 'direct.latency_s'."""
        return {f'{mapping}.{name}': metric
                for mapping, found in self.summary['arms'][arm]['mappings'].items()
                for name, metric in found['metrics'].items()}

    def changed(self, sound: Done) -> set[str]:
        """Return the names of the right arm's metrics that are not as in the sound run."""
        mine, other = self.metrics(), sound.metrics()
        return {name for name in mine.keys() | other.keys() if mine.get(name) != other.get(name)}

    def check_left_arm(self, sound: Done) -> None:
        """Check that nothing at all of the left arm's part differs from the sound run."""
        assert self.summary['arms']['left'] == sound.summary['arms']['left']
        assert any(metric['status'] == 'ok' for metric in self.metrics('left').values())


class Bench:
    """Makes recording and parameter file, and runs the command in its own process."""

    def __init__(self, folder: Path, capture: Any) -> None:
        self.folder = folder
        self._capture = capture

    def command(self, *arguments: object, out: str = 'out') -> Done:
        """Run `summarize` with these arguments."""
        self._capture.readouterr()
        status = main(['summarize', *map(str, arguments)])
        shown = self._capture.readouterr()
        return Done(status, shown.out, shown.err, self.folder / out)

    def run(self, events: Iterable[faulty.Event] | None = None, config: str = faulty.CONFIG,
            files: Mapping[str, str | bytes] | None = None) -> Done:
        """Summarize a recording of these events, by default the sound ones."""
        for name, text in {'evaluator.yaml': config, **(files or {})}.items():
            data = text if isinstance(text, bytes) else text.encode()
            (self.folder / name).write_bytes(data)
        path = faulty.write(self.folder / 'rec', faulty.healthy() if events is None else events)
        return self.command(path, '--config', self.folder / 'evaluator.yaml', '--out',
                            self.folder / 'out', '--no-progress')


class _Quiet:
    """Stands for pytest's capture in a fixture that lives longer than a test."""

    def readouterr(self) -> Any:
        """Return nothing said; the status tells all that counts."""
        return type('Shown', (), {'out': '', 'err': ''})


@pytest.fixture
def bench(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> Bench:
    """Return a bench in a folder of its own."""
    return Bench(tmp_path, capsys)


@pytest.fixture(scope='session')
def sound(tmp_path_factory: pytest.TempPathFactory) -> Done:
    """Return the run on the sound recording."""
    done = Bench(tmp_path_factory.mktemp('sound'), _Quiet()).run()
    assert done.status == 0 and done.summary['problems'] == []
    return done


@pytest.fixture(scope='session')
def short_sound(tmp_path_factory: pytest.TempPathFactory) -> Done:
    """Return the run on the first seconds of the sound recording."""
    done = Bench(tmp_path_factory.mktemp('short'), _Quiet()).run(faulty.short())
    assert done.status == 0 and done.summary['problems'] == []
    return done
