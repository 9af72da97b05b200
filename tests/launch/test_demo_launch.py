# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""demo.launch.xml started for real, and stopped before its end."""

from __future__ import annotations

import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from launched import Launched, assert_complete, include, wait_until

launch_pytest = pytest.importorskip(
    'launch_pytest', reason='launch_pytest is missing; it comes with a ROS 2 installation')

SECONDS = '20'  # the shortest that the demo takes


@launch_pytest.fixture
def demo(launch_domain: int, tmp_path: Path) -> tuple:
    """Launch the demo in a domain of its own."""
    launched = include('demo.launch.xml', tmp_path, launch_domain, seconds=SECONDS,
                       domain=str(launch_domain), out=str(tmp_path / 'sessions'))
    return launched.description, launched


@pytest.mark.launch(fixture=demo)
def test_the_demo_runs_and_ends_with_its_files_when_launch_does(demo: tuple) -> Iterator[None]:
    launched: Launched = demo[-1]
    wait_until(lambda: launched.text.count(f' of {SECONDS} s ') >= 3 or launched.exit_codes,
               lambda: time.sleep(0.1))
    assert launched.exit_codes == [], launched.text
    yield
    # Interrupted: status 1, and what was measured until then is shown and kept.
    assert launched.exit_codes == [1], launched.text
    assert 'The run was interrupted' in launched.text
    summary = assert_complete(launched.session(), 'summary', 'inputs')
    assert list(summary['arms']) == ['right']
    assert (launched.session() / 'truth.json').is_file()
