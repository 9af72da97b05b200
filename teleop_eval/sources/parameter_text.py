# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Write parameters as a file that ROS and this package read back to the same values."""

from __future__ import annotations

import math
import re
import sys
from collections.abc import Mapping
from typing import Any

import numpy as np

from teleop_eval.core.errors import ConfigError

_PLAIN_KEY = re.compile(r'[A-Za-z_][A-Za-z0-9_]*')
_ESCAPES = {'\\': '\\\\', '"': '\\"', '\n': '\\n', '\t': '\\t', '\r': '\\r'}
_MAX_LEVELS = 32


def to_yaml(flat: Mapping[str, Any]) -> str:
    """
    Write dotted parameters as the text of a parameter file keyed `/**`.

    Parameters
    ----------
    flat
        Dotted names to bool, int, float, str, or non-empty lists, tuples or (n,) arrays of one
        of them; integers among floats are written as floats.

    Returns
    -------
    str
        YAML in the order of `flat`, dotted names as nested maps where that is possible.

    Raises
    ------
    ConfigError
        A value that ROS parameters cannot hold: none, an empty or mixed list, an integer
        beyond 64 bits, text with NUL or lone surrogates.

    """
    tree: dict[str, Any] = {}
    for name, value in flat.items():
        if not isinstance(name, str) or not name:
            raise ConfigError(f'{name!r} is no parameter name; use a non-empty text.')
        _insert(tree, _path(name, flat), _format(name, value))
    lines = ['/**:', '  ros__parameters:' if tree else '  ros__parameters: {}']
    _write(tree, 4, lines)
    return '\n'.join(lines) + '\n'


def _path(name: str, flat: Mapping[str, Any]) -> list[str]:
    """Split a name into levels, or keep it whole where nesting would change its meaning."""
    parts = name.split('.')
    groups = ('.'.join(parts[:count]) for count in range(1, len(parts)))
    if len(parts) > _MAX_LEVELS or '' in parts or any(group in flat for group in groups):
        return [name]
    return parts


def _insert(tree: dict[str, Any], path: list[str], text: str) -> None:
    for part in path[:-1]:
        tree = tree.setdefault(part, {})
    tree[path[-1]] = text


def _write(tree: dict[str, Any], indent: int, lines: list[str]) -> None:
    for key, value in tree.items():
        shown = key if _PLAIN_KEY.fullmatch(key) else _quote(key, key)
        if isinstance(value, dict):
            lines.append(f'{" " * indent}{shown}:')
            _write(value, indent + 2, lines)
        else:
            lines.append(f'{" " * indent}{shown}: {value}')


def _format(name: str, value: Any) -> str:
    if isinstance(value, np.ndarray):
        value = value.tolist()
    if not isinstance(value, list | tuple):
        return _format_scalar(name, value)
    items = [item.item() if isinstance(item, np.generic) else item for item in value]
    if not items:
        raise ConfigError(
            f'parameter {name!r} is an empty list, which ROS cannot store; leave it out.')
    kinds = {type(item) for item in items}
    if kinds == {int, float} and all(int(float(i)) == i for i in items if type(i) is int):
        items = [float(item) for item in items]
    elif len(kinds) > 1:
        raise ConfigError(
            f'parameter {name!r} mixes types in a list ({value!r}); use one type.')
    return f'[{", ".join(_format_scalar(name, item) for item in items)}]'


def _format_scalar(name: str, value: Any) -> str:
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, bool):
        return 'true' if value else 'false'
    if isinstance(value, int):
        if not -2**63 <= value < 2**63:
            raise ConfigError(
                f'parameter {name!r} is {value}, beyond the 64 bits of an integer; use a float.')
        return str(int(value))
    if isinstance(value, float):
        return _format_float(float(value))
    if isinstance(value, str):
        return _quote(name, value)
    raise ConfigError(
        f'parameter {name!r} is {value!r}, which ROS parameters cannot hold; leave it out or '
        'use true/false, a number, text or a list of these.')


def _format_float(value: float) -> str:
    """Write the shortest text that every reader takes for this float."""
    if math.isnan(value):
        return '.nan'
    if math.isinf(value):
        return '.inf' if value > 0 else '-.inf'
    if 0.0 < abs(value) < sys.float_info.min:
        # C calls an inexact decimal below the normal range an error and rcl makes it text.
        return value.hex()
    text = repr(value)
    # YAML 1.1 readers take 1e-05 for text, but not 1.0e-05.
    return text if '.' in text else text.replace('e', '.0e')


def _quote(name: str, text: str) -> str:
    """Double-quote a text, escaping all that is not printable."""
    return '"' + ''.join(_escape(name, char) for char in text) + '"'


def _escape(name: str, char: str) -> str:
    code = ord(char)
    if code == 0 or 0xD800 <= code <= 0xDFFF:
        raise ConfigError(
            f'parameter {name!r} holds the character U+{code:04X}, which a parameter file '
            'cannot store; remove it.')
    if char in _ESCAPES:
        return _ESCAPES[char]
    if char.isprintable():
        return char
    if code < 0x100:
        return f'\\x{code:02X}'
    return f'\\u{code:04X}' if code < 0x10000 else f'\\U{code:08X}'
