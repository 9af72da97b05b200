# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""ROS domains and foreign nodes for the tests of the teardown cell."""

from __future__ import annotations

import importlib.util
import os
import subprocess
import sys
from collections.abc import Callable, Iterator

import pytest

if importlib.util.find_spec('rclpy') is None:
    collect_ignore_glob = ['test_dds_*.py']

FOREIGN = """
import sys, time, rclpy
rclpy.init(domain_id=int(sys.argv[1]))
node = rclpy.create_node(sys.argv[2], namespace=sys.argv[3])
print('ready', flush=True)
while True:
    time.sleep(0.1)
"""


@pytest.fixture
def cell_domain(free_domain: int) -> int:
    """Give a ROS domain of this test alone; the cell is told of it, the environment not."""
    return free_domain


@pytest.fixture
def foreign_node(cell_domain: int) -> Iterator[Callable[..., subprocess.Popen[str]]]:
    """Give a function that starts a node in another process and waits until it is there."""
    started: list[subprocess.Popen[str]] = []

    def start(name: str = 'driver', namespace: str = '/real_robot',
              discovery: str | None = 'LOCALHOST') -> subprocess.Popen[str]:
        environment = {key: value for key, value in os.environ.items()
                       if key != 'ROS_AUTOMATIC_DISCOVERY_RANGE'}
        if discovery:
            environment['ROS_AUTOMATIC_DISCOVERY_RANGE'] = discovery
        process = subprocess.Popen(
            [sys.executable, '-c', FOREIGN, str(cell_domain), name, namespace],
            env=environment, stdout=subprocess.PIPE, text=True)
        started.append(process)
        assert process.stdout is not None and process.stdout.readline() == 'ready\n'
        return process

    yield start
    for process in started:
        process.kill()
        process.wait()
        assert process.stdout is not None
        process.stdout.close()
