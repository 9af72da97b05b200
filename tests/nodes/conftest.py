# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""ROS domains for the tests of the live node, one for each test."""

from __future__ import annotations

import fcntl
import importlib.util
import os
import sys
import tempfile
import warnings
from collections.abc import Iterator
from pathlib import Path

import pytest

# Import mode importlib puts no test folder on the path; the helpers beside the tests need it.
sys.path.insert(0, str(Path(__file__).parent))

if importlib.util.find_spec('rclpy') is None:
    collect_ignore_glob = ['test_*.py']  # the live node needs ROS, the rest does not
else:
    with warnings.catch_warnings():
        # A library that rclpy loads with the first message type uses a deprecated module.
        warnings.simplefilter('ignore', DeprecationWarning)
        importlib.import_module('rosidl_generator_py')

# Domains up to 101 leave the operating system's own ports alone on Linux (ROS 2
# documentation, "The ROS_DOMAIN_ID"); the low ones are people's.
FIRST_DOMAIN, LAST_DOMAIN = 20, 101


@pytest.fixture
def domain(monkeypatch: pytest.MonkeyPatch) -> Iterator[int]:
    """Give a ROS domain that no other test, worker or test run of this machine uses now."""
    monkeypatch.setenv('ROS_AUTOMATIC_DISCOVERY_RANGE', 'LOCALHOST')
    span = LAST_DOMAIN - FIRST_DOMAIN + 1
    for attempt in range(span):
        number = FIRST_DOMAIN + (os.getpid() + attempt) % span
        path = Path(tempfile.gettempdir()) / f'teleop_eval_test_domain_{number}.lock'
        with path.open('w') as lock:
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError:
                continue
            monkeypatch.setenv('ROS_DOMAIN_ID', str(number))
            yield number
            return
    pytest.skip('every ROS domain for tests is in use')
