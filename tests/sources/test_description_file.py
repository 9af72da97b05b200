# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Descriptions of robot and operator from files, and their copies in a session's folder."""

from __future__ import annotations

from pathlib import Path

import pytest

from teleop_eval.core.errors import DescriptionError
from teleop_eval.core.settings import from_parameters
from teleop_eval.sinks.session_config import session_config
from teleop_eval.sources.description_file import read_descriptions
from teleop_eval.sources.parameter_file import load_parameters

CONFIG = Path(__file__).parents[2] / 'config'
HUMAN = 'package://teleop_eval/config/human_arm.urdf'


def parameters(file: str = HUMAN, arm: str = 'right') -> dict:
    return {f'arms.{arm}.{key}': value for key, value in {
        'robot.joints_topic': '/joints', 'robot.description_file': 'arm.urdf',
        'robot.base_link': 'a', 'robot.tip_link': 'b', 'operator.joints_topic': 'suit/joints',
        'operator.shoulder_topic': 'suit/shoulder', 'operator.description_file': file,
        'operator.base_link': 'human_arm_base', 'operator.tip_link': 'finger_tip'}.items()}


def read(folder: Path, file: str = HUMAN) -> dict[str, str]:
    return read_descriptions(from_parameters(parameters(file)), folder)


def test_robot_and_operator_are_read_each_from_its_file(tmp_path) -> None:
    (tmp_path / 'arm.urdf').write_text('the robot')
    (tmp_path / 'suit.urdf').write_text('the suit')
    assert read(tmp_path, 'suit.urdf') == {'right': 'the robot', 'right.operator': 'the suit'}


def test_a_package_address_is_found_without_ros(tmp_path, monkeypatch) -> None:
    monkeypatch.delenv('AMENT_PREFIX_PATH', raising=False)
    (tmp_path / 'arm.urdf').write_text('the robot')
    assert read(tmp_path)['right.operator'] == (CONFIG / 'human_arm.urdf').read_text()


def test_a_package_of_the_workspace_is_found_in_its_share_folder(tmp_path, monkeypatch) -> None:
    (tmp_path / 'arm.urdf').write_text('the robot')
    file = tmp_path / 'ws' / 'share' / 'lab_suit' / 'urdf' / 'suit.urdf'
    file.parent.mkdir(parents=True)
    file.write_text('of the lab')
    monkeypatch.setenv('AMENT_PREFIX_PATH', f'/nowhere:{tmp_path / "ws"}')
    assert read(tmp_path, 'package://lab_suit/urdf/suit.urdf')['right.operator'] == 'of the lab'


@pytest.mark.parametrize(('file', 'words'), [
    ('suit.urdf', r'arms.right.operator.description_file is .*suit.urdf, which cannot be read'),
    ('package://lab_suit/urdf/suit.urdf',
     r"arms.right.operator.description_file is package://.*no file 'urdf/suit.urdf' of a package "
     r"'lab_suit'"),
    ('package://teleop_eval/config/none.urdf', "'none.urdf'.*missing"),
])
def test_a_file_that_is_not_there_is_one_sentence(tmp_path, monkeypatch, file, words) -> None:
    monkeypatch.delenv('AMENT_PREFIX_PATH', raising=False)
    (tmp_path / 'arm.urdf').write_text('the robot')
    with pytest.raises(DescriptionError, match=words):
        read(tmp_path, file)


def test_a_session_keeps_both_descriptions_and_finds_them_again(tmp_path) -> None:
    """What a folder keeps gives the same descriptions and full topic names when read again."""
    first = tmp_path / 'first'
    first.mkdir()
    (first / 'arm.urdf').write_text('the robot')
    flat = parameters()
    texts = read(first)
    kept = tmp_path / 'kept'
    kept.mkdir()
    files = session_config(flat, texts, lambda topic: f'/cell/{topic}'.replace('//', '/'),
                           name='config.yaml')
    assert sorted(files) == ['config.yaml', 'description_right.operator.urdf',
                             'description_right.urdf']
    for name, text in files.items():
        (kept / name).write_text(text)
    again = from_parameters(load_parameters(kept / 'config.yaml'))
    assert read_descriptions(again, kept) == texts
    assert again.arms['right'].operator.shoulder_topic == '/cell/suit/shoulder'
