# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Shared by the launch tests: a launch file as description, and what became of it."""

from __future__ import annotations

import json
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

PACKAGE = 'teleop_eval'
# A test waits this long on a busy machine; nothing is asserted of the time.
PATIENCE_S = 90.0


@dataclass
class Launched:
    """A launch file under test, and what its processes did."""

    description: Any
    folder: Path
    domain: int
    exit_codes: list[int] = field(default_factory=list)
    text: str = ''

    def session(self) -> Path:
        """Return the folder of the one session."""
        folders = list((self.folder / 'sessions').iterdir())
        assert len(folders) == 1, folders
        return folders[0]


def installed_share() -> Path:
    """Return the share folder of the installed package; skip where it is not installed."""
    packages = pytest.importorskip('ament_index_python.packages',
                                   reason='launch needs ament_index_python')
    try:
        return Path(packages.get_package_share_directory(PACKAGE))
    except packages.PackageNotFoundError:
        pytest.skip('launch finds the executables of an installation only: run colcon test, '
                    'or source the workspace first')


def include(name: str, folder: Path, domain: int, /, **arguments: str) -> Launched:
    """Return an installed launch file as `ros2 launch` would include it."""
    import launch
    from launch.event_handlers import OnProcessExit, OnProcessIO
    from launch.launch_description_sources import AnyLaunchDescriptionSource

    launched = Launched(None, folder, domain)

    def ended(event: Any, _: Any) -> None:
        launched.exit_codes.append(event.returncode)

    def said(event: Any) -> None:
        launched.text += event.text.decode(errors='replace')

    launched.description = launch.LaunchDescription([
        launch.actions.RegisterEventHandler(OnProcessExit(on_exit=ended)),
        launch.actions.RegisterEventHandler(OnProcessIO(on_stdout=said, on_stderr=said)),
        launch.actions.IncludeLaunchDescription(
            AnyLaunchDescriptionSource(str(installed_share() / 'launch' / name)),
            launch_arguments=list(arguments.items())),
    ])
    return launched


@contextmanager
def listening(domain: int) -> Iterator[tuple[Any, Callable[[Callable[[], Any]], Any]]]:
    """Give a node of the test's own, and a function that spins it until a condition holds."""
    import rclpy
    from rclpy.context import Context
    from rclpy.signals import SignalHandlerOptions

    context = Context()
    rclpy.init(context=context, domain_id=domain, signal_handler_options=SignalHandlerOptions.NO)
    try:
        node = rclpy.create_node('launch_test', context=context)
        with spinning(node) as until:
            yield node, until
        node.destroy_node()
    finally:
        context.try_shutdown()


def wait_until(condition: Callable[[], Any], step: Callable[[], Any]) -> Any:
    """Step until the condition holds and return its value; fail with patience."""
    end = time.monotonic() + PATIENCE_S
    while time.monotonic() < end:
        step()
        value = condition()
        if value:
            return value
    raise AssertionError('waited in vain')


@contextmanager
def spinning(node: Any) -> Iterator[Callable[[Callable[[], Any]], Any]]:
    """Give a function that spins the node until a condition holds and returns its value."""
    from rclpy.executors import SingleThreadedExecutor

    executor = SingleThreadedExecutor(context=node.context)
    executor.add_node(node)
    try:
        yield lambda condition: wait_until(
            condition, lambda: executor.spin_once(timeout_sec=0.1))
    finally:
        executor.remove_node(node)
        executor.shutdown()


def full_names(node: Any) -> set[str]:
    """Return the full names of all nodes that are visible."""
    return {f'{space.rstrip("/")}/{name}' for name, space in node.get_node_names_and_namespaces()}


def assert_complete(session: Path, *bags: str) -> dict[str, Any]:
    """Check that a session's files are whole and return its summary."""
    from rosbags.highlevel import AnyReader

    for name in ('summary.json', 'metrics.csv', 'windows.csv', 'config.yaml'):
        assert (session / name).stat().st_size > 0, name
    for name in bags:
        assert (session / name / 'metadata.yaml').is_file()
        with AnyReader([session / name]) as reader:
            assert reader.connections, name
    return json.loads((session / 'summary.json').read_text(encoding='utf-8'))
