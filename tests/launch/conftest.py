# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""A ROS domain for each launch test, and waiting."""

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
from launched import installed_share  # noqa: E402

if importlib.util.find_spec('rclpy') is not None:
    with warnings.catch_warnings():
        # A library that rclpy loads with the first message type uses a deprecated module.
        warnings.simplefilter('ignore', DeprecationWarning)
        importlib.import_module('rosidl_generator_py')

# As for the live node's tests, with the same lock files: no two tests share a domain.
FIRST_DOMAIN, LAST_DOMAIN = 20, 101


@pytest.fixture
def launch_domain(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Iterator[int]:
    """Give a ROS domain of this test alone, to itself and to what it launches."""
    installed_share()  # skips here, where launch_pytest lets one skip
    monkeypatch.setenv('ROS_AUTOMATIC_DISCOVERY_RANGE', 'LOCALHOST')
    monkeypatch.setenv('ROS_LOG_DIR', str(tmp_path / 'log'))
    span = LAST_DOMAIN - FIRST_DOMAIN + 1
    for attempt in range(span):
        number = FIRST_DOMAIN + (os.getpid() * 7 + 20 + attempt) % span
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
