# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""A ROS domain for each launch test."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

# Import mode importlib puts no test folder on the path; the helpers beside the tests need it.
sys.path.insert(0, str(Path(__file__).parent))
from launched import installed_share  # noqa: E402


@pytest.fixture
def launch_domain(free_domain: int, monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> int:
    """Give a ROS domain of this test alone, to itself and to what it launches."""
    installed_share()  # skips here, where launch_pytest lets one skip
    monkeypatch.setenv('ROS_AUTOMATIC_DISCOVERY_RANGE', 'LOCALHOST')
    monkeypatch.setenv('ROS_LOG_DIR', str(tmp_path / 'log'))
    monkeypatch.setenv('ROS_DOMAIN_ID', str(free_domain))
    return free_domain
