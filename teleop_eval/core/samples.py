# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Typed samples: what every source hands to the evaluator, live or from a recording.

A sample carries its header stamp in integer nanoseconds, 0 where the message has none. The
receive time (live) or log time (recording) travels beside the sample, never inside it, so
that the two clocks are never confused.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, slots=True)
class PoseSample:
    """
    Pose or point of one frame in another.

    Position (3,) in metres; orientation (4,) quaternion x, y, z, w, or None for a point.
    """

    stamp_ns: int
    position: np.ndarray
    orientation: np.ndarray | None
    frame_id: str


@dataclass(frozen=True, slots=True)
class JointSample:
    """
    Joint positions by name, (n,) in the message's own units.

    `enabled` (n,) of bool is None where the message carries no such field.
    """

    stamp_ns: int
    names: tuple[str, ...]
    positions: np.ndarray
    enabled: np.ndarray | None


@dataclass(frozen=True, slots=True)
class TrajectorySample:
    """
    Joint trajectory: positions (k, n) at `offsets_ns` (k,) after the stamp.

    A zero stamp means that the offsets count from the receive time.
    """

    stamp_ns: int
    names: tuple[str, ...]
    offsets_ns: np.ndarray
    positions: np.ndarray


@dataclass(frozen=True, slots=True)
class TwistSample:
    """
    Velocity in the axes of one frame.

    Linear (3,) in m/s, angular (3,) in rad/s.
    """

    stamp_ns: int
    linear: np.ndarray
    angular: np.ndarray
    frame_id: str


@dataclass(frozen=True, slots=True)
class JoySample:
    """State of a joystick: axes (n,) from -1 to 1, buttons (m,) of int."""

    stamp_ns: int
    axes: np.ndarray
    buttons: np.ndarray


@dataclass(frozen=True, slots=True)
class ArraySample:
    """Bare numbers (n,) in the configured joint order; the message has no stamp."""

    values: np.ndarray
    stamp_ns: int = 0


@dataclass(frozen=True, slots=True)
class BoolSample:
    """State such as clutch engaged; the message has no stamp."""

    value: bool
    stamp_ns: int = 0


@dataclass(frozen=True, slots=True)
class TextSample:
    """Label or document, such as the active mapping or a robot description."""

    text: str
    stamp_ns: int = 0


Sample = (PoseSample | JointSample | TrajectorySample | TwistSample | JoySample | ArraySample
          | BoolSample | TextSample)
