# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Read joints from any message whose definition has name[] and position[].

The definition, which recordings carry, is parsed by rosbags; the bytes are then walked field
by field up to the last one needed, with every length checked. No code is generated from the
definition, since a recording may come from anywhere.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from rosbags.interfaces import Nodetype
from rosbags.typesys import Stores, get_types_from_idl, get_types_from_msg, get_typestore

from teleop_eval.core.errors import InputError
from teleop_eval.core.samples import JointSample
from teleop_eval.sources.cdr import CdrReader, TextsCache
from teleop_eval.sources.decode_standard import wrong_length

# A field as rosbags describes it: (node type, details).
Field = tuple[Any, Any]
Fields = list[tuple[str, Field]]

_SIZES = {
    'bool': 1, 'byte': 1, 'char': 1, 'int8': 1, 'uint8': 1, 'int16': 2, 'uint16': 2, 'int32': 4,
    'uint32': 4, 'float32': 4, 'int64': 8, 'uint64': 8, 'float64': 8,
}
_MAX_DEFINITION = 1024 * 1024
_MAX_DEPTH = 32
_TIME = 'builtin_interfaces/msg/Time'
_TITLE = re.compile(r'^={80}\n(MSG|IDL): (\S+)\n', re.MULTILINE)

Skip = tuple[Callable[[CdrReader], None], int]
Step = Callable[[CdrReader, dict[str, Any]], None]


def joint_message_reader(
    what: str, *, definition: str, definition_format: str, enabled_field: str,
) -> Callable[[bytes], JointSample]:
    """
    Make a reader of one message type from its definition.

    Parameters
    ----------
    what
        The type as 'pkg/msg/T'.
    definition, definition_format
        Its text with all types it uses, as a recording stores it, and 'ros2msg' or 'ros2idl'.
        Types of the standard packages may be missing from the text.
    enabled_field
        Name of a boolean array of the message that says which joints count, or ''.

    Returns
    -------
    callable
        Message bytes to JointSample with float64 positions, in the message's own units; the
        stamp is that of the field `header`, else 0. Raises InputError.

    Raises
    ------
    InputError
        The definition cannot be understood or has not the fields needed.

    """
    types = _parse(what, definition, definition_format)
    fields = dict(types[what])
    code = _position_code(what, fields)
    if enabled_field:
        _check_enabled(what, fields, enabled_field)
    steps = _Compiler(what, types, wanted=('name', 'position', enabled_field)).steps()

    def decode(data: bytes) -> JointSample:
        reader = CdrReader(bytes(data), what)
        found: dict[str, Any] = {'stamp': 0, 'enabled': None}
        for step in steps:
            step(reader, found)
        names, positions = found['name'], found['position']
        if len(positions) == 0 or len(positions) != len(names):
            raise wrong_length(len(positions), len(names), what)
        enabled = found[enabled_field] if enabled_field else None
        if enabled is not None:
            enabled = _booleans(enabled, len(names), what=what, field=enabled_field)
        if code == 'f4' or not positions.dtype.isnative:
            positions = positions.astype(np.float64)
        return JointSample(found['stamp'], names, positions, enabled)

    return decode


def _parse(what: str, definition: str, definition_format: str) -> dict[str, Fields]:
    """Return the fields of each type that the definition or a standard package defines."""
    if definition_format not in ('ros2msg', 'ros2idl'):
        raise InputError(
            f'the definition of {what} is in the format {definition_format!r}; ros2msg and '
            'ros2idl are read.')
    if len(definition) > _MAX_DEFINITION:
        raise InputError(
            f'the definition of {what} has {len(definition)} characters, which no message '
            'definition has; check the recording.')
    parsed: dict[str, Any] = {}
    try:
        # A recorder may join parts in both languages, each below a line of 80 '='.
        lead, *titled = _TITLE.split(definition)
        parts = [('IDL' if definition_format == 'ros2idl' else 'MSG', what, lead)]
        parts += zip(titled[::3], titled[1::3], titled[2::3], strict=True)
        for kind, name, text in parts:
            if kind == 'MSG' and (text.strip() or name != what or len(parts) == 1):
                parsed.update(get_types_from_msg(text, name))
            elif text.strip():
                parsed.update(get_types_from_idl(text))
    # The parser fails in many ways on text that is not a definition; all mean the same here.
    except Exception as error:
        reason = ' '.join(str(error).split())[:120] or type(error).__name__
        raise InputError(
            f'the definition of {what} that the recording carries cannot be understood '
            f'({reason}); record the topic anew.') from error
    if what not in parsed:
        raise InputError(
            f'the definition given for {what} defines {", ".join(sorted(parsed)[:5]) or "nothing"}'
            ' instead; check the recording.')
    standard = get_typestore(Stores.ROS2_HUMBLE).fielddefs
    return {name: list(fields) for name, (_, fields) in {**standard, **parsed}.items()}


def _element(field: Field | None) -> str:
    """Return the primitive's name of an array or sequence, else ''."""
    if field is None or field[0] not in (Nodetype.ARRAY, Nodetype.SEQUENCE):
        return ''
    kind, details = field[1][0]
    return str(details[0]) if kind == Nodetype.BASE else ''


def _position_code(what: str, fields: Mapping[str, Field]) -> str:
    """Check for name[] and position[] and return the numpy code of the latter."""
    code = {'float64': 'f8', 'float32': 'f4'}.get(_element(fields.get('position')), '')
    if _element(fields.get('name')) != 'string' or not code:
        raise InputError(
            f'messages of type {what} cannot be read as joints: that needs the fields name[] of '
            f'string and position[] of float32 or float64, and it has '
            f'{", ".join(list(fields)[:12]) or "none"}.')
    return code


def _check_enabled(what: str, fields: Mapping[str, Field], enabled_field: str) -> None:
    if _element(fields.get(enabled_field)) != 'bool':
        usable = [name for name, field in fields.items() if _element(field) == 'bool']
        raise InputError(
            f'{what} has no boolean array {enabled_field!r}, which enabled_field names; boolean '
            f'arrays of it: {", ".join(usable) or "none"}.')


def _booleans(raw: np.ndarray, count: int, *, what: str, field: str) -> np.ndarray:
    if len(raw) != count:
        raise InputError(
            f'a {what} message has {len(raw)} entries in {field}[] for {count} joint names; both '
            'must be of one length.')
    if np.any(raw > 1):
        raise InputError(
            f'a {what} message holds a byte in {field}[] that is neither true nor false; check '
            'that publisher and recording have the same message definition.')
    return raw.view(np.bool_)


class _Compiler:
    """Turn a definition into steps that walk a message up to the last field wanted."""

    def __init__(self, what: str, types: Mapping[str, Fields], *, wanted: tuple[str, ...]) -> None:
        self._what = what
        self._types = types
        self._wanted = wanted
        self._known: dict[str, Skip] = {}

    def steps(self) -> list[Step]:
        """Return one step for each field of the message."""
        fields = self._types[self._what]
        wanted = (*self._wanted, 'header')
        last = max(index for index, (name, _) in enumerate(fields) if name in wanted)
        return [self._top(name, field) for name, field in fields[:last + 1]]

    def _top(self, name: str, field: Field) -> Step:
        """Read a wanted field, skip any other; a header is skipped but for its stamp."""
        kind, details = field
        if name in self._wanted:
            return self._wanted_step(name, field)
        if name == 'header' and kind == Nodetype.NAME:
            return self._header(details)
        skip = self._skip(field, ())[0]
        return lambda reader, found: skip(reader)

    def _wanted_step(self, name: str, field: Field) -> Step:
        """Read an array or sequence of strings or primitives."""
        (_, (base, _)), size = field[1]
        fixed = size if field[0] == Nodetype.ARRAY else None
        if base == 'string':
            cache = TextsCache()

            def texts(reader: CdrReader, found: dict[str, Any]) -> None:
                found[name] = reader.repeated_texts(cache, fixed)

            return texts
        code = {'float64': 'f8', 'float32': 'f4'}.get(base, 'u1')
        width = _SIZES[base]

        def numbers(reader: CdrReader, found: dict[str, Any]) -> None:
            count = reader.count(width) if fixed is None else fixed
            found[name] = reader.numbers(code, count)

        return numbers

    def _header(self, type_name: str) -> Step:
        """Step over a header of any kind, keeping header.stamp where it has one."""
        parts: list[tuple[bool, Callable[[CdrReader], None]]] = []
        for name, field in self._fields(type_name):
            is_stamp = name == 'stamp' and field[0] == Nodetype.NAME and field[1] == _TIME
            parts.append((is_stamp, self._skip(field, (type_name,))[0]))

        def header(reader: CdrReader, found: dict[str, Any]) -> None:
            for is_stamp, skip in parts:
                if is_stamp:
                    found['stamp'] = reader.stamp_ns()
                else:
                    skip(reader)

        return header

    def _fields(self, type_name: str) -> Fields:
        fields = self._types.get(type_name)
        if fields is None:
            raise InputError(
                f'the definition of {self._what} uses {type_name} and does not define it; record '
                'the topic anew with its full definition.')
        # An empty message still takes one byte on the wire.
        return fields or [('', (Nodetype.BASE, ('uint8', 0)))]

    def _skip(self, field: Field, outer: tuple[str, ...]) -> Skip:
        """Return what steps over a field, and the fewest bytes it can take."""
        kind, details = field
        if kind == Nodetype.BASE:
            return self._skip_base(details[0])
        if kind == Nodetype.NAME:
            return self._skip_message(details, outer)
        element, size = details
        fixed = size if kind == Nodetype.ARRAY else None
        if fixed == 0:
            raise InputError(f'the definition of {self._what} has an array of length 0, '
                             'which cannot be read; record the topic without it.')
        width = _SIZES.get(element[1][0], 0) if element[0] == Nodetype.BASE else 0
        if width:
            def skip_numbers(reader: CdrReader) -> None:
                count = reader.count(width) if fixed is None else fixed
                if count:
                    reader.skip(count * width, width)

            return skip_numbers, 4 if fixed is None else fixed * width
        one, smallest = self._skip(element, outer)

        def skip_each(reader: CdrReader) -> None:
            count = reader.count(smallest) if fixed is None else fixed
            reader.require(count * smallest)
            for _ in range(count):
                one(reader)

        return skip_each, 4 if fixed is None else fixed * smallest

    def _skip_base(self, name: str) -> Skip:
        if name == 'string':
            return CdrReader.skip_text, 4
        if name not in _SIZES:
            raise InputError(
                f'the definition of {self._what} has a field of type {name} before the joints, '
                'which cannot be read.')
        size = _SIZES[name]
        return lambda reader: reader.skip(size, size), size

    def _skip_message(self, type_name: str, outer: tuple[str, ...]) -> Skip:
        if type_name in self._known:
            return self._known[type_name]
        if type_name in outer or len(outer) > _MAX_DEPTH:
            raise InputError(
                f'the definition of {self._what} nests {type_name} in itself or too deep; check '
                'the recording.')
        parts = [self._skip(field, (*outer, type_name)) for _, field in self._fields(type_name)]

        def skip_all(reader: CdrReader) -> None:
            for part, _ in parts:
                part(reader)

        self._known[type_name] = skip_all, sum(smallest for _, smallest in parts)
        return self._known[type_name]
