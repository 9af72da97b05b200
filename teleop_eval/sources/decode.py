# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Turn message bytes into typed samples: the same decoders live and from recordings.

A decoder belongs to one topic: it remembers the names and frames of earlier messages, so that
repeated ones cost a comparison. It is not to be shared between threads.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from functools import partial

from teleop_eval.core.errors import InputError
from teleop_eval.core.samples import Sample
from teleop_eval.sources.decode_standard import (
    array_reader,
    bool_reader,
    joint_state_reader,
    joy_reader,
    pose_reader,
    text_reader,
    trajectory_reader,
    twist_reader,
)

_MAKERS: dict[str, Callable[[str], Callable[[bytes], Sample]]] = {
    'geometry_msgs/msg/PoseStamped': pose_reader,
    'geometry_msgs/msg/PoseWithCovarianceStamped': pose_reader,
    'geometry_msgs/msg/TransformStamped': partial(pose_reader, child_frame=True),
    'geometry_msgs/msg/PointStamped': partial(pose_reader, oriented=False),
    'nav_msgs/msg/Odometry': partial(pose_reader, child_frame=True),
    'geometry_msgs/msg/TwistStamped': twist_reader,
    'sensor_msgs/msg/JointState': joint_state_reader,
    'sensor_msgs/msg/Joy': joy_reader,
    'std_msgs/msg/Float64MultiArray': array_reader,
    'trajectory_msgs/msg/JointTrajectory': trajectory_reader,
    'std_msgs/msg/Bool': bool_reader,
    'std_msgs/msg/String': text_reader,
}

# What an input of each role may be; joints and commands also any recorded message with name[]
# and position[].
SUPPORTED: dict[str, tuple[str, ...]] = {
    'pose': (
        'geometry_msgs/msg/PoseStamped', 'geometry_msgs/msg/PoseWithCovarianceStamped',
        'geometry_msgs/msg/TransformStamped', 'geometry_msgs/msg/PointStamped',
        'nav_msgs/msg/Odometry'),
    'joints': ('sensor_msgs/msg/JointState',),
    'command': (
        'sensor_msgs/msg/JointState', 'geometry_msgs/msg/PoseStamped',
        'geometry_msgs/msg/TwistStamped', 'std_msgs/msg/Float64MultiArray',
        'trajectory_msgs/msg/JointTrajectory'),
    'rate': ('geometry_msgs/msg/TwistStamped', 'sensor_msgs/msg/Joy'),
    'bool': ('std_msgs/msg/Bool', 'sensor_msgs/msg/Joy'),
    'text': ('std_msgs/msg/String',),
}

_TYPE_NAME = re.compile(r'([A-Za-z][A-Za-z0-9_]*)/(?:msg/)?([A-Za-z][A-Za-z0-9_]*)')


def full_type_name(type_name: str) -> str:
    """
    Return a message type as 'pkg/msg/T', from that or 'pkg/T'.

    Raises
    ------
    InputError
        It has another form.

    """
    match = _TYPE_NAME.fullmatch(type_name)
    if match is None:
        raise InputError(
            f'{type_name[:80]!r} is no message type; write it as package/msg/Type.')
    return f'{match.group(1)}/msg/{match.group(2)}'


def make_decoder(
    type_name: str, *, definition: str = '', definition_format: str = 'ros2msg',
    enabled_field: str = '',
) -> Callable[[bytes], Sample]:
    """
    Make the decoder of one topic.

    Parameters
    ----------
    type_name
        'pkg/msg/T' or 'pkg/T'.
    definition, definition_format
        For a type that is not built in: the message definition of the recording and its format,
        'ros2msg' or 'ros2idl'. It must have name[] and position[].
    enabled_field
        Boolean array of such a message that masks joints; '' for none.

    Returns
    -------
    callable
        Message bytes (CDR with encapsulation header) to a sample, whose arrays never change
        afterwards but may be read-only views of the bytes. Raises InputError for bytes that are
        not such a message, whatever they are.

    Raises
    ------
    InputError
        The type is not supported, or its definition lacks what is needed.

    """
    what = full_type_name(type_name)
    maker = _MAKERS.get(what)
    if maker is not None:
        if enabled_field:
            raise InputError(
                f'{what} has no boolean array {enabled_field!r}, which enabled_field names; '
                'remove enabled_field for this topic.')
        return maker(what)
    if not definition.strip():
        raise InputError(
            f'messages of type {what} cannot be read; supported are '
            f'{", ".join(sorted(_MAKERS))}, and in recordings any type with name[] and '
            'position[].')
    # Imported here: a live node and the standard types do without rosbags.
    from teleop_eval.sources.decode_custom import joint_message_reader

    return joint_message_reader(
        what, definition=definition, definition_format=definition_format,
        enabled_field=enabled_field)
