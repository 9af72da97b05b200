# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Sessions with closed-form answers, fed to the evaluator message by message.

The robot is a turret: yaw and pitch axes that meet in the shoulder, a sliding boom along x
and a wrist whose three axes meet in the tool. Its kinematics are written here in a few lines,
so that what the evaluator says is checked against something it did not compute.
"""

from __future__ import annotations

import numpy as np
from scipy.spatial.transform import Rotation

from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.samples import (
    ArraySample,
    BoolSample,
    JointSample,
    PoseSample,
    TextSample,
    TrajectorySample,
)
from teleop_eval.core.settings import from_parameters

BASE_NS = 1_700_000_000_000_000_000
JOINTS = ('yaw', 'pitch', 'boom', 'wrist_z', 'wrist_y', 'wrist_x')
REACH_M = 1.25
SHOULDER_M = np.array([0.1, -0.2, 0.4])


def ns(seconds):
    """Return seconds after the start as integer nanoseconds of the epoch."""
    return BASE_NS + int(round(seconds * 1e9))


def urdf(*, lift=False, locked=False):
    """
    Return the turret's description; `lift` puts the shoulder on a column of 0 to 0.5 m.

    `locked` gives the last joint limits without any range between them.
    """
    def joint(name, kind, parent, child, axis, low, high, origin='0 0 0'):
        return (f'<link name="{child}"/><joint name="{name}" type="{kind}">'
                f'<parent link="{parent}"/><child link="{child}"/><origin xyz="{origin}"/>'
                f'<axis xyz="{axis}"/><limit lower="{low}" upper="{high}" effort="9" '
                'velocity="9"/></joint>')

    parts, root = ['<link name="base"/>'], 'base'
    if lift:
        parts.append(joint('lift', 'prismatic', 'base', 'column', '0 0 1', 0.0, 0.5))
        root = 'column'
    origin = ' '.join(map(str, SHOULDER_M))
    last = (0.0, 0.0) if locked else (-3.0, 3.0)
    parts += [
        joint('yaw', 'revolute', root, 'turret', '0 0 1', -3.1, 3.1, origin),
        joint('pitch', 'revolute', 'turret', 'tube', '0 1 0', -1.5, 1.5),
        joint('boom', 'prismatic', 'tube', 'slide', '1 0 0', 0.05, REACH_M),
        joint('wrist_z', 'revolute', 'slide', 'w1', '0 0 1', -3.0, 3.0),
        joint('wrist_y', 'revolute', 'w1', 'w2', '0 1 0', -3.0, 3.0),
        joint('wrist_x', 'revolute', 'w2', 'tool', '1 0 0', *last),
    ]
    return f'<robot name="turret">{"".join(parts)}</robot>'


def joints_for(u, turns=None):
    """
    Return joints (n, 6) that put the tool at normalised positions u (n, 3).

    `turns` is the tool's orientation as scipy rotations, the base's axes if not given.
    """
    p = np.asarray(u) * REACH_M
    yaw, pitch = np.arctan2(p[:, 1], p[:, 0]), -np.arctan2(p[:, 2], np.hypot(p[:, 0], p[:, 1]))
    boom = np.linalg.norm(p, axis=1)
    arm = Rotation.from_euler('ZY', np.column_stack([yaw, pitch]))
    turns = Rotation.identity(len(p)) if turns is None else turns
    return np.column_stack([yaw, pitch, boom, (arm.inv() * turns).as_euler('ZYX')])


def tool_for(q):
    """Return normalised tool positions (n, 3) of joints (n, 6)."""
    arm = Rotation.from_euler('ZY', q[:, :2])
    return arm.apply(np.column_stack([q[:, 2], 0 * q[:, 2], 0 * q[:, 2]])) / REACH_M


def wander(seed=1, *, centre=(0.45, 0.1, 0.15), size=0.12, width=3, low=0.15, high=2.0):
    """
    Return a function from seconds (n,) to a motion (n, width) that never repeats.

    It is a sum of sines of incommensurate frequencies, with the amplitude falling as 1/f.
    """
    rng = np.random.default_rng(seed)
    frequency = np.linspace(low, high, 24) + rng.uniform(0.0, 0.05, 24)
    phase = rng.uniform(0.0, 2.0 * np.pi, (width, 24))
    share = low / frequency / np.sqrt(np.sum((low / frequency) ** 2) / 2.0)

    def motion(times):
        turn = 2.0 * np.pi * frequency * np.asarray(times, dtype=float)[:, None]
        return np.column_stack([
            (np.asarray(centre) if np.ndim(centre) else np.full(width, centre))[axis]
            + size * np.sin(turn + phase[axis]) @ share for axis in range(width)])

    return motion


def clock(start, end, rate_hz, *, phase=0.3):
    """Return sample times (n,) s in [start, end)."""
    first = np.ceil((start * rate_hz) - phase)
    return (np.arange(first, end * rate_hz) + phase) / rate_hz


class Feed:
    """
    Messages by receive time.

    Those of equal time keep the order in which they were put, labels and flags first: so they
    keep their time to the nanosecond.
    """

    def __init__(self):
        self._messages = []

    def put(self, receive_s, topic, sample):
        """Add one message."""
        first = isinstance(sample, (BoolSample, TextSample))
        self._messages.append((ns(receive_s), not first, len(self._messages), topic, sample))
        return self

    def poses(self, topic, times, positions, turns=None, *, transport=0.002, ahead=0.0,
              stamped=True, frame='op'):
        """Add poses (n, 3) and orientations (n, 4); `ahead` is the stamps' clock error, s."""
        for k, t in enumerate(times):
            self.put(t + transport, topic, PoseSample(
                ns(t + ahead) if stamped else 0, np.array(positions[k], dtype=float),
                None if turns is None else np.array(turns[k], dtype=float), frame))
        return self

    def joints(self, topic, times, values, names=JOINTS, *, transport=0.002, ahead=0.0,
               stamped=True, enabled=None):
        """Add joint states (n, d)."""
        for k, t in enumerate(times):
            self.put(t + transport, topic, JointSample(
                ns(t + ahead) if stamped else 0, tuple(names),
                np.array(values[k], dtype=float), None if enabled is None else enabled[k]))
        return self

    def array(self, topic, times, values, *, transport=0.002):
        """Add bare numbers (n, d)."""
        for t, one in zip(times, values, strict=True):
            self.put(t + transport, topic, ArraySample(np.array(one, dtype=float)))
        return self

    def plan(self, receive_s, topic, start_s, offsets, values, names=JOINTS):
        """Add one trajectory; `start_s` None gives it a zero stamp."""
        return self.put(receive_s, topic, TrajectorySample(
            0 if start_s is None else ns(start_s), tuple(names),
            np.rint(np.asarray(offsets) * 1e9).astype(np.int64),
            np.array(values, dtype=float)))

    def text(self, receive_s, topic, text):
        """Add a label or event."""
        return self.put(receive_s, topic, TextSample(text))

    def flag(self, receive_s, topic, value):
        """Add a Bool."""
        return self.put(receive_s, topic, BoolSample(value))

    def messages(self):
        """Return (receive_ns, topic, sample), receive_ns strictly increasing."""
        found, last = [], 0
        for receive_ns, _, _, topic, sample in sorted(self._messages, key=lambda one: one[:3]):
            last = max(receive_ns, last + 1)
            found.append((last, topic, sample))
        return found


def arm_parameters(name='right', **more):
    """
    Return flat parameters of the turret driven by a hand in task space.

    Keyword arguments use two underscores for a dot and are put under the arm; None removes.
    """
    flat = {
        'robot.joints_topic': '/joints', 'robot.description_file': 'turret.urdf',
        'robot.base_link': 'base', 'robot.tip_link': 'tool',
        'operator.hand_topic': '/hand', 'operator.shoulder_m': [0.0, 0.0, 0.0],
        'operator.arm_length_m': 0.6,
    }
    flat.update({key.replace('__', '.'): value for key, value in more.items()})
    return {f'arms.{name}.{key}': value for key, value in flat.items() if value is not None}


TASK = {'mappings__direct__kind': 'task_space', 'active_mapping__fixed': 'direct'}
BARE = {'robot__description_file': None, 'robot__base_link': None, 'robot__tip_link': None,
        'robot__joint_names': ['a', 'b'], 'command__topic': '/command',
        'operator__hand_topic': None, 'operator__shoulder_m': None,
        'operator__arm_length_m': None}
"""Parameters of an arm without description or operator: joints 'a' and 'b', a command."""


def evaluator(parameters, text=None, **more):
    """Return an evaluator of flat parameters; `text` is the URDF of all arms."""
    settings = from_parameters({**parameters, **more})
    return SessionEvaluator(settings, descriptions={
        name: urdf() if text is None else text for name, arm in settings.arms.items()
        if arm.robot.description_file})


def feed(target, messages):
    """Add all messages; return the windows that closed."""
    for message in messages:
        target.add(*message)
    return target.poll()


def closed(target):
    """
    Close the last windows and return the summary without sampling the reachable space.

    The sampling takes a second, and only robot coverage needs it.
    """
    for arm in target.arms.values():
        arm.finish(target._receive_ns)
    return target.summary()


def metrics(summary, mapping='direct', arm='right'):
    """Return the metrics of one mapping."""
    return summary['arms'][arm]['mappings'][mapping]['metrics']


def session(end, *, motion, turns=None, hand_rate=100.0, robot_rate=125.0, delay=0.0,
            length=0.6, follow=None, start=0.0, **transport):
    """
    Return a feed of hand and robot; the robot follows the normalised hand after a delay.

    `motion` gives u_o; `follow` turns the ideal u into the robot's, the identity if not
    given; `turns` gives the hand's orientation as scipy rotations for seconds (n,).
    """
    follow = follow or (lambda u: u)
    made = Feed()
    t = clock(start, end, hand_rate)
    made.poses('/hand', t, length * motion(t), None if turns is None else turns(t).as_quat(),
               **transport)
    t = clock(start, end, robot_rate, phase=0.7)
    made.joints('/joints', t, joints_for(
        follow(motion(t - delay)), None if turns is None else turns(t - delay)), **transport)
    return made
