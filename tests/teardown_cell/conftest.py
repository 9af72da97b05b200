# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""ROS domains and foreign nodes for the tests of the teardown cell."""

from __future__ import annotations

import fcntl
import importlib.util
import os
import subprocess
import sys
import tempfile
import warnings
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

if importlib.util.find_spec('rclpy') is None:
    collect_ignore_glob = ['test_dds_*.py']
else:
    with warnings.catch_warnings():
        # A library that rclpy loads with the first message type uses a deprecated module.
        warnings.simplefilter('ignore', DeprecationWarning)
        importlib.import_module('rosidl_generator_py')

# As for the live node's tests, with the same lock files: no two tests share a domain.
FIRST_DOMAIN, LAST_DOMAIN = 20, 101

FOREIGN = """
import sys, time, rclpy
rclpy.init(domain_id=int(sys.argv[1]))
node = rclpy.create_node(sys.argv[2], namespace=sys.argv[3])
print('ready', flush=True)
while True:
    time.sleep(0.1)
"""


@pytest.fixture
def cell_domain() -> Iterator[int]:
    """Give a ROS domain that no other test, worker or test run of this machine uses now."""
    span = LAST_DOMAIN - FIRST_DOMAIN + 1
    for attempt in range(span):
        number = FIRST_DOMAIN + (os.getpid() * 13 + 40 + attempt) % span
        path = Path(tempfile.gettempdir()) / f'teleop_eval_test_domain_{number}.lock'
        with path.open('w') as lock:
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError:
                continue
            yield number
            return
    pytest.skip('every ROS domain for tests is in use')


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
