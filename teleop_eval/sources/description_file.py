# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Descriptions of robots and operators that come from a file instead of a topic."""

from __future__ import annotations

from pathlib import Path

from teleop_eval.core.errors import DescriptionError, TeleopEvalError
from teleop_eval.core.operator_settings import operator_key
from teleop_eval.core.settings import Settings
from teleop_eval.resources import package_file

# A description of a humanoid with all its links has some 200 kB.
_LARGEST_BYTES = 32 << 20
_PACKAGE = 'package://'


def read_descriptions(settings: Settings, folder: Path) -> dict[str, str]:
    """
    Read the files of every arm that names one for its robot or its operator.

    Parameters
    ----------
    settings
        Settings of the evaluation.
    folder
        Folder of the parameter file, to which relative names refer. A name such as
        package://teleop_eval/config/human_arm.urdf refers to an installed package.

    Returns
    -------
    dict of str to str
        URDF text by arm, that of its operator by `operator_key` of the arm.

    Raises
    ------
    DescriptionError
        When a file cannot be read as text.

    """
    found = {}
    for name, arm in settings.arms.items():
        for known_as, side, file in (
                (name, 'robot', arm.robot.description_file),
                (operator_key(name), 'operator', arm.operator.description_file)):
            if file:
                found[known_as] = _read(file, folder, f'arms.{name}.{side}.description_file')
    return found


def _path(file: str, folder: Path, key: str) -> Path:
    if not file.startswith(_PACKAGE):
        return folder / Path(file).expanduser()
    package, _, name = file.removeprefix(_PACKAGE).partition('/')
    try:
        return package_file(package, name)
    except TeleopEvalError as error:
        raise DescriptionError(f'{key} is {file}: {error}') from error


def _read(file: str, folder: Path, key: str) -> str:
    path = _path(file, folder, key)
    try:
        if path.exists() and not path.is_file():
            raise DescriptionError(f'{key} is {path}, which is no file; name a URDF file.')
        if path.stat().st_size > _LARGEST_BYTES:
            raise DescriptionError(
                f'{key} is {path}, which has {path.stat().st_size >> 20} MiB; name a URDF file.')
        return path.read_text(encoding='utf-8-sig')
    except UnicodeDecodeError as error:
        raise DescriptionError(
            f'{key} is {path}, which is no UTF-8 text (byte {error.start}); save the '
            'description as UTF-8.') from error
    except (OSError, ValueError) as error:
        reason = getattr(error, 'strerror', None) or error
        raise DescriptionError(
            f'{key} is {path}, which cannot be read: {reason}; relative names start at the '
            'folder of the parameter file.') from error
