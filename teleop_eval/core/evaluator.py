# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The one evaluator behind the live node and the recordings.

Its state is a function of the sequence of (receive_ns, topic, sample) alone: no clock, no
timer, no thread. Live and post-run numbers are the same because they come from here.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

from teleop_eval.core.arm import ArmEvaluator
from teleop_eval.core.arm_setup import DESCRIPTION, OPERATOR_DESCRIPTION
from teleop_eval.core.calibration_interval import CalibrationInterval
from teleop_eval.core.operator_settings import operator_key
from teleop_eval.core.reachable_cells import ReachableCells, ReachableSet
from teleop_eval.core.results import StatusLine, WindowResult
from teleop_eval.core.samples import Sample, TextSample
from teleop_eval.core.sentences import Sentences
from teleop_eval.core.settings import Settings, ThresholdSettings
from teleop_eval.core.status import ArmStatus
from teleop_eval.core.summary import arm_summary

EVENT_TOPIC = '/teleop_eval/session_event'
"""Topic of the evaluator's own events: 'reset', 'segment'."""

REACHABLE_SEED = 20260101
_NONE: Mapping[str, CalibrationInterval] = MappingProxyType({})


@dataclass(frozen=True)
class Route:
    """What a topic means: the arm, the role there, the field that enables joints or ''."""

    arm: str
    role: str
    enabled_field: str = ''


def absolute(topic: str) -> str:
    """Return a topic name from the root: recordings know no namespace."""
    return topic if topic.startswith('/') else f'/{topic}'


class SessionEvaluator:
    """
    Streaming evaluation of one session with one or several arms.

    Parameters
    ----------
    settings
        What to evaluate.
    descriptions
        URDF text by arm, for arms whose description is a file; that of the operator's arm by
        `operator_key` of the arm.
    resolve
        Turns a configured topic name into the full name used in `add`.
    simulated_time
        Whether receive times come from a simulated clock.
    candidates
        Whether to predict every configured mapping on the same operator motion.

    """

    def __init__(self, settings: Settings, *, descriptions: Mapping[str, str] | None = None,
                 resolve: Callable[[str], str] = absolute, simulated_time: bool = False,
                 candidates: bool = False) -> None:
        self.settings = settings
        self._descriptions = dict(descriptions or {})
        self._resolve = resolve
        self._simulated_time = simulated_time
        self._candidates = candidates
        self._receive_ns = 0
        self._notes = Sentences()
        self._problems = Sentences()
        self._results: list[WindowResult] = []
        self._told = 0
        self._thresholds = settings.thresholds
        self._reachable: dict[str, ReachableCells] = {}
        self._make_arms()

    def _make_arms(self, calibrations: Mapping[str, CalibrationInterval] = _NONE) -> None:
        self.arms = {
            name: ArmEvaluator(
                name, self.settings, urdf=self._descriptions.get(name),
                operator_urdf=self._descriptions.get(operator_key(name)),
                calibration=calibrations.get(name), results=self._results)
            for name in self.settings.arms}
        for one in self.arms.values():
            one.predicts = self._candidates
        self._status = {name: ArmStatus(arm) for name, arm in self.arms.items()}
        routes: dict[str, list[Route]] = {}
        for name, arm in self.settings.arms.items():
            for role, topic in (
                    ('hand', arm.operator.hand_topic),
                    ('shoulder', arm.operator.shoulder_topic),
                    ('rate_input', arm.operator.rate_topic),
                    ('operator_joints', arm.operator.joints_topic),
                    ('robot_joints', arm.robot.joints_topic),
                    ('command', arm.command.topic),
                    ('engaged', arm.engaged.topic),
                    ('active_mapping', arm.active_mapping.topic),
                    (DESCRIPTION, arm.robot.description_topic),
                    (OPERATOR_DESCRIPTION, arm.operator.description_topic)):
                if topic:
                    enabled = arm.command.enabled_field or '' if role == 'command' else ''
                    routes.setdefault(self._resolve(topic), []).append(
                        Route(name, role, enabled))
        self.routes = {topic: tuple(found) for topic, found in routes.items()}
        self._targets = {
            topic: tuple(
                (self.arms[route.arm], self._status[route.arm].phase, route.role)
                for route in found) for topic, found in self.routes.items()}

    def add(self, receive_ns: int, topic: str, sample: Sample) -> None:
        """
        Take one sample.

        Parameters
        ----------
        receive_ns
            Receive or log time, strictly increasing from call to call.
        topic
            Full name.
        sample
            What the source made of the message.

        """
        self._receive_ns = receive_ns
        for arm in self.arms.values():
            if receive_ns > arm.next_check_ns:
                arm.advance(receive_ns)
        if topic == EVENT_TOPIC:
            self._event(sample)
        for arm, phase, role in self._targets.get(topic, ()):
            phase.last_receive_ns[role] = receive_ns
            arm.add(role, receive_ns, sample)
            if role in arm.states:
                phase.state_came(role, receive_ns)
        if len(self._results) > self._told:
            self._tell_status()

    def _tell_status(self) -> None:
        """Tell of the windows that the message just taken has closed."""
        # Levels follow windows, not questions: so they are the same however often one asks.
        closed = dict.fromkeys(
            result.arm for result in self._results[self._told:] if result.mapping)
        self._told = len(self._results)
        for name in closed:
            self._status[name].window_closed(self._receive_ns, self._thresholds)

    def _event(self, sample: Sample) -> None:
        text = sample.text if isinstance(sample, TextSample) else ''
        if text == 'segment':
            self._problems.say('The clock that gives the receive times stepped back by more than '
                               '1 s, so a new segment began; let it run on during a session.')
            for arm in self.arms.values():
                arm.new_segment('the receive clock stepped back', self._receive_ns)
        elif text == 'reset':
            self._reset()

    def _reset(self) -> None:
        """Begin the evaluation anew; descriptions already seen and calibrations stay."""
        for name, arm in self.arms.items():
            for role, text in arm.described.items():
                self._descriptions[name if role == DESCRIPTION else operator_key(name)] = text
        held = {name: arm.states for name, arm in self.arms.items()}
        before = self._status
        self._make_arms({name: side.calibration for name, arm in self.arms.items()
                         if (side := arm.operator_side).calibration is not None})
        self._told = len(self._results)
        for name, arm in self.arms.items():
            self._status[name].phase.carry_on(before[name].phase)
            for role, state in arm.states.items():
                latest = held[name][role].latest
                if latest is not None:
                    state.add(self._receive_ns, latest, None)
        self._notes.say('the evaluation was reset')

    def poll(self) -> list[WindowResult]:
        """Return the windows closed since the last call, in order of closing."""
        found = self._results[:]
        self._results.clear()
        self._told = 0
        return found

    def background(self, postures: int = 20_000) -> bool:
        """Sample a slice of the reachable workspace; return whether there is more to do."""
        for name, arm in self.arms.items():
            sampling = self._sampling(name, arm)
            if sampling is not None and not sampling.ended:
                sampling.step(postures)
                return True
        return False

    def _sampling(self, name: str, arm: ArmEvaluator) -> ReachableCells | None:
        if arm.robot is None:
            return None
        if name not in self._reachable:
            self._reachable[name] = ReachableCells(
                arm.robot.chain, arm.robot.shoulder, arm.robot.reach.length_m,
                seed=REACHABLE_SEED)
        return self._reachable[name]

    def use_thresholds(self, thresholds: ThresholdSettings) -> None:
        """Judge by other thresholds from now on; no metric depends on them."""
        self._thresholds = thresholds
        self.settings = dataclasses.replace(self.settings, thresholds=thresholds)
        for status in self._status.values():
            status.judge(thresholds)

    def diagnostics(self, now_ns: int) -> list[StatusLine]:
        """Return the status lines of all arms at a receive time."""
        return [line for status in self._status.values()
                for line in status.lines(now_ns, self._thresholds)]

    @property
    def problems(self) -> list[str]:
        """Return the sentences about the inputs that a user must see."""
        return self._problems.texts() + [
            text for arm in self.arms.values() for text in arm.all_problems()]

    @property
    def notes(self) -> list[str]:
        """Return further sentences, such as why receive time is used."""
        return self._notes.texts() + [
            text for arm in self.arms.values() for text in arm.all_notes()]

    def summary(self) -> dict[str, Any]:
        """Return the evaluation as it stands, in plain types."""
        arms: dict[str, Any] = {}
        for name, arm in self.arms.items():
            sampling = self._sampling(name, arm)
            reachable: ReachableSet | None = None if sampling is None else sampling.result()
            arms[name] = arm_summary(arm, reachable, simulated_time=self._simulated_time)
        return {'arms': arms, 'notes': self.notes, 'problems': self.problems}

    def finish(self, *, explained: Collection[str] = ()) -> dict[str, Any]:
        """
        Close the last windows, complete the reachable workspace, return the summary.

        Parameters
        ----------
        explained
            Full names of topics on whose silence the caller has said something already.

        """
        for name, arm in self.arms.items():
            arm.finish(self._receive_ns, explained={
                route.role for topic in explained for route in self.routes.get(topic, ())
                if route.arm == name})
        self._tell_status()
        while self.background(100_000):
            pass
        return self.summary()
