# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What every source file must have, and what no module of the core may do."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / 'teleop_eval'
HEADER = ('# Copyright 2026 The teleop_eval authors\n'
          '# SPDX-License-Identifier: Apache-2.0\n')

DEFINITION = ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef

# Calls that open a file, read a clock or draw unseeded numbers; imports that could are
# refused by the table of test_architecture.
FORBIDDEN_NAMES = {'open', 'input', 'print', 'exec', 'eval', '__import__', 'breakpoint'}
FORBIDDEN_NUMPY = {'load', 'save', 'savez', 'savez_compressed', 'savetxt', 'loadtxt',
                   'genfromtxt', 'fromfile', 'tofile', 'memmap', 'open_memmap', 'DataSource'}
CLOCKS = {'utcnow', 'time_ns', 'monotonic', 'monotonic_ns', 'perf_counter', 'perf_counter_ns',
          'process_time'}
CLOCKS_OF_CLASSES = ('time.time', 'datetime.now', 'datetime.today', 'date.today')
SEEDED = {'default_rng', 'SeedSequence', 'PCG64', 'Generator'}


def python_files(*folders: str) -> list[Path]:
    """Return the Python files of folders of the project, and of its own folder."""
    found = [ROOT / 'setup.py']
    for folder in folders:
        found += sorted((ROOT / folder).rglob('*.py'))
    return found


def undocumented(text: str) -> list[str]:
    """Return what is public in a module and has no docstring."""
    tree = ast.parse(text)

    def walk(node: ast.Module | ast.ClassDef, prefix: str) -> Iterator[str]:
        for child in node.body:
            if isinstance(child, DEFINITION) and not child.name.startswith('_'):
                name = prefix + child.name
                if not (ast.get_docstring(child) or _is_overload(child)):
                    yield name
                if isinstance(child, ast.ClassDef):
                    yield from walk(child, name + '.')
    return ([] if ast.get_docstring(tree) else ['the module']) + list(walk(tree, ''))


def _is_overload(node: ast.AST) -> bool:
    return any('overload' in ast.unparse(decorator)
               for decorator in getattr(node, 'decorator_list', []))


def test_every_python_file_begins_with_the_licence() -> None:
    files = python_files('teleop_eval', 'tests')
    assert len(files) > 120
    assert [str(path.relative_to(ROOT)) for path in files
            if not path.read_text(encoding='utf-8').startswith(HEADER)] == []


def test_all_that_is_public_has_a_docstring() -> None:
    missing = {str(path.relative_to(ROOT)): names for path in sorted(PACKAGE.rglob('*.py'))
               if (names := undocumented(path.read_text(encoding='utf-8')))}
    assert missing == {}


def test_a_missing_docstring_is_found() -> None:
    text = ('class A:\n    """Be."""\n    def f(self):\n        pass\n'
            '    def _g(self):\n        pass\nasync def h():\n    def inner():\n        pass\n')
    assert undocumented(text) == ['the module', 'A.f', 'h']
    assert undocumented('"""M."""\ndef f():\n    """Do."""\n') == []


def impure(text: str) -> list[str]:
    """Return the calls with which a module would open a file, read a clock or draw lots."""
    found = []
    for node in ast.walk(ast.parse(text)):
        if not isinstance(node, ast.Call):
            continue
        name = ast.unparse(node.func)
        last = name.rpartition('.')[2]
        if (name in FORBIDDEN_NAMES or last in CLOCKS or name == 'time'
                or name.endswith(CLOCKS_OF_CLASSES)
                or ('.' in name and last in FORBIDDEN_NUMPY)
                or last.startswith(('read_', 'write_')) and last.endswith(('text', 'bytes'))):
            found.append(f'{name} in line {node.lineno}')
        if name.startswith(('np.random.', 'numpy.random.')) and name.count('.') == 2 and not (
                last in SEEDED and (node.args or node.keywords)):
            found.append(f'unseeded {name} in line {node.lineno}')
    return found


def test_the_core_opens_no_file_and_reads_no_clock() -> None:
    files = sorted((PACKAGE / 'core').rglob('*.py'))
    assert len(files) > 40
    assert {path.name: calls for path in files
            if (calls := impure(path.read_text(encoding='utf-8')))} == {}


@pytest.mark.parametrize('line', [
    "open('x')", 'time.time()', 'time.monotonic_ns()', 'datetime.now()',
    'datetime.datetime.now(tz=None)', "Path('x').read_text()", "np.load('x')", "a.tofile('x')",
    'np.random.normal()', 'np.random.default_rng()', "print('x')",
])
def test_an_impure_call_is_found(line: str) -> None:
    assert impure(line), line


def test_a_pure_call_is_not_found() -> None:
    assert impure('np.random.default_rng(7).normal(); np.loads; a.load; self.now(3)') == []
