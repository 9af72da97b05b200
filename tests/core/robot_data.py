# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Descriptions of real robots: those of the package example-robot-data (a test extra, 131 MB)."""

from __future__ import annotations

import importlib.metadata
from functools import cache

import pytest

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.urdf import parse_urdf

try:
    _FILES = importlib.metadata.files('example-robot-data') or []
except importlib.metadata.PackageNotFoundError:
    _FILES = None


def need() -> None:
    """Skip the test file that calls this where the package is not installed."""
    if _FILES is None:
        pytest.skip('example-robot-data (test extra) is not installed', allow_module_level=True)


@cache
def text_of(file: str) -> str:
    """Return the URDF of a file below the package's robots."""
    found = next(entry for entry in _FILES if str(entry).endswith(f'/robots/{file}'))
    return found.locate().read_text(encoding='utf-8')


@cache
def chain(file: str, base: str, tip: str) -> SerialChain:
    """Return the chain between two links of a file."""
    return SerialChain.from_description(parse_urdf(text_of(file), source=file), base, tip)
