# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Read plain CDR, the encoding of ROS 2 messages, without trusting the bytes.

Every length is checked against what is left of the message before anything is built from it,
so that a hostile count costs neither memory nor time.

References
----------
OMG, "DDS Interoperability Wire Protocol" 2.5, section 10 (encapsulation identifiers); OMG,
"Common Object Request Broker Architecture", part 2, section 9.3 (CDR alignment).

"""

from __future__ import annotations

import struct
from collections.abc import Callable
from dataclasses import dataclass
from typing import Generic, TypeVar

import numpy as np

from teleop_eval.core.errors import InputError

ORIGIN = 4  # the encapsulation header; alignment counts from its end
STAMP_AT = 4  # of a message that begins with a std_msgs Header
AFTER_STAMP = 12
NS_PER_S = 1_000_000_000

_ORDERS = {b'\x00\x00': '>', b'\x00\x01': '<'}
_UNSIGNED = {order: struct.Struct(order + 'I') for order in '<>'}
_STAMP = {order: struct.Struct(order + 'iI') for order in '<>'}


def byte_order(data: bytes, what: str) -> str:
    """
    Return '<' or '>' from the encapsulation header.

    Raises
    ------
    InputError
        No header, or not plain CDR (parameter lists and CDR version 2 are not read).

    """
    order = _ORDERS.get(data[:2])
    if order is None or len(data) < ORIGIN:
        raise InputError(
            f'a {what} message of {len(data)} bytes begins with {data[:4].hex(" ") or "nothing"} '
            'where plain CDR (00 00 or 00 01, two more bytes) is read; record or publish it with '
            'the usual ROS 2 serialization.')
    return order


@dataclass(slots=True)
class TextsCache:
    """The strings that one field held in the last message, and the bytes they came from."""

    section: bytes = b''
    order: str = ''
    texts: tuple[str, ...] = ()


class CdrReader:
    """
    A position in one message.

    Parameters
    ----------
    data
        The message with its encapsulation header.
    what
        The message type, for errors.

    Raises
    ------
    InputError
        From the constructor for another encoding, from each method where the message ends too
        early or holds what its type cannot.

    """

    __slots__ = ('_data', '_what', 'order', 'position')

    def __init__(self, data: bytes, what: str) -> None:
        self.order = byte_order(data, what)
        self._data = data
        self._what = what
        self.position = ORIGIN

    def align(self, size: int) -> None:
        """Skip the padding before a primitive of `size` bytes."""
        self.position += -(self.position - ORIGIN) % size

    def require(self, size: int) -> None:
        """Refuse when fewer than `size` bytes are left."""
        if size > len(self._data) - self.position:
            raise truncated(self._data, self._what)

    def skip(self, size: int, alignment: int) -> None:
        """Step over `size` bytes of primitives."""
        self.align(alignment)
        self.require(size)
        self.position += size

    def unsigned(self) -> int:
        """Read a uint32."""
        self.align(4)
        self.require(4)
        value: int = _UNSIGNED[self.order].unpack_from(self._data, self.position)[0]
        self.position += 4
        return value

    def count(self, smallest: int) -> int:
        """Read the length of a sequence whose elements take at least `smallest` bytes each."""
        value = self.unsigned()
        self.require(value * smallest)
        return value

    def stamp_ns(self) -> int:
        """Read builtin_interfaces Time or Duration as nanoseconds."""
        self.align(4)
        self.require(8)
        seconds, nanoseconds = _STAMP[self.order].unpack_from(self._data, self.position)
        self.position += 8
        return int(seconds) * NS_PER_S + int(nanoseconds)

    def skip_text(self) -> None:
        """Step over a string."""
        size = self.unsigned()
        self.require(size)
        self.position += size

    def text(self) -> str:
        """Read a string; its closing NUL is not part of it."""
        size = self.unsigned()
        self.require(size)
        raw = self._data[self.position:self.position + size]
        self.position += size
        try:
            return raw.removesuffix(b'\x00').decode()
        except UnicodeDecodeError as error:
            raise InputError(
                f'a {self._what} message holds text that is not UTF-8 ({raw[:20]!r}); check that '
                'the publisher and the recording have the same message definition.') from error

    def texts(self, count: int | None = None) -> tuple[str, ...]:
        """Read a sequence of strings, or `count` of them."""
        if count is None:
            count = self.count(4)
        return tuple(self.text() for _ in range(count))

    def repeated_texts(self, cache: TextsCache, count: int | None = None) -> tuple[str, ...]:
        """Read as `texts` does, but compare with the last time first."""
        self.align(4)
        start = self.position
        size = len(cache.section)
        if size and self._data[start:start + size] == cache.section \
                and self.order == cache.order:
            self.position += size
            return cache.texts
        cache.texts = self.texts(count)
        cache.section = self._data[start:self.position]
        cache.order = self.order
        return cache.texts

    def numbers(self, code: str, count: int) -> np.ndarray:
        """
        Read primitives of one type.

        Parameters
        ----------
        code
            numpy type code without byte order: 'f8', 'f4', 'u1'.
        count
            How many; with 0 there is no padding either.

        Returns
        -------
        numpy.ndarray
            (count,) read-only view of the message in its byte order.

        """
        if count == 0:
            return np.empty(0, code)
        size = int(code[1])
        self.align(size)
        self.require(count * size)
        values = np.frombuffer(self._data, self.order + code, count, self.position)
        self.position += count * size
        return values


def truncated(data: bytes, what: str) -> InputError:
    """Say that a message is shorter than its own counts demand."""
    return InputError(
        f'a {what} message of {len(data)} bytes ends before its content does; check that the '
        'recording is whole and that publisher and recording have the same message definition.')


Content = TypeVar('Content')


@dataclass(frozen=True, slots=True)
class Layout(Generic[Content]):
    """
    What the texts at the front of a message say, and where the rest begins.

    `kind` and `section` are the bytes from which `content` was read; `values_at` is the first
    byte after the padding that follows, `front` reads the stamp and the count before it.
    """

    kind: bytes
    section: bytes
    end: int
    content: Content
    count_at: int
    values_at: int
    number: np.dtype
    front: struct.Struct
    native: bool


class LayoutCache(Generic[Content]):
    """
    Find the texts of a message again by comparing bytes instead of decoding them.

    Names and frames repeat from message to message, so one comparison replaces all decoding.
    Several layouts are kept for publishers that share a topic.

    Parameters
    ----------
    parse
        Reads the texts from a reader that stands after the header's stamp.
    counted
        Whether a uint32 count stands between the texts and the float64 values.
    what
        The message type, for errors.

    """

    _KEPT = 8

    def __init__(
        self, parse: Callable[[CdrReader], Content], *, counted: bool, what: str,
    ) -> None:
        self._parse = parse
        self._counted = counted
        self._what = what
        self._layouts: list[Layout[Content]] = []

    def find(self, data: bytes, last: Layout[Content] | None) -> Layout[Content]:
        """Return the layout of `data`, which is `last` in nearly every call."""
        if last is not None and data[AFTER_STAMP:last.end] == last.section \
                and data[:2] == last.kind:
            return last
        for layout in self._layouts:
            if data[AFTER_STAMP:layout.end] == layout.section and data[:2] == layout.kind:
                return layout
        layout = self._read(data)
        self._layouts = [layout, *self._layouts[:self._KEPT - 1]]
        return layout

    def _read(self, data: bytes) -> Layout[Content]:
        reader = CdrReader(data, self._what)
        reader.stamp_ns()
        content = self._parse(reader)
        end = reader.position
        reader.align(4)
        count_at = reader.position
        if self._counted:
            reader.skip(4, 4)
        reader.align(8)
        middle = f'{count_at - AFTER_STAMP}xI' if self._counted else ''
        number = np.dtype(reader.order + 'f8')
        return Layout(
            kind=data[:2], section=data[AFTER_STAMP:end], end=end, content=content,
            count_at=count_at, values_at=reader.position, number=number,
            front=struct.Struct(f'{reader.order}{STAMP_AT}xiI{middle}'), native=number.isnative)
