# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Bytes of the standard messages that a session's summary bag holds.

The messages are few and simple, so they are packed here by hand: the bag can then be
written with no ROS installation and no message library, and the live node, which has one,
writes the very same bytes.

References
----------
Object Management Group, "Common Object Request Broker Architecture", version 3.3, part 2,
section 9.3 (CDR transfer syntax: each number aligned to its own size, strings with length
and closing zero); "DDS interoperability wire protocol", version 2.3, section 10.2 (the four
bytes in front, 0x0001 for little-endian CDR).

"""

from __future__ import annotations

import re
import struct
import zlib
from collections.abc import Sequence

from teleop_eval.core.results import StatusLine

FLOAT64 = 'std_msgs/msg/Float64'
STRING = 'std_msgs/msg/String'
DIAGNOSTIC_ARRAY = 'diagnostic_msgs/msg/DiagnosticArray'

# Names as the node gives them; '~' stands for the node itself.
DIAGNOSTICS_TOPIC = '/diagnostics'
SUMMARY_TOPIC = '~/summary'
HARDWARE_ID = 'teleop_eval'

_LITTLE_ENDIAN_CDR = b'\x00\x01\x00\x00'
_NANOSECONDS = 1_000_000_000
# Leaves room for the rest of a topic, which may have 255 characters in all.
_LONGEST_TOKEN = 80


def clean_text(text: str) -> str:
    """
    Return text that UTF-8 can carry and that ends no string early.

    Names come from other people's messages: a zero character would end a CDR string, a lone
    surrogate cannot be encoded.
    """
    shown = text.encode('utf-8', 'backslashreplace').decode('utf-8')
    return shown.replace('\x00', '\\x00')


def metric_topic(arm: str, metric: str) -> str:
    """
    Return the private topic of one metric, '~/ARM/METRIC'.

    A dot, which parts a metric from a joint's name, becomes a slash. Any other character
    that ROS forbids in a topic becomes an underscore; such a name gets a check sum of the
    original, so that two joints never share a topic.
    """
    return f'~/{_token(arm)}/' + '/'.join(
        _token(part) for part in metric.split('.', 1))


def plain_name(topic: str) -> str:
    """Return a topic's full name for a node that is called /teleop_eval."""
    return f'/teleop_eval{topic[1:]}' if topic.startswith('~') else topic


def _token(name: str) -> str:
    """Return a name that is valid between two slashes of a topic."""
    token = re.sub(r'[^A-Za-z0-9_]|__+', '_', name)[:_LONGEST_TOKEN]
    if not token or token[0].isdigit() or token.endswith('_'):
        token = f'n_{token}'.rstrip('_')
    if token == name:
        return name
    check = zlib.crc32(name.encode('utf-8', 'backslashreplace')) & 0xffff
    return re.sub('__+', '_', f'{token}_{check:04x}')


def float64(value: float) -> bytes:
    """Return a std_msgs/msg/Float64."""
    return _LITTLE_ENDIAN_CDR + struct.pack('<d', value)


def string(text: str) -> bytes:
    """Return a std_msgs/msg/String."""
    body = bytearray()
    _add_string(body, text)
    return _LITTLE_ENDIAN_CDR + bytes(body)


def diagnostic_array(stamp_ns: int, lines: Sequence[StatusLine], *,
                     prefix: str = 'teleop_eval') -> bytes:
    """
    Return a diagnostic_msgs/msg/DiagnosticArray.

    Parameters
    ----------
    stamp_ns
        Time of the header, nanoseconds.
    lines
        Statuses; each is named '<prefix>: <name>'.
    prefix
        The node's name.

    """
    seconds, nanoseconds = divmod(stamp_ns, _NANOSECONDS)
    body = bytearray(struct.pack('<iI', _int32(seconds), nanoseconds))
    _add_string(body, '')
    _add_count(body, len(lines))
    for line in lines:
        body.append(line.level)
        _add_string(body, f'{prefix}: {line.name}')
        _add_string(body, line.message)
        _add_string(body, HARDWARE_ID)
        _add_count(body, len(line.values))
        for key, value in line.values.items():
            _add_string(body, key)
            _add_string(body, value)
    return _LITTLE_ENDIAN_CDR + bytes(body)


def _int32(seconds: int) -> int:
    """Keep a time that the message's 32 bits cannot hold at their end."""
    return max(-2**31, min(2**31 - 1, seconds))


def _add_count(body: bytearray, count: int) -> None:
    body.extend(b'\x00' * (-len(body) % 4))
    body.extend(struct.pack('<I', count))


def _add_string(body: bytearray, text: str) -> None:
    data = clean_text(text).encode('utf-8') + b'\x00'
    _add_count(body, len(data))
    body.extend(data)
