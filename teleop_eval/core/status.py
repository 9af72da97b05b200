# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What /diagnostics says of one arm: inputs, tracking, latency, workspace."""

from __future__ import annotations

from teleop_eval.core.arm import ArmEvaluator
from teleop_eval.core.levels import MarginLevel, RisingLevel
from teleop_eval.core.metric import NOT_CONFIGURED, Metric, missing
from teleop_eval.core.results import (
    LEVEL_ERROR,
    LEVEL_OK,
    LEVEL_STALE,
    LEVEL_WARN,
    StatusLine,
)
from teleop_eval.core.settings import ThresholdSettings


class ArmStatus:
    """
    Makes the status lines of one arm; its only memory is the hysteresis of the levels.

    `last_receive_ns` by role is filled in by whoever takes the messages.
    """

    def __init__(self, arm: ArmEvaluator) -> None:
        self._arm = arm
        self._latency = RisingLevel()
        self._label = -1
        self._margin = MarginLevel()
        self.last_receive_ns: dict[str, int] = {}
        self._met: list[str] = []

    def lines(self, now_ns: int, thresholds: ThresholdSettings) -> list[StatusLine]:
        """Return the four lines at a receive time."""
        return [self._inputs(now_ns, thresholds), self._tracking(), self._latency_line(thresholds),
                self._workspace(thresholds)]

    def _name(self, concern: str) -> str:
        return f'{self._arm.name}: {concern}'

    def _inputs(self, now_ns: int, thresholds: ThresholdSettings) -> StatusLine:
        arm, level, words = self._arm, LEVEL_OK, []
        values: dict[str, str] = {}
        roles = {'hand': arm.arm.operator.hand_topic,
                 'operator_joints': arm.arm.operator.joints_topic,
                 'robot_joints': arm.arm.robot.joints_topic, 'command': arm.arm.command.topic}
        for role, topic in roles.items():
            if topic is None:
                continue
            last = self.last_receive_ns.get(role)
            intake = arm.intakes.get(role)
            lasting = intake is not None and not intake.stream.closes_windows
            if last is None:
                level = LEVEL_STALE
                words.append(f'no message on {topic} yet')
                values[f'{role} age (s)'] = 'none yet'
                continue
            age = (now_ns - last) / 1e9
            values[f'{role} age (s)'] = f'{age:.2f}'
            if not lasting and age > thresholds.stale_s:
                level = LEVEL_STALE
                words.append(f'{topic} is silent for {age:.1f} s')
        for role, state in arm.states.items():
            values[role] = 'none yet' if state.latest is None else str(state.latest)
            if state.latest is None:
                level = LEVEL_STALE
                words.append(f'no message on {state.topic} yet')
        if arm.time_base is not None:
            values['time base'] = arm.time_base.base
            if not arm.time_base.by_stamp:
                level = max(level, LEVEL_WARN) if level != LEVEL_STALE else level
                words.append(f'receive time is used: {arm.time_base.reason}')
        for role, age_statistics in arm.ages.items():
            if warning := age_statistics.warning():
                level = max(level, LEVEL_WARN) if level != LEVEL_STALE else level
                words.append(f'{role}: {warning}')
        met = [text for intake in arm.intakes.values() for text in intake.problems.texts()]
        problems = arm.all_problems()
        if problems:
            # Faulty messages that came no more since the last time are worth a warning.
            over = not arm.problems and met == self._met
            if not over:
                level = LEVEL_ERROR
            elif level == LEVEL_OK:
                level = LEVEL_WARN
            words = [text.removesuffix('.') for text in problems] + words
        self._met = met
        return StatusLine(self._name('inputs'), level, '; '.join(words) or 'all inputs arrive',
                          values)

    def _metric(self, name: str) -> Metric:
        measured = self._arm.measurement
        newest = None if measured is None else measured.newest
        if newest is None or name not in newest.metrics:
            return missing(NOT_CONFIGURED, '', 'no window has closed yet' if newest is None
                           else 'not configured for this mapping')
        return newest.metrics[name]

    def _mapping(self) -> str:
        measured = self._arm.measurement
        return '' if measured is None or measured.newest is None else measured.newest.mapping

    def _tracking(self) -> StatusLine:
        measured = self._arm.measurement
        if measured is None or measured.newest is None:
            return StatusLine(self._name('tracking'), LEVEL_OK, self._waiting(), {})
        tool = self._metric('tracking_error_rms_norm')
        joint = self._metric('joint_error_rms')
        values = {'mapping': self._mapping()}
        words = []
        for label, metric, unit in (
                ('tracking error RMS', tool, 'arm lengths'),
                ('delay-compensated RMS', self._metric('tracking_error_compensated_rms_norm'),
                 'arm lengths'),
                ('joint error RMS', joint, joint.unit or 'rad')):
            values[f'{label} ({unit})'] = _number(metric, 4)
        if not measured.engaged_now:
            words.append('disengaged')
        if tool.value is not None:
            words.append(f'tracking error {tool.value:.3f} arm lengths RMS')
        elif joint.value is not None:
            words.append(f'joint error {joint.value:.4f} {joint.unit} RMS')
        else:
            words.append(f'no tracking error: {tool.reason}')
        return StatusLine(self._name('tracking'), LEVEL_OK, ', '.join(words), values)

    def _latency_line(self, thresholds: ThresholdSettings) -> StatusLine:
        measured = self._arm.measurement
        if measured is None or measured.newest is None:
            return StatusLine(self._name('latency'), LEVEL_OK, self._waiting(), {})
        pairs = measured.latency.pairs(measured.label)
        if measured.label != self._label:
            self._label, self._latency = measured.label, RisingLevel()
        name = 'latency_s' if pairs['latency_s'] else 'latency_response_s'
        metric, now = self._metric(name), measured.latency.now(measured.label)[name]
        values = {'mapping': self._mapping()}
        for key in pairs:
            values[f'{key[:-2]} (s)'] = _number(self._metric(key), 4)
        level = self._latency.level
        if now.level_value is not None:
            level = self._latency.update(
                now.level_value, warn=thresholds.latency_warn_s,
                error=thresholds.latency_error_s, hysteresis=thresholds.hysteresis)
            values['median of last 3 windows (s)'] = f'{now.level_value:.4f}'
        if metric.value is None:
            message = f'{metric.status}: {metric.reason}'
        else:
            error = metric.details.get('standard_error_s')
            spread = f' +- {error * 1e3:.1f}' if isinstance(error, float) else ''
            message = f'{_WHAT[name]} {metric.value * 1e3:.1f}{spread} ms'
            if metric.details.get('space') == 'hand_to_tool':
                message += ' (hand to tool: the mapping is not modelled)'
        if level >= LEVEL_WARN:
            limit = (thresholds.latency_error_s if level == LEVEL_ERROR
                     else thresholds.latency_warn_s)
            message += f', limit {limit * 1e3:.0f} ms'
        return StatusLine(self._name('latency'), level, message, values)

    def _workspace(self, thresholds: ThresholdSettings) -> StatusLine:
        measured = self._arm.measurement
        if measured is None or measured.newest is None:
            return StatusLine(self._name('workspace'), LEVEL_OK, self._waiting(), {})
        limits = measured.limits
        if limits.margin is None:
            why = ('no engaged sample in the last window' if self._arm.robot is not None
                   else 'no robot description: limits are not known')
            return StatusLine(self._name('workspace'), LEVEL_OK, why, {})
        level = self._margin.update(
            limits.margin, approaching=limits.approaching, warn=thresholds.limit_margin_warn,
            hysteresis=thresholds.hysteresis)
        message = f'{limits.joint} is {limits.margin:.1%} of its span from a limit'
        if level == LEVEL_WARN:
            message += f' and approaching, threshold {thresholds.limit_margin_warn:.1%}'
        return StatusLine(self._name('workspace'), level, message, {
            'nearest limit margin (share of span)': f'{limits.margin:.4f}',
            'joint': limits.joint,
        })

    def _waiting(self) -> str:
        if self._arm.time_base is None:
            return 'waiting for the first seconds of data'
        return 'no window has closed under a known mapping yet'


_WHAT = {'latency_s': 'ideal command to robot', 'latency_response_s': 'command to robot'}


def _number(metric: Metric, digits: int) -> str:
    return metric.status if metric.value is None else f'{metric.value:.{digits}f}'
