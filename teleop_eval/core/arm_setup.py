# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Mapping models and inputs of one arm, once its robot is known or known to stay unknown."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from teleop_eval.core.errors import TeleopEvalError
from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry
from teleop_eval.core.intake import Intake
from teleop_eval.core.joint_match import JointMatcher
from teleop_eval.core.mappings import MappingModel, make_mapping
from teleop_eval.core.settings import ArmSettings
from teleop_eval.core.streams import HeldState, SampledStream

# Without a description nobody knows which joints turn and which slide.
UNKNOWN_UNIT = 'rad or m'
_WITHOUT = {'engaged': 'no time counts as engaged',
            'active_mapping': 'no time counts for any mapping'}


@dataclass
class ArmSetup:
    """
    What one arm is evaluated with.

    `joint_names` and `joint_units` (n,) of the robot's evaluated joints;
    `operator_joint_names` (m,) of those the mappings need; `problems` are sentences.
    """

    joint_names: tuple[str, ...] = ()
    joint_units: tuple[str, ...] = ()
    operator_joint_names: tuple[str, ...] = ()
    models: dict[str, MappingModel] = field(default_factory=dict)
    intakes: dict[str, Intake] = field(default_factory=dict)
    problems: list[str] = field(default_factory=list)


def make_setup(name: str, arm: ArmSettings, operator: OperatorGeometry,
               robot: RobotGeometry | None) -> ArmSetup:
    """Return models and inputs of an arm; what cannot be made becomes a problem sentence."""
    setup = ArmSetup()
    if robot is not None:
        for label, mapping in arm.mappings.items():
            try:
                setup.models[label] = make_mapping(label, mapping, operator, robot)
            except TeleopEvalError as error:
                setup.problems.append(f'{name}: {error}')
    setup.joint_names = arm.robot.joint_names or (
        robot.chain.joint_names if robot is not None else ())
    setup.joint_units = tuple(
        UNKNOWN_UNIT if robot is None else robot.unit_of(joint) for joint in setup.joint_names)
    setup.operator_joint_names = tuple(sorted({
        source.source for mapping in arm.mappings.values()
        if mapping.kind == 'joint_space' for source in mapping.joints.values()}))
    _make_intakes(name, arm, setup)
    return setup


def _make_intakes(name: str, arm: ArmSettings, setup: ArmSetup) -> None:
    commanded = arm.command.joint_order or setup.joint_names
    topics = {
        'hand': (arm.operator.hand_topic, None),
        'operator_joints': (arm.operator.joints_topic,
                            JointMatcher(setup.operator_joint_names, {})),
        'robot_joints': (arm.robot.joints_topic,
                         JointMatcher(setup.joint_names, arm.robot.joints)),
        'command': (arm.command.topic, JointMatcher(commanded, arm.command.joints)),
    }
    lacking = [joint for joint in setup.joint_names if joint not in commanded]
    for role, (topic, matcher) in topics.items():
        if topic is None or (matcher is not None and not matcher.names):
            continue
        if role == 'command' and lacking:
            setup.problems.append(
                f'{name}: command.joint_order leaves out {", ".join(lacking)}; the command is '
                'not evaluated.')
            continue
        stream = SampledStream(role, topic, held=role == 'command' and arm.command.hold)
        setup.intakes[role] = Intake(name, stream, matcher)


def silent_inputs(name: str, intakes: Mapping[str, Intake],
                  states: Mapping[str, HeldState]) -> list[str]:
    """Return a sentence for each input by role of which nothing useful came in the whole run."""
    found = []
    for role, intake in intakes.items():
        if not intake.stream.counts.messages:
            found.append(f'{name}: no message came on {intake.stream.topic} ({role}).')
        elif sentence := intake.never_matched():
            found.append(sentence)
    for role, state in states.items():
        if state.latest is None:
            found.append(
                f'{name}: no message came on {state.topic} ({role}); {_WITHOUT[role]}.')
    return found
