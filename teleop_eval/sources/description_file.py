# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Robot descriptions that come from a file instead of a topic."""

from __future__ import annotations

from pathlib import Path

from teleop_eval.core.errors import DescriptionError
from teleop_eval.core.settings import Settings

# A description of a humanoid with all its links has some 200 kB.
_LARGEST_BYTES = 32 << 20


def read_descriptions(settings: Settings, folder: Path) -> dict[str, str]:
    """
    Read the file of every arm that names one.

    Parameters
    ----------
    settings
        Settings of the evaluation.
    folder
        Folder of the parameter file, to which relative names refer.

    Returns
    -------
    dict of str to str
        URDF text by arm.

    Raises
    ------
    DescriptionError
        When a file cannot be read as text.

    """
    return {name: _read(folder / Path(arm.robot.description_file).expanduser(), name)
            for name, arm in settings.arms.items() if arm.robot.description_file}


def _read(path: Path, arm: str) -> str:
    key = f'arms.{arm}.robot.description_file'
    try:
        if path.exists() and not path.is_file():
            raise DescriptionError(f'{key} is {path}, which is no file; name a URDF file.')
        if path.stat().st_size > _LARGEST_BYTES:
            raise DescriptionError(
                f'{key} is {path}, which has {path.stat().st_size >> 20} MiB; name a URDF file.')
        return path.read_text(encoding='utf-8-sig')
    except UnicodeDecodeError as error:
        raise DescriptionError(
            f'{key} is {path}, which is no UTF-8 text (byte {error.start}); save the robot '
            'description as UTF-8.') from error
    except (OSError, ValueError) as error:
        reason = getattr(error, 'strerror', None) or error
        raise DescriptionError(
            f'{key} is {path}, which cannot be read: {reason}; relative names start at the '
            'folder of the parameter file.') from error
