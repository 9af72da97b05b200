# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""package.xml, setup.py, changelog and installed files agree with each other and the source."""

from __future__ import annotations

import ast
import importlib.metadata
import os
import re
import subprocess
import sys
import xml.etree.ElementTree as ET
from pathlib import Path
from typing import Any

import pytest
import setuptools

import teleop_eval
from teleop_eval.cli.main import COMMANDS

ROOT = Path(__file__).parents[1]
PACKAGE = 'teleop_eval'

# What the distributions of PyPI are imported as, where that differs from their name.
IMPORTED_AS = {'pyyaml': 'yaml', 'pin': 'pinocchio', 'mcap-ros2-support': 'mcap_ros2'}
# Tools that are run, plugins that pytest finds, files that are read: nothing imports them.
NOT_IMPORTED = {'pytest-timeout', 'pytest-xdist', 'ruff', 'mypy', 'example-robot-data'}
# rosdep's names of what is imported.
ROSDEP = {'numpy': 'python3-numpy', 'scipy': 'python3-scipy', 'yaml': 'python3-yaml',
          'rich': 'python3-rich', 'defusedxml': 'python3-defusedxml', 'lz4': 'python3-lz4',
          'zstandard': 'python3-zstandard'}
PIP_ONLY = {'rosbags', 'mcap'}


@pytest.fixture(scope='module')
def arguments() -> dict[str, Any]:
    """Return what setup.py hands to setuptools, read by running it in its own folder."""
    given: dict[str, Any] = {}
    here = Path.cwd()
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(setuptools, 'setup', lambda **keywords: given.update(keywords))
        os.chdir(ROOT)
        try:
            exec(compile((ROOT / 'setup.py').read_text(encoding='utf-8'), 'setup.py', 'exec'),
                 {'__name__': '__main__'})
        finally:
            os.chdir(here)
    return given


@pytest.fixture(scope='module')
def manifest() -> ET.Element:
    """Return package.xml."""
    return ET.parse(ROOT / 'package.xml').getroot()


def third_party(folder: str) -> set[str]:
    """Return the top-level names that the Python files of a folder import from elsewhere."""
    local = {path.stem for path in (ROOT / 'tests').rglob('*.py')} | {PACKAGE, 'tests'}
    found = set()
    for path in (ROOT / folder).rglob('*.py'):
        for node in ast.walk(ast.parse(path.read_text(encoding='utf-8'))):
            names = []
            if isinstance(node, ast.Import):
                names = [alias.name for alias in node.names]
            elif isinstance(node, ast.ImportFrom) and not node.level:
                names = [node.module or '']
            elif (isinstance(node, ast.Call) and node.args
                  and ast.unparse(node.func).rpartition('.')[2] in ('importorskip', 'find_spec')
                  and isinstance(node.args[0], ast.Constant)):
                names = [str(node.args[0].value)]
            found |= {name.partition('.')[0] for name in names}
    return {name for name in found - local if name and name not in sys.stdlib_module_names}


def is_ros(name: str) -> bool:
    """Return whether a top-level name comes with ROS."""
    return name.endswith(('_msgs', '_srvs', '_interfaces')) or name.startswith(
        ('rclpy', 'rosidl', 'launch', 'ament', 'rpyutils'))


def requirement_names(requirements: list[str]) -> set[str]:
    """Return the names of requirements, in small letters."""
    return {re.split(r'[<>=!~;\[ ]', one, maxsplit=1)[0].lower() for one in requirements}


def imports_of(requirements: list[str]) -> set[str]:
    """Return the top-level names that requirements are imported by."""
    return {IMPORTED_AS.get(name, name) for name in requirement_names(requirements)}


def test_one_version_everywhere(arguments, manifest) -> None:
    version = teleop_eval.__version__
    assert re.fullmatch(r'\d+\.\d+\.\d+', version)
    assert arguments['version'] == version
    assert manifest.findtext('version') == version


def test_the_changelog_ends_in_this_version_or_is_all_forthcoming() -> None:
    """REP 132: sections are `X.Y.Z (YYYY-MM-DD)`, or `Forthcoming` for what is unreleased."""
    lines = (ROOT / 'CHANGELOG.rst').read_text(encoding='utf-8').splitlines()
    title = f'Changelog for package {PACKAGE}'
    assert lines[1] == title and lines[0] == lines[2] == '^' * len(lines[0])
    assert len(lines[0]) >= len(title)
    sections = [text for text, rule in zip(lines, lines[1:], strict=False)
                if rule and set(rule) == {'-'}]
    assert sections
    released = [re.fullmatch(r'(\d+\.\d+\.\d+) \(\d{4}-\d\d-\d\d\)', text)
                for text in sections if text != 'Forthcoming']
    assert all(released), sections
    assert sections.index('Forthcoming') == 0 if 'Forthcoming' in sections else True
    if released:
        assert released[0][1] == teleop_eval.__version__
    assert all(line.startswith(('* ', '  ')) for line in lines[3:]
               if line and line not in sections and set(line) != {'-'})


def test_the_manifest_has_what_format_3_requires(manifest) -> None:
    """REP 149: name, version, description, maintainer with address, licence."""
    assert (manifest.tag, manifest.get('format')) == ('package', '3')
    assert manifest.findtext('name') == PACKAGE
    assert manifest.findtext('description', '').strip().endswith('.')
    assert '@' in manifest.find('maintainer').get('email') and manifest.findtext('maintainer')
    licence = manifest.find('license')
    assert licence.text == 'Apache-2.0' and (ROOT / licence.get('file')).is_file()
    assert manifest.findtext('export/build_type') == 'ament_python'
    known = {'name', 'version', 'description', 'maintainer', 'license', 'url', 'author',
             'exec_depend', 'test_depend', 'export'}
    assert {child.tag for child in manifest} <= known
    depends = [child.text for child in manifest if child.tag.endswith('_depend')]
    assert len(depends) == len(set(depends))


def test_manifest_and_setup_tell_the_same(arguments, manifest) -> None:
    assert arguments['name'] == PACKAGE
    assert arguments['description'] == manifest.findtext('description')
    assert arguments['license'] == manifest.findtext('license')
    maintainer = manifest.find('maintainer')
    assert arguments['maintainer'] == maintainer.text
    assert arguments['maintainer_email'] == maintainer.get('email')


def test_the_installation_requires_exactly_what_is_imported(arguments) -> None:
    used = {name for name in third_party(PACKAGE) if not is_ros(name)}
    assert imports_of(arguments['install_requires']) == used


def test_the_manifest_names_every_ros_package_that_is_imported(manifest) -> None:
    run = {child.text for child in manifest.findall('exec_depend')}
    imported = third_party(PACKAGE)
    ros = {name for name in imported if is_ros(name)}
    assert {'rclpy', 'std_msgs', 'diagnostic_msgs'} <= ros
    assert ros <= run
    assert {ROSDEP[name] for name in imported - ros - PIP_ONLY} <= run
    # The messages of inputs are found by the name of their type, which stands in a text.
    texts = ''.join(path.read_text(encoding='utf-8')
                    for path in (ROOT / PACKAGE).rglob('*.py'))
    for name in run - set(ROSDEP.values()) - ros - {'ros2launch'}:
        assert f'{name}/msg/' in texts, name


def test_the_test_extra_names_every_tool_the_tests_import(arguments) -> None:
    test = arguments['extras_require']['test']
    # A plain pytest is what colcon looks for when it decides to run the tests by it.
    assert 'pytest' in requirement_names(test)
    used = {name for name in third_party('tests') if not is_ros(name)}
    known = imports_of(arguments['install_requires']) | imports_of(test) | {'setuptools'}
    assert used <= known
    unused = requirement_names(test) - NOT_IMPORTED
    assert {IMPORTED_AS.get(name, name) for name in unused} <= used


def test_the_wheels_are_pinned_and_are_those_of_the_manifest(arguments, manifest) -> None:
    wheels = arguments['extras_require']['ros']
    assert all(re.fullmatch(r'ros-[a-z0-9-]+==\d+\.\d+\.\d+', one) for one in wheels)
    named = {one.partition('==')[0].removeprefix('ros-').replace('-', '_') for one in wheels}
    named.discard('rmw_fastrtps_cpp')  # a distribution brings its own middleware
    run = {child.text for child in manifest.findall('exec_depend')}
    assert named <= run


def test_every_requirement_of_the_environment_is_installed(arguments) -> None:
    for name in requirement_names(arguments['install_requires']):
        assert importlib.metadata.version(name)


def test_every_requirement_is_explained_for_developers(arguments) -> None:
    text = (ROOT / 'DEVELOPERS.md').read_text(encoding='utf-8').lower()
    every = requirement_names(arguments['install_requires']) | requirement_names(
        arguments['extras_require']['test'])
    assert {name for name in every
            if not re.search(rf'(?<![a-z0-9-]){re.escape(name)}(?![a-z0-9-])', text)} == set()


def test_every_sub_package_is_installed(arguments) -> None:
    folders = {path.parent for path in (ROOT / PACKAGE).rglob('*.py')}
    names = {'.'.join(path.relative_to(ROOT).parts) for path in folders}
    assert set(arguments['packages']) == names
    assert arguments['package_data'] == {PACKAGE: ['py.typed']}
    assert (ROOT / PACKAGE / 'py.typed').is_file()


def test_every_file_beside_the_package_is_installed(arguments) -> None:
    installed = {target: set(files) for target, files in arguments['data_files']}
    share = f'share/{PACKAGE}'
    index = 'share/ament_index/resource_index/packages'
    assert installed == {
        index: {f'resource/{PACKAGE}'},
        share: {'package.xml'},
        f'{share}/launch': files_in('launch'),
        f'{share}/config': files_in('config'),
        f'lib/{PACKAGE}': files_in('resource/run'),
    }
    assert all(installed.values())
    assert (ROOT / 'resource' / PACKAGE).read_bytes() == b''


def files_in(folder: str) -> set[str]:
    """Return the files of a folder relative to the project's."""
    return {str(path.relative_to(ROOT)) for path in (ROOT / folder).rglob('*')
            if path.is_file() and '__pycache__' not in path.parts}


def test_every_command_is_a_file_of_three_lines() -> None:
    """`ros2 run teleop_eval NAME` = `teleop_eval NAME` = `python -m teleop_eval NAME`."""
    assert {Path(name).name for name in files_in('resource/run')} == set(COMMANDS)
    for name in COMMANDS:
        path = ROOT / 'resource' / 'run' / name
        first, *rest = path.read_text(encoding='utf-8').splitlines()
        assert first == '#!/usr/bin/env python3'
        assert rest == ['from teleop_eval.cli.main import main',
                        f'raise SystemExit(main(["{name}", *__import__("sys").argv[1:]]))']
        assert os.access(path, os.X_OK), f'{name} is not executable'


def test_there_is_one_console_script(arguments) -> None:
    assert arguments['entry_points'] == {
        'console_scripts': [f'{PACKAGE} = {PACKAGE}.cli.main:main']}


@pytest.mark.parametrize('name', sorted(COMMANDS))
def test_the_three_ways_to_call_a_command_are_one(name: str, tmp_path: Path) -> None:
    ways = [[str(ROOT / 'resource' / 'run' / name)],
            [sys.executable, '-m', PACKAGE, name]]
    script = Path(sys.executable).with_name(PACKAGE)
    if script.exists():
        ways.append([str(script), name])
    path = os.pathsep.join([str(Path(sys.executable).parent), os.environ['PATH']])
    environment = {**os.environ, 'PYTHONPATH': str(ROOT), 'PATH': path}
    done = [subprocess.run([*way, '--help'], capture_output=True, text=True, timeout=120,
                           env=environment, cwd=tmp_path) for way in ways]
    for one in done:
        assert (one.returncode, one.stdout, one.stderr) == (0, done[0].stdout, '')
    assert f'{PACKAGE} {name}' in done[0].stdout
