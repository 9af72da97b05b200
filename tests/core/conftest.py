# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Fixtures of the evaluator's tests."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path

import pytest

from teleop_eval.core import arm as arm_module
from teleop_eval.core import operator_side as operator_module


def _load(name):
    """Import a module that lies beside this file."""
    if name not in sys.modules:
        path = Path(__file__).with_name(f'{name}.py')
        spec = importlib.util.spec_from_file_location(name, path)
        module = importlib.util.module_from_spec(spec)
        sys.modules[name] = module
        spec.loader.exec_module(module)
    return sys.modules[name]


_load('synthetic_session')
_load('mapping_cells')
_load('synthetic_chain')
_load('random_runs')
_load('robot_data')


@pytest.fixture(scope='session')
def _known_robots():
    """Return what robot_geometry makes, remembered by its input: the reach takes a second."""
    make, known = arm_module.robot_geometry, {}

    def remembered(settings, urdf, *, source):
        key = (settings.robot, urdf)
        if repr(key) not in known:
            known[repr(key)] = make(settings, urdf, source=source)
        return known[repr(key)]

    return remembered


@pytest.fixture(scope='session')
def _known_operators():
    make, known = operator_module.operator_arm, {}

    def remembered(settings, urdf, *, source):
        key = repr((settings.base_link, settings.tip_link, settings.shoulder_link,
                    settings.shoulder_m, settings.stature_m, settings.description_stature_m,
                    urdf, source))
        if key not in known:
            known[key] = make(settings, urdf, source=source)
        return known[key]

    return remembered


@pytest.fixture(autouse=True)
def _remember_robots(monkeypatch, _known_robots, _known_operators):
    monkeypatch.setattr(arm_module, 'robot_geometry', _known_robots)
    monkeypatch.setattr(operator_module, 'operator_arm', _known_operators)
