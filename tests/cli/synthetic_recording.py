# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
A recording with a known answer: a planar arm that follows its operator, late by 0.12 s.

It is written by the rosbags library, so that what the command reads is not of its own making.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from rosbags.rosbag2 import StoragePlugin, Writer
from rosbags.typesys import Stores, get_typestore

STORE = get_typestore(Stores.ROS2_JAZZY)
START_NS = 1_700_000_000_000_000_000
DELAY_S = 0.12
JOINTS = ('shoulder', 'elbow')
URDF = """<robot name="planar">
  <link name="base"/><link name="upper"/><link name="fore"/><link name="tool"/>
  <joint name="shoulder" type="revolute"><parent link="base"/><child link="upper"/>
    <axis xyz="0 0 1"/><limit lower="-3" upper="3" velocity="5" effort="1"/></joint>
  <joint name="elbow" type="revolute"><parent link="upper"/><child link="fore"/>
    <origin xyz="0.4 0 0"/><axis xyz="0 0 1"/>
    <limit lower="-3" upper="3" velocity="5" effort="1"/></joint>
  <joint name="wrist" type="fixed"><parent link="fore"/><child link="tool"/>
    <origin xyz="0.3 0 0"/></joint>
</robot>
"""
CONFIG = """/**:
  ros__parameters:
    use_sim_time: false
    arms:
      right:
        operator:
          joints_topic: operator/joint_states
        robot:
          joints_topic: joint_states
          description_topic: robot_description
          base_link: base
          tip_link: tool
        active_mapping:
          fixed: direct
        mappings:
          direct:
            kind: joint_space
            joints:
              shoulder: {source: human_shoulder}
              elbow: {source: human_elbow}
"""


@dataclass(frozen=True)
class Recording:
    """Where recording and parameter file are."""

    path: Path
    config: Path


def angles(time_s):
    """Return shoulder and elbow angle (n, 2) of a motion that does not repeat itself, rad."""
    rng = np.random.default_rng(5)
    frequencies = rng.uniform(0.1, 1.5, (12, 2))
    phases = rng.uniform(0.0, 2 * np.pi, (12, 2))
    waves = np.sin(2 * np.pi * frequencies * np.asarray(time_s)[:, None, None] + phases)
    return (0.15 / frequencies * waves).sum(axis=1)


def make(folder, *, seconds=40.0, rate_hz=100.0, storage=StoragePlugin.MCAP, namespace='',
         leave_out=()):
    """
    Write recording and parameter file into a folder.

    Parameters
    ----------
    folder
        Where to.
    seconds, rate_hz
        Length and rate of both streams.
    storage
        Format, as rosbags names it.
    namespace
        Put in front of every topic.
    leave_out
        Topics without namespace that the recording lacks.

    """
    folder = Path(folder)
    config = folder / 'evaluator.yaml'
    config.write_text(CONFIG, encoding='utf-8')
    path = folder / 'recording'
    with Writer(path, version=9, storage_plugin=storage) as writer:
        _write(writer, np.arange(int(seconds * rate_hz)) / rate_hz, namespace, set(leave_out))
    return Recording(path, config)


def _write(writer, times_s, namespace, leave_out):
    connections = {}
    for topic, type_name in (('/robot_description', 'std_msgs/msg/String'),
                             ('/operator/joint_states', 'sensor_msgs/msg/JointState'),
                             ('/joint_states', 'sensor_msgs/msg/JointState'),
                             ('/unrelated', 'std_msgs/msg/String')):
        if topic not in leave_out:
            connections[topic] = writer.add_connection(
                namespace + topic, type_name, typestore=STORE)

    def put(topic, time_ns, message):
        if topic in connections:
            data = STORE.serialize_cdr(message, message.__msgtype__)
            writer.write(connections[topic], time_ns, bytes(data))

    put('/robot_description', START_NS, STORE.types['std_msgs/msg/String'](data=URDF))
    put('/unrelated', START_NS, STORE.types['std_msgs/msg/String'](data='x'))
    stamps = START_NS + np.round(times_s * 1e9).astype(np.int64)
    operator, robot = angles(times_s), angles(times_s - DELAY_S)
    for k, stamp_ns in enumerate(stamps.tolist()):
        put('/operator/joint_states', stamp_ns + 1_000_000,
            _joints(stamp_ns, [f'human_{name}' for name in JOINTS], operator[k]))
        put('/joint_states', stamp_ns + 1_100_000, _joints(stamp_ns, list(JOINTS), robot[k]))


def _joints(stamp_ns, names, positions):
    none = np.zeros(0)
    header = STORE.types['std_msgs/msg/Header'](
        stamp=STORE.types['builtin_interfaces/msg/Time'](
            sec=stamp_ns // 10**9, nanosec=stamp_ns % 10**9), frame_id='')
    return STORE.types['sensor_msgs/msg/JointState'](
        header=header, name=names, position=np.asarray(positions), velocity=none, effort=none)
