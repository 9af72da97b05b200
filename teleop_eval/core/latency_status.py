# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
What /diagnostics says of the latency of one arm.

The level follows the median of the last three windows in a row that told the delay. When the
newest window does not tell it, the level is held as long as the last value serves
(`latency.max_age_s`), with that value's age in the text; after that nothing is known, and the
level is OK with the reason.
"""

from __future__ import annotations

from dataclasses import dataclass

from teleop_eval.core.arm import ArmEvaluator
from teleop_eval.core.latency import DelayEstimate
from teleop_eval.core.levels import RisingLevel
from teleop_eval.core.measure import ArmMeasurement
from teleop_eval.core.metric import UNOBSERVABLE, Metric
from teleop_eval.core.phase import OPERATOR_ROLES, Phase, seconds, spoken
from teleop_eval.core.results import LEVEL_ERROR, LEVEL_OK, LEVEL_STALE, LEVEL_WARN, StatusLine
from teleop_eval.core.settings import ThresholdSettings

_SIDES = {'latency_s': ('ideal command', 'robot'),
          'latency_command_s': ('ideal command', 'command'),
          'latency_response_s': ('command', 'robot')}
_NO_PAIR = ('nothing to compare: a latency needs the robot and a command, or the robot and an '
            'operator input')
# Younger than this, a value is as old as its window.
_AT_ONCE_S = 1.0


@dataclass(frozen=True)
class _Last:
    """The last delay that was observed, and when its window closed."""

    delay_s: float
    sides: tuple[str, str]
    receive_ns: int

    def text(self) -> str:
        return f'last {" -> ".join(self.sides)} {self.delay_s * 1e3:.1f} ms'


class LatencyStatus:
    """Makes the line of the latency; its memory is filled by closing windows alone."""

    def __init__(self, arm: ArmEvaluator, phase: Phase) -> None:
        self._arm = arm
        self._phase = phase
        self._of: tuple[ArmMeasurement, int, str] | None = None
        self._forget()

    def _forget(self) -> None:
        self._rising = RisingLevel()
        self._last: _Last | None = None
        self._estimate: DelayEstimate | None = None
        self._closed_ns: int | None = None

    def window_closed(self, receive_ns: int, thresholds: ThresholdSettings) -> None:
        """Look at the newest window; only one that ends a hop has a new estimate."""
        measured = self._arm.measurement
        if measured is None or measured.newest is None:
            return
        # Without a mapping model or without operator there is still command -> robot.
        name = ('latency_s' if measured.latency.pairs(measured.label)['latency_s']
                else 'latency_response_s')
        if self._of is None or self._of[0] is not measured or self._of[1:] != (
                measured.label, name):
            self._of = (measured, measured.label, name)
            self._forget()
        before, self._estimate = self._estimate, (
            measured.latency.now(measured.label)[name].estimate)
        if self._estimate is None or self._estimate is before:
            return
        self._closed_ns = receive_ns
        if self._estimate.delay_s is not None:
            if self._too_old(receive_ns):
                self._rising = RisingLevel()
            self._last = _Last(self._estimate.delay_s, self._sides(), receive_ns)
        self.judge(thresholds)

    def judge(self, thresholds: ThresholdSettings) -> None:
        """Let the level follow the value of now, if there is one."""
        value = self._level_value
        if value is not None:
            self._rising.update(
                value, warn=thresholds.latency_warn_s, error=thresholds.latency_error_s,
                hysteresis=thresholds.hysteresis)

    @property
    def _level_value(self) -> float | None:
        """Return the median of the last three windows in a row, s, None without three."""
        if self._of is None:
            return None
        measured, label, name = self._of
        return measured.latency.now(label)[name].level_value

    @property
    def _observed(self) -> bool:
        """Tell whether the newest window told the delay."""
        return self._estimate is not None and self._estimate.delay_s is not None

    def _too_old(self, now_ns: int) -> bool:
        """Tell whether there is no value, or none that still serves."""
        return self._last is None or (
            seconds(self._last.receive_ns, now_ns) > self._arm.settings.latency.max_age_s)

    def _metric(self, name: str) -> Metric | None:
        measured = self._arm.measurement
        newest = None if measured is None else measured.newest
        return None if newest is None else newest.metrics.get(name)

    def _sides(self) -> tuple[str, str]:
        assert self._of is not None  # a window has closed
        metric = self._metric(self._of[2])
        by_hand = metric is not None and metric.details.get('space') == 'hand_to_tool'
        return ('hand', 'tool') if by_hand else _SIDES[self._of[2]]

    def line(self, now_ns: int, thresholds: ThresholdSettings) -> StatusLine:
        """Return the line at a receive time."""
        name, phase = f'{self._arm.name}: latency', self._phase
        if text := phase.waiting(now_ns):
            return StatusLine(name, LEVEL_OK, text, {})
        stale = phase.stale(now_ns, thresholds, closed_ns=self._closed_ns,
                            every_s=self._arm.settings.latency.hop_s)
        if stale:
            aged = self._last is not None and self._closed_ns is not None and (
                seconds(self._last.receive_ns, self._closed_ns) > _AT_ONCE_S)
            text = '; '.join([stale, *self._last_words(now_ns, aged=aged)])
            return StatusLine(name, LEVEL_STALE, text, self._last_values(now_ns))
        if text := phase.between_mappings(now_ns):
            return StatusLine(name, LEVEL_OK, text, {})
        if not self._observed and self._too_old(now_ns):
            level = LEVEL_OK
        else:
            level = self._rising.level
        return StatusLine(name, level, self._message(now_ns, level, thresholds),
                          self._values(now_ns))

    def _message(self, now_ns: int, level: int, thresholds: ThresholdSettings) -> str:
        assert self._of is not None  # a window has closed
        measured, label, name = self._of
        if measured.latency.pairs(label)[name] is None:
            return _NO_PAIR
        disengaged = self._phase.disengaged(now_ns)
        if self._observed and not disengaged:
            return '; '.join([self._now_words(), *self._level_words(level, thresholds)])
        if self._too_old(now_ns):
            return disengaged or self._why(now_ns, thresholds)
        why = disengaged or f'not observed now ({self._reason(now_ns, thresholds)})'
        words = [why, *self._last_words(now_ns, aged=True)]
        if level >= LEVEL_WARN:
            max_age_s = self._arm.settings.latency.max_age_s
            words.append(f'level held until it is {spoken(max_age_s)} old')
        return '; '.join(words)

    def _why(self, now_ns: int, thresholds: ThresholdSettings) -> str:
        """Return why there is no latency at all."""
        reason = self._reason(now_ns, thresholds)
        if self._estimate is not None and self._estimate.status == UNOBSERVABLE:
            return f'unobservable: {reason}'
        return f'no latency{"" if self._last else " yet"}: {reason}'

    def _reason(self, now_ns: int, thresholds: ThresholdSettings) -> str:
        """Return why the newest window tells no delay, in the names of its two sides."""
        assert self._of is not None  # a window has closed
        other = OPERATOR_ROLES if self._of[2] == 'latency_response_s' else ('command',)
        if silent := self._phase.silent(now_ns, thresholds.stale_s, but=other):
            return silent
        if self._estimate is None:
            return 'no latency window has closed ' + (
                'since the interruption' if self._last else 'yet')
        reference, response = self._sides()
        text = self._estimate.reason.rstrip('.')
        text = text.replace('The reference', f'the {reference}')
        text = text.replace('The response', f'the {response}')
        return text[:1].lower() + text[1:]

    def _now_words(self) -> str:
        assert self._estimate is not None and self._estimate.delay_s is not None
        error, sides = self._estimate.standard_error_s, self._sides()
        spread = '' if error is None else f' +- {error * 1e3:.1f}'
        text = f'{" -> ".join(sides)} {self._estimate.delay_s * 1e3:.1f}{spread} ms'
        return text if sides[0] != 'hand' else f'{text} (the mapping is not modelled)'

    def _level_words(self, level: int, thresholds: ThresholdSettings) -> list[str]:
        """Return what raised the level, and which part of the chain to look at."""
        if level < LEVEL_WARN:
            return []
        value = self._level_value
        if value is None:
            return ['level held until 3 windows in a row tell the delay']
        word, limit_s = (('ERROR', thresholds.latency_error_s) if level == LEVEL_ERROR
                         else ('WARN', thresholds.latency_warn_s))
        text = f'median of 3 windows {value * 1e3:.1f} ms, {word} '
        if value >= limit_s:
            text += f'from {limit_s * 1e3:.0f} ms'
        else:
            text += f'until below {limit_s * (1.0 - thresholds.hysteresis) * 1e3:.0f} ms'
        return [text, *self._larger_part()]

    def _larger_part(self) -> list[str]:
        parts = {name: metric.value for name in ('latency_command_s', 'latency_response_s')
                 if (metric := self._metric(name)) is not None and metric.value is not None}
        if len(parts) < 2:
            return []
        name = max(parts, key=lambda one: parts[one])
        return [f'mostly {" -> ".join(_SIDES[name])}, {parts[name] * 1e3:.1f} ms']

    def _last_words(self, now_ns: int, *, aged: bool) -> list[str]:
        if self._last is None:
            return []
        age = f', {spoken(seconds(self._last.receive_ns, now_ns))} old' if aged else ''
        return [self._last.text() + age]

    def _last_values(self, now_ns: int) -> dict[str, str]:
        if self._last is None:
            return {}
        return {'last value (s)': f'{self._last.delay_s:.4f}',
                'age of last value (s)': f'{seconds(self._last.receive_ns, now_ns):.1f}'}

    def _values(self, now_ns: int) -> dict[str, str]:
        measured = self._arm.measurement
        assert measured is not None and measured.newest is not None  # a window has closed
        values = {'mapping': measured.newest.mapping}
        for name in _SIDES:
            if (metric := self._metric(name)) is not None:
                values[f'{name[:-2]} (s)'] = (
                    metric.status if metric.value is None else f'{metric.value:.4f}')
        if (value := self._level_value) is not None:
            values['median of last 3 windows (s)'] = f'{value:.4f}'
        if not self._observed and not self._too_old(now_ns):
            values |= self._last_values(now_ns)
        return values
