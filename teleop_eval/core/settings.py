# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Every setting of an evaluation: name, kind, default, unit, range and meaning."""

from __future__ import annotations

import dataclasses
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.mappings.guarded import checked_fault
from teleop_eval.core.mappings.registry import kind_settings
from teleop_eval.core.mappings.settings import MappingSettings
from teleop_eval.core.operator_settings import OperatorSettings, UnitSettings
from teleop_eval.core.parameters import (
    BOOL,
    DOUBLE,
    INTEGER,
    STRING,
    STRINGS,
    build,
    group,
    named_map,
    parameter,
)
from teleop_eval.core.sentences import listed, nearest, shown

# As ROS 2 has them: absolute, relative or private.
_TOPIC = re.compile(r'(?:~/|/)?[A-Za-z_][A-Za-z0-9_]*(?:/[A-Za-z_][A-Za-z0-9_]*)*')


@dataclass(frozen=True)
class SessionSettings:
    """Where results go and what is kept."""

    directory: str = parameter(
        STRING, 'teleop_eval_sessions', 'Folder in which each session gets a folder of its own.')
    name: str = parameter(
        STRING, '', "Name of the session's folder; empty: date and time of the start.")
    record_inputs: bool = parameter(
        BOOL, False, 'Also keep every input message in inputs/ (personal data: ask consent).')
    autostart: bool = parameter(
        BOOL, True, 'Start when the node starts; otherwise wait for ~/start_session.')
    operator: str = parameter(STRING, '', 'Pseudonym of the operator, never the name.')


@dataclass(frozen=True)
class TimeSettings:
    """Grid, windows and clocks."""

    grid_rate_hz: float | None = parameter(
        DOUBLE, None, "Rate of the common grid; not given: the slowest sampled stream's rate, "
        'at least 50 Hz, frozen from the first seconds.', unit='Hz', low=10.0, high=1000.0)
    window_s: float = parameter(
        DOUBLE, 2.0, 'Length of the windows of all metrics but latency.',
        unit='s', low=0.5, high=60.0)
    lateness_s: float = parameter(
        DOUBLE, 0.5, 'How long a window waits for a stream that is behind.',
        unit='s', low=0.0, high=10.0)
    settling_s: float = parameter(
        DOUBLE, 1.0, 'Time left out after an engagement or a change of mapping.',
        unit='s', low=0.0, high=60.0)
    max_gap_s: float | None = parameter(
        DOUBLE, None, 'Longest gap bridged by interpolation; not given: max(0.1 s, '
        '3 median periods) of each stream.', unit='s', low=0.001, high=10.0)
    clock_tolerance_s: float = parameter(
        DOUBLE, 0.5, 'Largest difference between the clocks of the streams of one arm for '
        'header stamps to be used.', unit='s', low=0.001, high=60.0)
    warm_up_s: float = parameter(
        DOUBLE, 5.0, 'Time at the start from which clock, rates and grid are frozen.',
        unit='s', low=1.0, high=60.0)


@dataclass(frozen=True)
class LatencySettings:
    """Correlation latency."""

    window_s: float = parameter(
        DOUBLE, 10.0, 'Length of a latency window, a whole number of time.window_s.',
        unit='s', low=2.0, high=120.0)
    hop_s: float = parameter(
        DOUBLE, 2.0, 'Time between latency windows, a whole number of time.window_s.',
        unit='s', low=0.5, high=120.0)
    min_s: float = parameter(
        DOUBLE, -0.1, 'Lower end of the searched range.', unit='s', low=-2.0, high=0.0)
    max_s: float = parameter(
        DOUBLE, 1.0, 'Upper end of the searched range.', unit='s', low=0.05, high=5.0)
    max_age_s: float = parameter(
        DOUBLE, 60.0, 'How long the last observed delay serves for delay compensation.',
        unit='s', low=0.0, high=3600.0)


@dataclass(frozen=True)
class ThresholdSettings:
    """Levels on /diagnostics. Choose them for your task."""

    latency_warn_s: float = parameter(
        DOUBLE, 0.15, 'Median latency from which the level is WARN (choose for your task).',
        unit='s', low=0.0, high=10.0)
    latency_error_s: float = parameter(
        DOUBLE, 0.30, 'Median latency from which the level is ERROR (choose for your task).',
        unit='s', low=0.0, high=10.0)
    limit_margin_warn: float = parameter(
        DOUBLE, 0.05, 'Distance to a joint limit, as share of its span, below which the level '
        'is WARN while approaching (choose for your task).', low=0.0, high=0.5)
    stale_s: float = parameter(
        DOUBLE, 1.0, 'Silence after which an input is STALE.', unit='s', low=0.05, high=600.0)
    hysteresis: float = parameter(
        DOUBLE, 0.1, 'A level falls only when the value is this share below its threshold.',
        low=0.0, high=0.9)


@dataclass(frozen=True)
class RobotSettings:
    """The robot's side of one arm."""

    joints_topic: str | None = parameter(STRING, None, "JointState of the robot's joints.")
    joint_names: tuple[str, ...] | None = parameter(
        STRINGS, None, 'Joints to evaluate; not given: those that move the tip.')
    description_topic: str | None = parameter(
        STRING, None, 'Latched topic with the robot description (URDF).')
    description_file: str | None = parameter(
        STRING, None, 'File with the robot description, instead of the topic; relative to the '
        'parameter file.')
    base_link: str | None = parameter(STRING, None, "First link of the arm's chain.")
    tip_link: str | None = parameter(STRING, None, "Last link of the arm's chain, the tool.")
    shoulder_link: str | None = parameter(
        STRING, None, 'Link at the shoulder; not given: found from the joint axes.')
    joints: dict[str, UnitSettings] = named_map(
        UnitSettings, 'Units of single joints.', free_names=True)


@dataclass(frozen=True)
class CommandSettings:
    """The command that the stack sends to the robot."""

    topic: str | None = parameter(STRING, None, 'Command sent to the robot.')
    hold: bool = parameter(
        BOOL, False, 'The last command stays valid until the next one (zero-order hold).')
    enabled_field: str | None = parameter(
        STRING, None, 'Name of a boolean array in the message that switches joints on.')
    joint_order: tuple[str, ...] | None = parameter(
        STRINGS, None, 'Order of the joints in a message without names.')
    joints: dict[str, UnitSettings] = named_map(
        UnitSettings, 'Units of single joints.', free_names=True)


@dataclass(frozen=True)
class TopicSettings:
    """One state topic."""

    topic: str | None = parameter(STRING, None, 'Topic of the state.')


@dataclass(frozen=True)
class EngagedSettings:
    """The clutch."""

    topic: str | None = parameter(
        STRING, None, 'Bool, or Joy of which one button is the clutch; not given: always '
        'engaged.')
    button: int = parameter(
        INTEGER, 0, "Which of a Joy message's buttons, counted from 0; engaged while pressed.",
        low=0, high=63)


@dataclass(frozen=True)
class ActiveMappingSettings:
    """Which mapping is in use."""

    topic: str | None = parameter(STRING, None, 'Latched topic with the label of the mapping.')
    fixed: str | None = parameter(STRING, None, 'Label of the mapping when it never changes.')


@dataclass(frozen=True)
class ArmSettings:
    """One pair of operator arm and robot arm."""

    operator: OperatorSettings = group(OperatorSettings)
    robot: RobotSettings = group(RobotSettings)
    command: CommandSettings = group(CommandSettings)
    engaged: EngagedSettings = group(EngagedSettings)
    active_mapping: ActiveMappingSettings = group(ActiveMappingSettings)
    mappings: dict[str, MappingSettings] = named_map(
        MappingSettings, 'Mappings by label.', kinds=kind_settings)


@dataclass(frozen=True)
class Settings:
    """All settings of an evaluation."""

    arms: dict[str, ArmSettings] = named_map(ArmSettings, 'Arms by name.')
    session: SessionSettings = group(SessionSettings)
    time: TimeSettings = group(TimeSettings)
    latency: LatencySettings = group(LatencySettings)
    thresholds: ThresholdSettings = group(ThresholdSettings)


def from_parameters(flat: Mapping[str, Any], *, where: str = 'the parameters') -> Settings:
    """
    Return checked settings from flat dotted parameters.

    Raises
    ------
    ConfigError
        With one sentence that names the parameter, its value and the remedy.

    """
    settings: Settings = build(Settings, flat, where=where)
    _check(settings, where)
    return settings


def to_plain(settings: Any) -> Any:
    """Return settings as plain types, for the session folder and the summary."""
    return dataclasses.asdict(settings)


def _check(settings: Settings, where: str) -> None:
    """Check what one parameter alone cannot show."""
    if not settings.arms:
        raise ConfigError(
            f'{where}: no arm is configured; give at least arms.NAME.robot.joints_topic.')
    for label, value in (('window_s', settings.latency.window_s),
                         ('hop_s', settings.latency.hop_s)):
        ratio = value / settings.time.window_s
        if abs(ratio - round(ratio)) > 1e-6 or round(ratio) < 1:
            raise ConfigError(
                f'{where}: latency.{label} is {value:g} s, but must be a whole number of '
                f'time.window_s ({settings.time.window_s:g} s).')
    if settings.thresholds.latency_error_s < settings.thresholds.latency_warn_s:
        raise ConfigError(
            f'{where}: thresholds.latency_error_s ({settings.thresholds.latency_error_s:g} s) '
            f'is below thresholds.latency_warn_s ({settings.thresholds.latency_warn_s:g} s); '
            'exchange or change them.')
    for name, arm in settings.arms.items():
        _check_arm(f'arms.{name}', arm, where)


def _check_arm(key: str, arm: ArmSettings, where: str) -> None:
    if arm.robot.joints_topic is None:
        raise ConfigError(f'{where}: {key}.robot.joints_topic is missing; name the JointState '
                          "topic of the robot's joints.")
    described = arm.robot.description_topic or arm.robot.description_file
    if arm.robot.description_topic and arm.robot.description_file:
        raise ConfigError(f'{where}: {key}.robot has both description_topic and '
                          'description_file; keep one.')
    if not described and not arm.robot.joint_names:
        raise ConfigError(f'{where}: {key}.robot has neither a description (description_topic, '
                          'description_file) nor joint_names; give one of them.')
    if described and not (arm.robot.base_link and arm.robot.tip_link):
        raise ConfigError(f'{where}: {key}.robot.base_link and tip_link are needed to follow '
                          'the description from base to tool.')
    if arm.active_mapping.topic and arm.active_mapping.fixed:
        raise ConfigError(f'{where}: {key}.active_mapping has both topic and fixed; keep one.')
    fixed = arm.active_mapping.fixed
    if len(arm.mappings) > 1 and not (fixed or arm.active_mapping.topic):
        raise ConfigError(
            f'{where}: {key} has the mappings {listed(arm.mappings)}; say which is active: give '
            f'{key}.active_mapping.topic, on which a label comes, or {key}.active_mapping.fixed, '
            'one of the labels.')
    if fixed and arm.mappings and fixed not in arm.mappings:
        near = nearest(fixed, arm.mappings)
        hint = f'did you mean {near!r}?' if near else 'correct it.'
        raise ConfigError(f'{where}: {key}.active_mapping.fixed is {shown(fixed)}, which is not '
                          f'among the mappings {listed(arm.mappings)}; {hint}')
    if fault := arm.operator.fault(f'{key}.operator'):
        raise ConfigError(f'{where}: {fault}')
    for label, mapping in arm.mappings.items():
        if fault := checked_fault(mapping, f'{key}.mappings.{label}'):
            raise ConfigError(f'{where}: {fault}')
    for field, topic in _topics(key, arm):
        if topic and not _TOPIC.fullmatch(topic):
            raise ConfigError(f'{where}: {field} is {shown(topic)}, which is no topic name: '
                              'between slashes it may hold letters, digits and _, and must not '
                              'begin with a digit.')


def _topics(key: str, arm: ArmSettings) -> list[tuple[str, str | None]]:
    return [(f'{key}.operator.hand_topic', arm.operator.hand_topic),
            (f'{key}.operator.joints_topic', arm.operator.joints_topic),
            (f'{key}.operator.shoulder_topic', arm.operator.shoulder_topic),
            (f'{key}.operator.rate_topic', arm.operator.rate_topic),
            (f'{key}.operator.description_topic', arm.operator.description_topic),
            (f'{key}.robot.joints_topic', arm.robot.joints_topic),
            (f'{key}.robot.description_topic', arm.robot.description_topic),
            (f'{key}.command.topic', arm.command.topic),
            (f'{key}.engaged.topic', arm.engaged.topic),
            (f'{key}.active_mapping.topic', arm.active_mapping.topic)]
