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

from collections import Counter
from collections.abc import Callable, Collection

import numpy as np

from teleop_eval.core import arm_setup
from teleop_eval.core.arm_setup import DESCRIPTION, OPERATOR_DESCRIPTION, ArmSetup, undescribed
from teleop_eval.core.boundaries import Boundaries
from teleop_eval.core.calibration_interval import CalibrationInterval
from teleop_eval.core.errors import TeleopEvalError
from teleop_eval.core.freezing import can_freeze, freeze
from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry, robot_geometry
from teleop_eval.core.intake import RUN_ON, Intake
from teleop_eval.core.measure import ArmMeasurement
from teleop_eval.core.operator_side import OperatorSide
from teleop_eval.core.results import WindowResult
from teleop_eval.core.samples import Sample, TextSample, TrajectorySample
from teleop_eval.core.segment import NEVER_NS, Segment, SegmentInputs
from teleop_eval.core.sentences import Sentences
from teleop_eval.core.settings import ArmSettings, Settings
from teleop_eval.core.streams import HeldState, SampledStream
from teleop_eval.core.timebase import TimeBase
from teleop_eval.core.tracking import JointErrors
from teleop_eval.core.transport_age import TransportAge

# An arm whose description does not come is evaluated without it after this time.
DESCRIPTION_WAIT_NS = 30_000_000_000
_WHOSE = {DESCRIPTION: 'robot', OPERATOR_DESCRIPTION: 'operator'}


class ArmEvaluator:
    """
    Streaming evaluation of one arm; its state follows from the samples alone.

    Parameters
    ----------
    name
        The arm's name in the settings.
    settings
        Of the whole evaluation.
    urdf, operator_urdf
        Descriptions of the robot and of the operator's arm, None if they come on a topic or
        not at all.
    calibration
        One that began before, as when the evaluation is reset.
    results
        Where closed windows go, shared by all arms so that they keep the order of closing.

    Attributes
    ----------
    predicts
        Whether every configured mapping is predicted beside the active one; set it at once.

    """

    def __init__(self, name: str, settings: Settings, *, urdf: str | None = None,
                 operator_urdf: str | None = None, calibration: CalibrationInterval | None = None,
                 results: list[WindowResult] | None = None) -> None:
        self.name = name
        self.predicts = False
        self.settings = settings
        self.arm: ArmSettings = settings.arms[name]
        self.operator_side = OperatorSide(self.arm.operator, calibration)
        self.robot: RobotGeometry | None = None
        self.setup = ArmSetup()
        self.intakes: dict[str, Intake] = {}
        self.ages: dict[str, TransportAge] = {}
        self.time_base: TimeBase | None = None
        self.chosen: TimeBase | None = None
        self.ever_by_receive = False
        self.period_ns: int | None = None
        self.segments = 0
        self.problems = Sentences()
        self.notes = Sentences()
        self.results: list[WindowResult] = [] if results is None else results
        self.states = {
            role: HeldState(role, topic) for role, topic in (
                ('engaged', self.arm.engaged.topic),
                ('active_mapping', self.arm.active_mapping.topic)) if topic}
        self.boundaries = Boundaries(
            self.states.get('engaged'), self.states.get('active_mapping'),
            arm_setup.fixed_label(self.arm), labels=self.arm.mappings)
        self.measurement: ArmMeasurement | None = None
        self.observe_joint_errors: Callable[[str, JointErrors], None] | None = None
        self.described: dict[str, str] = {}
        self.unused: Counter[str] = Counter()  # messages without an intake, by role
        self.frozen_streams: list[SampledStream] = []
        self.next_check_ns = NEVER_NS
        self._waiting: list[tuple[str, int, Sample]] = []
        self._ready = False
        self._warm_from_ns: int | None = None
        self._stepped_at_ns = -NEVER_NS
        self._segment: Segment | None = None
        for role, text in ((DESCRIPTION, urdf), (OPERATOR_DESCRIPTION, operator_urdf)):
            if text is not None:
                self._describe(role, text)
        if not undescribed(self.arm, self.described):
            self._make_ready()

    def add(self, role: str, receive_ns: int, sample: Sample) -> None:
        """Take one sample of a role; what cannot be used becomes a problem sentence."""
        intake = self.intakes.get(role)
        if intake is not None:
            if self.operator_side.over(role, receive_ns):
                self._calibrate(receive_ns)
                intake = self.intakes[role]
            self._add_sampled(intake, receive_ns, sample)
        elif role in self.states:
            self._add_state(self.states[role], receive_ns, sample)
        elif role in (DESCRIPTION, OPERATOR_DESCRIPTION):
            self._add_description(role, receive_ns, sample)
        else:
            self.unused[role] += 1
            if self._ready:
                return
            self._waiting.append((role, receive_ns, sample))
            if receive_ns - self._waiting[0][1] > DESCRIPTION_WAIT_NS:
                self._say_undescribed(f' within {DESCRIPTION_WAIT_NS // 10 ** 9} s')
                self._make_ready()

    def _add_state(self, state: HeldState, receive_ns: int, sample: Sample) -> None:
        value = arm_setup.state_value(state.role, sample, self.arm.engaged.button)
        if value is None:
            self.problems.say(f'{self.name}: {state.role} ({state.topic}): '
                              f'{arm_setup.no_state(sample, self.arm.engaged.button)}')
            return
        state.counts.messages += 1
        if sentence := arm_setup.unknown_label(self.name, self.arm, value):
            self.problems.say(sentence)
        segment = self._segment
        state.add(receive_ns, value, None if segment is None else segment.closed_until_ns)

    def _add_sampled(self, intake: Intake, receive_ns: int, sample: Sample) -> None:
        stream = intake.stream
        stream.counts.messages += 1
        if not isinstance(sample, TrajectorySample):
            # A plan is stamped with its start, not with its sending.
            self.ages[stream.role].add(receive_ns, sample.stamp_ns)
        if not (rows := intake.rows(receive_ns, sample)):
            return
        if self.operator_side.uncalibrated:
            self.operator_side.take(stream.role, receive_ns, rows)
        back_ns = stream.stepped_back(sample.stamp_ns)
        if back_ns and (stream.by_stamp or self.time_base is None):
            self._step_back(intake, receive_ns, back_ns)
        if self.time_base is not None and not stream.frozen:
            self._new_segment(f'{stream.role} appeared', keep=True)
        if stream.by_stamp and not sample.stamp_ns and stream.closes_windows:
            intake.problem('a message without header stamp came after header stamps were '
                           'chosen as time base; it is not used')
            return
        stream.add(rows)
        if self._segment is None:
            if self._warm_from_ns is None:
                self._warm_up_from(receive_ns)
        elif stream.closes_windows:
            if self.next_check_ns == NEVER_NS:
                self._segment.plan_next()
                self.next_check_ns = self._segment.next_check_ns
            if receive_ns > self.next_check_ns or (
                    stream.last_ns is not None and stream.last_ns >= self._segment.end_ns):
                self._close_ready(receive_ns)

    def _step_back(self, intake: Intake, receive_ns: int, back_ns: int) -> None:
        """Begin anew after stamps fell back, and say so."""
        if self.time_base is None:
            intake.stream.drop_raw()
        else:
            self._flush(receive_ns)
            self._new_segment(f'{intake.stream.role}: header stamps stepped back', keep=False)
        # One clock often stamps several streams, and they step together.
        if receive_ns - self._stepped_at_ns > self.settings.time.warm_up_s * 1e9:
            intake.stepped_back(back_ns)
        self._stepped_at_ns = receive_ns

    def advance(self, receive_ns: int) -> None:
        """Let time pass: freeze after the warm-up, close windows that waited long enough."""
        if self.time_base is not None:
            self._close_ready(receive_ns)
        elif self._warm_from_ns is not None:
            present = {role: intake.stream for role, intake in self.intakes.items()
                       if intake.stream.raw}
            if can_freeze(present):
                self._freeze(present, receive_ns)
            else:
                # Too little to tell a rate from: warm up anew from the next sample on.
                for stream in present.values():
                    stream.drop_raw(keep=1)
                self._warm_up_from(None)

    def _add_description(self, role: str, receive_ns: int, sample: Sample) -> None:
        if not isinstance(sample, TextSample) or sample.text == self.described.get(role):
            return
        whose = _WHOSE[role]
        if role in self.described:
            self.notes.say(f'{self.name}: another {whose} description came during the run; the '
                           'first one is kept.')
            return
        if self._ready:
            self._flush(receive_ns)
        self._describe(role, sample.text)
        if self._ready:
            self._begin_anew(f'the {whose} description came')
        elif not undescribed(self.arm, self.described):
            self._make_ready()

    def _describe(self, role: str, urdf: str) -> None:
        self.described[role] = urdf
        side = self.arm.robot if role == DESCRIPTION else self.arm.operator
        source = side.description_file or side.description_topic or 'the description'
        try:
            if role == DESCRIPTION:
                self.robot = robot_geometry(self.arm, urdf, source=source)
            else:
                self.operator_side.describe(urdf, source=source)
        except TeleopEvalError as error:
            text = str(error)
            end = '' if text.endswith(('.', '?')) else '.'
            self.problems.say(f'{self.name}: {text}{end}')

    def _begin_anew(self, reason: str) -> None:
        """Drop the metrics: nothing measured before fits to what is measured from now on."""
        self._new_segment(f'{reason}; the metrics begin here', keep=False)
        self.measurement = None
        self._make_ready()

    @property
    def operator(self) -> OperatorGeometry:
        """Return the operator's geometry as known by now."""
        return self.operator_side.geometry

    def _calibrate(self, receive_ns: int) -> None:
        """Fit the sweeps, whose interval is over; with a new geometry the metrics begin."""
        found = self.operator_side.fit(self.intakes, self.setup.operator_joint_names)
        if not found.accepted:
            self.operator_side.apply()
            self._say_uncalibrated()
            return
        self._flush(receive_ns)
        self.operator_side.apply()
        self.notes.say(f'{self.name}: {self.operator.note}.')
        self._begin_anew('the operator was calibrated')

    def _say_uncalibrated(self) -> None:
        """Say why a calibration gave nothing, and what was not said while it might have."""
        self.problems.say(f'{self.name}: {self.operator_side.calibration_sentence()}')
        if self.operator.missing:
            for problem in self.setup.problems:
                self.problems.say(problem)

    def _make_ready(self) -> None:
        """Make models and inputs, now that the robot is known or known to stay unknown."""
        before = self.intakes
        self.setup = arm_setup.make_setup(self.name, self.arm, self.operator, self.robot)
        if not self.operator_side.pending:
            for problem in self.setup.problems:
                self.problems.say(problem)
        self.intakes = self.setup.intakes
        for role, intake in self.intakes.items():
            self.ages.setdefault(role, TransportAge())
            if role in before:
                intake.stream.counts = before[role].stream.counts
                intake.problems = before[role].problems
        self._ready = True
        waiting, self._waiting = self._waiting, []
        self.unused.subtract(role for role, _, _ in waiting)
        for role, receive_ns, sample in waiting:
            self.add(role, receive_ns, sample)

    def use_tool_rotation(self, hand_to_tool: np.ndarray) -> None:
        """Give the estimated rotation (4,) x, y, z, w to every mapping that lacks one."""
        for model in self.setup.models.values():
            model.take_tool_rotation(hand_to_tool)
        if self.measurement is not None and self.measurement.ideal.candidates is not None:
            self.measurement.ideal.candidates.take_tool_rotation(hand_to_tool)
        shown = ', '.join(f'{part:.4f}' for part in hand_to_tool)
        self.notes.say(f'{self.name}: hand-to-tool rotation estimated from motion: x, y, z, w = '
                       f'{shown}.')

    def _warm_up_from(self, receive_ns: int | None) -> None:
        self._warm_from_ns = receive_ns
        self.next_check_ns = NEVER_NS if receive_ns is None else (
            receive_ns + round(self.settings.time.warm_up_s * 1e9))

    def _freeze(self, present: dict[str, SampledStream], receive_ns: int) -> None:
        """Choose time base, gap lengths and grid, and put what has come on them."""
        frozen, self.frozen_streams = freeze(present, self.settings.time), [*present.values()]
        self.time_base = self.chosen = frozen.time_base
        if self.time_base.reason:
            self.ever_by_receive = True
            self.notes.say(f'{self.name}: time base is receive time because '
                           f'{self.time_base.reason}.')
        self.segments += 1
        if self.period_ns is None:
            self.period_ns = round(1e9 / frozen.rate_hz)
        for state in self.states.values():
            state.shift(self.time_base.common_offset_ns)
        if self.measurement is None:
            self.measurement = ArmMeasurement(self)
        self.measurement.restart()
        self._segment = Segment(
            frozen.origin_ns, self.period_ns, self.settings.time,
            SegmentInputs(self.frozen_streams, self.states.values(), self.ages.values()),
            self.measurement)
        self._close_ready(receive_ns)

    def new_segment(self, reason: str, receive_ns: int) -> None:
        """Begin a new segment from outside, as after a step of the receive clock."""
        self._stepped_at_ns = receive_ns  # stamps of the same clock step too
        if self.time_base is not None:
            self._flush(receive_ns)
            self._new_segment(reason, keep=False)
        else:
            for intake in self.intakes.values():
                intake.stream.drop_raw(keep=int(intake.stream.held))
            self._warm_up_from(None)

    def _new_segment(self, reason: str, *, keep: bool) -> None:
        """Warm up anew; with `keep`, samples no window has used come along."""
        self.notes.say(f'{self.name}: a new segment began: {reason}.')
        self.time_base = self._segment = None
        self.boundaries.restart()
        for state in self.states.values():
            state.shift(0)
        self.frozen_streams = []
        firsts = []
        for intake in self.intakes.values():
            stream = intake.stream
            kept, newest = stream.remaining() if keep else [], stream.newest
            if stream.held and newest is not None and not keep:
                # What holds goes on; on the new axis its receive time places it.
                kept = [[(newest[0], 0, *newest[2:])]]
            stream.restart()
            for rows in kept:
                stream.add(rows)
            if kept and stream.closes_windows:
                firsts.append(kept[0][0][0])
        self._warm_up_from(min(firsts, default=None))

    def _close_ready(self, receive_ns: int) -> None:
        """Close the windows that may close; where a clock moved away, begin a new segment."""
        assert self._segment is not None  # made at the freeze
        moved = self._segment.close_ready(receive_ns, self.results)
        self.next_check_ns = self._segment.next_check_ns
        if moved:
            self.problems.say(f'{self.name}: {moved}, so a new segment began; {RUN_ON}.')
            self._new_segment(moved, keep=True)

    def _flush(self, receive_ns: int) -> None:
        """Close what is there, the last window as far as it goes."""
        if self._segment is not None:
            self._segment.flush(receive_ns, self.results)
            self.next_check_ns = self._segment.next_check_ns

    def finish(self, receive_ns: int, *, explained: Collection[str] = ()) -> None:
        """Close everything; the silence of the `explained` roles needs no sentence."""
        if not self._ready:
            self._say_undescribed('', explained)
            self._make_ready()
        self.advance(receive_ns)
        self._flush(receive_ns)
        if self.operator_side.uncalibrated:
            self._say_uncalibrated()
        for age in self.ages.values():
            age.close_window(receive_ns)
        silent = arm_setup.silent_inputs(self.name, self.intakes, self.states)
        for role, sentence in silent.items():
            if role not in explained:
                self.problems.say(sentence)

    def _say_undescribed(self, within: str, explained: Collection[str] = ()) -> None:
        for role, topic in undescribed(self.arm, self.described).items():
            if role not in explained:
                self.problems.say(f'{self.name}: no {_WHOSE[role]} description came on '
                                  f'{topic}{within}; evaluated without it.')

    def all_notes(self) -> list[str]:
        """Return every note, those on the beginnings of engagements last."""
        return self.notes.texts() + (
            [] if self.measurement is None else self.measurement.ideal.notes())

    def all_problems(self) -> list[str]:
        """Return every problem sentence, each with how often it was met if more than once."""
        return self.problems.texts() + [
            text for intake in self.intakes.values() for text in intake.problems.texts()]
