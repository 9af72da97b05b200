# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Fixtures shared by all tests."""

from __future__ import annotations

import fcntl
import importlib
import importlib.util
import os
import subprocess
import sys
import tarfile
import tempfile
import warnings
from collections.abc import Iterator
from pathlib import Path

import pytest

if importlib.util.find_spec('rclpy') is not None:
    with warnings.catch_warnings():
        # A library that rclpy loads with the first message type uses a deprecated module.
        warnings.simplefilter('ignore', DeprecationWarning)
        importlib.import_module('rosidl_generator_py')

# Domains up to 101 leave the operating system's own ports alone on Linux (ROS 2
# documentation, "The ROS_DOMAIN_ID"); the low ones are people's.
FIRST_DOMAIN, LAST_DOMAIN = 20, 101

_CACHE = Path(__file__).parents[1] / '.cache'
_REAL = 'mcap_bag_parser-0.3.1'


def _fetch_real_recordings(target: Path) -> str:
    """Fetch the source package that carries the recordings; return what went wrong."""
    target.parent.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory(dir=target.parent) as scratch:
        command = [
            sys.executable, '-m', 'pip', 'download', '--quiet', '--no-deps',
            '--disable-pip-version-check', '--no-binary', 'mcap-bag-parser', '--dest', scratch,
            'mcap-bag-parser==0.3.1',
        ]
        try:
            done = subprocess.run(command, capture_output=True, text=True, timeout=180)
        except subprocess.TimeoutExpired:
            return 'pip took too long'
        archives = list(Path(scratch).glob('*.tar.gz'))
        if done.returncode or not archives:
            return (done.stderr.strip().splitlines() or ['pip found nothing'])[-1]
        with tarfile.open(archives[0]) as archive:
            members = [m for m in archive.getmembers() if m.isfile() and '..' not in m.name]
            archive.extractall(scratch, members=members)
        try:
            os.replace(Path(scratch) / _REAL, target)
        except OSError:
            if not target.is_dir():
                raise
    return ''


@pytest.fixture(scope='session')
def real_recordings() -> Path:
    """
    Return the folder with real recordings of a robot, skipping where it cannot be had.

    They come with the source package mcap-bag-parser 0.3.1 (MIT, Copyright 2024 Neal Tanner)
    and hold joint commands and states of a surgical robot: `bagfile`, `alternate_bagfile`,
    `data`.
    """
    folder = _CACHE / _REAL / 'src' / 'mcap_bag' / 'test'
    if not folder.is_dir():
        problem = _fetch_real_recordings(_CACHE / _REAL)
        if problem:
            pytest.skip(f'the real recordings cannot be fetched: {problem}')
    return folder


@pytest.fixture
def free_domain() -> Iterator[int]:
    """Give a ROS domain that no other test, worker or test run of this machine uses now."""
    span = LAST_DOMAIN - FIRST_DOMAIN + 1
    for attempt in range(span):
        number = FIRST_DOMAIN + (os.getpid() + attempt) % span
        path = Path(tempfile.gettempdir()) / f'teleop_eval_test_domain_{number}.lock'
        with path.open('w') as lock:
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError:
                continue
            yield number
            return
    pytest.skip('every ROS domain for tests is in use')
