# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Every launch file parses and names only what exists, proved without launch being there.

The tables hold the tags, attributes and substitutions used here, as the XML front end of
ROS 2's launch 3.7 and launch_ros 0.28 reads them (`parse` of each action, `expose_action`,
`expose_substitution`): launch/actions/declare_launch_argument.py, execute_local.py,
execute_process.py, launch/frontend/parser.py; launch_ros/actions/node.py. Whoever uses another
tag looks it up there and adds it.
"""

from __future__ import annotations

import importlib
import re
import shlex
import xml.etree.ElementTree as ET
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

import defusedxml.ElementTree
import pytest

from teleop_eval.core.parameters import describe
from teleop_eval.core.settings import Settings

ROOT = Path(__file__).parents[1]
PACKAGE = 'teleop_eval'
FILES = sorted((ROOT / 'launch').iterdir())
COMMANDS = {path.name for path in (ROOT / 'resource' / 'run').iterdir()}

PROCESS = {'cwd', 'name', 'output', 'sigterm_timeout', 'sigkill_timeout', 'if', 'unless'}
# Tag: its attributes, those of them that it must have, and the tags that may stand in it.
TAGS = {
    'launch': ({'version'}, set(), {'arg', 'executable', 'node'}),
    'arg': ({'name', 'default', 'description'}, {'name', 'description'}, {'choice'}),
    'choice': ({'value'}, {'value'}, set()),
    'executable': ({'cmd', *PROCESS}, {'cmd', 'output'}, {'env'}),
    'env': ({'name', 'value'}, {'name', 'value'}, set()),
    'node': ({'pkg', 'exec', 'namespace', 'ros_args', *PROCESS}, {'pkg', 'exec', 'name', 'output'},
             {'param', 'remap', 'env'}),
    'param': ({'name', 'value', 'from'}, set(), set()),
    'remap': ({'from', 'to'}, {'from', 'to'}, set()),
}
# Substitution: the number of its arguments.
SUBSTITUTIONS = {'var': {1}, 'exec-in-pkg': {2}, 'find-pkg-share': {1}, 'dirname': {0},
                 'env': {1, 2}}
OUTPUTS = {'screen', 'log', 'both', 'own_log', 'full'}
NUMBERS = {'sigterm_timeout', 'sigkill_timeout'}
# rclpy declares these for every node.
ROS_PARAMETERS = {'use_sim_time', 'start_type_description_service'}


def own_parameters() -> set[str]:
    """Return the names of the node's parameters that need no name of the user's."""
    return {name for name, _ in describe(Settings, {})} | ROS_PARAMETERS


@dataclass
class Check:
    """Everything wrong with one launch file, as sentences."""

    folder: Path = ROOT / 'launch'
    declared: set[str] = field(default_factory=set)
    used: set[str] = field(default_factory=set)
    problems: list[str] = field(default_factory=list)

    def say(self, text: str) -> None:
        """Note a problem."""
        self.problems.append(text)

    def file(self, text: str) -> None:
        """Check the whole text of a launch file."""
        try:
            root = defusedxml.ElementTree.fromstring(text)
        except ET.ParseError as error:
            self.say(f'no XML: {error}')
            return
        if root.tag != 'launch':
            self.say(f'<{root.tag}> instead of <launch>')
            return
        self.element(root)
        for name in sorted(self.declared - self.used):
            self.say(f'argument {name} is declared and not used')

    def element(self, element: ET.Element) -> None:
        """Check one element, then what is in it, in the order in which launch goes on."""
        attributes, required, children = TAGS[element.tag]
        for name in set(element.attrib) - attributes:
            self.say(f'<{element.tag}> has no attribute {name}')
        for name in required - set(element.attrib):
            self.say(f'<{element.tag}> lacks {name}')
        if (element.text or '').strip() or any((child.tail or '').strip() for child in element):
            self.say(f'text in <{element.tag}>')
        for name, value in element.attrib.items():
            self.value(name, value)
        getattr(self, f'_{element.tag}', lambda _: None)(element)
        for child in element:
            if child.tag in children:
                self.element(child)
            else:
                self.say(f'<{child.tag}> in <{element.tag}>')

    def value(self, name: str, value: str) -> None:
        """Check the substitutions and the files in the value of an attribute."""
        for words in substitutions(value):
            kind, *arguments = words
            if len(arguments) not in SUBSTITUTIONS.get(kind, set()):
                self.say(f'$({" ".join(words)}) is no substitution')
            elif kind == 'var':
                self.used.add(arguments[0])
                if arguments[0] not in self.declared:
                    self.say(f'argument {arguments[0]} is used and not declared before')
            elif kind == 'exec-in-pkg':
                self.executable(*arguments)
            elif kind == 'find-pkg-share' and arguments[0] != PACKAGE:
                self.say(f'package {arguments[0]} is not this one')
        if name == 'output' and value not in OUTPUTS:
            self.say(f'output {value}')
        if name in NUMBERS and not re.fullmatch(r'\d+(\.\d+)?', value):
            self.say(f'{name} {value} is no number')
        share = re.fullmatch(r'\$\(find-pkg-share \w+\)/([^$]+)', value)
        beside = re.fullmatch(r'\$\(dirname\)/([^$]+)', value)
        path = ROOT / share[1] if share else self.folder / beside[1] if beside else None
        if path is not None and not path.is_file():
            self.say(f'there is no file {value}')

    def executable(self, name: str, package: str) -> None:
        """Check that a package is this one and has a command."""
        if package != PACKAGE:
            self.say(f'package {package} is not this one')
        if name not in COMMANDS:
            self.say(f'there is no executable {name}')

    def parameter(self, name: str) -> None:
        """Check that the node has a parameter."""
        if name not in own_parameters():
            self.say(f'there is no parameter {name}')

    def _arg(self, element: ET.Element) -> None:
        name = element.get('name', '')
        if name in self.declared:
            self.say(f'argument {name} is declared twice')
        self.declared.add(name)

    def _node(self, element: ET.Element) -> None:
        self.executable(element.get('exec', ''), element.get('pkg', ''))
        text = re.sub(r'\$\([^()]*\)', 'x', element.get('ros_args', ''))
        words = iter(shlex.split(text))
        for word in words:
            rule = next(words, '')
            if word not in ('-p', '-r') or ':=' not in rule:
                self.say(f'ros_args has {word} {rule}')
            elif word == '-p':
                self.parameter(rule.partition(':=')[0])

    def _executable(self, element: ET.Element) -> None:
        if not re.match(rf'\$\(exec-in-pkg [a-z]+ {PACKAGE}\)( |$)', element.get('cmd', '')):
            self.say('cmd does not begin with an executable of this package')

    def _param(self, element: ET.Element) -> None:
        if set(element.attrib) not in ({'name', 'value'}, {'from'}):
            self.say('<param> needs name and value, or from')
        if 'name' in element.attrib:
            self.parameter(element.attrib['name'])


def substitutions(value: str) -> Iterator[list[str]]:
    """Yield the words of every $(...) of a text; none of ours are nested."""
    for match in re.finditer(r'\$\(([^()$]*)\)', value):
        yield shlex.split(match[1]) or ['']
    if '$(' in re.sub(r'\$\([^()$]*\)', '', value):
        yield ['nested or unfinished']


def problems(text: str) -> list[str]:
    """Return what is wrong with the text of a launch file."""
    check = Check()
    check.file(text)
    return check.problems


def test_launch_files_are_xml_and_named_so() -> None:
    """`ros2 launch` takes XML by the ending; setup.py installs by the same."""
    assert {path.name for path in FILES} >= {'evaluate.launch.xml', 'demo.launch.xml'}
    assert all(path.name.endswith('.launch.xml') for path in FILES)


@pytest.mark.parametrize('path', FILES, ids=lambda path: path.name)
def test_a_launch_file_names_only_what_exists(path: Path) -> None:
    assert problems(path.read_text(encoding='utf-8')) == []


EVALUATE, DEMO = 'evaluate.launch.xml', 'demo.launch.xml'


@pytest.mark.parametrize('name, old, new, found', [
    (EVALUATE, 'exec="evaluate"', 'exec="evaluator"', 'no executable evaluator'),
    (EVALUATE, 'pkg="teleop_eval"', 'pkg="teleop"', 'package teleop is not this one'),
    (EVALUATE, '-p use_sim_time:=', '-p sim_time:=', 'no parameter sim_time'),
    (EVALUATE, '-p use_sim_time:=', '-p use_sim_time=', 'ros_args has -p use_sim_time=x'),
    (EVALUATE, '<param from', '<param name="session.place" value="x"/><param from',
     'no parameter session.place'),
    (EVALUATE, '<param from', '<param name="session.name" from', 'needs name and value, or from'),
    (EVALUATE, '<param from', '<parameter from', '<parameter> in <node>'),
    (EVALUATE, '$(var config)', '$(var file)', 'argument file is used and not declared'),
    (EVALUATE, '$(var config)', 'x.yaml', 'argument config is declared and not used'),
    (EVALUATE, '$(var config)', '$(var config', 'unfinished'),
    (EVALUATE, '$(var config)', '$(arg config)', '$(arg config) is no substitution'),
    (EVALUATE, '$(var config)', '$(find-pkg-share teleop_eval)/config/absent.yaml', 'no file'),
    (EVALUATE, '$(var config)', '$(dirname)/absent.yaml', 'no file'),
    (EVALUATE, 'namespace="$', 'ns="$', '<node> has no attribute ns'),
    (EVALUATE, 'output="screen"', 'output="console"', 'output console'),
    (EVALUATE, 'sigterm_timeout="30"', 'sigterm_timeout="30 s"', 'is no number'),
    (EVALUATE, '</launch>', '', 'no XML'),
    (EVALUATE, '<launch>', '<launch>now', 'text in <launch>'),
    (DEMO, '$(exec-in-pkg demo ', '$(exec-in-pkg demonstrate ', 'no executable demonstrate'),
    (DEMO, '$(exec-in-pkg demo teleop_eval)', 'demo', 'cmd does not begin with'),
    (DEMO, 'cmd=', 'command=', '<executable> lacks cmd'),
    (DEMO, '<arg name="out"', '<arg name="seconds"', 'declared twice'),
])
def test_a_fault_is_found(name: str, old: str, new: str, found: str) -> None:
    text = (ROOT / 'launch' / name).read_text(encoding='utf-8')
    assert old in text
    changed = problems(text.replace(old, new, 1))
    assert any(found in problem for problem in changed), changed


def test_a_file_that_is_installed_is_found() -> None:
    text = (ROOT / 'launch' / EVALUATE).read_text(encoding='utf-8')
    there = '<arg name="config" default="$(find-pkg-share teleop_eval)/config/teardown_cell.yaml"'
    assert problems(text.replace('<arg name="config"', there)) == []


def test_the_demo_is_launched_with_the_defaults_of_the_command(
        capsys: pytest.CaptureFixture[str]) -> None:
    pytest.importorskip('rclpy', reason='the demo needs rclpy')
    cli = importlib.import_module('teleop_eval.cli.main')
    assert cli.main(['demo', '--help']) == 0
    text = ' '.join(capsys.readouterr().out.split())
    arguments = list(ET.parse(ROOT / 'launch' / DEMO).getroot().iter('arg'))
    assert {element.get('name') for element in arguments} == {'seconds', 'domain', 'out'}
    for element in arguments:
        shown = re.search(rf'--{element.get("name")} [A-Z]+ [^(]*\(default: ([^)]*)\)',
                          text.partition('options:')[2])
        assert shown and shown[1] == element.get('default'), element.get('name')


@pytest.mark.parametrize('path', FILES, ids=lambda path: path.name)
def test_the_options_of_commands_exist(path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    pytest.importorskip('rclpy', reason='the commands that launch starts need rclpy')
    cli = importlib.import_module('teleop_eval.cli.main')
    for element in ET.parse(path).getroot().iter('executable'):
        command, rest = re.fullmatch(r'\$\(exec-in-pkg (\w+) \w+\)(.*)',
                                     element.get('cmd', '')).groups()
        assert cli.main([command, '--help']) == 0
        text = capsys.readouterr().out
        options = re.findall(r'(?<!\S)--?[a-z][a-z-]*', rest)
        assert options or not rest.strip()
        for option in options:
            assert re.search(rf'(?<!\S){option}(?![a-z-])', text), option
