# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Settings of the operator's arm: where the hand, the shoulder and the arm length come from."""

from __future__ import annotations

from dataclasses import dataclass

from teleop_eval.core.mappings.settings import quaternion_fault
from teleop_eval.core.parameters import DOUBLE, DOUBLES, INTEGERS, STRING, named_map, parameter

TRACKED_POINTS = ('wrist', 'finger_tip')
# Longer sweeps tire the arm; what is kept of them is bounded.
LONGEST_CALIBRATION_S = 600.0


@dataclass(frozen=True)
class UnitSettings:
    """Conversion of one joint's numbers."""

    scale: float = parameter(
        DOUBLE, 1.0, "Factor from the message's number to radians or metres.")


@dataclass(frozen=True)
class OperatorSettings:
    """The operator's side of one arm."""

    hand_topic: str | None = parameter(STRING, None, "Pose or point of the operator's hand.")
    joints_topic: str | None = parameter(
        STRING, None, "JointState of the operator's arm or of the arm the operator moves.")
    joints: dict[str, UnitSettings] = named_map(
        UnitSettings, 'Units of single operator joints.', free_names=True)
    description_topic: str | None = parameter(
        STRING, None, "Latched topic with a URDF of the operator's arm; the hand then follows "
        'from joints_topic.')
    description_file: str | None = parameter(
        STRING, None, "File with a URDF of the operator's arm, instead of the topic; relative to "
        'the parameter file, or package://teleop_eval/config/human_arm.urdf.')
    base_link: str | None = parameter(
        STRING, None, "First link of the operator's chain, the frame of hand and shoulder.")
    tip_link: str | None = parameter(STRING, None, "Last link of the operator's chain, the hand.")
    shoulder_link: str | None = parameter(
        STRING, None, "Link at the operator's shoulder; not given: found from the joint axes.")
    description_stature_m: float | None = parameter(
        DOUBLE, None, 'Stature that the description is drawn for; its lengths are scaled to '
        'stature_m.', unit='m', low=0.5, high=2.5)
    rate_topic: str | None = parameter(
        STRING, None, 'TwistStamped or Joy that sets the velocity, for a rate mapping.')
    joy_axes: tuple[int, ...] = parameter(
        INTEGERS, [0, 1, 2, 3, 4, 5], "Which of a Joy message's axes, counted from 0, are x, y, "
        'z and the rotations about them; -1 for none.', size=6, low=-1, high=63)
    shoulder_m: tuple[float, ...] | None = parameter(
        DOUBLES, None, "The operator's shoulder in the frame of the hand's messages.",
        unit='m', size=3)
    shoulder_topic: str | None = parameter(
        STRING, None, "Pose or point of the operator's shoulder where it moves, in the frame of "
        "the hand's messages.")
    arm_length_m: float | None = parameter(
        DOUBLE, None, "Length of the operator's arm, shoulder to tracked point.",
        unit='m', low=0.1, high=2.0)
    arm_length_sd_m: float | None = parameter(
        DOUBLE, None, 'Standard uncertainty of arm_length_m.', unit='m', low=0.0, high=0.5)
    stature_m: float | None = parameter(
        DOUBLE, None, 'Stature, from which the arm length is estimated to +-12 %.',
        unit='m', low=0.5, high=2.5)
    tracked_point: str = parameter(
        STRING, 'wrist', 'What the hand topic tracks.', choices=TRACKED_POINTS)
    calibration_start_s: float | None = parameter(
        DOUBLE, None, 'Start of the sweeps with the stretched arm that give shoulder and arm '
        'length, after the first message of the hand (or of the operator joints).',
        unit='s', low=0.0, high=86_400.0)
    calibration_end_s: float | None = parameter(
        DOUBLE, None, 'End of these sweeps; the metrics begin there.',
        unit='s', low=0.0, high=86_400.0)
    axes_xyzw: tuple[float, ...] = parameter(
        DOUBLES, [0.0, 0.0, 0.0, 1.0],
        'Rotation that turns operator axes into robot axes, quaternion x, y, z, w.', size=4)

    @property
    def described(self) -> bool:
        """Tell whether a description is configured, from which the hand follows."""
        return bool(self.description_file or self.description_topic)

    @property
    def hand_role(self) -> str:
        """Return the input that the hand comes from, '' if there is none."""
        if self.hand_topic:
            return 'hand'
        return 'operator_joints' if self.described and self.joints_topic else ''

    def fault(self, key: str) -> str:
        """Return one sentence on what no parameter alone can show to be wrong, else ''."""
        return (self._double(key) or self._description_fault(key) or self._calibration_fault(key)
                or quaternion_fault(f'{key}.axes_xyzw', self.axes_xyzw))

    def _double(self, key: str) -> str:
        """Return the sentence on what is given in two ways."""
        for first, second in (('description_topic', 'description_file'),
                              ('shoulder_m', 'shoulder_topic'), ('shoulder_m', 'shoulder_link')):
            if getattr(self, first) and getattr(self, second):
                return f'{key} has both {first} and {second}; keep one.'
        if self.described and self.hand_topic:
            return (f'{key} has a description, from which the hand would follow, and also '
                    'hand_topic; keep one.')
        return ''

    def _description_fault(self, key: str) -> str:
        if not self.described:
            for name in ('base_link', 'tip_link', 'shoulder_link', 'description_stature_m'):
                if getattr(self, name):
                    return (f'{key}.{name} belongs to a description of the operator; give '
                            'description_file or remove it.')
            return ''
        if not self.joints_topic:
            return (f'{key}.joints_topic is missing; name the JointState topic that moves the '
                    'described arm.')
        if not (self.base_link and self.tip_link):
            return (f'{key}.base_link and tip_link are needed to follow the description from '
                    'base to hand.')
        if self.description_stature_m and not self.stature_m:
            return (f'{key}.stature_m is missing; give it, since description_stature_m asks to '
                    'scale the description to it.')
        if self.stature_m and not self.description_stature_m and not self.arm_length_m:
            return (f'{key}.description_stature_m is missing; give the stature the description '
                    'is drawn for (1.75 for human_arm.urdf), or remove stature_m.')
        return ''

    def _calibration_fault(self, key: str) -> str:
        start, end = self.calibration_start_s, self.calibration_end_s
        if start is None and end is None:
            return ''
        if start is None or end is None:
            lacking = 'calibration_start_s' if start is None else 'calibration_end_s'
            return f'{key}.{lacking} is missing; an interval needs both ends.'
        if not 0.0 < end - start <= LONGEST_CALIBRATION_S:
            return (f'{key}.calibration_end_s is {end:g} s and calibration_start_s {start:g} s; '
                    f'the end must come later, by at most {LONGEST_CALIBRATION_S:g} s.')
        if not self.hand_role:
            return (f'{key}.calibration_start_s needs the hand; give hand_topic, or joints_topic '
                    'with a description.')
        return ''


def operator_key(arm: str) -> str:
    """Return the key of an operator's description among those of the robots, by arm."""
    return f'{arm}.operator'
