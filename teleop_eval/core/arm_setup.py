# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Mapping models and inputs of one arm, once its robot is known or known to stay unknown."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass, field

from teleop_eval.core.description import CONTINUOUS
from teleop_eval.core.errors import TeleopEvalError
from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry
from teleop_eval.core.intake import Intake
from teleop_eval.core.joint_match import JointMatcher
from teleop_eval.core.mappings import MappingModel, MappingSettings, make_mapping
from teleop_eval.core.mappings.base import HAND, OPERATOR_JOINTS, RATE_INPUT
from teleop_eval.core.mappings.guarded import checked_operator_joints
from teleop_eval.core.mappings.registry import is_modelled
from teleop_eval.core.mappings.unmodelled import NO_MAPPING, UNMODELLED
from teleop_eval.core.samples import BoolSample, JoySample, Sample, TextSample
from teleop_eval.core.sentences import listed, nearest, shown
from teleop_eval.core.settings import ArmSettings
from teleop_eval.core.streams import HeldState, SampledStream

DESCRIPTION, OPERATOR_DESCRIPTION = 'description', 'operator_description'
# Without a description nobody knows which joints turn and which slide.
UNKNOWN_UNIT = 'rad or m'
_WITHOUT = {'engaged': 'no time counts as engaged',
            'active_mapping': 'no time counts for any mapping'}


@dataclass
class ArmSetup:
    """
    What one arm is evaluated with.

    `joint_names` and `joint_units` (n,) of the robot's evaluated joints;
    `operator_joint_names` (m,) of those the mappings need; `turning` are the robot's joints
    without limits; `problems` are sentences.
    """

    joint_names: tuple[str, ...] = ()
    joint_units: tuple[str, ...] = ()
    operator_joint_names: tuple[str, ...] = ()
    turning: frozenset[str] = frozenset()
    models: dict[str, MappingModel] = field(default_factory=dict)
    intakes: dict[str, Intake] = field(default_factory=dict)
    problems: list[str] = field(default_factory=list)


def make_setup(name: str, arm: ArmSettings, operator: OperatorGeometry,
               robot: RobotGeometry | None) -> ArmSetup:
    """Return models and inputs of an arm; what cannot be made becomes a problem sentence."""
    setup = ArmSetup()
    if robot is not None:
        for label, mapping in arm.mappings.items():
            if not is_modelled(mapping.kind):
                continue
            try:
                setup.models[label] = make_mapping(label, mapping, operator, robot)
            except TeleopEvalError as error:
                setup.problems.append(f'{name}: {error}')
        steps = robot.chain.steps
        if steps and all(step.backward for step in steps):
            setup.problems.append(
                f'{name}: tip_link {arm.robot.tip_link!r} is above base_link '
                f'{arm.robot.base_link!r} in the description; exchange the two unless the robot '
                'hangs on its tool.')
    setup.joint_names = _evaluated_joints(name, arm, robot, setup.problems)
    setup.joint_units = tuple(
        UNKNOWN_UNIT if robot is None else robot.unit_of(joint) for joint in setup.joint_names)
    setup.operator_joint_names = tuple(sorted({
        joint for mapping in arm.mappings.values()
        for joint in checked_operator_joints(mapping)}.union(
            () if operator.arm is None else operator.arm.chain.joint_names)))
    setup.turning = frozenset() if robot is None else frozenset(
        joint for joint, kind in zip(robot.chain.joint_names, robot.chain.kinds, strict=True)
        if kind == CONTINUOUS)
    _make_intakes(name, arm, setup, operator)
    if setup.joint_names:
        for key, units, known in (
                ('robot', arm.robot.joints, setup.joint_names),
                ('command', arm.command.joints, arm.command.joint_order or setup.joint_names),
                ('operator', arm.operator.joints, setup.operator_joint_names)):
            setup.problems += [_foreign_unit(name, f'{key}.joints.{joint}', joint, known)
                               for joint in units if joint not in known]
    return setup


def _evaluated_joints(name: str, arm: ArmSettings, robot: RobotGeometry | None,
                      problems: list[str]) -> tuple[str, ...]:
    """Return the configured joints, or those that move the tip where one of them is left out."""
    given = arm.robot.joint_names or ()
    if robot is None:
        return given
    moving = robot.chain.joint_names
    lacking = [joint for joint in moving if joint not in given]
    if given and lacking:
        strange = [joint for joint in given if joint not in robot.chain.description.joints]
        has = f' and has {listed(strange)}, which the description does not' if strange else ''
        problems.append(
            f'{name}: robot.joint_names leaves out {listed(lacking)}, which moves '
            f'{arm.robot.tip_link}{has}; the joints that move it are evaluated instead '
            f'({listed(moving)}), so correct joint_names or remove it.')
    return moving if lacking else given


def sampled_topics(arm: ArmSettings) -> dict[str, str]:
    """Return the configured topics that carry what is measured, by role."""
    topics = {'hand': arm.operator.hand_topic, 'shoulder': arm.operator.shoulder_topic,
              RATE_INPUT: arm.operator.rate_topic, 'operator_joints': arm.operator.joints_topic,
              'robot_joints': arm.robot.joints_topic, 'command': arm.command.topic}
    return {role: topic for role, topic in topics.items() if topic}


def undescribed(arm: ArmSettings, described: Collection[str]) -> dict[str, str]:
    """Return by role the topics on which a description has not come yet."""
    topics = {DESCRIPTION: arm.robot.description_topic,
              OPERATOR_DESCRIPTION: arm.operator.description_topic}
    return {role: topic for role, topic in topics.items() if topic and role not in described}


def fixed_label(arm: ArmSettings) -> str | None:
    """Return the mapping that holds all the time, None if a topic tells it."""
    if arm.active_mapping.topic:
        return None
    if arm.active_mapping.fixed:
        return arm.active_mapping.fixed
    return next(iter(arm.mappings)) if len(arm.mappings) == 1 else UNMODELLED


def no_mapping(arm: ArmSettings) -> str:
    """Return what follows from an arm without any mapping, '' if it has one."""
    if arm.mappings:
        return ''
    operator = arm.operator.hand_role or arm.operator.rate_topic
    return f'{NO_MAPPING}, so ' + (
        'only command against robot is judged' if arm.command.topic and not operator
        else 'there is no ideal command')


def state_value(role: str, sample: Sample, button: int) -> bool | str | None:
    """Return what a sample says of a state, None if nothing; `button` is a joystick's clutch."""
    if role != 'engaged':
        return sample.text if isinstance(sample, TextSample) else None
    if isinstance(sample, JoySample):
        return bool(sample.buttons[button]) if button < len(sample.buttons) else None
    return sample.value if isinstance(sample, BoolSample) else None


def no_state(sample: Sample, button: int) -> str:
    """Return why a sample says nothing of a state."""
    if isinstance(sample, JoySample):
        return (f'engaged.button is {button}, but a message has {len(sample.buttons)} buttons, '
                'counted from 0; correct it.')
    return f'{type(sample).__name__} is of no use here.'


def unknown_label(name: str, arm: ArmSettings, label: object) -> str:
    """Return the sentence on a label that names none of the configured mappings, else ''."""
    if not label or not isinstance(label, str) or not arm.mappings or label in arm.mappings:
        return ''
    near = nearest(label, arm.mappings)
    hint = f'did you mean {near!r}?' if near else 'add it to the parameter file.'
    return (f'{name}: active_mapping ({arm.active_mapping.topic}) is {shown(label)}, which is not '
            f'among the mappings {listed(arm.mappings)}; {hint}')


def has_input(need: str, intakes: Mapping[str, Intake], operator: OperatorGeometry) -> bool:
    """Tell whether there is an input for what a model needs; joints may give the hand."""
    return need in intakes or (
        need == HAND and operator.arm is not None and OPERATOR_JOINTS in intakes)


def lacks_operator_arm(mapping: MappingSettings, operator: OperatorGeometry) -> bool:
    """Tell whether a mapping cannot be modelled for want of the operator's arm."""
    if not operator.lacking:
        return False
    no_shoulder = operator.shoulder_m is None and not operator.shoulder_moves
    return (operator.length_m is None and getattr(mapping, 'normalized', False)) or (
        no_shoulder and getattr(mapping, 'operator_center_m', ()) is None)


def _foreign_unit(name: str, key: str, joint: str, known: tuple[str, ...]) -> str:
    near = nearest(joint, known)
    hint = f'did you mean {near}?' if near else 'remove it.'
    return (f'{name}: {key} is not used, since {joint} is not among the joints '
            f'{listed(known)}; {hint}')


def _make_intakes(name: str, arm: ArmSettings, setup: ArmSetup,
                  operator: OperatorGeometry) -> None:
    commanded = arm.command.joint_order or setup.joint_names
    matchers = {
        'operator_joints': JointMatcher(
            setup.operator_joint_names, arm.operator.joints,
            turning=frozenset() if operator.arm is None else operator.arm.turning),
        'robot_joints': JointMatcher(setup.joint_names, arm.robot.joints, turning=setup.turning),
        'command': JointMatcher(commanded, arm.command.joints, turning=setup.turning),
    }
    lacking = [joint for joint in setup.joint_names if joint not in commanded]
    for role, topic in sampled_topics(arm).items():
        matcher = matchers.get(role)
        if matcher is not None and not matcher.names:
            continue
        if role == 'command' and lacking:
            setup.problems.append(
                f'{name}: command.joint_order leaves out {", ".join(lacking)}; the command is '
                'not evaluated.')
            continue
        stream = SampledStream(role, topic, held=role == 'command' and arm.command.hold)
        setup.intakes[role] = Intake(
            name, stream, matcher, joy_axes=arm.operator.joy_axes,
            base_link=arm.robot.base_link if role == 'command' else None)


def silent_inputs(name: str, intakes: Mapping[str, Intake],
                  states: Mapping[str, HeldState]) -> dict[str, str]:
    """Return by role a sentence for each input of which nothing useful came in the whole run."""
    found = {}
    for role, intake in intakes.items():
        if not intake.stream.counts.messages:
            found[role] = f'{name}: no message came on {intake.stream.topic} ({role}).'
        elif sentence := intake.never_matched():
            found[role] = sentence
    for role, state in states.items():
        if state.latest is None:
            found[role] = f'{name}: no message came on {state.topic} ({role}); {_WITHOUT[role]}.'
        elif role == 'engaged' and not state.ever_true:
            found[role] = f'{name}: {state.topic} (engaged) was never true; {_WITHOUT[role]}.'
    return found
