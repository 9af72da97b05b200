# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The three delays of one arm, window after window."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from teleop_eval.core.accumulator import LATENCIES, MappingAccumulator
from teleop_eval.core.delays import DelayNow, Observed, window_metric
from teleop_eval.core.frequency_response import FrequencyResponse
from teleop_eval.core.history import History
from teleop_eval.core.latency import DelayEstimate, DelaySettings, Sides, estimate_delay
from teleop_eval.core.mappings.base import VELOCITY as GIVES_VELOCITY
from teleop_eval.core.mappings.unmodelled import NOT_MODELLED, UNMODELLED
from teleop_eval.core.metric import INSUFFICIENT, NOT_CONFIGURED, UNOBSERVABLE, Metric, missing
from teleop_eval.core.silence import Heard, inputs_of, never_came, no_orientation, why_no_sample
from teleop_eval.core.window import Span

if TYPE_CHECKING:
    from teleop_eval.core.arm import ArmEvaluator


_RATE_SIDES = {'latency_s': ('w_i', 'w_r'), 'latency_command_s': ('w_i', 'w_c'),
               'latency_response_s': ('w_c', 'w_r')}
HAND_TO_TOOL = 'hand_to_tool'
# Share of a window that must have valid pairs: what lags and filters take is a quarter of 10 s.
MIN_SHARE = 0.4
# What a user calls the two sides; the operator's is the bare hand where nothing is modelled.
_NAMES = {'latency_s': ('ideal command', 'robot'),
          'latency_command_s': ('ideal command', 'command'),
          'latency_response_s': ('command', 'robot')}


@dataclass(frozen=True)
class Pair:
    """
    Two sides of one latency: names of tracks, columns of each, and the space they are in.

    In the space 'velocity' the tracks are velocities already.
    """

    reference: str
    response: str
    space: str
    columns: tuple[np.ndarray | None, np.ndarray | None] = (None, None)


class WindowLatency:
    """
    Estimates each delay at every hop, and knows which delay is in use now.

    Attributes
    ----------
    keep_cells
        Length of the history that an estimate needs.
    hop_windows
        Number of windows from one estimate to the next.

    """

    def __init__(self, arm: ArmEvaluator, period_s: float,
                 chain_columns: np.ndarray | None) -> None:
        self._arm = arm
        self._period_s = period_s
        self._chain_columns = chain_columns
        latency = arm.settings.latency
        self._settings = DelaySettings(
            min_s=latency.min_s, max_s=latency.max_s,
            min_duration_s=MIN_SHARE * latency.window_s)
        self.cells = round(latency.window_s / period_s)
        # The filters run in inside the window: nothing from before it reaches the estimate,
        # so that a window after a step of the delay knows only the new one.
        self._run_in_cells = round(self._settings.context_s / period_s)
        self.keep_cells = self.cells + 2
        self.hop_windows = round(latency.hop_s / arm.settings.time.window_s)
        self._now: dict[int, dict[str, DelayNow]] = {}
        self._spaces = dict.fromkeys(LATENCIES, '')
        self._seen: set[str] = set()

    def now(self, label: int) -> dict[str, DelayNow]:
        """Return what is known at this moment of each delay under a mapping."""
        if label not in self._now:
            self._now[label] = {name: DelayNow() for name in LATENCIES}
        return self._now[label]

    def forget(self) -> None:
        """Forget the delays: their times have no meaning on a new time axis."""
        self._now.clear()

    def interrupt(self) -> None:
        """
        Go on after a pause or under another mapping.

        The delays still serve for their time, but windows do not follow each other.
        """
        for known in self._now.values():
            for now in known.values():
                now.interrupt()

    def saw(self, names: set[str]) -> None:
        """Note which tracks there are."""
        self._seen |= names

    def has(self, name: str) -> bool:
        """Tell whether a track was ever there."""
        return name in self._seen

    def pairs(self, label: int) -> dict[str, Pair | None]:
        """Return the two sides of each latency under a mapping, None where there are none."""
        have = self._seen
        model = self._arm.setup.models.get(self._arm.boundaries.labels[label])
        chain = self._chain_columns
        if model is not None and model.gives == GIVES_VELOCITY:
            return {name: Pair(*sides, 'velocity') if have.issuperset(sides) else None
                    for name, sides in _RATE_SIDES.items()}
        needs = None if model is None else model.needs
        has_ideal = needs in have and 'u_i' in have
        joints_ideal = has_ideal and 'q_i' in have and needs == 'operator_joints'
        found: dict[str, Pair | None] = dict.fromkeys(LATENCIES)
        if joints_ideal and 'q_r' in have:
            found['latency_s'] = Pair('q_i', 'q_r', 'joints', (None, chain))
        elif has_ideal and 'u_r' in have:
            found['latency_s'] = Pair('u_i', 'u_r', 'tool')
        elif model is None and {'u_o', 'u_r'} <= have:
            found['latency_s'] = Pair('u_o', 'u_r', HAND_TO_TOOL)
        if joints_ideal and 'q_c' in have:
            found['latency_command_s'] = Pair('q_i', 'q_c', 'joints', (None, chain))
        elif has_ideal and 'u_c' in have:
            found['latency_command_s'] = Pair('u_i', 'u_c', 'tool')
        if {'q_c', 'q_r'} <= have:
            found['latency_response_s'] = Pair('q_c', 'q_r', 'joints')
        elif {'u_c', 'u_r'} <= have:
            found['latency_response_s'] = Pair('u_c', 'u_r', 'tool')
        return found

    def measure(self, history: History, span: Span, label: int,
                accumulator: MappingAccumulator) -> None:
        """Estimate each delay over the window that ends with the span."""
        start_ns, now = span.end_ns - self.cells * span.period_ns, self.now(label)
        for name, pair in self.pairs(label).items():
            if pair is None:
                continue
            self._spaces[name] = pair.space
            if len(history) < self.cells:
                need_s = self._arm.settings.latency.window_s
                now[name].add(_too_short(len(history) * self._period_s, need_s), span.end_ns)
                continue
            estimate = self._estimate(history, pair, label, self._sides(name, pair))
            if estimate.status == INSUFFICIENT:
                estimate = self._blamed(estimate, name, history, label)
            now[name].add(estimate, span.end_ns)
            accumulator.delays[name].add(estimate, start_ns, span.end_ns, pair.space)

    def feed_responses(self, history: History, span: Span, label: int, here: np.ndarray,
                       responses: Mapping[str, FrequencyResponse]) -> None:
        """
        Add one window to the frequency responses, by name of the latency with the same sides.

        `here` (count,) tells which cells are usable under the mapping.
        """
        pairs = self.pairs(label)
        for name, response in responses.items():
            pair = pairs[name]
            if pair is None or pair.space == HAND_TO_TOOL:
                continue  # the response to a command is asked for, not to the bare hand
            reference, robot = (history.last(side, span.count)
                                for side in (pair.reference, pair.response))
            if reference is None or robot is None:
                continue
            seen = self.in_use(span.end_ns, label, (name,))
            before, after = self._on_one_scale(pair, reference.values, robot.values)
            response.add(
                before, after, here & reference.valid & robot.valid, history.run[-span.count:],
                shift_cells=0 if seen is None else round(seen.delay_s / self._period_s))

    def _on_one_scale(self, pair: Pair, *sides: np.ndarray) -> list[np.ndarray]:
        """Return both sides (m, d) with the same joints, sliding ones beside angles."""
        found = []
        for values, columns in zip(sides, pair.columns, strict=True):
            chosen = values if columns is None else values[:, columns]
            found.append(chosen * self._joint_weights(columns) if pair.space == 'joints'
                         else chosen)
        return found

    def _blamed(self, estimate: DelayEstimate, name: str, history: History,
                label: int) -> DelayEstimate:
        """Return the estimate with the input that is to blame, if there is one."""
        heard, last = Heard(), slice(-self.cells, None)
        heard.add(history, history.usable[last] & (history.label[last] == label))
        why = why_no_sample(self._arm, self._roles(name, label), heard,
                            where=' in the latency window')
        why = why or no_orientation(
            self._arm, self._arm.boundaries.labels[label], name, heard)
        return dataclasses.replace(estimate, reason=why) if why else estimate

    def _roles(self, name: str, label: int) -> tuple[str, ...]:
        return inputs_of(self._arm, self._arm.boundaries.labels[label], name)

    def _sides(self, name: str, pair: Pair) -> Sides:
        """Return what the sides of a latency are called, and the unit of their velocities."""
        reference, response = _NAMES[name]
        if pair.space == HAND_TO_TOOL:
            reference = 'hand'
        if pair.space != 'joints':
            return Sides(reference, response, 'arm lengths/s')
        units = sorted(set(self._arm.setup.joint_units))
        # Sliding joints are weighted by the arm's length, if that is known.
        scaled = self._arm.robot is not None
        return Sides(reference, response, ' or '.join(
            'rad/s' if unit == 'rad' else 'arm lengths/s' if scaled else 'rad/s or m/s'
            for unit in reversed(units)))

    def _estimate(self, history: History, pair: Pair, label: int, sides: Sides) -> DelayEstimate:
        if pair.space == 'velocity':
            reference = history.usable_track(pair.reference)
            response = history.get(pair.response)
        else:
            reference = history.velocity(pair.reference, self._period_s, usable_only=True)
            response = history.velocity(pair.response, self._period_s, usable_only=False)
        lacking = [name for name, track in (
            (sides.reference, reference), (sides.response, response)) if track is None]
        if reference is None or response is None:
            return _none(f'the {" and the ".join(lacking)} has not come since the last '
                         'interruption')
        scaled = self._on_one_scale(pair, reference.values, response.values)
        stop = len(history)
        return estimate_delay(
            scaled[0], scaled[1], 1.0 / self._period_s,
            valid_reference=reference.valid & (history.label == label),
            valid_response=response.valid, runs=history.run,
            window=(stop - self.cells + self._run_in_cells, stop), settings=self._settings,
            sides=sides)

    def _joint_weights(self, columns: np.ndarray | None) -> np.ndarray:
        """Return weights (n,) that put sliding joints (m) on a scale with angles."""
        arm = self._arm
        reach = arm.robot.reach.length_m if arm.robot is not None else 1.0
        weights = np.array(
            [1.0 / reach if unit == 'm' else 1.0 for unit in arm.setup.joint_units])
        return weights if columns is None else weights[columns]

    def metrics(self, label: int) -> dict[str, Metric]:
        """Return the newest estimate of each delay as a metric."""
        return {
            name: self._no_pair(name, label) if pair is None
            else window_metric(self.now(label)[name].estimate, self._spaces[name])
            for name, pair in self.pairs(label).items()}

    def _no_pair(self, name: str, label: int) -> Metric:
        roles = self._roles(name, label)
        if all(role in self._arm.intakes for role in roles) and (
                never := never_came(self._arm, roles)):
            return missing(INSUFFICIENT, 's', never)
        mapping = self._arm.arm.mappings.get(self._arm.boundaries.labels[label])
        if name == 'latency_command_s' and 'command' in self._arm.intakes and (
                mapping is not None and mapping.kind == UNMODELLED):
            return missing(NOT_CONFIGURED, 's', NOT_MODELLED)
        return missing(NOT_CONFIGURED, 's', 'one of the two sides of this delay is not there')

    def in_use(self, now_ns: int, label: int, names: Sequence[str] = ()) -> Observed | None:
        """
        Return the delay under a mapping, None if it is not known.

        It is the sum over `names`, by default a + b from ideal command to robot.
        """
        if label < 0:
            return None
        age_s = self._arm.settings.latency.max_age_s
        stages = names or self._stages(label)
        seen = [self.now(label)[name].observed(now_ns, age_s) for name in stages]
        known = [one for one in seen if one is not None]
        if len(known) < len(seen):
            return None
        return Observed(sum(one.delay_s for one in known), max(one.age_s for one in known))

    def why_none(self, label: int, unit: str, names: Sequence[str] = ()) -> Metric:
        """Return the metric for what needs a delay when `in_use` knows none."""
        estimates = [self.now(label)[name].estimate for name in names or self._stages(label)]
        tried = any(one is not None and one.status == UNOBSERVABLE for one in estimates)
        return missing(
            UNOBSERVABLE if tried else INSUFFICIENT, unit, 'no delay has been observed within '
            f'{self._arm.settings.latency.max_age_s:g} s')

    def _stages(self, label: int) -> list[str]:
        pairs = self.pairs(label)
        return (['latency_command_s', 'latency_response_s']
                if pairs['latency_command_s'] and pairs['latency_response_s']
                else ['latency_s'])


def _none(reason: str) -> DelayEstimate:
    nan = float('nan')
    return DelayEstimate(
        delay_s=None, standard_error_s=None, correlation=nan, status=INSUFFICIENT,
        reason=reason, samples=0, speed_reference=nan, speed_response=nan, snr=nan)


def _too_short(have_s: float, need_s: float) -> DelayEstimate:
    return _none(f'the run so far has {have_s:.0f} s of a latency window of {need_s:g} s')
