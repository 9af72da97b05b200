# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Messages of invented motion, serialized without ROS, for all benchmarks."""

from __future__ import annotations

import struct
from collections.abc import Iterator
from pathlib import Path

import numpy as np

from teleop_eval.resources import config_file

JOINTS = ('column_pan', 'shoulder_lift', 'elbow_bend', 'forearm_turn', 'wrist_bend',
          'wrist_swing')
CENTRE = np.array([0.1, 0.4, -0.9, 0.0, 0.3, 0.0])
DELAY_S = 0.08
START_NS = 1_700_000_000_000_000_000


class Motion:
    """Band-limited joint motion of 0.2 to 1.6 Hz."""

    def __init__(self) -> None:
        rng = np.random.default_rng(7)
        self._frequencies = np.arange(0.2, 1.7, 0.13)
        self._phases = rng.uniform(0, 2 * np.pi, (6, len(self._frequencies)))
        self._size = 0.12 / self._frequencies / len(self._frequencies) ** 0.5

    def at(self, t: np.ndarray) -> np.ndarray:
        """Return joint angles (n, 6) at times (n,)."""
        wave = np.sin(2 * np.pi * self._frequencies * t[:, None, None] + self._phases)
        return CENTRE + wave @ self._size


def joint_state(stamp_ns: int, names: bytes, positions: np.ndarray) -> bytes:
    """Return the CDR bytes of a JointState; `names` come from `name_section`."""
    head = struct.pack('<4xiI', stamp_ns // 10 ** 9, stamp_ns % 10 ** 9)
    head = b'\x00\x01\x00\x00' + head[4:] + struct.pack('<I', 1) + b'\x00\x00\x00\x00' + names
    head += b'\x00' * (-(len(head) - 4) % 4)
    head += struct.pack('<I', len(positions))
    head += b'\x00' * (-(len(head) - 4) % 8)
    return head + positions.astype('<f8').tobytes() + struct.pack('<II', 0, 0)


def name_section(names: tuple[str, ...]) -> bytes:
    """Return the serialized sequence of names, aligned to four bytes at its start."""
    out = struct.pack('<I', len(names))
    for name in names:
        text = name.encode() + b'\x00'
        out += b'\x00' * (-len(out) % 4) + struct.pack('<I', len(text)) + text
    return out


def pose(stamp_ns: int, position: np.ndarray) -> bytes:
    """Return the CDR bytes of a PoseStamped without turn, frame 'op'."""
    head = b'\x00\x01\x00\x00' + struct.pack(
        '<iI', stamp_ns // 10 ** 9, stamp_ns % 10 ** 9) + struct.pack('<I', 3) + b'op\x00'
    head += b'\x00' * (-(len(head) - 4) % 8)
    return head + position.astype('<f8').tobytes() + struct.pack('<4d', 0.0, 0.0, 0.0, 1.0)


def arm_messages(seconds: float, rate_hz: float, *, first_ns: int = START_NS,
                 prefix: str = '') -> Iterator[tuple[int, str, bytes]]:
    """Yield (log_ns, topic, data) of hand, command and robot joints in log order."""
    motion, names = Motion(), name_section(JOINTS)
    period_ns = round(1e9 / rate_hz)
    block = 1000
    for start in range(0, int(seconds * rate_hz), block):
        k = np.arange(start, min(start + block, int(seconds * rate_hz)))
        t = k / rate_hz
        wanted, robot = motion.at(t), motion.at(t - DELAY_S)
        for row, index in enumerate(k.tolist()):
            ns = first_ns + index * period_ns
            yield ns + 1000, f'{prefix}/hand', pose(ns, wanted[row, :3] * 0.3)
            yield ns + 2000, f'{prefix}/command', joint_state(ns, names, wanted[row])
            yield ns + 3000, f'{prefix}/joint_states', joint_state(ns, names, robot[row])


TYPES = {'hand': 'geometry_msgs/msg/PoseStamped', 'command': 'sensor_msgs/msg/JointState',
         'joint_states': 'sensor_msgs/msg/JointState'}


def parameters(folder: Path, prefixes: tuple[str, ...], *, record: bool = False) -> Path:
    """Write the parameter file that evaluates the streams."""
    arms = ''.join(f"""\
      arm{number}:
        operator:
          hand_topic: {prefix}/hand
          shoulder_m: [0.0, 0.0, 0.0]
          arm_length_m: 0.6
        robot:
          joints_topic: {prefix}/joint_states
          description_file: {config_file('teardown_arm.urdf')}
          base_link: teardown_arm_base
          tip_link: teardown_arm_tool
        command: {{topic: {prefix}/command}}
        mappings:
          reach: {{kind: task_space}}
""" for number, prefix in enumerate(prefixes))
    path = folder / 'evaluate.yaml'
    path.write_text(f"""\
/**:
  ros__parameters:
    session:
      directory: {folder / 'sessions'}
      record_inputs: {str(record).lower()}
    arms:
{arms}""")
    return path
