# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Mapping kinds of other packages, each installed by pip from a project of its own."""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from synthetic_recording import CONFIG, make

ROOT = Path(__file__).parents[2]
SOURCES = 'sources: [human_shoulder, human_elbow]'
DIRECT = CONFIG[CONFIG.index('            kind: joint_space'):]

# Kinds that load and then do something wrong.
FAULTY = """
import numpy as np
from teleop_eval.core.mappings import Ideal, MappingModel


class Raises(MappingModel):
    needs = 'operator_joints'

    def ideal(self, cells):
        return {}['no such\\nthing']


class Refuses(MappingModel):
    def __init__(self, label, settings, operator, robot):
        raise ValueError('I do not like this robot.')

    def ideal(self, cells):
        raise AssertionError


class Misshapen(MappingModel):
    needs = 'operator_joints'

    def ideal(self, cells):
        return Ideal(np.zeros((len(cells), 2)))


class NoIdeal(MappingModel):
    needs = 'operator_joints'

    def ideal(self, cells):
        return np.zeros((len(cells), 3))


class Writes(MappingModel):
    needs = 'operator_joints'

    def ideal(self, cells):
        cells.joints[:] = 0.0
        return Ideal(np.zeros((len(cells), 3)))


class Forgetful(MappingModel):
    needs = 'operator_joints'

    def restart(self):
        raise RuntimeError('cannot forget')

    def ideal(self, cells):
        return Ideal(np.zeros((len(cells), 3)))


class OddNeeds(MappingModel):
    def __init__(self, label, settings, operator, robot):
        self.needs = 'telepathy'

    def ideal(self, cells):
        return Ideal(np.zeros((len(cells), 3)))
"""
FAULTY_POINTS = {name: f'faulty_kinds:{cls}' for name, cls in (
    ('raises', 'Raises'), ('refuses', 'Refuses'), ('misshapen', 'Misshapen'),
    ('no_ideal', 'NoIdeal'), ('writes', 'Writes'), ('forgetful', 'Forgetful'),
    ('odd_needs', 'OddNeeds'))}
# Kinds that cannot be used at all.
UNUSABLE = """
from teleop_eval.core.mappings import MappingModel


class Bare(MappingModel):
    pass


class Good(MappingModel):
    def ideal(self, cells):
        raise AssertionError


def function(label, settings, operator, robot):
    return None
"""
UNUSABLE_POINTS = {
    'task_space': 'unusable_kinds:Good', 'absent': 'no_such_module:Kind',
    'nameless': 'unusable_kinds:Missing', 'function': 'unusable_kinds:function',
    'bare': 'unusable_kinds:Bare', 'Camel-Case': 'unusable_kinds:Good',
    'geared': 'unusable_kinds:Good'}


def blocks(language: str) -> list[str]:
    """Return the examples of the chapter that tells how to add a mapping kind."""
    text = (ROOT / 'DEVELOPERS.md').read_text(encoding='utf-8')
    chapter = text.partition('## Add a mapping kind')[2].partition('\n## ')[0]
    return re.findall(rf'```{language}\n(.*?)```', chapter, flags=re.DOTALL)


def project(folder: Path, name: str, points: dict[str, str]) -> str:
    """Write a project file with these entry points."""
    folder.mkdir()
    entries = '\n'.join(f'{key} = "{value}"' for key, value in points.items())
    (folder / 'pyproject.toml').write_text(
        '[build-system]\nrequires = ["setuptools"]\nbuild-backend = "setuptools.build_meta"\n'
        f'[project]\nname = "{name}"\nversion = "1.0"\n[tool.setuptools]\n'
        f'py-modules = ["{name.replace("-", "_")}"]\n'
        f'[project.entry-points."teleop_eval.mappings"]\n{entries}\n', encoding='utf-8')
    return name.replace('-', '_') + '.py'


def install(source: Path, target: Path) -> Path:
    """Install a project as pip does, from its own folder and without any index."""
    done = subprocess.run(
        [sys.executable, '-m', 'pip', 'install', '--quiet', '--no-deps', '--no-build-isolation',
         '--no-index', '--disable-pip-version-check', '--target', str(target), str(source)],
        capture_output=True, text=True, timeout=240, check=False)
    assert done.returncode == 0, done.stderr
    return target


@pytest.fixture(scope='session')
def lab(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return where the example of DEVELOPERS.md is installed, file by file as it stands there."""
    folder = tmp_path_factory.mktemp('lab')
    package = folder / 'project' / 'lab_mappings'
    package.mkdir(parents=True)
    (package / '__init__.py').touch()
    [code], [toml] = blocks('python'), blocks('toml')
    (package / 'geared.py').write_text(code, encoding='utf-8')
    (folder / 'project' / 'pyproject.toml').write_text(toml, encoding='utf-8')
    return install(folder / 'project', folder / 'site')


@pytest.fixture(scope='session')
def faulty_kinds(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return where kinds are installed that load and then do something wrong."""
    folder = tmp_path_factory.mktemp('faulty')
    name = project(folder / 'project', 'faulty-kinds', FAULTY_POINTS)
    (folder / 'project' / name).write_text(FAULTY, encoding='utf-8')
    return install(folder / 'project', folder / 'site')


@pytest.fixture(scope='session')
def unusable_kinds(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return where kinds are installed that cannot be used."""
    folder = tmp_path_factory.mktemp('unusable')
    name = project(folder / 'project', 'unusable-kinds', UNUSABLE_POINTS)
    (folder / 'project' / name).write_text(UNUSABLE, encoding='utf-8')
    return install(folder / 'project', folder / 'site')


@pytest.fixture(scope='session')
def recording(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a recording of 25 s in which the robot follows joint by joint."""
    return make(tmp_path_factory.mktemp('recording'), seconds=25.0).path


@dataclass(frozen=True)
class Run:
    """What a run of the command left."""

    status: int
    said: list[str]
    folder: Path

    @property
    def summary(self) -> dict[str, Any]:
        """Return the whole summary."""
        return json.loads((self.folder / 'summary.json').read_text(encoding='utf-8'))

    @property
    def metrics(self) -> dict[str, Any]:
        """Return the metrics of the mapping `direct`."""
        return self.summary['arms']['right']['mappings']['direct']['metrics']


def summarize(recording: Path, folder: Path, mapping: str, *sites: Path) -> Run:
    """Run the command in a process that sees the packages installed in `sites`."""
    config = folder / 'evaluator.yaml'
    config.write_text(CONFIG.replace(DIRECT, mapping), encoding='utf-8')
    done = subprocess.run(
        [sys.executable, '-m', 'teleop_eval', 'summarize', str(recording), '--config',
         str(config), '--out', str(folder / 'out'), '--no-progress'],
        capture_output=True, text=True, timeout=240, check=False, cwd=folder,
        env={**os.environ, 'PYTHONPATH': os.pathsep.join(map(str, [ROOT, *sites]))})
    assert 'Traceback' not in done.stderr, done.stderr
    return Run(done.returncode, done.stderr.splitlines(), folder / 'out')


def of_kind(kind: str, more: str = '') -> str:
    """Return the section of the mapping `direct`, and another mapping beside it."""
    return (f'            kind: {kind}\n{more}          other:\n{DIRECT}')


@pytest.fixture(scope='session')
def plain(recording: Path, tmp_path_factory: pytest.TempPathFactory) -> Run:
    """Return the run with this package's own kind."""
    return summarize(recording, tmp_path_factory.mktemp('plain'), DIRECT)


def test_the_example_gives_what_joint_space_gives(recording, lab, plain, tmp_path) -> None:
    """With ratio 1 both models are the same function, so every number is the same."""
    run = summarize(recording, tmp_path, of_kind('geared', f'            {SOURCES}\n'), lab)
    assert (run.status, run.said) == (0, [])
    assert run.metrics == plain.metrics
    assert run.metrics['tracking_error_rms_norm']['status'] == 'ok'


def test_the_examples_parameters_act_and_are_checked(recording, lab, plain, tmp_path) -> None:
    geared = f'            {SOURCES}\n            ratio: '
    run = summarize(recording, tmp_path, of_kind('geared', geared + '0.8\n'), lab)
    name = 'tracking_error_compensated_rms_norm'
    assert run.metrics[name]['value'] > plain.metrics[name]['value'] + 0.05
    for text, words in (('500.0', 'mappings.direct.ratio is 500, outside its range 0.01 to 100'),
                        ('1.0\n            scale: 2.0',
                         'mappings.direct.scale is a parameter of the kind task_space')):
        run = summarize(recording, tmp_path, of_kind('geared', geared + text + '\n'), lab)
        assert run.status == 1 and len(run.said) == 1 and words in run.said[0]


def test_a_kind_that_is_not_installed_is_named_with_those_that_are(recording, lab, tmp_path):
    run = summarize(recording, tmp_path, of_kind('gearde', f'            {SOURCES}\n'), lab)
    assert run.status == 1 and len(run.said) == 1
    assert "mappings.direct.kind is 'gearde'" in run.said[0]
    assert "unmodelled, geared; did you mean 'geared'?" in run.said[0]


@pytest.mark.parametrize(('kind', 'words'), [
    ('raises', r"mapping 'direct' of kind raises: ideal\(\) raised KeyError: 'no such"),
    ('refuses', r"'direct' of kind refuses cannot be modelled, since Refuses failed \(ValueError: "
                r'I do not like this robot\.\)'),
    ('misshapen', r'returned positions_m of shape \(m, 2\) where \(m, 3\) is expected for m'),
    ('no_ideal', r'ideal\(\) returned ndarray where Ideal is expected'),
    ('writes', r'ideal\(\) raised ValueError: assignment destination is read-only'),
    ('forgetful', r'restart\(\) raised RuntimeError: cannot forget'),
    ('odd_needs', "its needs is 'telepathy', not one of 'hand', 'operator_joints', 'rate_input'"),
])
def test_a_kind_that_fails_is_told_once_and_costs_its_own_metrics_only(
        recording, faulty_kinds, plain, tmp_path, kind: str, words: str) -> None:
    run = summarize(recording, tmp_path, of_kind(kind), faulty_kinds)
    assert run.status == 0 and len(run.said) == 1, run.said
    assert re.search(words, run.said[0]), run.said[0]
    assert run.said[0].startswith('teleop_eval summarize: right: mapping ')
    assert run.said[0].endswith('.') and run.said[0].isprintable()
    lost = {name for name, metric in plain.metrics.items()
            if metric['value'] is not None and run.metrics[name]['value'] is None}
    assert {'tracking_error_rms_norm', 'latency_s'} <= lost
    for name in lost:
        assert run.metrics[name]['status'] in ('not_configured', 'insufficient'), name
        assert run.metrics[name]['reason'], name
    for name in ('limit_margin_min', 'reach_p95_norm', 'engaged_time_s'):
        assert run.metrics[name] == plain.metrics[name]


def test_kinds_that_cannot_be_used_are_one_sentence_each(
        recording, unusable_kinds, lab, plain, tmp_path) -> None:
    """They are told and left alone: the run is as it would be without their package."""
    run = summarize(recording, tmp_path, DIRECT, lab, unusable_kinds)
    assert run.status == 0
    assert all(line.startswith('teleop_eval summarize: package unusable-kinds 1.0: mapping kind ')
               and line.endswith('.') for line in run.said), run.said
    told = {re.search("mapping kind '(.*?)'", line)[1]: line for line in run.said}
    assert len(told) == len(run.said) and set(told) == set(UNUSABLE_POINTS)
    for name, words in (
            ('task_space', 'is one of this package; give yours another name'),
            ('absent', "(ModuleNotFoundError: No module named 'no_such_module')"),
            ('nameless', '(AttributeError: '), ('function', 'no class derived from'),
            ('bare', 'Bare does not define ideal(); define it'),
            ('Camel-Case', 'must be lower-case letters'),
            ('geared', 'is there twice; rename one of the two')):
        assert words in told[name], told[name]
    assert run.metrics == plain.metrics
    assert run.summary['problems'] == []


def test_a_mapping_of_a_kind_that_cannot_be_used_is_a_problem(
        recording, unusable_kinds, plain, tmp_path) -> None:
    """Its parameters cannot be checked, its ideal command is not configured, the run goes on."""
    run = summarize(recording, tmp_path, of_kind('absent', '            gain: 2.0\n'),
                    unusable_kinds)
    assert run.status == 0
    [line] = [line for line in run.said if "'absent'" in line]
    assert line.startswith("teleop_eval summarize: right: mapping 'direct' cannot be modelled: "
                           "package unusable-kinds 1.0: mapping kind 'absent' "
                           '(no_such_module:Kind) could not be loaded')
    [problem] = run.summary['problems']
    assert problem in line
    assert run.metrics['tracking_error_rms_norm']['status'] == 'not_configured'
    assert run.metrics['limit_margin_min'] == plain.metrics['limit_margin_min']
