# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
A small recording of two arms, sound but for the one fault that a test puts into it.

Both arms are the planar arm of `synthetic_recording`, with every kind of input: operator hand,
operator joints, command, robot joints, and, latched, description, clutch and mapping. The arms
share no topic, so that a fault of one must leave every number of the other as it was.
"""

from __future__ import annotations

import functools
import struct
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import synthetic_recording as synthetic
from rosbags.rosbag2 import StoragePlugin, Writer

STORE, START_NS, URDF = synthetic.STORE, synthetic.START_NS, synthetic.URDF
JOINTS = synthetic.JOINTS
SECONDS, RATE_HZ, SHORT_S = 20.0, 50.0, 8.0
COMMAND_LATE_S, ROBOT_LATE_S = 0.04, 0.12
# Receive time minus stamp, by what is received.
TRANSPORT_NS = {'hand': 1_000_000, 'operator': 1_300_000, 'command': 1_600_000,
                'joint_states': 1_900_000}
JOINT_STATE, POSE = 'sensor_msgs/msg/JointState', 'geometry_msgs/msg/PoseStamped'
TEXT, BOOL = 'std_msgs/msg/String', 'std_msgs/msg/Bool'
ARRAY = 'std_msgs/msg/Float64MultiArray'

_ARM = """\
      {arm}:
        operator:
          hand_topic: /{arm}/hand
          joints_topic: /{arm}/operator
          shoulder_m: [0.0, 0.0, 0.0]
          arm_length_m: 0.7
        robot:
          joints_topic: /{arm}/joint_states
          description_topic: /{arm}/robot_description
          base_link: base
          tip_link: tool
        command:
          topic: /{arm}/command
        engaged:
          topic: /{arm}/engaged
        active_mapping:
          topic: /{arm}/mapping
        mappings:
          direct:
            kind: joint_space
            joints:
              shoulder: {{source: human_shoulder}}
              elbow: {{source: human_elbow}}
          reach:
            kind: task_space
            scaling: metric
            scale: 1.0
"""
CONFIG = '/**:\n  ros__parameters:\n    arms:\n' + ''.join(
    _ARM.format(arm=arm) for arm in ('right', 'left'))


@dataclass(frozen=True)
class Event:
    """One message: when and where, as bytes."""

    log_ns: int
    topic: str
    type_name: str
    data: bytes

    @property
    def time_s(self) -> float:
        """Return the log time since the start of the recording."""
        return (self.log_ns - START_NS) / 1e9


def encode(message) -> bytes:
    """Return a message of the rosbags library as CDR."""
    return bytes(STORE.serialize_cdr(message, message.__msgtype__))


def text(value: str) -> bytes:
    """Return a std_msgs String."""
    return encode(STORE.types[TEXT](data=value))


def joints(time_s, names, positions, *, stamp_ns=None) -> bytes:
    """Return a JointState of that time of the recording."""
    if stamp_ns is None:
        stamp_ns = START_NS + round(time_s * 1e9)
    return encode(synthetic._joints(stamp_ns, list(names), positions))


def pose(time_s, position, xyzw=(0.0, 0.0, 0.0, 1.0)) -> bytes:
    """Return a PoseStamped of that time of the recording."""
    types, stamp_ns = STORE.types, START_NS + round(time_s * 1e9)
    header = types['std_msgs/msg/Header'](
        stamp=types['builtin_interfaces/msg/Time'](
            sec=stamp_ns // 10**9, nanosec=stamp_ns % 10**9), frame_id='room')
    return encode(types[POSE](header=header, pose=types['geometry_msgs/msg/Pose'](
        position=types['geometry_msgs/msg/Point'](*map(float, position)),
        orientation=types['geometry_msgs/msg/Quaternion'](*map(float, xyzw)))))


def stamped(event: Event, stamp_ns: int) -> Event:
    """Return a JointState or PoseStamped with another header stamp."""
    data = bytearray(event.data)
    struct.pack_into('<iI', data, 4, stamp_ns // 10**9, stamp_ns % 10**9)
    return replace(event, data=bytes(data))


def stamp_ns(event: Event) -> int:
    """Return the header stamp of an event of the sound recording."""
    return event.log_ns - TRANSPORT_NS[event.topic.rpartition('/')[2]]


def array(values) -> bytes:
    """Return a Float64MultiArray without a layout."""
    layout = STORE.types['std_msgs/msg/MultiArrayLayout'](dim=[], data_offset=0)
    return encode(STORE.types[ARRAY](layout=layout, data=np.asarray(values, dtype=float)))


def motion(time_s, *, arm='right'):
    """Return shoulder and elbow angle (n, 2), rad; the arms move differently."""
    return synthetic.angles(np.asarray(time_s) + (0.0 if arm == 'right' else 100.0))


def tool(angles):
    """Return position (3,) and orientation (x, y, z, w) of the planar arm's tool."""
    first, both = angles[0], angles[0] + angles[1]
    place = (0.4 * np.cos(first) + 0.3 * np.cos(both),
             0.4 * np.sin(first) + 0.3 * np.sin(both), 0.0)
    return place, (0.0, 0.0, np.sin(both / 2), np.cos(both / 2))


@functools.cache
def healthy() -> tuple[Event, ...]:
    """Return every message in the order of log times."""
    events = []
    times = np.arange(round(SECONDS * RATE_HZ)) / RATE_HZ
    for arm in ('right', 'left'):
        for at_s, topic, type_name, data in (
                (0.0, 'robot_description', TEXT, text(URDF)),
                (0.0, 'mapping', TEXT, text('direct')),
                (0.6 * SECONDS, 'mapping', TEXT, text('reach')),
                (0.0, 'engaged', BOOL, encode(STORE.types[BOOL](data=True)))):
            events.append(Event(START_NS + round(at_s * 1e9) + 1, f'/{arm}/{topic}', type_name,
                                data))
        operator = motion(times, arm=arm)
        command = motion(times - COMMAND_LATE_S, arm=arm)
        robot = motion(times - ROBOT_LATE_S, arm=arm)
        human = [f'human_{name}' for name in JOINTS]
        for k, time_s in enumerate(times):
            stamp_ns = START_NS + round(time_s * 1e9)
            for topic, type_name, data in (
                    ('hand', POSE, pose(time_s, *tool(operator[k]))),
                    ('operator', JOINT_STATE, joints(time_s, human, operator[k])),
                    ('command', JOINT_STATE, joints(time_s, JOINTS, command[k])),
                    ('joint_states', JOINT_STATE, joints(time_s, JOINTS, robot[k]))):
                events.append(Event(stamp_ns + TRANSPORT_NS[topic], f'/{arm}/{topic}',
                                    type_name, data))
    return tuple(sorted(events, key=lambda event: event.log_ns))


def short(events: Iterable[Event] | None = None) -> list[Event]:
    """Return the first seconds, where only sentences and statuses count."""
    return [event for event in (healthy() if events is None else events)
            if event.time_s < SHORT_S]


def change(topic: str, make: Callable[[Event], bytes | Event | None], *, start_s: float = 0.0,
           end_s: float = SECONDS + 1.0, events: Iterable[Event] | None = None) -> list[Event]:
    """
    Return the recording with the messages of one topic and stretch changed.

    Parameters
    ----------
    topic
        Full name.
    make
        Gives the new bytes, a whole event, or None for no message.
    start_s, end_s
        Stretch of log time since the start.
    events
        What to change; not given: the sound recording.

    """
    out = []
    for event in healthy() if events is None else events:
        if event.topic == topic and start_s <= event.time_s < end_s:
            made = make(event)
            event = replace(event, data=made) if isinstance(made, bytes) else made
        if event is not None:
            out.append(event)
    return out


def write(folder: Path, events: Iterable[Event], *, storage=StoragePlugin.MCAP) -> Path:
    """Write a recording with the rosbags library and return it; event order is file order."""
    with Writer(folder, version=9, storage_plugin=storage) as writer:
        connections = {}
        for event in events:
            key = event.topic, event.type_name
            if key not in connections:
                connections[key] = writer.add_connection(*key, typestore=STORE)
            writer.write(connections[key], event.log_ns, event.data)
    return folder
