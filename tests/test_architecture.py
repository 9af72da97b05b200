# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Who may import whom, read from the source text, and proved once by importing without ROS.

Imports point downward: core <- sources, sinks <- nodes, cli, teardown_cell. What an import
inside a function names counts too; it is left out only where import cycles are looked for.
"""

from __future__ import annotations

import ast
import functools
import graphlib
import os
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PACKAGE = 'teleop_eval'


@dataclass(frozen=True)
class Layer:
    """What the modules of one layer may import besides the standard library."""

    own: frozenset[str]
    libraries: frozenset[str] = frozenset()
    ros: bool = False


def layer(own: str, libraries: str = '', *, ros: bool = False) -> Layer:
    """Return a layer from names between spaces."""
    return Layer(frozenset(own.split()), frozenset(libraries.split()), ros)


# A dotted own name allows that one module. __init__ holds the version only.
LAYERS = {
    '__init__': layer(''),
    '__main__': layer('cli'),
    'resources': layer('core.errors'),
    'core': layer('core', 'numpy scipy'),
    'sources': layer('sources core resources', 'numpy yaml rosbags mcap zstandard lz4'),
    'sinks': layer('sinks core sources.parameter_file __init__',
                   'numpy rich rosbags yaml mcap'),
    'cli': layer('cli core sources sinks resources __init__', 'numpy rich'),
    'nodes': layer('nodes core sources sinks resources __init__', 'numpy', ros=True),
    'teardown_cell': layer('teardown_cell core sinks resources cli.main cli.called',
                           'numpy scipy rich', ros=True),
}
# One library for one file: only the description of a robot is foreign XML.
EXTRA = {'core.urdf': frozenset({'defusedxml'})}

# In core even the standard library is named: nothing here opens a file or tells the time.
CORE_STANDARD = frozenset("""
    __future__ abc array bisect collections contextlib copy dataclasses difflib enum fractions
    functools heapq itertools math numbers operator re statistics string struct sys textwrap
    types typing xml
""".split())


def is_ros(library: str) -> bool:
    """Return whether a top-level name comes with ROS."""
    return library.endswith(('_msgs', '_srvs', '_interfaces')) or library.startswith(
        ('rclpy', 'ros', 'ament', 'rmw', 'tf2', 'rpyutils', 'launch')) and library != 'rosbags'


@functools.cache
def sources() -> dict[str, str]:
    """Return the text of every module by its dotted name without the package's."""
    found = {}
    for path in sorted((ROOT / PACKAGE).rglob('*.py')):
        parts = path.relative_to(ROOT / PACKAGE).with_suffix('').parts
        name = '.'.join(parts)
        found[name] = path.read_text(encoding='utf-8')
    return found


def layer_of(module: str) -> str:
    """Return the name of the layer a module is in."""
    return module.partition('.')[0]


def imported(module: str, text: str) -> Iterator[tuple[str, bool]]:
    """Yield (full dotted name, whether it is imported while the module is) of each import."""
    def walk(node: ast.AST, at_import: bool) -> Iterator[tuple[str, bool]]:
        for child in ast.iter_child_nodes(node):
            inside = at_import and not isinstance(
                child, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda)
            if isinstance(child, ast.If) and 'TYPE_CHECKING' in ast.unparse(child.test):
                inside = False
            if isinstance(child, ast.Import):
                yield from ((alias.name, inside) for alias in child.names)
            elif isinstance(child, ast.ImportFrom):
                base = _absolute(module, child)
                yield base, inside
                yield from ((f'{base}.{alias.name}', inside) for alias in child.names)
            yield from walk(child, inside)
    yield from walk(ast.parse(text), True)


def _absolute(module: str, node: ast.ImportFrom) -> str:
    if not node.level:
        return node.module or ''
    package = [PACKAGE, *module.split('.')][:-node.level]
    return '.'.join([*package, *([node.module] if node.module else [])])


def own_module(name: str) -> str | None:
    """Return the module of this package that an imported name is or is a part of."""
    parts = name.split('.')
    if parts[0] != PACKAGE:
        return None
    for stop in range(len(parts), 0, -1):
        dotted = '.'.join(parts[1:stop])
        for candidate in (dotted, f'{dotted}.__init__'.lstrip('.')):
            if candidate in sources():
                return candidate
    return '__init__'


def breaches(module: str, text: str) -> list[str]:
    """Return a sentence for every import that the table above does not allow."""
    allowed = LAYERS[layer_of(module)]
    libraries = allowed.libraries | EXTRA.get(module, frozenset())
    found = []
    for name, _ in imported(module, text):
        top = name.partition('.')[0]
        own = own_module(name)
        if own is not None:
            # `from teleop_eval.core import x` names the packages on its way as well.
            if own.endswith('__init__') and own != '__init__':
                own = own.removesuffix('.__init__')
            if own == '__init__' and name == PACKAGE:
                continue
            fine = own in allowed.own or layer_of(own) in allowed.own
            fine = fine or any(dotted.startswith(f'{own}.') for dotted in allowed.own)
        elif top in sys.stdlib_module_names:
            fine = layer_of(module) != 'core' or top in CORE_STANDARD
        else:
            fine = top in libraries or (allowed.ros and is_ros(top))
        if not fine:
            found.append(f'{module} must not import {name}')
    return found


def test_every_layer_has_its_rules() -> None:
    assert {layer_of(name) for name in sources()} == set(LAYERS)
    assert len(sources()) > 80


def test_no_module_imports_what_its_layer_may_not() -> None:
    assert [line for name, text in sources().items() for line in breaches(name, text)] == []


@pytest.mark.parametrize('module, line', [
    ('core.tracking', 'import rclpy'),
    ('core.tracking', 'from std_msgs.msg import String'),
    ('core.tracking', 'import yaml'),
    ('core.tracking', 'import defusedxml.ElementTree'),
    ('core.tracking', 'import time'),
    ('core.tracking', 'from pathlib import Path'),
    ('core.tracking', 'from ..sources import decode'),
    ('core.tracking', 'def f():\n    import teleop_eval.sinks.tables'),
    ('sources.decode', 'from rclpy.node import Node'),
    ('sources.decode', 'from teleop_eval.sinks import tables'),
    ('sources.decode', 'import rich'),
    ('sinks.tables', 'from teleop_eval.sources.decode import make_decoder'),
    ('sinks.tables', 'from std_msgs.msg import Float64'),
    ('cli.summarize', 'from teleop_eval.nodes.evaluate import main'),
    ('cli.main', 'import teleop_eval.teardown_cell.run'),
    ('nodes.evaluate', 'from teleop_eval import cli'),
    ('nodes.evaluate', 'from teleop_eval.teardown_cell.plan import COMMAND_TOPIC'),
    ('teardown_cell.run', 'from teleop_eval.nodes import evaluate'),
    ('teardown_cell.run', 'import torch'),
])
def test_the_rules_find_a_forbidden_import(module: str, line: str) -> None:
    assert breaches(module, line), line


def cycle(graph: dict[str, set[str]]) -> list[str]:
    """Return the modules of one import cycle, or nothing."""
    try:
        tuple(graphlib.TopologicalSorter(graph).static_order())
    except graphlib.CycleError as error:
        return list(error.args[1])
    return []


@functools.cache
def import_graph() -> dict[str, set[str]]:
    """Return for each module those that are imported while it is."""
    return {module: {own for name, at_import in imported(module, text) if at_import
                     and (own := own_module(name)) not in (None, module)
                     and not own.endswith('__init__')}
            for module, text in sources().items()}


def test_no_import_cycles() -> None:
    graph = import_graph()
    assert cycle(graph) == []
    assert sum(map(len, graph.values())) > 150
    looped = {**graph, 'core.errors': {'core.evaluator'}}
    assert {'core.errors', 'core.evaluator'} <= set(cycle(looped))


def needs_ros() -> set[str]:
    """Return the modules that import ROS themselves or by way of others of this package."""
    graph = import_graph()
    found = {module for module, text in sources().items()
             if any(at_import and is_ros(name.partition('.')[0])
                    for name, at_import in imported(module, text))}
    while more := {module for module, used in graph.items() if used & found} - found:
        found |= more
    return found


WITHOUT_ROS = """
import importlib, sys

class Block:
    def find_spec(self, name, path=None, target=None):
        top = name.partition('.')[0]
        if top == 'rclpy' or top.endswith(('_msgs', '_srvs', '_interfaces')):
            raise ModuleNotFoundError(f'{name} is blocked')

sys.meta_path.insert(0, Block())
for name in sys.stdin.read().split():
    importlib.import_module(name)
try:
    import rclpy
except ModuleNotFoundError:
    print('blocked')
"""


def test_everything_but_the_nodes_is_imported_where_there_is_no_ros() -> None:
    free = set(sources()) - needs_ros() - {'__main__'}
    assert {layer_of(name) for name in needs_ros()} == {'nodes', 'teardown_cell'}
    for name in sources():
        if layer_of(name) not in ('nodes', 'teardown_cell', '__main__'):
            assert name in free, name
    names = [f'{PACKAGE}.{name}'.removesuffix('.__init__') for name in sorted(free)]
    done = subprocess.run(
        [sys.executable, '-c', WITHOUT_ROS], input='\n'.join(names), capture_output=True,
        text=True, timeout=240, env={**os.environ, 'PYTHONPATH': str(ROOT)})
    assert (done.returncode, done.stdout) == (0, 'blocked\n'), done.stderr


# What the live node may say: measurements and texts, no message that moves a robot.
PUBLISHED = {'DiagnosticArray', 'Float64', 'String', 'MarkerArray'}


def published(text: str) -> set[str]:
    """Return the message types that a module creates publishers of."""
    return {ast.unparse(call.args[0]) for call in ast.walk(ast.parse(text))
            if isinstance(call, ast.Call) and isinstance(call.func, ast.Attribute)
            and call.func.attr in ('create_publisher', 'create_client', 'Publisher')}


def test_only_the_simulated_cell_publishes_commands() -> None:
    for module, text in sources().items():
        if layer_of(module) != 'teardown_cell':
            assert published(text) <= PUBLISHED, module
    assert published(sources()['nodes.live_outputs']) >= {'DiagnosticArray', 'String'}
    assert 'JointState' in published(sources()['teardown_cell.mapping_node'])
    used = {own for module, names in import_graph().items()
            if layer_of(module) != 'teardown_cell' for own in names}
    assert not any(layer_of(name) == 'teardown_cell' for name in used)
