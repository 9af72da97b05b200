# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
One pair of arms: takes samples, freezes time base and grid, and closes windows.

An arm lives in segments. A segment warms up for some seconds, during which samples are kept
raw; then time base, grid and gap lengths are frozen and all that came is put on the grid. A
clock that steps back, a clock that wanders off or an input that appears late begins a new
segment; what has been accumulated stays.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from teleop_eval.core.boundaries import Boundaries
from teleop_eval.core.errors import TeleopEvalError
from teleop_eval.core.geometry import RobotGeometry, operator_geometry, robot_geometry
from teleop_eval.core.intake import NEVER_A_GAP_NS, Intake
from teleop_eval.core.joint_match import JointMatcher
from teleop_eval.core.mappings import MappingModel, make_mapping
from teleop_eval.core.measure import ArmMeasurement
from teleop_eval.core.resample import default_max_gap_ns
from teleop_eval.core.results import WindowResult
from teleop_eval.core.samples import BoolSample, Sample, TextSample
from teleop_eval.core.settings import ArmSettings, Settings
from teleop_eval.core.streams import HeldState, SampledStream
from teleop_eval.core.timebase import TimeBase, choose_time_base, observe_clock
from teleop_eval.core.tracking import JointErrors
from teleop_eval.core.transport_age import TransportAge
from teleop_eval.core.window import Span

SAMPLED_ROLES = ('hand', 'operator_joints', 'robot_joints', 'command')
UNMODELLED = 'unmodelled'
# Without a description nobody knows which joints turn and which slide.
UNKNOWN_UNIT = 'rad or m'
# An arm whose description does not come is evaluated without it after this time.
DESCRIPTION_WAIT_NS = 30_000_000_000
MIN_GRID_HZ = 50.0
NEVER_NS = 2 ** 63 - 1


class ArmEvaluator:
    """Streaming evaluation of one arm; its state follows from the samples alone."""

    def __init__(self, name: str, settings: Settings, *, urdf: str | None = None) -> None:
        self.name = name
        self.settings = settings
        self.arm: ArmSettings = settings.arms[name]
        self.operator = operator_geometry(self.arm.operator)
        self.robot: RobotGeometry | None = None
        self.models: dict[str, MappingModel] = {}
        self.time_base: TimeBase | None = None
        self.period_ns: int | None = None
        self.segments = 0
        self.problems: dict[str, int] = {}
        self.notes: dict[str, int] = {}
        self.intakes: dict[str, Intake] = {}
        self.ages: dict[str, TransportAge] = {}
        self.results: list[WindowResult] = []
        self.states: dict[str, HeldState] = {}
        if self.arm.engaged.topic:
            self.states['engaged'] = HeldState('engaged', self.arm.engaged.topic)
        if self.arm.active_mapping.topic:
            self.states['active_mapping'] = HeldState(
                'active_mapping', self.arm.active_mapping.topic)
        self.boundaries = Boundaries(
            self.states.get('engaged'), self.states.get('active_mapping'), self._fixed_label())
        self.measurement: ArmMeasurement | None = None
        self.joint_names: tuple[str, ...] = ()
        self.joint_units: tuple[str, ...] = ()
        self.operator_joint_names: tuple[str, ...] = ()
        self.observe_joint_errors: Callable[[str, JointErrors], None] | None = None
        self._waiting: list[tuple[str, int, Sample]] = []
        self._awaits_description = bool(self.arm.robot.description_topic)
        self.described: str | None = None
        self._ready = False
        self._warm_from_ns: int | None = None
        self._origin_ns = 0
        self._next_cell = 0
        self.frozen_streams: list[SampledStream] = []
        self.next_check_ns = NEVER_NS
        if urdf is not None:
            self._describe(urdf, self.arm.robot.description_file or 'description_file')
        if not self._awaits_description:
            self._make_ready()

    # ------------------------------------------------------------------ intake

    def add(self, role: str, receive_ns: int, sample: Sample) -> None:
        """Take one sample of a role; what cannot be used becomes a problem sentence."""
        if role in self.states:
            self._add_state(self.states[role], receive_ns, sample)
        elif role == 'description':
            if isinstance(sample, TextSample):
                self._description(sample.text)
        elif not self._ready:
            self._waiting.append((role, receive_ns, sample))
            if receive_ns - self._waiting[0][1] > DESCRIPTION_WAIT_NS:
                self._problem(f'{self.name}: no robot description came on '
                              f'{self.arm.robot.description_topic} within '
                              f'{DESCRIPTION_WAIT_NS // 10 ** 9} s; evaluated without it.')
                self._make_ready()
        elif role in self.intakes:
            self._add_sampled(self.intakes[role], receive_ns, sample)

    def _add_state(self, state: HeldState, receive_ns: int, sample: Sample) -> None:
        value: object
        if isinstance(sample, BoolSample):
            value = sample.value
        elif isinstance(sample, TextSample):
            value = sample.text
        else:
            self._problem(f'{self.name}: {state.role} ({state.topic}): '
                          f'{type(sample).__name__} is of no use here.')
            return
        state.counts.messages += 1
        state.add(receive_ns, value,
                  self._closed_until_ns if self.time_base is not None else None)

    def _add_sampled(self, intake: Intake, receive_ns: int, sample: Sample) -> None:
        stream = intake.stream
        stream.counts.messages += 1
        self.ages[stream.role].add(receive_ns, sample.stamp_ns)
        rows = intake.rows(receive_ns, sample)
        if not rows:
            return
        if stream.stepped_back(sample.stamp_ns):
            if self.time_base is None:
                stream.drop_raw()
            elif self.time_base.by_stamp:
                self._flush(receive_ns)
                self._new_segment(f'{stream.role}: header stamps stepped back', keep=False)
        if self.time_base is not None and stream not in self.frozen_streams:
            self._new_segment(f'{stream.role} appeared', keep=True)
        if intake.planned:
            stream.replace_after(rows[0][1] or rows[0][0])
        for row in rows:
            stream.add(row)
        if self.time_base is None:
            if self._warm_from_ns is None:
                self._warm_from_ns = receive_ns
                self.next_check_ns = receive_ns + round(self.settings.time.warm_up_s * 1e9)
        else:
            if self.next_check_ns == NEVER_NS:
                self._plan_next()
            if stream.last_ns is not None and stream.last_ns >= self._close_at_ns:
                self._close_ready(receive_ns)

    def advance(self, receive_ns: int) -> None:
        """Let time pass: freeze after the warm-up, close windows that waited long enough."""
        if self.time_base is None:
            if self._ready and self._warm_from_ns is not None and any(
                    self._closes_windows(intake) and len(intake.stream.raw) > 1
                    for intake in self.intakes.values()):
                self._freeze(receive_ns)
        else:
            self._close_ready(receive_ns)

    # ------------------------------------------------------- description, models

    def _description(self, urdf: str) -> None:
        if urdf == self.described:
            return
        if self.described is not None:
            self._note(f'{self.name}: another robot description came during the run; the first '
                       'one is kept.')
            return
        late = self._ready
        self._describe(urdf, str(self.arm.robot.description_topic))
        if late:
            self._new_segment('the robot description appeared', keep=False)
        self._make_ready()

    def _describe(self, urdf: str, source: str) -> None:
        self.described = urdf
        try:
            self.robot = robot_geometry(self.arm, urdf, source=source)
        except TeleopEvalError as error:
            self._problem(f'{self.name}: {error}')

    def _make_ready(self) -> None:
        """Make models and matchers, now that the robot is known or known to stay unknown."""
        robot = self.robot
        self.models = {}
        for label, mapping in self.arm.mappings.items():
            self.boundaries.index(label)
            if robot is None:
                continue
            try:
                self.models[label] = make_mapping(label, mapping, self.operator, robot)
            except TeleopEvalError as error:
                self._problem(f'{self.name}: {error}')
        self.joint_names = self.arm.robot.joint_names or (
            robot.chain.joint_names if robot is not None else ())
        self.joint_units = tuple(
            UNKNOWN_UNIT if robot is None else robot.unit_of(name) for name in self.joint_names)
        self.operator_joint_names = tuple(sorted({
            source.source for mapping in self.arm.mappings.values()
            if mapping.kind == 'joint_space' for source in mapping.joints.values()}))
        topics = {'hand': self.arm.operator.hand_topic,
                  'operator_joints': self.arm.operator.joints_topic,
                  'robot_joints': self.arm.robot.joints_topic,
                  'command': self.arm.command.topic}
        matchers = {
            'operator_joints': JointMatcher(self.operator_joint_names, {}),
            'robot_joints': JointMatcher(self.joint_names, self.arm.robot.joints),
            'command': JointMatcher(
                self.arm.command.joint_order or self.joint_names, self.arm.command.joints),
        }
        for role in SAMPLED_ROLES:
            topic, matcher = topics[role], matchers.get(role)
            if topic is None or (matcher is not None and not matcher.names):
                continue
            self.intakes[role] = Intake(self.name, SampledStream(role, topic), matcher)
            self.ages.setdefault(role, TransportAge())
        self._ready = True
        waiting, self._waiting = self._waiting, []
        for role, receive_ns, sample in waiting:
            self.add(role, receive_ns, sample)

    def use_tool_rotation(self, hand_to_tool: np.ndarray) -> None:
        """Give the estimated rotation (4,) x, y, z, w to every mapping that lacks one."""
        for model in self.models.values():
            model.take_tool_rotation(hand_to_tool)
        x, y, z, w = hand_to_tool
        self._note(f'{self.name}: hand-to-tool rotation estimated from motion: x {x:.4f}, '
                   f'y {y:.4f}, z {z:.4f}, w {w:.4f}.')

    def _fixed_label(self) -> str | None:
        if self.arm.active_mapping.topic:
            return None
        if self.arm.active_mapping.fixed:
            return self.arm.active_mapping.fixed
        return next(iter(self.arm.mappings)) if len(self.arm.mappings) == 1 else UNMODELLED

    # ------------------------------------------------------------------ segments

    def _freeze(self, receive_ns: int) -> None:
        """Choose time base, gap lengths and grid, and put what has come on them."""
        present = {role: intake for role, intake in self.intakes.items() if intake.stream.raw}
        clocks = {
            role: observe_clock([row[1] for row in intake.stream.raw],
                                [row[0] for row in intake.stream.raw])
            for role, intake in present.items()}
        self.time_base = choose_time_base(
            clocks, tolerance_ns=round(self.settings.time.clock_tolerance_s * 1e9))
        if self.time_base.reason:
            self._note(f'{self.name}: time base is receive time because '
                       f'{self.time_base.reason}.')
        self.segments += 1
        rates, firsts = [], []
        for role, intake in present.items():
            stream = intake.stream
            times = np.array([row[1 if self.time_base.by_stamp else 0] for row in stream.raw])
            stream.freeze(by_stamp=self.time_base.by_stamp,
                          offset_ns=self.time_base.offset_of(role),
                          max_gap_ns=self._max_gap_ns(intake, times))
            first = stream.first_ns()
            if self._closes_windows(intake) and first is not None and len(times) > 1:
                rates.append(_rate_hz(times))
                firsts.append(first)
        self.frozen_streams = [intake.stream for intake in present.values()]
        if self.period_ns is None:
            rate = self.settings.time.grid_rate_hz or max(MIN_GRID_HZ, round(min(rates)))
            self.period_ns = round(1e9 / rate)
        # A first stamp that is far off must not open hours of empty windows.
        warm_up_ns = round(self.settings.time.warm_up_s * 1e9)
        self._origin_ns = max(min(firsts), max(firsts) - warm_up_ns)
        self._next_cell = 0
        for state in self.states.values():
            state.shift(self.time_base.common_offset_ns)
        if self.measurement is None:
            self.measurement = ArmMeasurement(self)
        self.measurement.restart()
        self._plan_next()
        self._close_ready(receive_ns)

    def _max_gap_ns(self, intake: Intake, times_ns: np.ndarray) -> int:
        if intake.planned or (intake.stream.role == 'command' and self.arm.command.hold):
            return NEVER_A_GAP_NS
        if self.settings.time.max_gap_s is not None:
            return round(self.settings.time.max_gap_s * 1e9)
        return default_max_gap_ns(np.unique(times_ns))

    def _closes_windows(self, intake: Intake) -> bool:
        return not intake.planned and not (
            intake.stream.role == 'command' and self.arm.command.hold)

    def new_segment(self, reason: str) -> None:
        """Begin a new segment from outside, as after a step of the receive clock."""
        if self.time_base is not None:
            self._new_segment(reason, keep=False)

    def _new_segment(self, reason: str, *, keep: bool) -> None:
        """Warm up anew; with `keep`, samples no window has used come along."""
        self._note(f'{self.name}: a new segment began: {reason}.')
        self.time_base = None
        self._warm_from_ns = None
        self.boundaries.restart()
        for state in self.states.values():
            state.shift(0)
        for intake in self.intakes.values():
            stream = intake.stream
            rows = stream.remaining() if stream in self.frozen_streams else list(stream.raw)
            stream.restart()
            if keep:
                for row in rows:
                    stream.add(row)
                if rows and (self._warm_from_ns is None or rows[0][0] < self._warm_from_ns):
                    self._warm_from_ns = rows[0][0]
        self.frozen_streams = []
        warm_up_ns = round(self.settings.time.warm_up_s * 1e9)
        self.next_check_ns = (NEVER_NS if self._warm_from_ns is None
                              else self._warm_from_ns + warm_up_ns)

    # ------------------------------------------------------------------- windows

    @property
    def _window_cells(self) -> int:
        assert self.period_ns is not None  # windows exist only after the freeze
        return max(1, round(self.settings.time.window_s * 1e9 / self.period_ns))

    @property
    def _closed_until_ns(self) -> int:
        return self._origin_ns + self._next_cell * (self.period_ns or 0)

    def _plan_next(self) -> None:
        """Note when the next window ends, and from when it may close without a stream."""
        assert self.period_ns is not None
        self._close_at_ns = self._closed_until_ns + self._window_cells * self.period_ns
        self.next_check_ns = min(self._deadline_ns(stream) for stream in self._closing())

    def _closing(self) -> list[SampledStream]:
        return [intake.stream for intake in self.intakes.values()
                if intake.stream in self.frozen_streams and self._closes_windows(intake)]

    def _deadline_ns(self, stream: SampledStream) -> int:
        lateness_ns = round(self.settings.time.lateness_s * 1e9)
        return self._close_at_ns - stream.offset_ns + lateness_ns

    def _close_ready(self, receive_ns: int) -> None:
        """Close every window whose samples are all there or no longer waited for."""
        while self.time_base is not None:
            closing = self._closing()
            for stream in closing:
                there = stream.last_ns is not None and stream.last_ns >= self._close_at_ns
                if not there and receive_ns <= self._deadline_ns(stream):
                    return
            silent = self._silent_windows(closing)
            if silent is None:
                # Nothing to evaluate: look again when a sample comes.
                self.next_check_ns = NEVER_NS
                return
            if silent > 0:
                self._jump(silent)
                continue
            self._close(self._window_cells, receive_ns)
            self._check_clocks()

    def _silent_windows(self, closing: list[SampledStream]) -> int | None:
        """Return the number of windows before the next sample, None if there is no sample."""
        assert self.period_ns is not None
        starts = [start for stream in closing
                  if (start := stream.next_from(self._closed_until_ns)) is not None]
        if not starts:
            return None
        return int((min(starts) - self._closed_until_ns) // (self._window_cells * self.period_ns))

    def _jump(self, windows: int) -> None:
        """
        Leave out windows without any sample.

        A clock that steps ahead by hours must not cost an empty window every two seconds.
        """
        assert self.measurement is not None  # made at the freeze
        self._next_cell += windows * self._window_cells
        self.boundaries.restart()
        self.measurement.restart()
        self._plan_next()

    def _close(self, cells: int, receive_ns: int) -> None:
        assert self.measurement is not None and self.period_ns is not None
        span = Span(self._origin_ns, self.period_ns, self._next_cell, cells)
        result = self.measurement.window(span, receive_ns)
        if result is not None:
            self.results.append(result)
        self._next_cell += cells
        for stream in self.frozen_streams:
            stream.close(span.end_ns)
        for state in self.states.values():
            state.close(span.end_ns)
        for age in self.ages.values():
            age.close_window(receive_ns)
        self._plan_next()

    def _check_clocks(self) -> None:
        """Begin a new segment if a stream's stamps have left the frozen offset."""
        if self.time_base is None or not self.time_base.by_stamp:
            return
        start_ns = self._closed_until_ns
        for stream in self._closing():
            offset = stream.offset_in(start_ns, start_ns + 10 ** 18)
            if offset is None:
                continue
            moved = offset - stream.offset_ns
            if abs(moved) > self.settings.time.clock_tolerance_s * 1e9:
                self._new_segment(f'the clock of {stream.role} moved by {moved / 1e9:+.3f} s',
                                  keep=True)
                return

    def _flush(self, receive_ns: int) -> None:
        """Close what is there, the last window as far as it goes."""
        while self.time_base is not None and self.period_ns is not None:
            lasts = [stream.last_ns for stream in self._closing() if stream.last_ns is not None]
            # The last cell may end beyond the last sample: the grid masks it, but the joint
            # error, which is not gridded, still sees that sample.
            cells = (max(lasts, default=0) - self._closed_until_ns) // self.period_ns + 1
            if cells <= 0:
                return
            self._close(min(int(cells), self._window_cells), receive_ns)

    def finish(self, receive_ns: int) -> None:
        """Close everything; nothing may be added afterwards."""
        if not self._ready:
            if self._awaits_description and self.robot is None:
                self._problem(f'{self.name}: no robot description came on '
                              f'{self.arm.robot.description_topic}; evaluated without it.')
            self._make_ready()
        self.advance(receive_ns)
        if self.time_base is not None:
            self._close_ready(receive_ns)
            self._flush(receive_ns)
        for role, intake in self.intakes.items():
            if not intake.stream.counts.messages:
                self._problem(f'{self.name}: no message came on {intake.stream.topic} ({role}).')
            elif sentence := intake.never_matched():
                self._problem(sentence)

    # --------------------------------------------------------------------- words

    def _problem(self, sentence: str) -> None:
        self.problems[sentence] = self.problems.get(sentence, 0) + 1

    def _note(self, sentence: str) -> None:
        self.notes[sentence] = self.notes.get(sentence, 0) + 1

    def all_problems(self) -> list[str]:
        """Return every problem sentence, each with how often it was met if more than once."""
        found = dict(self.problems)
        for intake in self.intakes.values():
            found.update(intake.problems)
        return [text if times == 1 else f'{text} ({times} times)'
                for text, times in found.items()]


def _rate_hz(times_ns: np.ndarray) -> float:
    """Return the mean rate of samples (n,), pauses left out."""
    periods = np.diff(np.unique(times_ns))
    typical = np.median(periods) if len(periods) else 0
    kept = periods[periods <= 5 * typical]
    return float(1e9 / kept.mean()) if len(kept) and kept.mean() > 0 else MIN_GRID_HZ
