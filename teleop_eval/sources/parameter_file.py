# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Read a ROS parameter file without ROS, with the result that a node would get.

Measured against rcl 10.1.3 through rclpy 9.1.2. Differences are on one side only: where rcl
drops or bends a value without a word (lists of maps, repeated keys, empty lists, `null` as
text, some dotted keys), this reader refuses and names the line.
"""

from __future__ import annotations

import os
import stat
from dataclasses import dataclass, field
from pathlib import Path
from typing import NoReturn

from teleop_eval.core.errors import ConfigError
from teleop_eval.sources.parameter_node_name import applies_to, check_node_name
from teleop_eval.sources.parameter_scalar import (
    FALSE_WORDS,
    NULL_WORDS,
    TRUE_WORDS,
    resolve_scalar,
)
from teleop_eval.sources.parameter_text import to_yaml
from teleop_eval.sources.parameter_tree import (
    MAX_BYTES,
    Mapping,
    Node,
    Scalar,
    Sequence,
    config_error,
    read_documents,
    shown,
)

__all__ = ['ParameterValue', 'load_parameters', 'to_yaml']

ParameterValue = bool | int | float | str | list[bool] | list[int] | list[float] | list[str]

_KEY = 'ros__parameters'
_KIND = {bool: 'true/false', int: 'integer', float: 'number', str: 'text'}


@dataclass(slots=True)
class _Section:
    """Parameters of one node name, with the line where each stands."""

    values: dict[str, ParameterValue] = field(default_factory=dict)
    lines: dict[str, int] = field(default_factory=dict)


def load_parameters(
    path_or_text: str | os.PathLike[str], *, node_name: str = 'teleop_eval',
    namespace: str = '/',
) -> dict[str, ParameterValue]:
    """
    Read the parameters that a parameter file gives to one node.

    Parameters
    ----------
    path_or_text
        A path; or the file's text, recognised by a line break in it.
    node_name, namespace
        The node. Sections apply by full name, relative name or wildcard (`/*` one level, `/**`
        any number); a later section of the file overrides an earlier one.

    Returns
    -------
    dict of str to ParameterValue
        Dotted names; empty when the file holds no section at all.

    Raises
    ------
    ConfigError
        The file cannot be read, rcl would refuse it, rcl would lose a value of it, or it has
        sections and none is for this node.

    """
    content, source = _read(path_or_text)
    sections: dict[str, _Section] = {}
    for document in read_documents(content, source=source):
        _read_nodes(document, '', sections, source)
    full_name = f'{namespace.rstrip("/")}/{node_name}'
    result: dict[str, ParameterValue] = {}
    found = False
    for name, section in sections.items():
        if applies_to(name, full_name):
            found = True
            result.update(section.values)
    if sections and not found:
        raise ConfigError(
            f'{source}: no section is for the node {full_name} (the file has '
            f'{", ".join(shown(name) for name in list(sections)[:4])}), so ROS would ignore all '
            "of it; key the parameters with '/**:'.")
    return result


def _read(path_or_text: str | os.PathLike[str]) -> tuple[bytes, str]:
    """Return the bytes and what to call them."""
    if isinstance(path_or_text, str) and '\n' in path_or_text:
        try:
            return path_or_text.encode(), 'parameter text'
        except UnicodeEncodeError as error:
            raise ConfigError(
                f'parameter text: not valid Unicode ({error}); save it as UTF-8.') from error
    path = Path(path_or_text)
    try:
        if not stat.S_ISREG(path.stat().st_mode):
            raise ConfigError(f'{path}: not a regular file; name a YAML parameter file.')
        with path.open('rb') as file:
            return file.read(MAX_BYTES + 1), str(path)
    except (OSError, ValueError) as error:
        reason = getattr(error, 'strerror', None) or str(error)
        raise ConfigError(
            f'{path}: cannot be read ({reason}); check the name and its permissions.') from error


def _read_nodes(
    mapping: Mapping, prefix: str, sections: dict[str, _Section], source: str,
) -> None:
    """Walk the levels above `ros__parameters`, which spell node names."""
    closed_by = 0
    for key, value in mapping.pairs:
        if closed_by:
            raise config_error(
                source, key.line, f"{shown(key.text)} follows 'ros__parameters' of line "
                f'{closed_by} inside the same section, where ROS loses track of the name; '
                'move it to a section of its own')
        if key.text.startswith(_KEY):
            parameters = _parameters_map(key, value, prefix, source)
            check_node_name(prefix, source=source, line=key.line)
            section = sections.setdefault(prefix, _Section())
            _read_parameters(parameters, '', section, source)
            closed_by = key.line
            continue
        if not isinstance(value, Mapping):
            raise config_error(
                source, value.line, f'the key {shown(key.text)} stands above any '
                "'ros__parameters' and has a value; put it below '/**:', then 'ros__parameters:'")
        if prefix and '/' in key.text:
            raise config_error(
                source, key.line, f'the node name {shown(key.text)} has a slash and stands below '
                f'{shown(prefix)}, where ROS loses track of it; write the full name at the left '
                'margin')
        joined = key.text if not prefix else f'{prefix.removesuffix("/")}/{key.text}'
        _read_nodes(value, joined, sections, source)


def _parameters_map(key: Scalar, value: Node, prefix: str, source: str) -> Mapping:
    """Return what `ros__parameters` holds."""
    if key.text != _KEY:
        raise config_error(
            source, key.line, f'{shown(key.text)} is read by ROS as ros__parameters; write '
            'ros__parameters')
    if not prefix:
        raise config_error(
            source, key.line, "'ros__parameters' stands without a node name above it; put "
            "'/**:' above and indent it")
    if not isinstance(value, Mapping):
        raise config_error(
            source, value.line, "'ros__parameters' holds no map of parameters; write them below "
            'it, indented, or remove the section')
    return value


def _read_parameters(mapping: Mapping, prefix: str, section: _Section, source: str) -> None:
    """Flatten the levels below `ros__parameters` into dotted names."""
    for key, value in mapping.pairs:
        name = f'{prefix}.{key.text}' if prefix else key.text
        known = section.lines.get(name)
        if isinstance(value, Mapping):
            _check_group(key, value, name=name, nested=bool(prefix), source=source)
            if known is not None:
                raise config_error(
                    source, key.line, f'{shown(name)} opens a map but has a value in line '
                    f'{known}, which ROS would drop; rename one of them')
            _read_parameters(value, name, section, source)
            continue
        if known is not None:
            raise config_error(
                source, key.line, f'{shown(name)} is given again (first in line {known}), and ROS '
                'would keep one of the two; remove one')
        section.lines[name] = key.line
        if isinstance(value, Sequence):
            section.values[name] = _array(value, name, source)
        else:
            section.values[name] = _value(value, name, source)


def _check_group(
    key: Scalar, value: Mapping, *, name: str, nested: bool, source: str,
) -> None:
    if not value.pairs:
        raise config_error(
            source, value.line, f'{shown(name)} is an empty map, after which ROS misreads the '
            'rest; remove it')
    if nested and '.' in key.text:
        raise config_error(
            source, key.line, f'the dotted key {shown(key.text)} opens a map inside another map, '
            'where ROS misnames what follows; write one level of map for each dot')


def _value(scalar: Scalar, name: str, source: str) -> bool | int | float | str:
    """Type a scalar; an empty one is an error to rcl, null a loss to the user."""
    if not scalar.text and not scalar.quoted:
        raise config_error(
            source, scalar.line, f"{shown(name)} has no value; give one ('' for empty text) or "
            'remove the line')
    if scalar.literal:
        return scalar.text
    if scalar.text in NULL_WORDS:
        raise config_error(
            source, scalar.line, f'{shown(name)} is {scalar.text}, which ROS reads as the text '
            f"{scalar.text!r} and not as 'none'; remove the line, or put the text into quotes")
    return resolve_scalar(scalar.text)


def _array(sequence: Sequence, name: str, source: str) -> ParameterValue:
    """Type a sequence: scalars of one type, at least one."""
    if not sequence.items:
        raise config_error(
            source, sequence.line, f'{shown(name)} is an empty list, which ROS drops because it '
            'has no type; remove the line')
    values: list[bool | int | float | str] = []
    for index, item in enumerate(sequence.items):
        if isinstance(item, Mapping):
            raise config_error(
                source, item.line, f'{shown(name)} is a list of maps (entry {index + 1}), which '
                'ROS folds into one without a word; use named maps (one key for each entry) or '
                'parallel arrays')
        if isinstance(item, Sequence):
            raise config_error(
                source, item.line, f'{shown(name)} is a list of lists (entry {index + 1}), which '
                'ROS cannot hold; use one flat list')
        value = _value(item, name, source)
        if values and type(value) is not type(values[0]):
            _refuse_mixture(item, values[0], value, name=name, source=source)
        values.append(value)
    return values  # type: ignore[return-value]


def _refuse_mixture(
    item: Scalar, first: object, value: object, *, name: str, source: str,
) -> NoReturn:
    """Name the two types; the remedy depends on what they are."""
    kinds = {type(first), type(value)}
    if kinds == {int, float}:
        remedy = 'write every number with a decimal point, as in [1.0, 2.5]'
    elif bool in kinds and not item.quoted:
        words = ', '.join(sorted(word for word in TRUE_WORDS | FALSE_WORDS if word.islower()))
        remedy = f'put text into quotes ({words} are true/false when unquoted)'
    else:
        remedy = 'put every text into quotes and no number'
    raise config_error(
        source, item.line, f'the list {shown(name)} mixes {_KIND[type(first)]} ({shown(first)}) '
        f'and {_KIND[type(value)]} ({shown(value)}), which ROS refuses; {remedy}')
