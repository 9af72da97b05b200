# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Where the installed files are found."""

from __future__ import annotations

import shutil
import subprocess
import sys
from pathlib import Path

import pytest

import teleop_eval
from teleop_eval.core.errors import TeleopEvalError
from teleop_eval.resources import config_file

PACKAGE = Path(teleop_eval.__file__).parent
PRINT = "from teleop_eval.resources import config_file; print(config_file('teardown_cell.yaml'))"


def test_the_files_of_the_demo_are_there():
    for name in ('teardown_cell.yaml', 'teardown_arm.urdf'):
        assert config_file(name).is_file()


def test_a_missing_file_is_one_sentence():
    with pytest.raises(TeleopEvalError, match="'no_such.yaml'.*install the package again"):
        config_file('no_such.yaml')


@pytest.mark.parametrize('library', ['lib/python3.12/site-packages', 'local/lib/python3/dist'])
def test_an_installed_package_finds_its_own_share_folder(tmp_path: Path, library: str):
    """As colcon and pip lay it out: code below lib/, files below share/ of one prefix."""
    site = tmp_path / library / 'teleop_eval'
    (site / 'core').mkdir(parents=True)
    for name in ('__init__.py', 'resources.py', 'core/__init__.py', 'core/errors.py'):
        shutil.copy(PACKAGE / name, site / name)
    shared = tmp_path / 'share' / 'teleop_eval' / 'config'
    shared.mkdir(parents=True)
    (shared / 'teardown_cell.yaml').write_text('')
    done = subprocess.run([sys.executable, '-c', PRINT], cwd=site.parent, capture_output=True,
                          text=True, check=True)
    assert Path(done.stdout.strip()) == shared / 'teardown_cell.yaml'


def test_a_prefix_of_ros_is_searched(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    shared = tmp_path / 'share' / 'teleop_eval' / 'config'
    shared.mkdir(parents=True)
    (shared / 'only_here.yaml').write_text('')
    monkeypatch.setenv('AMENT_PREFIX_PATH', f'/nowhere:{tmp_path}')
    assert config_file('only_here.yaml') == shared / 'only_here.yaml'
