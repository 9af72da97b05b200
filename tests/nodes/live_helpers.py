# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Shared by the tests of the live node: ROS domains, contexts, a small fake evaluator."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import rclpy
from rclpy.context import Context
from rclpy.signals import SignalHandlerOptions

from teleop_eval.core.metric import Metric, missing
from teleop_eval.core.results import StatusLine, WindowResult
from teleop_eval.core.samples import Sample
from teleop_eval.nodes.parts import Parts
from teleop_eval.sinks.session_folder import SessionFolder
from teleop_eval.sources.decode import SUPPORTED, make_decoder

EVENT_TOPIC = '/teleop_eval/session_event'
# A test waits this long for discovery on a busy machine; nothing is asserted of the time.
PATIENCE_S = 30.0

SETTINGS_YAML = """\
/**:
  ros__parameters:
    session:
      directory: {directory}
      record_inputs: true
    arms:
      right:
        operator:
          hand_topic: hand
        robot:
          joints_topic: robot_joints
          joint_names: [j1, j2]
        engaged:
          topic: engaged
        active_mapping:
          topic: mapping
"""

# Command against robot needs no operator and no mapping.
HALF_CHAIN = """\
/**:
  ros__parameters:
    session: {{directory: {directory}, record_inputs: true}}
    time: {{settling_s: 0.0}}
    arms:
      right:
        robot: {{joints_topic: robot_joints, joint_names: [j1, j2]}}
        command: {{topic: robot_joints}}
"""


def write_settings(folder: Path, text: str = SETTINGS_YAML) -> Path:
    """Write a parameter file whose sessions go below the folder."""
    path = folder / 'evaluate.yaml'
    path.write_text(text.format(directory=folder / 'sessions'), encoding='utf-8')
    return path


@contextmanager
def ros(domain: int, *arguments: str) -> Iterator[Context]:
    """Give a context of ROS in a domain of its own."""
    context = Context()
    rclpy.init(args=list(arguments), context=context, domain_id=domain,
               signal_handler_options=SignalHandlerOptions.NO)
    try:
        yield context
    finally:
        context.try_shutdown()


def wait_until(condition: Callable[[], Any], step: Callable[[], Any] = lambda: None) -> Any:
    """Step until the condition holds and return its value; fail with patience."""
    end = time.monotonic() + PATIENCE_S
    while time.monotonic() < end:
        step()
        value = condition()
        if value:
            return value
        time.sleep(0.01)
    raise AssertionError('waited in vain')


@dataclass(frozen=True)
class FakeRoute:
    """What a topic is used for."""

    arm: str
    role: str
    enabled_field: str = ''


class FakeEvaluator:
    """
    Counts what it is given and closes a window every ten samples.

    It has the evaluator's methods and none of its arithmetic, so that the node can be tested
    by itself.
    """

    def __init__(self, settings: Any, *, descriptions: Any, resolve: Callable[[str], str],
                 simulated_time: bool) -> None:
        self.settings = settings
        self.thresholds = settings.thresholds
        self.simulated_time = simulated_time
        self.descriptions = dict(descriptions)
        self.routes: dict[str, tuple[FakeRoute, ...]] = {}
        for name, arm in settings.arms.items():
            for role, topic in (('hand', arm.operator.hand_topic),
                                ('operator_joints', arm.operator.joints_topic),
                                ('robot_joints', arm.robot.joints_topic),
                                ('description', arm.robot.description_topic),
                                ('command', arm.command.topic),
                                ('engaged', arm.engaged.topic),
                                ('active_mapping', arm.active_mapping.topic)):
                if topic:
                    full = resolve(topic)
                    self.routes[full] = (*self.routes.get(full, ()), FakeRoute(name, role))
        self.fed: list[tuple[int, str, Sample]] = []
        self.problems: list[str] = []
        self.notes: list[str] = []
        self._closed = 0

    def add(self, receive_ns: int, topic: str, sample: Sample) -> None:
        self.fed.append((receive_ns, topic, sample))

    def poll(self) -> list[WindowResult]:
        windows = []
        while len(self.fed) >= 10 * (self._closed + 1):
            self._closed += 1
            end = self.fed[10 * self._closed - 1][0]
            windows.append(WindowResult('right', 'direct', end - 10, end, end, {
                'samples': Metric(float(self._closed), '1'),
                'latency_s': missing('unobservable', 's', 'Nothing moved.')}))
        return windows

    def diagnostics(self, now_ns: int) -> list[StatusLine]:
        return [StatusLine('right: inputs', 0, 'All inputs arrive.',
                           {'samples': str(len(self.fed))})]

    def summary(self) -> dict[str, Any]:
        inputs = {route.role: {'topic': topic, 'messages': sum(t == topic for _, t, _ in self.fed)}
                  for topic, routes in self.routes.items() for route in routes}
        samples = Metric(float(len(self.fed)), '1').to_dict()
        mappings = {'direct': {'metrics': {'samples': samples}}} if self.fed else {}
        return {'arms': {'right': {'inputs': inputs, 'mappings': mappings}}}

    def finish(self, *, explained: Any = ()) -> dict[str, Any]:
        return self.summary()

    def background(self, postures: int) -> bool:
        return False

    def use_thresholds(self, thresholds: Any) -> None:
        self.thresholds = thresholds


def fake_parts() -> Parts:
    """Return the real folder and decoders with the fake evaluator."""
    return Parts(FakeEvaluator, SessionFolder, make_decoder, SUPPORTED, EVENT_TOPIC)
