# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Node names and wildcards that key the sections of a parameter file."""

from __future__ import annotations

import re

from teleop_eval.sources.parameter_tree import config_error, shown

_TOKEN = re.compile(r'[A-Za-z_][A-Za-z0-9_]*')
_WILDCARDS = ('*', '**')
# Limits of the ROS middleware interface.
_MAX_NODE_NAME = 255
_MAX_NAMESPACE = 245


def check_node_name(name: str, *, source: str, line: int) -> None:
    """
    Refuse a section name that rcl refuses.

    Raises
    ------
    ConfigError
        A part of it is no ROS name and no wildcard, or it is too long.

    """
    tokens = _absolute(name)[1:].split('/')
    for token in tokens:
        if token not in _WILDCARDS and not _TOKEN.fullmatch(token):
            raise config_error(
                source, line, f'{shown(name)} is no node name (the part {shown(token)} may hold '
                'letters, digits and _ only and must not begin with a digit); key the '
                "section '/**'")
    if len(tokens[-1]) > _MAX_NODE_NAME or any(len(t) >= _MAX_NAMESPACE for t in tokens[:-1]):
        raise config_error(
            source, line, f"the node name of {len(name)} characters is too long; key it '/**'")


def applies_to(name: str, full_name: str) -> bool:
    """
    Tell whether a section is for a node.

    Parameters
    ----------
    name
        Section name: absolute, relative to the root, or with `*` (one level) and `**` (any
        number of levels, also none) as parts.
    full_name
        The node's name with namespace, as `/ns/node`.

    """
    levels = {'*': r'/\w+', '**': r'(?:/\w+)*'}
    pattern = ''.join(
        levels.get(token, '/' + re.escape(token)) for token in _absolute(name)[1:].split('/'))
    return re.fullmatch(pattern, full_name, re.ASCII) is not None


def _absolute(name: str) -> str:
    return name if name.startswith('/') else '/' + name
