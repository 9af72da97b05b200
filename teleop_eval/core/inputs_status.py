# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What /diagnostics says of the inputs of one arm."""

from __future__ import annotations

from teleop_eval.core.arm import ArmEvaluator
from teleop_eval.core.phase import Phase, seconds, spoken
from teleop_eval.core.results import (
    LEVEL_ERROR,
    LEVEL_OK,
    LEVEL_STALE,
    LEVEL_WARN,
    StatusLine,
)
from teleop_eval.core.settings import ThresholdSettings

ALL_ARRIVE = 'all inputs arrive'


class InputsStatus:
    """Makes the line of the inputs; it remembers which faults it has told of."""

    def __init__(self, arm: ArmEvaluator, phase: Phase) -> None:
        self._arm = arm
        self._phase = phase
        self._met: list[str] = []

    def line(self, now_ns: int, thresholds: ThresholdSettings) -> StatusLine:
        """Return the line at a receive time."""
        values: dict[str, str] = {}
        words = self._silences(now_ns, thresholds, values)
        level = LEVEL_STALE if words else LEVEL_OK
        doubts = self._doubts(values)
        if doubts and level == LEVEL_OK:
            level = LEVEL_WARN
        problems, fresh = self._problems()
        if fresh:
            level = LEVEL_ERROR
        elif problems and level == LEVEL_OK:
            level = LEVEL_WARN
        return StatusLine(f'{self._arm.name}: inputs', level,
                          '; '.join([*problems, *words, *doubts]) or ALL_ARRIVE, values)

    def _silences(self, now_ns: int, thresholds: ThresholdSettings,
                  values: dict[str, str]) -> list[str]:
        """Return what has not come, or not for too long; put the ages into the values."""
        arm, absent, silent = self._arm, [], []
        roles = {'hand': arm.arm.operator.hand_topic,
                 'shoulder': arm.arm.operator.shoulder_topic,
                 'rate_input': arm.arm.operator.rate_topic,
                 'operator_joints': arm.arm.operator.joints_topic,
                 'robot_joints': arm.arm.robot.joints_topic, 'command': arm.arm.command.topic}
        for role, topic in roles.items():
            if topic is None:
                continue
            last, intake = self._phase.last_receive_ns.get(role), arm.intakes.get(role)
            lasting = intake is not None and not intake.stream.closes_windows
            if last is None:
                absent.append(topic)
                values[f'{role} age (s)'] = 'none yet'
                continue
            age_s = seconds(last, now_ns)
            values[f'{role} age (s)'] = f'{age_s:.2f}'
            if not lasting and age_s > thresholds.stale_s:
                silent.append(f'{topic} is silent for {spoken(age_s)}')
        for role, state in arm.states.items():
            values[role] = 'none yet' if state.latest is None else str(state.latest)
            if state.latest is None:
                absent.append(state.topic)
        return ([f'no message yet on {", ".join(absent)}'] if absent else []) + silent

    def _doubts(self, values: dict[str, str]) -> list[str]:
        """Return why times are to be distrusted."""
        arm, words = self._arm, []
        if arm.time_base is not None:
            values['time base'] = arm.time_base.base
            if not arm.time_base.by_stamp:
                words.append(f'receive time is used: {arm.time_base.reason}')
        return words + [f'{role}: {warning}' for role, ages in arm.ages.items()
                        if (warning := ages.warning())]

    def _problems(self) -> tuple[list[str], bool]:
        """Return the faults, and whether any came since the last time."""
        arm = self._arm
        met = [text for intake in arm.intakes.values() for text in intake.problems.texts()]
        problems = arm.all_problems()
        # Faulty messages that came no more since the last time are worth a warning.
        fresh = bool(problems) and (bool(arm.problems) or met != self._met)
        self._met = met
        return [text.removesuffix('.') for text in problems], fresh
