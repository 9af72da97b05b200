# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""ROS domains for the tests of the live node, one for each test."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path

import pytest

# Import mode importlib puts no test folder on the path; the helpers beside the tests need it.
sys.path.insert(0, str(Path(__file__).parent))

if importlib.util.find_spec('rclpy') is None:
    collect_ignore_glob = ['test_*.py']  # the live node needs ROS, the rest does not


@pytest.fixture
def domain(free_domain: int, monkeypatch: pytest.MonkeyPatch) -> int:
    """Give a ROS domain of this test alone, to itself and to the processes it starts."""
    monkeypatch.setenv('ROS_AUTOMATIC_DISCOVERY_RANGE', 'LOCALHOST')
    monkeypatch.setenv('ROS_DOMAIN_ID', str(free_domain))
    return free_domain
