# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Find the files that are installed beside the package."""

from __future__ import annotations

import os
import sys
from pathlib import Path

from teleop_eval.core.errors import TeleopEvalError

PACKAGE = 'teleop_eval'


def config_file(name: str) -> Path:
    """
    Return the path of a file of the project's config folder.

    Looked for in the source tree this module is part of, in the ROS prefixes of
    AMENT_PREFIX_PATH, and under the prefix of the Python installation.

    Raises
    ------
    TeleopEvalError
        If it is in none of them.

    """
    places = _places()
    for place in places:
        if (place / name).is_file():
            return place / name
    listed = ', '.join(map(str, places))
    raise TeleopEvalError(
        f'The file {name!r} that is installed with {PACKAGE} is missing (looked in {listed}); '
        'install the package again.')


def package_file(package: str, name: str) -> Path:
    """
    Return the path of a file in the share folder of a package, as package:// names it.

    Files of this project's own config folder are found without a ROS installation too.

    Raises
    ------
    TeleopEvalError
        If there is no such file.

    """
    folder, _, rest = name.partition('/')
    if package == PACKAGE and folder == 'config':
        return config_file(rest)
    places = [Path(prefix) / 'share' / package
              for prefix in os.environ.get('AMENT_PREFIX_PATH', '').split(os.pathsep) if prefix]
    for place in places:
        if (place / name).is_file():
            return place / name
    listed = ', '.join(map(str, places)) or 'nowhere, since AMENT_PREFIX_PATH is empty'
    raise TeleopEvalError(
        f'there is no file {name!r} of a package {package!r} (looked in {listed}); correct the '
        'name or source the workspace that has it.')


def _places() -> list[Path]:
    root = Path(__file__).resolve().parent.parent
    # The package comes first: an installed copy must not pair with an older tree's files,
    # nor a source tree with those of an installed version. site-packages has no package.xml.
    places = [root / 'config'] if (root / 'package.xml').is_file() else []
    shared = Path('share') / PACKAGE / 'config'
    for parent in Path(__file__).resolve().parents:
        if (parent / shared).is_dir():
            places.append(parent / shared)
    prefixes = os.environ.get('AMENT_PREFIX_PATH', '').split(os.pathsep)
    places += [Path(prefix) / shared for prefix in prefixes if prefix]
    places += [Path(sys.prefix) / shared, Path(sys.base_prefix) / shared, root / 'config']
    return list(dict.fromkeys(places))
