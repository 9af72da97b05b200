# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The node in process: services, parameters, outputs, and that it commands nothing."""

from __future__ import annotations

import json
import math
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from diagnostic_msgs.msg import DiagnosticArray
from geometry_msgs.msg import PoseStamped
from live_helpers import EVENT_TOPIC, fake_parts, ros, wait_until, write_settings
from rclpy.context import Context
from rclpy.executors import SingleThreadedExecutor
from rclpy.node import Node
from rclpy.parameter import Parameter
from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy
from rosgraph_msgs.msg import Clock
from sensor_msgs.msg import JointState
from std_msgs.msg import Bool, Float64, String
from std_srvs.srv import Trigger

from teleop_eval.nodes import evaluator_node
from teleop_eval.nodes.evaluator_node import EvaluatorNode
from teleop_eval.sources.recording import open_recording

LATCHED = QoSProfile(depth=1, durability=DurabilityPolicy.TRANSIENT_LOCAL)


class Bench:
    """The node under test, stepped by hand, and a stack that talks to it."""

    def __init__(self, context: Context, stack: Context) -> None:
        self.node = EvaluatorNode(context=context, parts=fake_parts())
        self.stack = Node('stack', context=stack)
        self._executors = [SingleThreadedExecutor(context=context),
                           SingleThreadedExecutor(context=stack)]
        for executor, node in zip(self._executors, (self.node, self.stack), strict=True):
            executor.add_node(node)
        self.received: dict[str, list[Any]] = {}

    def step(self) -> None:
        for executor in self._executors:
            executor.spin_once(timeout_sec=0.0)
        self.node.step()

    def listen(self, message_type: type, topic: str, qos: Any = 100) -> list[Any]:
        kept = self.received.setdefault(topic, [])
        self.stack.create_subscription(message_type, topic, kept.append, qos)
        return kept

    def publisher(self, message_type: type, topic: str, qos: Any = 100) -> Any:
        made = self.stack.create_publisher(message_type, topic, qos)
        wait_until(made.get_subscription_count, self.step)
        return made

    def call(self, name: str) -> Trigger.Response:
        client = self.stack.create_client(Trigger, f'/teleop_eval/{name}')
        wait_until(client.service_is_ready, self.step)
        future = client.call_async(Trigger.Request())
        wait_until(future.done, self.step)
        return future.result()

    def fed(self) -> list[tuple[int, str, Any]]:
        assert self.node.session is not None
        return self.node.session.evaluator.fed  # type: ignore[attr-defined,no-any-return]

    def wait_fed(self, count: int) -> None:
        wait_until(lambda: len(self.fed()) >= count, self.step)

    def close(self) -> None:
        self.node.close()
        for executor in self._executors:
            executor.shutdown()
        self.node.destroy_node()
        self.stack.destroy_node()


@pytest.fixture
def make_bench(domain: int, tmp_path: Path) -> Iterator[Any]:
    benches, contexts = [], []

    def make(*arguments: str) -> Bench:
        settings = write_settings(tmp_path)
        for given in (['--ros-args', '--params-file', str(settings), *arguments], []):
            manager = ros(domain, *given)
            contexts.append(manager)
            benches.append(manager.__enter__())
        benches[:] = [Bench(benches[-2], benches[-1])]
        return benches[0]
    yield make
    for bench in benches:
        bench.close()
    for manager in contexts:
        manager.__exit__(None, None, None)


def test_the_node_publishes_nothing_but_its_results(make_bench: Any) -> None:
    """The evaluator is passive: no command, whatever it is told to listen to."""
    bench = make_bench('-p', 'arms.right.command.topic:=command')
    joints = bench.publisher(JointState, '/robot_joints')
    for _ in range(10):
        joints.publish(JointState(name=['j1', 'j2'], position=[0.0, 0.0]))
    bench.wait_fed(10)
    bench.step()
    bench.publisher(JointState, '/command')
    wait_until(lambda: '/teleop_eval/right/samples' in dict(
        bench.stack.get_publisher_names_and_types_by_node('teleop_eval', '/')), bench.step)
    published = {name for name, _ in
                 bench.stack.get_publisher_names_and_types_by_node('teleop_eval', '/')}
    assert published == {
        '/diagnostics', '/rosout', '/parameter_events', '/teleop_eval/summary',
        '/teleop_eval/right/samples', '/teleop_eval/right/latency_s'}
    assert [info.node_name for info in bench.stack.get_publishers_info_by_topic('/command')] == [
        'stack']


def test_inputs_are_evaluated_and_recorded_alike(make_bench: Any, tmp_path: Path) -> None:
    bench = make_bench('-p', 'session.name:=first')
    drained: list[Any] = []
    drain = bench.node.inputs.drain

    def drain_and_keep() -> Any:
        batch = drain()
        drained.extend(batch.messages)
        return batch
    bench.node.inputs.drain = drain_and_keep
    mapping = bench.stack.create_publisher(String, '/mapping', LATCHED)
    mapping.publish(String(data='direct'))
    hand = bench.publisher(PoseStamped, '/hand')
    joints = bench.publisher(JointState, '/robot_joints')
    for place in range(15):
        pose = PoseStamped()
        pose.pose.position.x = float(place)
        hand.publish(pose)
        joints.publish(JointState(name=['j1', 'j2'], position=[0.1 * place, 0.0]))
    bench.wait_fed(31)
    assert bench.call('reset').success
    bench.wait_fed(32)
    fed = list(bench.fed())
    assert [topic for _, topic, _ in fed].count(EVENT_TOPIC) == 1
    assert [sample.position[0] for _, topic, sample in fed if topic == '/hand'] == [
        float(place) for place in range(15)]
    times = [ns for ns, _, _ in fed]
    assert times == sorted(set(times))
    answer = bench.call('stop_session')
    folder = tmp_path / 'sessions' / 'first'
    assert answer.success and answer.message == f'Session ended: {folder}'
    with open_recording(folder / 'inputs') as recording:
        kept = list(recording.messages(list(recording.topics)))
    assert [(ns, topic) for ns, topic, _ in kept] == [(ns, topic) for ns, topic, _ in fed]
    assert sorted((topic, data) for _, topic, data in kept if topic != EVENT_TOPIC) == sorted(
        (item.topic, item.data) for item in drained)
    summary = json.loads((folder / 'summary.json').read_text(encoding='utf-8'))
    assert summary['arms']['right']['inputs']['robot_joints'] == {
        'topic': '/robot_joints', 'messages': 15, 'lost': 0}
    assert summary['arms']['right']['inputs']['engaged']['lost'] is None
    assert summary['arms']['right']['inputs']['engaged']['lost_reason'] == 'no message yet'
    assert (summary['session']['start_ns'], summary['session']['end_ns']) == (
        times[0], times[-1])


def test_sessions_start_and_stop_by_service(make_bench: Any, tmp_path: Path) -> None:
    bench = make_bench('-p', 'session.autostart:=false', '-p', 'session.name:=trial')
    mapping = bench.stack.create_publisher(String, '/mapping', LATCHED)
    mapping.publish(String(data='direct'))
    engaged = bench.publisher(Bool, '/engaged')
    engaged.publish(Bool(data=False))
    wait_until(lambda: len(bench.node.inputs.latched_messages()) == 2, bench.step)
    assert bench.node.session is None
    refused = bench.call('stop_session')
    assert (refused.success, refused.message) == (
        False, 'No session runs; call ~/start_session first.')
    assert not bench.call('reset').success
    assert bench.call('start_session').success
    assert sorted(topic for _, topic, _ in bench.fed()) == ['/engaged', '/mapping']
    again = bench.call('start_session')
    assert not again.success and 'runs already in' in again.message
    engaged.publish(Bool(data=True))
    bench.wait_fed(3)
    assert bench.call('stop_session').success
    assert bench.call('start_session').success
    assert [sample.value for _, topic, sample in bench.fed() if topic == '/engaged'] == [True]
    assert bench.call('stop_session').success
    assert sorted(path.name for path in (tmp_path / 'sessions').iterdir()) == [
        'trial', 'trial_2']
    for name in ('trial', 'trial_2'):
        summary = json.loads((tmp_path / 'sessions' / name / 'summary.json').read_text('utf-8'))
        assert summary['session']['name'] == name


def test_losses_and_problems_of_one_session_are_not_those_of_the_next(
        make_bench: Any, tmp_path: Path) -> None:
    bench = make_bench('-p', 'session.name:=trial')
    best_effort = QoSProfile(depth=50, reliability=ReliabilityPolicy.BEST_EFFORT)

    def disturb() -> None:
        """Overrun the queue of the joints, and offer a topic with a type that cannot serve."""
        joints = bench.publisher(JointState, '/robot_joints', best_effort)
        joints.publish(JointState(name=['j1', 'j2'], position=[0.0, 0.0]))
        found = bench.node.inputs.topics['/robot_joints']
        before = found.messages
        wait_until(lambda: found.messages > before, bench.step)
        for _ in range(found.request.depth + 50):
            joints.publish(JointState(name=['j1', 'j2'], position=[0.0, 0.0]))
        wait_until(lambda: found.loss.lost, bench.step)
        wrong = bench.stack.create_publisher(JointState, '/engaged', 10)
        wait_until(lambda: bench.node.inputs.problems(), bench.step)
        for publisher in (wrong, joints):
            bench.stack.destroy_publisher(publisher)
        wait_until(lambda: not (bench.node.inputs.problems() or found.publishers), bench.step)

    def end(name: str) -> tuple[int | None, bool]:
        """Return what the session's summary says of lost joints, and whether of the type."""
        bench.node.stop_session()
        summary = json.loads((tmp_path / 'sessions' / name / 'summary.json').read_text('utf-8'))
        return (summary['arms']['right']['inputs']['robot_joints']['lost'],
                any('/engaged has the type' in text for text in summary['problems']))

    disturb()
    lost, told = end('trial')
    assert lost and told
    bench.node.start_session()
    assert end('trial_2') == (0, False)
    bench.node.start_session()
    disturb()
    assert bench.node.reset()
    assert end('trial_3') == (0, False)


def test_diagnostics_metrics_and_summary_are_published(
        make_bench: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(evaluator_node, 'DIAGNOSTICS_S', 0.05)
    monkeypatch.setattr(evaluator_node, 'SUMMARY_S', 0.05)
    bench = make_bench('-r', '__ns:=/cell')
    statuses = bench.listen(DiagnosticArray, '/diagnostics')
    windows = bench.listen(Float64, '/cell/teleop_eval/right/samples')
    latencies = bench.listen(Float64, '/cell/teleop_eval/right/latency_s')
    joints = bench.publisher(JointState, '/cell/robot_joints')
    array = wait_until(lambda: statuses and statuses[-1], bench.step)
    assert array.header.stamp.sec > 0
    assert [status.name for status in array.status] == [
        'teleop_eval: session', 'teleop_eval: right: inputs']
    assert [status.level for status in array.status] == [b'\x00', b'\x00']
    assert all(status.hardware_id for status in array.status)
    values = {pair.key: pair.value for pair in array.status[1].values}
    assert values['hand publishers'] == '0'
    assert values['hand lost messages'] == 'unobservable: no message yet'

    def publish() -> None:
        joints.publish(JointState(name=['j1', 'j2'], position=[0.0, 0.0]))
        bench.step()
    wait_until(lambda: windows and latencies, publish)
    assert windows[0].data >= 1.0
    assert math.isnan(latencies[0].data)
    late = bench.listen(String, '/cell/teleop_eval/summary', LATCHED)
    summary = json.loads(wait_until(lambda: late and late[-1], bench.step).data)
    assert summary['schema_version'] == 1
    assert summary['arms']['right']['inputs']['robot_joints']['topic'] == '/cell/robot_joints'


def test_topics_are_recorded_as_they_are_published(
        make_bench: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """In a namespace, under another name, remapped: the bag has what a listener hears."""
    monkeypatch.setattr(evaluator_node, 'DIAGNOSTICS_S', 0.05)
    bench = make_bench('-r', '__ns:=/cell', '-r', '__node:=judge', '-p', 'session.name:=s',
                       '-r', '/diagnostics:=/cell/health')
    heard = bench.listen(DiagnosticArray, '/cell/health')
    joints = bench.publisher(JointState, '/cell/robot_joints')

    def publish() -> None:
        joints.publish(JointState(name=['j1', 'j2'], position=[0.0, 0.0]))
        bench.step()
    wait_until(lambda: heard and '/cell/judge/right/latency_s' in dict(
        bench.stack.get_publisher_names_and_types_by_node('judge', '/cell')), publish)
    bench.node.stop_session()
    published = {name for name, _ in
                 bench.stack.get_publisher_names_and_types_by_node('judge', '/cell')}
    with open_recording(tmp_path / 'sessions' / 's' / 'summary') as recording:
        kept = list(recording.messages())
        assert set(recording.topics) == published - {'/rosout', '/parameter_events'} == {
            '/cell/health', '/cell/judge/summary', '/cell/judge/right/samples',
            '/cell/judge/right/latency_s'}
    assert b'judge: right: inputs' in next(
        data for _, topic, data in kept if topic == '/cell/health')


def test_a_malformed_message_is_counted_and_shown(
        make_bench: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(evaluator_node, 'DIAGNOSTICS_S', 0.05)
    bench = make_bench()
    statuses = bench.listen(DiagnosticArray, '/diagnostics')
    mapping = bench.publisher(String, '/mapping')
    mapping.publish(b'\x00\x01\x00\x00\xff\xff\x00\x00abc')
    mapping.publish(String(data='direct'))
    bench.wait_fed(1)
    session = bench.node.session
    assert session.malformed == {'/mapping': 1}
    line = wait_until(lambda: next(
        (status for array in statuses for status in array.status if status.level == b'\x01'),
        None), bench.step)
    assert (line.name, line.message) == (
        'teleop_eval: session', '1 message could not be decoded (/mapping).')


def test_thresholds_can_be_set_and_nothing_else(make_bench: Any) -> None:
    bench = make_bench()
    result = bench.node.set_parameters([Parameter('thresholds.stale_s', value=2.5)])[0]
    assert result.successful
    assert bench.node.session.evaluator.thresholds.stale_s == 2.5
    for name, value in (('thresholds.stale_s', -1.0), ('time.window_s', 4.0)):
        result = bench.node.set_parameters([Parameter(name, value=value)])[0]
        assert not result.successful and name in result.reason
    both = bench.node.set_parameters_atomically([
        Parameter('thresholds.latency_warn_s', value=0.5),
        Parameter('thresholds.latency_error_s', value=0.6)])
    assert both.successful
    assert bench.node.settings.thresholds.latency_warn_s == 0.5


def test_simulated_time_is_receive_time_and_a_jump_back_a_segment(
        make_bench: Any, tmp_path: Path) -> None:
    bench = make_bench('-p', 'use_sim_time:=true', '-p', 'session.name:=s')
    assert bench.node.session.evaluator.simulated_time
    clock = bench.publisher(Clock, '/clock')
    mapping = bench.publisher(String, '/mapping')

    def send(seconds: int, label: str, count: int) -> None:
        reading = Clock()
        reading.clock.sec = seconds
        clock.publish(reading)
        wait_until(lambda: bench.node.inputs.clock.now_ns() == seconds * 10**9, bench.step)
        mapping.publish(String(data=label))
        bench.wait_fed(count)

    send(100, 'a', 1)
    send(103, 'b', 2)
    send(50, 'c', 4)
    assert [(ns, sample.text) for ns, _, sample in bench.fed()] == [
        (100 * 10**9, 'a'), (103 * 10**9, 'b'), (103 * 10**9 + 1, 'segment'),
        (103 * 10**9 + 2, 'c')]
    bench.node.stop_session()
    summary = json.loads((tmp_path / 'sessions/s/summary.json').read_text(encoding='utf-8'))
    assert summary['session']['duration_s'] == pytest.approx(3.0)
    config = (tmp_path / 'sessions/s/config.yaml').read_text(encoding='utf-8')
    assert 'use_sim_time: true' in config


def test_remapped_topics_are_found(make_bench: Any) -> None:
    """A swap of two names shows whether a name is remapped once or twice."""
    bench = make_bench('-r', 'hand:=robot_joints', '-r', 'robot_joints:=hand')
    joints = bench.publisher(JointState, '/hand')
    joints.publish(JointState(name=['j1', 'j2'], position=[0.0, 0.0]))
    bench.wait_fed(1)
    assert bench.fed()[0][1] == '/hand'


def test_relative_descriptions_are_read_beside_the_parameter_file(
        domain: int, tmp_path: Path) -> None:
    settings = write_settings(tmp_path)
    (tmp_path / 'arm.urdf').write_text('<robot/>', encoding='utf-8')
    arguments = ['--ros-args', '--params-file', str(settings), '-p',
                 'arms.right.robot.description_file:=arm.urdf', '-p',
                 'arms.right.robot.base_link:=a', '-p', 'arms.right.robot.tip_link:=b', '-p',
                 'session.autostart:=false']
    with ros(domain, *arguments) as context:
        node = EvaluatorNode(context=context, folder=tmp_path, parts=fake_parts())
        node.start_session()
        assert node.session is not None
        assert node.session.evaluator.descriptions == {  # type: ignore[attr-defined]
            'right': '<robot/>'}
        node.close()
        node.destroy_node()
