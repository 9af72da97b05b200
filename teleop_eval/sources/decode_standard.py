# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Hand-written readers of the standard messages.

They read what the evaluator uses and leave the rest of a message alone. Arrays in the samples
are read-only views of the message's immutable bytes where those are in the machine's byte
order, else copies; they never change afterwards. Values are passed on as they are: NaN, and
quaternions that are not of unit norm.
"""

from __future__ import annotations

import struct
from collections.abc import Callable

import numpy as np

from teleop_eval.core.errors import InputError
from teleop_eval.core.samples import (
    ArraySample,
    BoolSample,
    JointSample,
    JoySample,
    PoseSample,
    TextSample,
    TrajectorySample,
    TwistSample,
)
from teleop_eval.sources.cdr import NS_PER_S, CdrReader, Layout, LayoutCache, truncated

# Positions, velocities, accelerations, effort: a count each; then a Duration.
_SMALLEST_POINT = 4 * 4 + 8


def pose_reader(
    what: str, *, child_frame: bool = False, oriented: bool = True,
) -> Callable[[bytes], PoseSample]:
    """
    Make a reader of a message that begins with a header and a pose, transform or point.

    Parameters
    ----------
    what
        The message type, for errors.
    child_frame
        Whether a child_frame_id stands between header and pose (TransformStamped, Odometry).
    oriented
        Whether an orientation follows the position.

    Returns
    -------
    callable
        Message bytes to PoseSample; raises InputError.

    """
    def frame(reader: CdrReader) -> str:
        name = reader.text()
        if child_frame:
            reader.skip_text()
        return name

    cache = LayoutCache(frame, counted=False, what=what)
    last: Layout[str] | None = None
    size = 7 if oriented else 3

    def decode(data: bytes) -> PoseSample:
        nonlocal last
        data = data if type(data) is bytes else bytes(data)
        last = layout = cache.find(data, last)
        seconds, nanoseconds = layout.front.unpack_from(data)
        if len(data) < layout.values_at + size * 8:
            raise truncated(data, what)
        values = np.frombuffer(data, layout.number, size, layout.values_at)
        if not layout.native:
            values = values.astype(np.float64)
        return PoseSample(
            seconds * NS_PER_S + nanoseconds, values[:3], values[3:] if oriented else None,
            layout.content)

    return decode


def twist_reader(what: str) -> Callable[[bytes], TwistSample]:
    """Make a reader of geometry_msgs TwistStamped; it raises InputError."""
    cache = LayoutCache(CdrReader.text, counted=False, what=what)
    last: Layout[str] | None = None

    def decode(data: bytes) -> TwistSample:
        nonlocal last
        data = data if type(data) is bytes else bytes(data)
        last = layout = cache.find(data, last)
        seconds, nanoseconds = layout.front.unpack_from(data)
        if len(data) < layout.values_at + 6 * 8:
            raise truncated(data, what)
        values = np.frombuffer(data, layout.number, 6, layout.values_at)
        if not layout.native:
            values = values.astype(np.float64)
        return TwistSample(
            seconds * NS_PER_S + nanoseconds, values[:3], values[3:], layout.content)

    return decode


def joy_reader(what: str) -> Callable[[bytes], JoySample]:
    """Make a reader of sensor_msgs Joy; it raises InputError."""
    def decode(data: bytes) -> JoySample:
        reader = CdrReader(bytes(data), what)
        stamp_ns = reader.stamp_ns()
        reader.skip_text()
        axes = reader.numbers('f4', reader.count(4))
        buttons = reader.numbers('i4', reader.count(4))
        return JoySample(stamp_ns, axes.astype(np.float64), buttons.astype(np.int64))

    return decode


def joint_state_reader(what: str) -> Callable[[bytes], JointSample]:
    """Make a reader of sensor_msgs JointState; it raises InputError."""
    def names(reader: CdrReader) -> tuple[str, ...]:
        reader.skip_text()
        return reader.texts()

    cache = LayoutCache(names, counted=True, what=what)
    last: Layout[tuple[str, ...]] | None = None

    def decode(data: bytes) -> JointSample:
        nonlocal last
        data = data if type(data) is bytes else bytes(data)
        last = layout = cache.find(data, last)
        try:
            seconds, nanoseconds, count = layout.front.unpack_from(data)
            if count == 0 or count != len(layout.content):
                raise wrong_length(count, len(layout.content), what)
            positions = np.frombuffer(data, layout.number, count, layout.values_at)
        except (struct.error, ValueError) as error:
            raise truncated(data, what) from error
        if not layout.native:
            positions = positions.astype(np.float64)
        return JointSample(
            seconds * NS_PER_S + nanoseconds, layout.content, positions, None)

    return decode


def wrong_length(positions: int, names: int, what: str) -> InputError:
    """Say that positions are missing or do not go with the names."""
    if positions == 0:
        return InputError(
            f'a {what} message with {names} joint names carries no positions; choose a topic '
            'whose publisher fills position[].')
    return InputError(
        f'a {what} message has {positions} positions for {names} joint names; both must be of '
        'one length, so correct its publisher.')


def trajectory_reader(what: str) -> Callable[[bytes], TrajectorySample]:
    """Make a reader of trajectory_msgs JointTrajectory; it raises InputError."""
    def decode(data: bytes) -> TrajectorySample:
        reader = CdrReader(bytes(data), what)
        stamp_ns = reader.stamp_ns()
        reader.skip_text()
        names = reader.texts()
        count = reader.count(_SMALLEST_POINT)
        offsets = np.empty(count, np.int64)
        rows: list[np.ndarray] = []
        for index in range(count):
            width = reader.count(8)
            if width != len(names) or width == 0:
                raise wrong_length(width, len(names), what)
            rows.append(reader.numbers('f8', width))
            for _ in range(3):
                length = reader.count(8)
                if length:
                    reader.skip(8 * length, 8)
            offsets[index] = reader.stamp_ns()
        positions = np.array(rows, np.float64).reshape(count, len(names))
        return TrajectorySample(stamp_ns, names, offsets, positions)

    return decode


def array_reader(what: str) -> Callable[[bytes], ArraySample]:
    """Make a reader of std_msgs Float64MultiArray; it raises InputError."""
    def decode(data: bytes) -> ArraySample:
        reader = CdrReader(bytes(data), what)
        for _ in range(reader.count(12)):
            reader.skip_text()
            reader.skip(8, 4)
        offset = reader.unsigned()
        if offset:
            raise InputError(
                f'a {what} message has layout.data_offset {offset}; only arrays whose data begin '
                'at once, in the configured joint order, are read.')
        values = reader.numbers('f8', reader.count(8))
        return ArraySample(values.astype(np.float64, copy=False))

    return decode


def bool_reader(what: str) -> Callable[[bytes], BoolSample]:
    """Make a reader of std_msgs Bool; it raises InputError."""
    def decode(data: bytes) -> BoolSample:
        value = int(CdrReader(bytes(data), what).numbers('u1', 1)[0])
        if value > 1:
            raise InputError(
                f'a {what} message holds the byte {value}, which is neither true nor false; '
                'check its publisher.')
        return BoolSample(value == 1)

    return decode


def text_reader(what: str) -> Callable[[bytes], TextSample]:
    """Make a reader of std_msgs String; it raises InputError."""
    def decode(data: bytes) -> TextSample:
        return TextSample(CdrReader(bytes(data), what).text())

    return decode
