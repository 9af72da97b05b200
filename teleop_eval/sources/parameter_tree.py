# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Read the YAML of a parameter file into nodes that keep line numbers and quoting.

Built on the parser's events, as rcl is: no schema, no recursion, no aliases (so no alias
bombs), bounded depth and size.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

import yaml

from teleop_eval.core.errors import ConfigError

MAX_BYTES = 512 * 1024
MAX_DEPTH = 64

# libyaml where PyYAML was built with it: the same parser that rcl uses, and faster.
_LOADER = getattr(yaml, 'CBaseLoader', yaml.BaseLoader)
_TAG = 'tag:yaml.org,2002:'
_STRING_TAG = _TAG + 'str'


@dataclass(frozen=True, slots=True)
class Scalar:
    """One scalar; `literal` when quoting or `!!str` makes it a string whatever it says."""

    text: str
    literal: bool
    quoted: bool
    line: int


@dataclass(frozen=True, slots=True)
class Sequence:
    """A YAML sequence."""

    line: int
    items: list[Node] = field(default_factory=list)


@dataclass(frozen=True, slots=True)
class Mapping:
    """A YAML mapping as pairs in file order; equal keys are kept, rcl merges them."""

    line: int
    pairs: list[tuple[Scalar, Node]] = field(default_factory=list)


Node = Scalar | Sequence | Mapping


def config_error(source: str, line: int, problem: str) -> ConfigError:
    """Say what is wrong where; `problem` is a clause that ends with the remedy."""
    return ConfigError(f'{source}, line {line}: {problem}.')


def shown(value: object) -> str:
    """Quote a value for a message, cut to a readable length."""
    text = repr(value)
    return text if len(text) <= 60 else f'{text[:56]} ...'


def read_documents(content: bytes, *, source: str) -> list[Mapping]:
    """
    Parse a parameter file into one mapping for each YAML document.

    Parameters
    ----------
    content
        The file's bytes: UTF-8, or UTF-16 with a byte order mark.
    source
        What to call the file in an error.

    Returns
    -------
    list of Mapping
        Empty for a file of nothing but comments.

    Raises
    ------
    ConfigError
        Not YAML, too large or too deep, an alias, a key that is no plain name, a tag that rcl
        ignores, or a document that is not a mapping.

    """
    if len(content) > MAX_BYTES:
        raise ConfigError(
            f'{source}: larger than {MAX_BYTES // 1024} KiB, which no parameter file of this '
            'package is; name the right file.')
    try:
        return _build(yaml.parse(content, Loader=_LOADER), source)
    except yaml.YAMLError as error:
        raise _syntax_error(error, source) from error
    except UnicodeError as error:
        raise ConfigError(f'{source}: not UTF-8 text ({error}); save it as UTF-8.') from error


def _syntax_error(error: yaml.YAMLError, source: str) -> ConfigError:
    """Put the parser's own message into one line."""
    mark = getattr(error, 'problem_mark', None)
    problem = getattr(error, 'problem', None) or ' '.join(str(error).split())
    if mark is None:
        return ConfigError(
            f'{source}: not readable as YAML ({problem}); save it as plain UTF-8 text.')
    return config_error(
        source, mark.line + 1,
        f'not valid YAML at column {mark.column + 1} ({problem}); correct the indentation '
        '(spaces only), brackets or quotes here or just above')


def _build(events: Iterator[yaml.Event], source: str) -> list[Mapping]:
    """Fold the parser's events into trees."""
    documents: list[Mapping] = []
    stack: list[_Open] = []
    for event in events:
        line = event.start_mark.line + 1
        if isinstance(event, yaml.ScalarEvent):
            in_flow = bool(stack) and stack[-1].flow
            _place(_scalar(event, in_flow, source), stack, source)
        elif isinstance(event, yaml.CollectionStartEvent):
            is_mapping = isinstance(event, yaml.MappingStartEvent)
            _check_collection(event, is_mapping, source)
            if len(stack) == MAX_DEPTH:
                raise config_error(
                    source, line, f'nested deeper than {MAX_DEPTH} levels; use fewer')
            node: Mapping | Sequence = Mapping(line) if is_mapping else Sequence(line)
            if stack:
                _place(node, stack, source)
            elif isinstance(node, Mapping):
                documents.append(node)
            else:
                raise _not_a_mapping(source, line, 'a list')
            stack.append(_Open(node, bool(event.flow_style)))
        elif isinstance(event, yaml.CollectionEndEvent):
            stack.pop()
        elif isinstance(event, yaml.AliasEvent):
            raise config_error(
                source, line, f'the alias *{event.anchor[:40]} is not supported by ROS parameter '
                'files; write the value out')
        elif isinstance(event, yaml.DocumentStartEvent) and event.version not in (None, (1, 1)):
            raise config_error(
                source, line, '%YAML names a version that not every ROS release reads; remove '
                'the directive')
    return documents


@dataclass(slots=True)
class _Open:
    """A collection whose end has not come yet."""

    node: Mapping | Sequence
    flow: bool
    key: Scalar | None = None


def _place(node: Node, stack: list[_Open], source: str) -> None:
    """Put a node into the innermost open collection."""
    if not stack:
        raise _not_a_mapping(source, node.line, 'a single value')
    top = stack[-1]
    if isinstance(top.node, Sequence):
        top.node.items.append(node)
    elif top.key is not None:
        top.node.pairs.append((top.key, node))
        top.key = None
    elif not isinstance(node, Scalar):
        raise config_error(source, node.line, 'a list or map cannot be a key; use a name')
    elif not node.text:
        raise config_error(source, node.line, 'a key is empty; give the parameter a name')
    else:
        top.key = node


def _scalar(event: yaml.ScalarEvent, in_flow: bool, source: str) -> Scalar:
    """Take over a scalar, refusing what rcl would read as something else."""
    line = event.start_mark.line + 1
    if event.tag not in (None, _STRING_TAG):
        raise _ignored_tag(source, line, event.tag)
    if '\0' in event.value:
        raise config_error(
            source, line, f'{shown(event.value)} holds a NUL character, where ROS cuts text off; '
            'remove it')
    quoted = event.style in ("'", '"')
    if in_flow and event.style in (None, '') and not _is_portable_in_flow(event.value):
        raise config_error(
            source, line, f'{shown(event.value)} stands unquoted inside [ ] or {{ }} with a colon '
            'or question mark, which not every ROS release reads; put it into quotes')
    return Scalar(event.value, quoted or event.tag is not None, quoted, line)


def _is_portable_in_flow(text: str) -> bool:
    """Whether old and new libyaml agree; rcl's wheels carry 0.1.7, where `[a:b]` is an error."""
    return ':' not in text and '?' not in text


def _check_collection(event: yaml.CollectionStartEvent, is_mapping: bool, source: str) -> None:
    """Refuse a tag that asks for anything but a plain map or list."""
    if event.tag not in (None, _TAG + ('map' if is_mapping else 'seq')):
        raise _ignored_tag(source, event.start_mark.line + 1, event.tag)


def _ignored_tag(source: str, line: int, tag: str) -> ConfigError:
    shown = tag.replace(_TAG, '!!')
    return config_error(
        source, line, f'the tag {shown} is ignored by ROS, so the value would not be what the '
        'tag says; remove the tag (only !!str is understood)')


def _not_a_mapping(source: str, line: int, found: str) -> ConfigError:
    return config_error(
        source, line, f'the file holds {found} where a parameter file begins with a map; begin '
        "it with '/**:', then 'ros__parameters:'")
