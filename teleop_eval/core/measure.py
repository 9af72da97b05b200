# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What one window of one arm measures, and what it adds to the run."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.accumulator import LATENCIES, MappingAccumulator
from teleop_eval.core.boundaries import CellStates
from teleop_eval.core.delays import DelayNow, window_metric
from teleop_eval.core.history import History, Track
from teleop_eval.core.latency import DelayEstimate, DelaySettings, estimate_delay
from teleop_eval.core.metric import INSUFFICIENT, Metric, missing
from teleop_eval.core.results import WindowResult
from teleop_eval.core.streams import Items
from teleop_eval.core.tracking import ARM_LENGTHS, joint_errors
from teleop_eval.core.window import (
    Span,
    ideal_tracks,
    on_grid,
    operator_tracks,
    pose_command_tracks,
    tool_tracks,
)

if TYPE_CHECKING:
    from teleop_eval.core.arm import ArmEvaluator

# Motion from which the fixed hand-to-tool rotation is estimated, once per arm.
TOOL_ROTATION_S = 10.0
# Time over which the limit margin is compared to tell approaching from leaving.
APPROACH_S = 0.2


@dataclass(frozen=True)
class Pair:
    """Two sides of one latency: names of tracks, columns of each, and the space they are in."""

    reference: str
    response: str
    space: str
    columns: tuple[np.ndarray | None, np.ndarray | None] = (None, None)


@dataclass
class LimitState:
    """How near the joints were to their limits at the end of the last window."""

    margin: float | None = None
    joint: str = ''
    approaching: bool = False


class ArmMeasurement:
    """Measures window after window of one arm."""

    def __init__(self, arm: ArmEvaluator) -> None:
        assert arm.period_ns is not None  # made at the freeze
        self._arm = arm
        self._period_s = arm.period_ns / 1e9
        latency = arm.settings.latency
        self._delay_settings = DelaySettings(min_s=latency.min_s, max_s=latency.max_s)
        self._latency_cells = round(latency.window_s / self._period_s)
        self._hop_windows = round(latency.hop_s / arm.settings.time.window_s)
        keep_s = latency.window_s + self._delay_settings.context_s + latency.max_s
        self._keep = round(keep_s / self._period_s) + 2
        self.accumulators: dict[int, MappingAccumulator] = {}
        self.now = {name: DelayNow() for name in LATENCIES}
        self.spaces = dict.fromkeys(LATENCIES, '')
        self.limits = LimitState()
        self.label = -1
        self.tool_rotation: np.ndarray | None = None
        self._tool_outer = np.zeros((4, 4))
        self._tool_cells = 0
        self.newest: WindowResult | None = None
        self.engaged_now = False
        self.restart()

    def restart(self) -> None:
        """Forget what must not be bridged, at the start of a segment or after silence."""
        self.history = History(self._keep)
        self._windows = 0
        for now in self.now.values():
            now.forget()
        for accumulator in self.accumulators.values():
            accumulator.restart()

    # ------------------------------------------------------------------ a window

    def window(self, span: Span, receive_ns: int) -> WindowResult | None:
        """Measure one window; None while no mapping is known."""
        arm = self._arm
        tracks, robot_items, command_items = self._tracks(span)
        delay = self._delay(span.start_ns)
        settling_s = max(arm.settings.time.settling_s, delay or 0.0)
        states = arm.boundaries.states(span, settling_ns=round(settling_s * 1e9))
        tracks |= self._ideal(tracks, states)
        self.history.extend(tracks, states.usable, states.run, states.label)
        self._windows += 1
        known = states.label[states.label >= 0]
        label = int(known[-1]) if len(known) else -1
        if label >= 0 and label != self.label:
            self.label = label
            for now in self.now.values():
                now.forget()
        self.engaged_now = bool(states.engaged[-1])
        self._count_engaged(states)
        if self._windows % self._hop_windows == 0 and label >= 0:
            self._latencies(span, label)
        metrics: dict[str, Metric] = {}
        for index in np.unique(known):
            found = self._measure(span, int(index), states, robot_items, command_items)
            if index == label:
                metrics = found
        if label < 0:
            return None
        for name in LATENCIES:
            metrics[name] = window_metric(self.now[name].estimate, self.spaces[name])
        self.newest = WindowResult(
            arm.name, arm.boundaries.labels[label], span.start_ns, span.end_ns, receive_ns,
            metrics)
        return self.newest

    def _tracks(self, span: Span) -> tuple[dict[str, Track], Items | None, Items | None]:
        arm = self._arm
        streams = {role: intake.stream for role, intake in arm.intakes.items()
                   if intake.stream in arm.frozen_streams}
        tracks = operator_tracks(
            streams.get('hand'), streams.get('operator_joints'), span, arm.operator)
        robot_items = command_items = None
        if 'robot_joints' in streams:
            robot_items = streams['robot_joints'].items(span.end_ns)
            tracks['q_r'] = on_grid(
                robot_items, span, max_gap_ns=streams['robot_joints'].max_gap_ns)
            if arm.robot is not None:
                tracks |= tool_tracks('r', tracks['q_r'], self._chain_columns, arm.robot)
        if 'command' in streams:
            stream, hold = streams['command'], arm.arm.command.hold
            command_items = stream.items(span.end_ns)
            if not arm.intakes['command'].posed:
                command_items = self._in_robot_order(command_items)
                tracks['q_c'] = on_grid(
                    command_items, span, max_gap_ns=stream.max_gap_ns, hold=hold)
                if arm.robot is not None:
                    tracks |= tool_tracks('c', tracks['q_c'], self._chain_columns, arm.robot)
            elif arm.robot is not None:
                tracks |= pose_command_tracks(
                    command_items, span, max_gap_ns=stream.max_gap_ns, hold=hold,
                    robot=arm.robot, robot_joints=self._robot_joints(tracks, span))
                command_items = None
        return tracks, robot_items, command_items

    @property
    def _chain_columns(self) -> np.ndarray:
        """Return where the chain's joints stand among the evaluated joints."""
        arm = self._arm
        assert arm.robot is not None  # asked for only with a robot
        return np.array([arm.joint_names.index(name) for name in arm.robot.chain.joint_names],
                        dtype=np.int64)

    def _in_robot_order(self, items: Items) -> Items:
        matcher = self._arm.intakes['command'].matcher
        assert matcher is not None  # joint commands always have one
        if matcher.names == self._arm.joint_names:
            return items
        columns = [matcher.names.index(name) for name in self._arm.joint_names]
        return Items(items.times_ns, items.values[:, columns], items.orientations,
                     None if items.enabled is None else items.enabled[:, columns])

    def _robot_joints(self, tracks: dict[str, Track], span: Span) -> np.ndarray:
        """Return the chain's joints (m, n), 0 where there are none: they carry the shoulder."""
        assert self._arm.robot is not None  # asked for only with a robot
        track = tracks.get('q_r')
        if track is None:
            return np.zeros((span.count, len(self._arm.robot.chain.joint_names)))
        return np.where(track.valid[:, None], track.values, 0.0)[:, self._chain_columns]

    def _ideal(self, tracks: dict[str, Track], states: CellStates) -> dict[str, Track]:
        """Return the ideal command of each cell under its own active mapping."""
        arm, count = self._arm, len(states.label)
        joined: dict[str, Track] = {}
        if arm.robot is None:
            return joined
        names = arm.operator_joint_names
        span_joints = self._robot_joints(tracks, Span(0, 1, 0, count))
        for index in np.unique(states.label[states.label >= 0]):
            model = arm.models.get(arm.boundaries.labels[index])
            if model is None:
                continue
            here = states.label == index
            for name, track in ideal_tracks(
                    model, tracks, names, span_joints, arm.robot).items():
                old = joined.get(name) or Track(
                    np.full(track.values.shape, np.nan), np.zeros(count, dtype=bool))
                joined[name] = Track(np.where(here[:, None], track.values, old.values),
                                     np.where(here, track.valid, old.valid))
        return joined

    def _count_engaged(self, states: CellStates) -> None:
        for index in np.unique(states.label[states.label >= 0]):
            self._accumulator(int(index)).engaged_cells += int(
                np.count_nonzero(states.engaged & (states.label == index)))
        for index in states.engagements:
            if index >= 0:
                self._accumulator(index).engagements += 1

    def _accumulator(self, index: int) -> MappingAccumulator:
        if index not in self.accumulators:
            self.accumulators[index] = MappingAccumulator(
                self._arm.robot, self._arm.joint_names, self._arm.joint_units, self._period_s)
        return self.accumulators[index]

    # ------------------------------------------------------------------- latency

    def pairs(self, label: int) -> dict[str, Pair | None]:
        """Return the two sides of each latency under a mapping, None where there are none."""
        have = {name for name in ('u_o', 'u_i', 'q_i', 'u_c', 'q_c', 'u_r', 'q_r')
                if self.history.get(name) is not None}
        model = self._arm.models.get(self._arm.boundaries.labels[label])
        chain = self._chain_columns if self._arm.robot is not None else None
        joints_ideal = model is not None and 'q_i' in have and model.needs == 'operator_joints'
        found: dict[str, Pair | None] = dict.fromkeys(LATENCIES)
        if joints_ideal and 'q_r' in have:
            found['latency_s'] = Pair('q_i', 'q_r', 'joints', (None, chain))
        elif model is not None and {'u_i', 'u_r'} <= have:
            found['latency_s'] = Pair('u_i', 'u_r', 'tool')
        elif model is None and {'u_o', 'u_r'} <= have:
            found['latency_s'] = Pair('u_o', 'u_r', 'hand_to_tool')
        if joints_ideal and 'q_c' in have:
            found['latency_command_s'] = Pair('q_i', 'q_c', 'joints', (None, chain))
        elif model is not None and {'u_i', 'u_c'} <= have:
            found['latency_command_s'] = Pair('u_i', 'u_c', 'tool')
        if {'q_c', 'q_r'} <= have:
            found['latency_response_s'] = Pair('q_c', 'q_r', 'joints')
        elif {'u_c', 'u_r'} <= have:
            found['latency_response_s'] = Pair('u_c', 'u_r', 'tool')
        return found

    def _latencies(self, span: Span, label: int) -> None:
        stop = len(self.history)
        start_ns = span.end_ns - self._latency_cells * span.period_ns
        for name, pair in self.pairs(label).items():
            if pair is None:
                continue
            self.spaces[name] = pair.space
            if stop < self._latency_cells:
                self.now[name].add(_too_short(
                    stop * self._period_s, self._arm.settings.latency.window_s), span.end_ns)
                continue
            estimate = self._estimate(pair, label, stop)
            self.now[name].add(estimate, span.end_ns)
            self._accumulator(label).delays[name].add(
                estimate, start_ns, span.end_ns, pair.space)

    def _estimate(self, pair: Pair, label: int, stop: int) -> DelayEstimate:
        history = self.history
        reference = history.velocity(pair.reference, self._period_s, usable_only=True)
        response = history.velocity(pair.response, self._period_s, usable_only=False)
        assert reference is not None and response is not None  # pairs() saw both
        sides = []
        for track, columns in zip((reference, response), pair.columns, strict=True):
            values = track.values if columns is None else track.values[:, columns]
            sides.append(values * self._joint_weights(columns) if pair.space == 'joints'
                         else values)
        return estimate_delay(
            sides[0], sides[1], 1.0 / self._period_s,
            valid_reference=reference.valid & (history.label == label),
            valid_response=response.valid, runs=history.run,
            window=(stop - self._latency_cells, stop), settings=self._delay_settings)

    def _joint_weights(self, columns: np.ndarray | None) -> np.ndarray:
        """Return weights (n,) that put sliding joints (m) on a scale with angles."""
        arm = self._arm
        reach = arm.robot.reach.length_m if arm.robot is not None else 1.0
        weights = np.array([1.0 / reach if unit == 'm' else 1.0 for unit in arm.joint_units])
        if columns is not None:
            return weights[columns]
        return weights if len(weights) else np.ones(1)

    def _delay(self, now_ns: int) -> float | None:
        """Return the delay a + b from ideal command to robot in use, None if not observed."""
        if self.label < 0:
            return None
        pairs, age = self.pairs(self.label), self._arm.settings.latency.max_age_s
        wanted = (['latency_command_s', 'latency_response_s']
                  if pairs['latency_command_s'] and pairs['latency_response_s']
                  else ['latency_s'])
        seen = [self.now[name].observed(now_ns, age) for name in wanted]
        return None if any(one is None for one in seen) else sum(
            one.delay_s for one in seen if one is not None)

    # ------------------------------------------------------------------- metrics

    def _measure(self, span: Span, index: int, states: CellStates, robot_items: Items | None,
                 command_items: Items | None) -> dict[str, Metric]:
        """Add one mapping's share of the window to its run, and return it as metrics."""
        accumulator = self._accumulator(index)
        here = states.usable & (states.label == index)
        found = self._track_tool(span, index, here, accumulator)
        if robot_items is not None and command_items is not None:
            found |= self._track_joints(
                span, here, robot_items, command_items, accumulator)
        for which, name in (('operator', 'u_o'), ('ideal', 'u_i'), ('robot', 'u_r')):
            track = self.history.last(name, span.count)
            if track is not None:
                accumulator.add_positions(which, track.values[track.valid & here])
        joints = self.history.last('q_r', span.count)
        if joints is not None and self._arm.robot is not None:
            q = joints.values[joints.valid & here][:, self._chain_columns]
            accumulator.add_joints(q)
            found |= self._limits(q)
        return found

    def _track_tool(self, span: Span, index: int, here: np.ndarray,
                    accumulator: MappingAccumulator) -> dict[str, Metric]:
        robot = self.history.last('u_r', span.count)
        ideal = self.history.last('u_i', span.count)
        found: dict[str, Metric] = {}
        if robot is None or ideal is None:
            return found
        raw = _norms(robot, ideal, here)
        accumulator.raw.add(raw)
        found['tracking_error_rms_norm'] = _rms(raw, ARM_LENGTHS)
        turn_robot = self.history.last('turn_r', span.count)
        turn_ideal = self.history.last('turn_i', span.count)
        if turn_robot is not None and turn_ideal is not None:
            both = here & turn_robot.valid & turn_ideal.valid
            accumulator.turn_raw.add(turn_ideal.values[both], turn_robot.values[both])
        delay = self._delay(span.end_ns)
        name = 'tracking_error_compensated_rms_norm'
        if delay is None:
            found[name] = missing(INSUFFICIENT, ARM_LENGTHS, 'no delay has been observed '
                                  f'within {self._arm.settings.latency.max_age_s:g} s')
            return found
        shift = delay / self._period_s
        earlier = self._label_earlier(span.count, shift) == index
        delayed = self.history.delayed('u_i', span.count, shift)
        assert delayed is not None  # u_i is there
        compensated = _norms(robot, delayed, earlier)
        accumulator.compensated.add(compensated)
        found[name] = _rms(compensated, ARM_LENGTHS)
        if turn_robot is not None:
            self._turn(span, index, shift, turn_robot, earlier, accumulator)
        return found

    def _turn(self, span: Span, index: int, shift: float, robot: Track, earlier: np.ndarray,
              accumulator: MappingAccumulator) -> None:
        """Add delay-compensated orientation errors, or learn the hand-to-tool rotation."""
        ideal = self.history.delayed('turn_i', span.count, shift, turn=True)
        if ideal is not None:
            both = robot.valid & ideal.valid & earlier
            accumulator.turn_compensated.add(ideal.values[both], robot.values[both])
        model = self._arm.models.get(self._arm.boundaries.labels[index])
        if model is None or not model.estimates_tool_rotation or self.tool_rotation is not None:
            return
        hand = self.history.delayed('hand_turn', span.count, shift, turn=True)
        if hand is None:
            return
        both = robot.valid & hand.valid & earlier
        turned = rotations.multiply(self._arm.operator.axes, hand.values[both])
        pairs = rotations.multiply(rotations.conjugate(turned), robot.values[both])
        self._tool_outer += pairs.T @ pairs
        self._tool_cells += len(pairs)
        if self._tool_cells * self._period_s >= TOOL_ROTATION_S:
            self.tool_rotation = np.linalg.eigh(self._tool_outer)[1][:, -1]
            self._arm.use_tool_rotation(self.tool_rotation)

    def _label_earlier(self, count: int, shift: float) -> np.ndarray:
        where = np.arange(len(self.history) - count, len(self.history)) - int(np.ceil(shift))
        return np.where(where >= 0, self.history.label[np.maximum(where, 0)], -1)

    def _track_joints(self, span: Span, here: np.ndarray, robot: Items, command: Items,
                      accumulator: MappingAccumulator) -> dict[str, Metric]:
        arm = self._arm
        inside = (robot.times_ns >= span.start_ns) & (robot.times_ns < span.end_ns)
        times, values = robot.times_ns[inside], robot.values[inside]
        usable = here[span.cell_of(times)]
        hold = arm.arm.command.hold
        gap = arm.intakes['command'].stream.max_gap_ns
        errors = joint_errors(
            times[usable], values[usable], command.times_ns, command.values, hold=hold,
            max_gap_ns=gap, enabled=command.enabled)
        accumulator.joints_raw.add(errors.errors)
        if arm.observe_joint_errors is not None:
            arm.observe_joint_errors(arm.name, errors)
        found = {'joint_error_rms': _joint_rms(errors.errors, arm.joint_units)}
        seen = self.now['latency_response_s'].observed(
            span.end_ns, arm.settings.latency.max_age_s)
        name = 'joint_error_compensated_rms'
        if seen is None:
            found[name] = missing(INSUFFICIENT, found['joint_error_rms'].unit, 'no response '
                                  f'delay observed within {arm.settings.latency.max_age_s:g} s')
            return found
        shifted = joint_errors(
            times[usable], values[usable], command.times_ns, command.values, hold=hold,
            max_gap_ns=gap, delay_ns=round(seen.delay_s * 1e9), enabled=command.enabled)
        accumulator.joints_compensated.add(shifted.errors)
        found[name] = _joint_rms(shifted.errors, arm.joint_units)
        return found

    def _limits(self, q: np.ndarray) -> dict[str, Metric]:
        """Return the window's smallest limit margin, and note whether a limit comes nearer."""
        assert self._arm.robot is not None  # asked for only with a robot
        chain = self._arm.robot.chain
        limited = np.isfinite(chain.lower) & np.isfinite(chain.upper)
        if not len(q) or not limited.any():
            self.limits = LimitState()
            return {}
        low, high = chain.lower[limited], chain.upper[limited]
        margins = np.clip(np.minimum(q[:, limited] - low, high - q[:, limited]) / (high - low),
                          0.0, 0.5)
        names = [name for name, has in zip(chain.joint_names, limited, strict=True) if has]
        joint = int(margins[-1].argmin())
        before = margins[max(0, len(margins) - 1 - round(APPROACH_S / self._period_s)), joint]
        self.limits = LimitState(float(margins[-1, joint]), names[joint],
                                 bool(margins[-1, joint] < before))
        return {'limit_margin_min': Metric(float(margins.min()), '1', n=1, samples=len(q))}


def _norms(robot: Track, ideal: Track, here: np.ndarray) -> np.ndarray:
    both = here & robot.valid & ideal.valid
    return np.linalg.norm(robot.values[both] - ideal.values[both], axis=1)


def _rms(magnitudes: np.ndarray, unit: str) -> Metric:
    if not magnitudes.size:
        return missing(INSUFFICIENT, unit, 'no engaged and settled sample in this window')
    return Metric(float(np.sqrt(np.mean(magnitudes ** 2))), unit, None, 1, magnitudes.size)


def _joint_rms(errors: np.ndarray, units: tuple[str, ...]) -> Metric:
    """Return the RMS over the joints of the commoner unit, as over the run."""
    unit = max(sorted(set(units)), key=units.count) if units else 'rad'
    chosen = errors[:, np.array([one == unit for one in units], dtype=bool)]
    return _rms(np.abs(chosen[np.isfinite(chosen)]), unit)


def _too_short(have_s: float, need_s: float) -> DelayEstimate:
    nan = float('nan')
    return DelayEstimate(
        delay_s=None, standard_error_s=None, correlation=nan, status=INSUFFICIENT,
        reason=f'the run so far has {have_s:.0f} s of a latency window of {need_s:g} s',
        samples=0, speed_reference=nan, speed_response=nan, snr=nan)
