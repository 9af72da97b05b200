# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What README prints is true of the program: its parameter files, its commands."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from teleop_eval.cli.main import COMMANDS
from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.settings import from_parameters
from teleop_eval.sources.parameter_file import load_parameters

README = Path(__file__).parents[1].joinpath('README.md').read_text(encoding='utf-8')
SMALLEST, ADDED, *_ = re.findall(r'```yaml\n(.*?)```', README, re.DOTALL)


@pytest.mark.parametrize('text', [SMALLEST, SMALLEST + ADDED])
def test_parameter_files_are_read_as_they_stand(tmp_path, text):
    path = tmp_path / 'evaluate.yaml'
    path.write_text(text, encoding='utf-8')
    evaluator = SessionEvaluator(from_parameters(load_parameters(path)))
    assert list(evaluator.arms) == ['right']
    assert evaluator.problems == []
    recorded = re.search(r'ros2 bag record -o my_recording (.*?)\nteleop_eval', README, re.DOTALL)
    # The line that records names every topic of the parameter file.
    assert set(evaluator.routes) <= set(recorded[1].replace('\\', '').split())


def test_commands_exist():
    named = set(re.findall(r'(?:run teleop_eval|bin/teleop_eval|^teleop_eval) ([a-z]+)', README,
                           re.MULTILINE))
    assert {'evaluate', 'summarize'} <= named <= set(COMMANDS)
