# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
What /diagnostics says of one arm: inputs, tracking, latency, workspace.

A line is STALE when no window of its kind has closed for the windows' distance, plus the
lateness that is borne, plus the silence after which an input is stale.
"""

from __future__ import annotations

import numpy as np

from teleop_eval.core.advice import WORDS, largest_term, meant_apart, plain_words
from teleop_eval.core.arm import ArmEvaluator
from teleop_eval.core.budget import LEAST_DISCREPANCY
from teleop_eval.core.geometry import NO_ROBOT
from teleop_eval.core.inputs_status import InputsStatus
from teleop_eval.core.latency_status import LatencyStatus
from teleop_eval.core.levels import MarginLevel
from teleop_eval.core.metric import NOT_CONFIGURED, Metric, missing
from teleop_eval.core.phase import OPERATOR_ROLES, Phase, seconds
from teleop_eval.core.results import LEVEL_OK, LEVEL_STALE, LEVEL_WARN, StatusLine
from teleop_eval.core.settings import ThresholdSettings
from teleop_eval.core.window_budget import POSITION, Space


class ArmStatus:
    """
    Makes the status lines of one arm.

    What it remembers of windows and held states is told to it as they come. The lines follow
    from that and from the time of the question; only faulty messages are compared with those
    of the last question.
    """

    def __init__(self, arm: ArmEvaluator) -> None:
        self._arm = arm
        self.phase = Phase(arm)
        self._inputs = InputsStatus(arm, self.phase)
        self._latency = LatencyStatus(arm, self.phase)
        self._margin = MarginLevel()

    def window_closed(self, receive_ns: int, thresholds: ThresholdSettings) -> None:
        """Take over what the newest window, closed by a message at that time, has measured."""
        self.phase.closed_ns = receive_ns
        self._latency.window_closed(receive_ns, thresholds)
        measured = self._arm.measurement
        if measured is None or measured.limits.margin is None:
            self._margin = MarginLevel()
        else:
            self._judge_margin(thresholds)

    def judge(self, thresholds: ThresholdSettings) -> None:
        """Judge the newest windows by other thresholds."""
        self._latency.judge(thresholds)
        self._judge_margin(thresholds)

    def _judge_margin(self, thresholds: ThresholdSettings) -> None:
        limits = None if self._arm.measurement is None else self._arm.measurement.limits
        if limits is not None and limits.margin is not None:
            self._margin.update(
                limits.margin, approaching=limits.approaching,
                warn=thresholds.limit_margin_warn, hysteresis=thresholds.hysteresis)

    def lines(self, now_ns: int, thresholds: ThresholdSettings) -> list[StatusLine]:
        """Return the four lines at a receive time."""
        return [self._inputs.line(now_ns, thresholds), self._tracking(now_ns, thresholds),
                self._latency.line(now_ns, thresholds), self._workspace(now_ns, thresholds)]

    def _without_number(self, concern: str, last: str, now_ns: int,
                        thresholds: ThresholdSettings) -> StatusLine | None:
        """Return the line of a moment at which there is no number of now, else None."""
        name, phase = f'{self._arm.name}: {concern}', self.phase
        if text := phase.waiting(now_ns):
            return StatusLine(name, LEVEL_OK, text, {})
        if text := phase.stale(now_ns, thresholds):
            age_s = seconds(phase.closed_ns or now_ns, now_ns)
            return StatusLine(name, LEVEL_STALE, f'{text}; last {last}' if last else text,
                              {'age of last window (s)': f'{age_s:.1f}'})
        if text := phase.between_mappings(now_ns):
            return StatusLine(name, LEVEL_OK, text, {})
        if text := phase.disengaged(now_ns):
            since_ns = phase.disengaged_ns
            return StatusLine(name, LEVEL_OK, text, {} if since_ns is None else {
                'disengaged for (s)': f'{seconds(since_ns, now_ns):.1f}'})
        return None

    def _metric(self, name: str) -> Metric:
        measured = self._arm.measurement
        newest = None if measured is None else measured.newest
        if newest is None or name not in newest.metrics:
            return missing(NOT_CONFIGURED, '', 'not configured for this mapping')
        return newest.metrics[name]

    def _tracking(self, now_ns: int, thresholds: ThresholdSettings) -> StatusLine:
        space = self._space()
        tool = self._metric(f'tracking_error_rms{space.suffix}')
        joint = self._metric('joint_error_rms')
        compensated = self._metric(f'tracking_error_compensated_rms{space.suffix}')
        number = ''
        if tool.value is not None:
            number = f'tracking error {tool.value:.3f} {space.unit} RMS'
        elif joint.value is not None:
            number = f'joint error {joint.value:.4f} {joint.unit} RMS'
        line = self._without_number('tracking', number, now_ns, thresholds)
        if line is not None:
            return line
        measured = self._arm.measurement
        assert measured is not None and measured.newest is not None  # else it waits
        values = {'mapping': measured.newest.mapping}
        for label, metric, unit in (
                ('tracking error RMS', tool, space.unit),
                ('delay-compensated RMS', compensated, space.unit),
                ('joint error RMS', joint, joint.unit or 'rad')):
            values[f'{label} ({unit})'] = (
                metric.status if metric.value is None else f'{metric.value:.4f}')
        if tool.value is not None and compensated.value is not None:
            number += f', {compensated.value:.3f} with the delay taken out'
        if not number:
            aside = () if tool.status == NOT_CONFIGURED else ('command',)
            why = self.phase.silent(now_ns, thresholds.stale_s, but=aside)
            number = f'no tracking error: {why or tool.reason.rstrip(".")}'
        words = self._largest_term(values)
        if tool.value is None or tool.value < LEAST_DISCREPANCY:
            words = ''  # of next to nothing no part is worth a look
        return StatusLine(f'{self._arm.name}: tracking', LEVEL_OK,
                          f'{number}; {words}' if words else number, values)

    def _space(self) -> Space:
        measured = self._arm.measurement
        return POSITION if measured is None or measured.label < 0 else (
            measured.space(measured.label))

    def _largest_term(self, values: dict[str, str]) -> str:
        """Return the largest term of the newest window in plain words; add all to `values`."""
        measured = self._arm.measurement
        assert measured is not None and measured.newest is not None  # else it waits
        space, metrics = self._space(), measured.newest.metrics
        for term, words in WORDS.items():
            metric = metrics.get(f'budget_{term}_rms{space.suffix}')
            if metric is not None and metric.value is not None:
                values[f'{words} RMS ({space.unit})'] = f'{metric.value:.4f}'
        model = self._arm.setup.models.get(self._arm.boundaries.labels[measured.label])
        meant = meant_apart(clutched=model is not None and model.anchored, suffix=space.suffix)
        largest = largest_term(metrics, space.suffix, but=meant)
        if not largest:
            return ''
        cancels = measured.accumulators[measured.label].budget.cancels(largest)
        # The mapping's own part is none of the tracking error that the line begins with.
        ends = 'hand and tool' if space is POSITION else 'input and tool'
        return (f'between {ends} ' if largest == 'mapping' else '') + 'mostly ' + plain_words(
            metrics, delays_s=measured.delays_s, cancels=cancels, suffix=space.suffix,
            has_command=measured.latency.has(space.command), but=meant)

    def _workspace(self, now_ns: int, thresholds: ThresholdSettings) -> StatusLine:
        measured = self._arm.measurement
        limits = None if measured is None else measured.limits
        last = ('' if limits is None or limits.margin is None
                else f'limit margin {limits.margin:.1%} of the span of {limits.joint}')
        line = self._without_number('workspace', last, now_ns, thresholds)
        if line is not None:
            return line
        name = f'{self._arm.name}: workspace'
        if limits is None or limits.margin is None:
            return StatusLine(name, LEVEL_OK, self._why_no_margin(now_ns, thresholds), {})
        level = self._margin.level
        number = f'{limits.joint} is {limits.margin:.1%} of its span from a limit'
        if level == LEVEL_WARN:
            warn = thresholds.limit_margin_warn
            number += ' and approaching, WARN ' + (
                f'below {warn:.1%}' if limits.margin < warn
                else f'until above {warn * (1.0 + thresholds.hysteresis):.1%}')
        return StatusLine(name, level, number, {
            'nearest limit margin (share of span)': f'{limits.margin:.4f}',
            'joint': limits.joint,
        })

    def _why_no_margin(self, now_ns: int, thresholds: ThresholdSettings) -> str:
        if self._arm.robot is None:
            return f'no limit margin: {NO_ROBOT}'
        chain = self._arm.robot.chain
        if not np.any(np.isfinite(chain.lower) & np.isfinite(chain.upper)):
            return 'no limit margin: no joint of this arm has limits'
        silent = self.phase.silent(now_ns, thresholds.stale_s, but=(*OPERATOR_ROLES, 'command'))
        why = silent or 'no engaged and settled sample in the last window'
        return f'no limit margin: {why}'
