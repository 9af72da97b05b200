# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The live evaluator as a ROS node.

It subscribes, hands on and publishes results; it computes nothing and commands nothing.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from datetime import datetime
from pathlib import Path
from typing import Any

from rcl_interfaces.msg import SetParametersResult
from rclpy.context import Context
from rclpy.node import Node
from rclpy.parameter import Parameter as RosParameter
from std_srvs.srv import Trigger

from teleop_eval.core.errors import TeleopEvalError
from teleop_eval.core.results import LEVEL_ERROR, LEVEL_OK, StatusLine, WindowResult
from teleop_eval.core.settings import from_parameters
from teleop_eval.nodes import statuses
from teleop_eval.nodes.declared_parameters import check_change, declare, flat_overrides
from teleop_eval.nodes.live_inputs import LiveInputs
from teleop_eval.nodes.live_outputs import LiveOutputs
from teleop_eval.nodes.live_session import RESET, Decoder, LiveSession
from teleop_eval.nodes.live_summary import add_losses, summary_text
from teleop_eval.nodes.parts import Parts, free_folder
from teleop_eval.nodes.schedule import Every
from teleop_eval.nodes.topic_match import LATCHED_ROLES
from teleop_eval.sinks import messages
from teleop_eval.sources.description_file import read_descriptions
from teleop_eval.sources.mapping_kinds import load_mapping_kinds

NODE_NAME = 'teleop_eval'
GRAPH_S, DIAGNOSTICS_S, FLUSH_S, SUMMARY_S = 0.5, 1.0, 0.5, 5.0
# Publishers need this long to be discovered; before, a topic is not called absent.
DISCOVERY_S = 2.0
# Postures in one slice of deferred work.
MIN_SLICE, MAX_SLICE = 100, 20_000
CAUTION = ('Measures only: sends no command and is no safety function. A teleoperated arm can '
           'injure; motion recordings are personal data.')


class EvaluatorNode(Node):
    """
    Node that evaluates while a teleoperation runs.

    Parameters
    ----------
    context
        Context of ROS.
    where
        What to call the source of the parameters in an error text.
    folder
        Folder from which relative file names in the parameters count.
    parts
        Evaluator, folder and decoder.

    Raises
    ------
    TeleopEvalError
        When the parameters cannot be used.

    """

    def __init__(self, *, context: Context, where: str = 'the parameters',
                 folder: Path = Path(), parts: Parts | None = None) -> None:
        super().__init__(NODE_NAME, context=context)
        self._parts = parts or Parts()
        # There is no public way to list overrides: declaring them automatically fails on an
        # empty list.
        flat = flat_overrides(self._parameter_overrides)
        for problem in load_mapping_kinds(flat):
            self.get_logger().warning(problem)
        declared = declare(self, flat, where=where)
        self.settings, self._flat = declared.settings, declared.flat
        self._descriptions = read_descriptions(self.settings, folder)
        self._configured: dict[str, str] = {}
        self._simulated = bool(self.get_parameter('use_sim_time').value)
        self._spare = self._new_evaluator()
        self._routes = self._spare.routes
        self._measured = [topic for topic, uses in self._routes.items()
                          if any(route.role not in LATCHED_ROLES for route in uses)]
        self.inputs = LiveInputs(
            self, self._routes, self._configured, self._parts.supported,
            simulated=self._simulated)
        self.outputs = LiveOutputs(self)
        self.session: LiveSession | None = None
        self.exit_problem = ''
        self.nothing = ''
        self._evaluated = False
        self.last_summary: dict[str, Any] | None = None
        self.last_path: Path | None = None
        self._changes = statuses.Changes()
        self._slice = MIN_SLICE
        self._mappings: dict[str, str] = {}
        self._graph, self._flush = Every(GRAPH_S), Every(FLUSH_S)
        self._diagnostics, self._summary = Every(DIAGNOSTICS_S), Every(SUMMARY_S)
        self._absent_ns: int | None = time.monotonic_ns() + round(DISCOVERY_S * 1e9)
        self.add_on_set_parameters_callback(self._check_change)
        self.add_post_set_parameters_callback(self._apply_change)
        for name, handler in (('start_session', self._on_start), ('stop_session', self._on_stop),
                              ('reset', self._on_reset)):
            self.create_service(Trigger, f'~/{name}', _service(handler))
        self.get_logger().info(CAUTION)
        if self.settings.session.autostart:
            self.start_session()
        else:
            self.get_logger().info('Waiting for ~/start_session.')

    def step(self) -> bool:
        """
        Take what has arrived and do what is due; return whether more may be waiting.

        Nothing in here waits.
        """
        batch = self.inputs.drain()
        if self.session is not None:
            self._publish(self.session.add(batch.messages, batch.cut_ns))
        now_ns = time.monotonic_ns()
        if self._graph.due(now_ns):
            self._poll_graph(now_ns)
        if self._diagnostics.due(now_ns):
            self._publish_diagnostics()
        if self.session is not None:
            if self._flush.due(now_ns):
                self.session.flush()
            if self._summary.due(now_ns):
                self.outputs.summary(summary_text(
                    self.session, self.settings, self.inputs, self._routes))
        return batch.more

    def background(self, slice_s: float) -> bool:
        """Do deferred work for about that long; return whether there is more."""
        if self.session is None:
            return False
        begun = time.perf_counter()
        more = bool(self.session.evaluator.background(self._slice))
        # Machines and arms differ: the next slice is fitted to what this one took.
        ratio = slice_s / max(time.perf_counter() - begun, 1e-6)
        self._slice = max(MIN_SLICE, min(MAX_SLICE, round(self._slice * min(ratio, 2.0))))
        return more

    def start_session(self) -> Path:
        """
        Begin a session in a new folder.

        Raises
        ------
        TeleopEvalError
            When the folder cannot be made.

        """
        session = self.settings.session
        path = free_folder(session.directory,
                           session.name or datetime.now().strftime('%Y-%m-%d_%H-%M-%S'))
        folder = self._parts.make_folder(
            path, self.settings, self._flat, source='live', record_inputs=session.record_inputs,
            descriptions=self._descriptions, resolve=self._resolve,
            published=self.resolve_topic_name, node_name=self.get_name(),
            simulated_time=self._simulated)
        evaluator, self._spare = self._spare or self._new_evaluator(), None
        self.session = LiveSession(
            evaluator, folder, event_topic=self._parts.event_topic,
            type_name=self.inputs.type_name, decoder=self._decoder)
        # What arrived before the start is not part of the session, but what is latched is.
        batch = self.inputs.begin()
        latched = self.inputs.latched_messages()
        if latched:
            self.session.start(batch.cut_ns, latched)
        self._mappings = {}
        self.get_logger().info(f'Session begins: {path}' + (
            ' (inputs are recorded)' if session.record_inputs else ''))
        return path

    def stop_session(self) -> Path | None:
        """Finish the session's files, then publish its last results; None without a session."""
        if self.session is None:
            return None
        batch = self.inputs.drain()
        windows = self.session.add(batch.messages)
        session, self.session = self.session, None
        self._keep(session, self._lines(session))
        last, whole = session.finish(
            lambda summary: add_losses(summary, self.inputs, self._routes),
            measured=self._measured, problems=self.inputs.problems_so_far(),
            explained=self.inputs.unusable())
        # One session that was evaluated makes the run worth its while.
        self._evaluated = self._evaluated or not session.unevaluated
        self.nothing = '' if self._evaluated else session.unevaluated
        self._publish([*windows, *last])
        self.outputs.summary(summary_text(session, self.settings, self.inputs, self._routes,
                                          whole=whole))
        self.last_path, self.last_summary = session.folder.path, whole
        if session.write_problem:
            self.exit_problem = session.write_problem
            self.get_logger().error(session.write_problem)
        self.get_logger().info(f'Session ended: {session.folder.path}')
        return session.folder.path

    def reset(self) -> bool:
        """Let the evaluation begin anew in the same session; False without a session."""
        if self.session is None:
            return False
        batch = self.inputs.begin()
        self._publish(self.session.add(batch.messages))
        self.session.event(self.inputs.clock.now_ns(), RESET)
        return True

    def close(self) -> None:
        """Finish what runs and give everything back."""
        self.stop_session()
        self.inputs.close()

    def _new_evaluator(self) -> Any:
        return self._parts.make_evaluator(
            self.settings, descriptions=self._descriptions, resolve=self._resolve,
            simulated_time=self._simulated)

    def _resolve(self, name: str) -> str:
        """Return a topic's full name; remember its name before, which ROS remaps itself."""
        full = self.resolve_topic_name(name)
        self._configured[full] = name
        return full

    def _decoder(self, topic: str) -> Decoder:
        if topic == self._parts.event_topic:
            return self._parts.make_decoder(messages.STRING)
        fields = [route.enabled_field for route in self._routes[topic] if route.enabled_field]
        decode = self._parts.make_decoder(
            self.inputs.type_name(topic), enabled_field=fields[0] if fields else '')
        arms = [route.arm for route in self._routes[topic] if route.role == 'active_mapping']
        if not arms:
            return decode

        def tell(data: bytes) -> Any:
            sample = decode(data)
            for arm in arms:
                self._tell_mapping(arm, sample.text)
            return sample
        return tell

    def _tell_mapping(self, arm: str, label: str) -> None:
        if self._mappings.get(arm) != label:
            self._mappings[arm] = label
            self.get_logger().info(f'{arm}: the active mapping is {label!r}.')

    def _poll_graph(self, now_ns: int) -> None:
        for topic_input in self.inputs.poll_graph(now_ns):
            self.get_logger().info(self.inputs.found(topic_input))
        if self._absent_ns is not None and now_ns > self._absent_ns:
            self._absent_ns = None
            for sentence in self.inputs.absent():
                self.get_logger().warning(sentence)

    def _publish(self, windows: Sequence[WindowResult]) -> None:
        for result in windows:
            self.outputs.window(result)

    def _publish_diagnostics(self) -> None:
        lines = self._lines(self.session)
        clock_ns = self.inputs.clock.now_ns()
        self.outputs.diagnostics(clock_ns, lines)
        if self.session is not None:
            self._keep(self.session, lines)
        self._tell(lines)

    def _keep(self, session: LiveSession, lines: Sequence[StatusLine]) -> None:
        clock_ns = self.inputs.clock.now_ns()
        if clock_ns:  # a simulation that has not begun has no time to file them under
            session.keep_diagnostics(session.feed_time_ns(clock_ns), lines)

    def _lines(self, session: LiveSession | None) -> list[StatusLine]:
        recording = self.settings.session.record_inputs
        lines = [statuses.session_line(session, recording=recording)]
        if session is None:
            return lines + [statuses.waiting_inputs(
                arm, self.inputs.values(arm), self.inputs.problems(arm))
                for arm in self.settings.arms]
        now_ns = session.feed_time_ns(self.inputs.clock.now_ns())
        for line in session.evaluator.diagnostics(now_ns):
            arm, _, concern = line.name.partition(': ')
            if concern == 'inputs':
                line = statuses.with_inputs(
                    line, self.inputs.values(arm), self.inputs.problems(arm))
            lines.append(line)
        return lines

    def _tell(self, lines: Sequence[StatusLine]) -> None:
        """Log what is new since the last time."""
        logger = self.get_logger()
        problems = self.inputs.problems()
        if self.session is not None:
            problems += [*self.session.problems, *self.session.first_failures(),
                         *self.session.evaluator.problems]
            for sentence in self._changes.new(list(self.session.evaluator.notes)):
                logger.info(sentence)
        for sentence in self._changes.new(problems):
            logger.warning(sentence)
        for line in self._changes.levels(lines):
            text = f'{line.name}: {statuses.LEVEL_WORDS[line.level]}'
            # What has just been said as a sentence is not said again.
            if not any(sentence.rstrip('.') in line.message for sentence in problems):
                text += f': {line.message}'
            if line.level == LEVEL_OK:
                logger.info(text)
            elif line.level == LEVEL_ERROR:
                logger.error(text)
            else:
                logger.warning(text)

    def _check_change(self, changes: list[RosParameter]) -> SetParametersResult:
        return check_change(self._flat, changes)

    def _apply_change(self, changes: list[RosParameter]) -> None:
        self._flat.update({change.name: change.value for change in changes})
        self.settings = from_parameters(self._flat)
        self._spare = None  # it has the old ones
        if self.session is not None:
            self.session.evaluator.use_thresholds(self.settings.thresholds)

    def _on_start(self) -> tuple[bool, str]:
        if self.session is not None:
            return False, (f'A session runs already in {self.session.folder.path}; call '
                           '~/stop_session first.')
        try:
            return True, f'Session begins: {self.start_session()}'
        except TeleopEvalError as error:
            return False, str(error)

    def _on_stop(self) -> tuple[bool, str]:
        path = self.stop_session()
        if path is None:
            return False, 'No session runs; call ~/start_session first.'
        return not self.exit_problem, self.exit_problem or f'Session ended: {path}'

    def _on_reset(self) -> tuple[bool, str]:
        if not self.reset():
            return False, 'No session runs; call ~/start_session first.'
        return True, 'The evaluation begins anew; the session goes on.'


def _service(handler: Callable[[], tuple[bool, str]]) -> Callable[..., Trigger.Response]:
    def answer(_: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        response.success, response.message = handler()
        return response
    return answer
