# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What one window of one arm measures, and what it adds to the run."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.accumulator import MappingAccumulator, total_unit
from teleop_eval.core.arm_setup import has_input
from teleop_eval.core.boundaries import CellStates
from teleop_eval.core.delays import Observed
from teleop_eval.core.history import History, Track
from teleop_eval.core.ideal_command import IdealCommand
from teleop_eval.core.mappings.base import VELOCITY as GIVES_VELOCITY
from teleop_eval.core.metric import INSUFFICIENT, NOT_CONFIGURED, Metric, missing
from teleop_eval.core.operator_tracks import operator_tracks
from teleop_eval.core.results import WindowResult
from teleop_eval.core.silence import Heard, explained
from teleop_eval.core.streams import Items
from teleop_eval.core.tracking import JointErrors, joint_errors
from teleop_eval.core.velocity import velocity_tracks
from teleop_eval.core.window import (
    Span,
    on_grid,
    pose_command_tracks,
    tool_tracks,
)
from teleop_eval.core.window_budget import POSITION, VELOCITY, Delays, Space, window_budget
from teleop_eval.core.window_latency import WindowLatency
from teleop_eval.core.window_limits import LimitState, limit_state, limited_joints

if TYPE_CHECKING:
    from teleop_eval.core.arm import ArmEvaluator

# Motion from which the fixed hand-to-tool rotation is estimated, once per arm.
TOOL_ROTATION_S = 10.0


class ArmMeasurement:
    """Measures window after window of one arm."""

    def __init__(self, arm: ArmEvaluator) -> None:
        assert arm.period_ns is not None  # made at the freeze
        self._arm = arm
        self._period_s = arm.period_ns / 1e9
        self._columns = self._chain_columns()
        self.latency = WindowLatency(
            arm, self._period_s, None if arm.robot is None else self._columns)
        self.ideal = IdealCommand(arm, self._period_s)
        self._has_velocities = any(
            model.gives == GIVES_VELOCITY for model in arm.setup.models.values())
        self.accumulators: dict[int, MappingAccumulator] = {}
        self.delays_s: Delays = {}
        self._published: dict[str, str] = {}
        self.limits = LimitState()
        self.label = -1
        self.tool_rotation: np.ndarray | None = None
        self._tool_outer = np.zeros((4, 4))
        self._tool_cells = 0
        self.newest: WindowResult | None = None
        self.engaged_now = False
        self.restart()

    def restart(self) -> None:
        """Forget what must not be bridged, at the start of a segment."""
        self._interrupt()
        self.latency.forget()
        for accumulator in self.accumulators.values():
            accumulator.restart()

    def skip(self, start_ns: int, end_ns: int) -> None:
        """Pass over a stretch of the time axis without samples."""
        self._interrupt()
        for index in self._arm.boundaries.skip(
                start_ns, end_ns, settling_ns=self._settling_ns(start_ns)):
            self._accumulator(index).engagements += 1

    def _interrupt(self) -> None:
        self.history = History(self.latency.keep_cells)
        self.ideal.interrupt()
        self.latency.interrupt()
        self._earlier: Items | None = None
        self._windows = 0

    def _settling_ns(self, now_ns: int) -> int:
        seen = self.latency.in_use(now_ns, self.label)
        settling_s = self._arm.settings.time.settling_s
        return round(max(settling_s, 0.0 if seen is None else seen.delay_s) * 1e9)

    def window(self, span: Span, receive_ns: int) -> WindowResult | None:
        """Measure one window; None before any mapping was known."""
        arm = self._arm
        tracks, robot_items, command_items = self._tracks(span)
        states = arm.boundaries.states(span, settling_ns=self._settling_ns(span.start_ns))
        if arm.robot is not None:
            tracks |= self.ideal.tracks(
                span, states, tracks, self._robot_joints(tracks, span.count))
        self.latency.saw(set(tracks))
        self.history.extend(tracks, states.usable, states.run, states.label)
        self._windows += 1
        known = states.label[states.label >= 0]
        label = int(known[-1]) if len(known) else -1
        if label >= 0 and label != self.label:
            self.label = label
            self.latency.interrupt()
        self.engaged_now = bool(states.engaged[-1])
        self._count_engaged(states)
        if self._windows % self.latency.hop_windows == 0 and label >= 0:
            self.latency.measure(self.history, span, label, self._accumulator(label))
        self.limits = LimitState()
        metrics: dict[str, Metric] = {}
        for index in np.unique(known):
            found = self._measure(span, int(index), states, robot_items, command_items)
            if index == label:
                metrics = found
        if label < 0:
            # What was published must not stand as if it were of now.
            return None if not self._published else WindowResult(
                arm.name, '', span.start_ns, span.end_ns, receive_ns,
                {name: missing(INSUFFICIENT, unit, 'no mapping is active')
                 for name, unit in self._published.items()})
        heard = Heard()
        heard.add(self.history, states.usable & (states.label == label))
        metrics = explained(metrics, arm, arm.boundaries.labels[label], heard,
                            where=' in this window')
        metrics |= self.latency.metrics(label)
        for name, unit in self._published.items():
            if name not in metrics:
                metrics[name] = missing(
                    NOT_CONFIGURED, unit, 'this metric is that of another mapping')
        self._published |= {name: metric.unit for name, metric in metrics.items()}
        self.newest = WindowResult(
            arm.name, arm.boundaries.labels[label], span.start_ns, span.end_ns, receive_ns,
            metrics)
        return self.newest

    def _tracks(self, span: Span) -> tuple[dict[str, Track], Items | None, Items | None]:
        arm = self._arm
        streams = {role: intake.stream for role, intake in arm.intakes.items()
                   if intake.stream in arm.frozen_streams}
        tracks = operator_tracks(arm, streams, span)
        robot_items = command_items = None
        if 'robot_joints' in streams:
            robot_items = streams['robot_joints'].items(span.end_ns)
            tracks['q_r'] = on_grid(
                robot_items, span, max_gap_ns=streams['robot_joints'].max_gap_ns)
            if arm.robot is not None:
                tracks |= tool_tracks('r', tracks['q_r'], self._columns, arm.robot)
        if 'command' in streams:
            stream, hold = streams['command'], arm.arm.command.hold
            command_items = stream.items(span.end_ns)
            if arm.intakes['command'].velocities:
                command_items = None
            elif not arm.intakes['command'].posed:
                command_items = self._in_robot_order(command_items)
                tracks['q_c'] = on_grid(
                    command_items, span, max_gap_ns=stream.max_gap_ns, hold=hold)
                if arm.robot is not None:
                    tracks |= tool_tracks('c', tracks['q_c'], self._columns, arm.robot)
                command_items = self._with_earlier(command_items, span)
            else:
                if arm.robot is not None:
                    tracks |= pose_command_tracks(
                        command_items, span, max_gap_ns=stream.max_gap_ns, hold=hold,
                        robot=arm.robot, robot_joints=self._robot_joints(tracks, span.count))
                command_items = None
        if self._has_velocities and arm.robot is not None:
            tracks |= velocity_tracks(
                {role: intake for role, intake in arm.intakes.items() if role in streams}, span,
                arm.robot, hold=arm.arm.command.hold)
        return tracks, robot_items, command_items

    def _with_earlier(self, command: Items, span: Span) -> Items:
        """Return the commands with those a robot sample of this window may follow late."""
        joined = command if self._earlier is None else self._earlier.followed_by(command)
        longest_ns = round(self._arm.settings.latency.max_s * 1e9)
        self._earlier = joined.since(span.end_ns - longest_ns)
        return joined

    def _chain_columns(self) -> np.ndarray:
        """Return where the chain's joints stand among the evaluated joints."""
        arm = self._arm
        names = () if arm.robot is None else arm.robot.chain.joint_names
        return np.array([arm.setup.joint_names.index(name) for name in names], dtype=np.int64)

    def _in_robot_order(self, items: Items) -> Items:
        matcher = self._arm.intakes['command'].matcher
        assert matcher is not None  # joint commands always have one
        if matcher.names == self._arm.setup.joint_names:
            return items
        columns = [matcher.names.index(name) for name in self._arm.setup.joint_names]
        return items.picked(columns)

    def _robot_joints(self, tracks: dict[str, Track], count: int) -> np.ndarray:
        """Return the chain's joints (m, n), 0 where there are none: they carry the shoulder."""
        assert self._arm.robot is not None  # asked for only with a robot
        track = tracks.get('q_r')
        if track is None:
            return np.zeros((count, len(self._arm.robot.chain.joint_names)))
        return np.where(track.valid[:, None], track.values, 0.0)[:, self._columns]

    def _count_engaged(self, states: CellStates) -> None:
        for index in np.unique(states.label[states.label >= 0]):
            self._accumulator(int(index)).engaged_cells += int(
                np.count_nonzero(states.engaged & (states.label == index)))
        for index in states.engagements:
            self._accumulator(index).engagements += 1

    def _accumulator(self, index: int) -> MappingAccumulator:
        if index not in self.accumulators:
            setup = self._arm.setup
            space = self.space(index)
            self.accumulators[index] = MappingAccumulator(
                self._arm.robot, setup.joint_names, setup.joint_units, self._period_s,
                suffix=space.suffix, unit=space.unit)
        return self.accumulators[index]

    def space(self, index: int) -> Space:
        """Return whether a mapping is judged by positions or, as a rate, by velocities."""
        model = self._arm.setup.models.get(self._arm.boundaries.labels[index])
        return VELOCITY if model is not None and model.gives == GIVES_VELOCITY else POSITION

    def _measure(self, span: Span, index: int, states: CellStates, robot_items: Items | None,
                 command_items: Items | None) -> dict[str, Metric]:
        """Add one mapping's share of the window to its run, and return it as metrics."""
        accumulator = self._accumulator(index)
        here = states.usable & (states.label == index)
        accumulator.heard.add(self.history, here)
        found = self._track_tool(span, index, here, accumulator)
        budget = window_budget(
            self.history, self.latency, span, index, here, self.space(index), self._period_s)
        if budget is not None:
            accumulator.budget.add(budget.terms)
            found |= budget.metrics
            if index == self.label:
                self.delays_s = budget.delays_s
        found |= self._track_joints(span, index, here, (robot_items, command_items))
        self.latency.feed_responses(self.history, span, index, here, accumulator.responses)
        for which, name in (('operator', 'u_o'), ('ideal', 'u_i'), ('robot', 'u_r')):
            track = self.history.last(name, span.count)
            if track is not None:
                accumulator.add_positions(which, track.values[track.valid & here])
        if self._arm.robot is not None:
            found |= self._use_joints(span, index, here, accumulator)
        return found

    def _use_joints(self, span: Span, index: int, here: np.ndarray,
                    accumulator: MappingAccumulator) -> dict[str, Metric]:
        """Add the joint positions to the run, and return how near a limit they come."""
        assert self._arm.robot is not None  # asked for only with a robot
        chain = self._arm.robot.chain
        joints = self.history.last('q_r', span.count)
        q = (np.zeros((0, len(chain.joint_names))) if joints is None
             else joints.values[joints.valid & here][:, self._columns])
        accumulator.add_joints(q)
        if not limited_joints(chain).any():
            return {}
        state = limit_state(chain, q, self._period_s)
        if index == self.label:
            self.limits = state
        return {'limit_margin_min': _nothing('1') if state.least is None
                else Metric(state.least, '1', n=1, samples=len(q))}

    def _track_tool(self, span: Span, index: int, here: np.ndarray,
                    accumulator: MappingAccumulator) -> dict[str, Metric]:
        space = self.space(index)
        robot = self.history.last(space.robot, span.count)
        ideal = self.history.last(space.ideal, span.count)
        found: dict[str, Metric] = {}
        if robot is None or ideal is None:
            return {f'tracking_error_{which}{space.suffix}': _nothing(space.unit)
                    for which in ('rms', 'compensated_rms') if self._modelled(index)}
        raw = _norms(robot, ideal, here)
        accumulator.raw.add(raw)
        found[f'tracking_error_rms{space.suffix}'] = _rms(raw, space.unit)
        turns = {name: self.history.last(name, span.count)
                 for name in ('turn_r', 'turn_i', 'spin_r', 'spin_i')}
        if (turn_robot := turns['turn_r']) and (turn_ideal := turns['turn_i']):
            both = here & turn_robot.valid & turn_ideal.valid
            accumulator.turn_raw.add(turn_ideal.values[both], turn_robot.values[both])
        if space is VELOCITY and (spin := turns['spin_r']) and (spin_ideal := turns['spin_i']):
            accumulator.spin.add(_norms(spin, spin_ideal, here))
        seen = self.latency.in_use(span.end_ns, index)
        name = f'tracking_error_compensated_rms{space.suffix}'
        if seen is None:
            found[name] = self.latency.why_none(index, space.unit)
            return found
        shift = seen.delay_s / self._period_s
        earlier = self.history.label_delayed(span.count, shift) == index
        delayed = self.history.delayed(space.ideal, span.count, shift)
        assert delayed is not None  # the ideal command is there
        compensated = _norms(robot, delayed, earlier)
        accumulator.compensated.add(compensated)
        found[name] = _rms(compensated, space.unit, seen)
        if turn_robot is not None and space is POSITION:
            self._turn(span, index, shift, turn_robot, earlier, accumulator)
        return found

    def _turn(self, span: Span, index: int, shift: float, robot: Track, earlier: np.ndarray,
              accumulator: MappingAccumulator) -> None:
        """Add delay-compensated orientation errors, or learn the hand-to-tool rotation."""
        ideal = self.history.delayed('turn_i', span.count, shift, turn=True)
        if ideal is not None:
            both = robot.valid & ideal.valid & earlier
            accumulator.turn_compensated.add(ideal.values[both], robot.values[both])
        model = self._arm.setup.models.get(self._arm.boundaries.labels[index])
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
            rotation = np.linalg.eigh(self._tool_outer)[1][:, -1]
            self.tool_rotation = rotation if rotation[3] >= 0.0 else -rotation
            self._arm.use_tool_rotation(self.tool_rotation)

    def _modelled(self, index: int) -> bool:
        """Tell whether an ideal command is configured for a mapping, though none may come."""
        model = self._arm.setup.models.get(self._arm.boundaries.labels[index])
        return model is not None and has_input(
            model.needs, self._arm.intakes, self._arm.operator)

    def _track_joints(self, span: Span, index: int, here: np.ndarray,
                      items: tuple[Items | None, Items | None]) -> dict[str, Metric]:
        """Add joint errors against the command, raw and at the observed response delay."""
        arm, accumulator = self._arm, self._accumulator(index)
        robot, command = items
        if robot is None or command is None:
            intake = arm.intakes.get('command')
            if intake is None or intake.posed or intake.velocities:
                return {}
            return {name: _nothing(total_unit(arm.setup.joint_units))
                    for name in ('joint_error_rms', 'joint_error_compensated_rms')}
        inside = (robot.times_ns >= span.start_ns) & (robot.times_ns < span.end_ns)
        times, values = robot.times_ns[inside], robot.values[inside]
        stream = arm.intakes['command'].stream

        def errors_of(usable: np.ndarray, delay_ns: int) -> JointErrors:
            return joint_errors(
                times[usable], values[usable], command.times_ns, command.values,
                hold=stream.held, max_gap_ns=stream.max_gap_ns, delay_ns=delay_ns,
                enabled=command.enabled, turning=arm.intakes['robot_joints'].turning)

        raw = errors_of(here[span.cell_of(times)], 0)
        accumulator.joints_raw.add(raw.errors)
        if arm.observe_joint_errors is not None:
            arm.observe_joint_errors(arm.name, raw)
        found = {'joint_error_rms': _joint_rms(raw.errors, arm.setup.joint_units)}
        response, name = ('latency_response_s',), 'joint_error_compensated_rms'
        seen = self.latency.in_use(span.end_ns, index, response)
        if seen is None:
            found[name] = self.latency.why_none(index, found['joint_error_rms'].unit, response)
            return found
        delay_ns = round(seen.delay_s * 1e9)
        shifted = errors_of(self._usable_at(span, times - delay_ns, index), delay_ns)
        accumulator.joints_compensated.add(shifted.errors)
        found[name] = _joint_rms(shifted.errors, arm.setup.joint_units, seen)
        return found

    def _usable_at(self, span: Span, times_ns: np.ndarray, index: int) -> np.ndarray:
        """Tell which times (n,) before the span's end lie in usable cells of a mapping."""
        cells = len(self.history) - span.count + span.cell_of(times_ns)
        kept = np.maximum(cells, 0)
        return (cells >= 0) & self.history.usable[kept] & (self.history.label[kept] == index)


def _norms(robot: Track, ideal: Track, here: np.ndarray) -> np.ndarray:
    both = here & robot.valid & ideal.valid
    return np.linalg.norm(robot.values[both] - ideal.values[both], axis=1)


def _nothing(unit: str) -> Metric:
    return missing(INSUFFICIENT, unit, 'no engaged and settled sample in this window')


def _rms(magnitudes: np.ndarray, unit: str, delay: Observed | None = None) -> Metric:
    if not magnitudes.size:
        return _nothing(unit)
    details: dict[str, object] = {} if delay is None else {
        'delay_s': delay.delay_s, 'delay_age_s': delay.age_s}
    return Metric(float(np.sqrt(np.mean(magnitudes ** 2))), unit, None, 1, magnitudes.size,
                  details=details)


def _joint_rms(errors: np.ndarray, units: tuple[str, ...],
               delay: Observed | None = None) -> Metric:
    """Return the RMS over the joints of the commoner unit, as over the run."""
    unit = total_unit(units)
    chosen = errors[:, np.array([one == unit for one in units], dtype=bool)]
    return _rms(np.abs(chosen[np.isfinite(chosen)]), unit, delay)
