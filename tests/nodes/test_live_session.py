# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""One session without ROS: what goes to the evaluator goes to the recording, alike."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from live_helpers import EVENT_TOPIC, FakeEvaluator

from teleop_eval.core.errors import InputError, OutputError
from teleop_eval.core.samples import BoolSample, TextSample
from teleop_eval.core.settings import from_parameters
from teleop_eval.nodes.live_session import LiveSession
from teleop_eval.sinks import messages
from teleop_eval.sources.decode import make_decoder
from teleop_eval.sources.feed_order import Received

SECOND = 1_000_000_000


class FakeFolder:
    """Keeps what it is given; refuses on demand, as a full disk does."""

    def __init__(self) -> None:
        self.path = Path('session')
        self.inputs: list[tuple[int, str, bytes]] = []
        self.types: dict[str, str] = {}
        self.windows: list[Any] = []
        self.finished: dict[str, Any] = {}
        self.full = False

    def input(self, topic: str, type_name: str, receive_ns: int, data: bytes) -> None:
        self.inputs.append((receive_ns, topic, data))
        self.types[topic] = type_name
        self._check()

    def window(self, result: Any) -> None:
        self.windows.append(result)
        self._check()

    def diagnostics(self, now_ns: int, lines: Any) -> None:
        self._check()

    def flush(self) -> None:
        self._check()

    def finish(self, summary: Any, **facts: Any) -> dict[str, Any]:
        self._check()
        self.finished = {'summary': summary, **facts}
        return dict(summary)

    def _check(self) -> None:
        if self.full:
            raise OutputError('The disk is full.')


def decoder(topic: str) -> Any:
    if topic == '/refused':
        raise InputError('This type cannot be read.')
    return make_decoder(type_name(topic))


def type_name(topic: str) -> str:
    return 'std_msgs/msg/Bool' if topic == '/engaged' else 'std_msgs/msg/String'


@pytest.fixture
def session() -> LiveSession:
    settings = from_parameters({'arms.right.robot.joints_topic': 'j',
                                'arms.right.robot.joint_names': ['a']})
    evaluator = FakeEvaluator(settings, descriptions={}, resolve=str, simulated_time=False)
    return LiveSession(evaluator, FakeFolder(), event_topic=EVENT_TOPIC, type_name=type_name,
                       decoder=decoder)


def text(time_ns: int, label: str, topic: str = '/mapping') -> Received:
    return Received(time_ns, topic, 1, messages.string(label))


def fed(session: LiveSession) -> list[Any]:
    return session.evaluator.fed  # type: ignore[attr-defined,no-any-return]


def test_evaluator_and_recording_get_the_same_times(session: LiveSession) -> None:
    session.add([text(5, 'b'), text(5, 'a', '/a')])
    session.add([text(4, 'late')])
    assert [(ns, topic) for ns, topic, _ in fed(session)] == [
        (5, '/a'), (6, '/mapping'), (7, '/mapping')]
    assert [(ns, topic) for ns, topic, _ in session.folder.inputs] == [  # type: ignore[attr-defined]
        (ns, topic) for ns, topic, _ in fed(session)]
    assert fed(session)[0][2] == TextSample('a')


def test_latched_messages_open_the_session(session: LiveSession) -> None:
    session.start(100, [text(3, 'direct'), Received(4, '/engaged', 1, b'\0\1\0\0\1')])
    session.add([text(150, 'other')])
    assert fed(session) == [(100, '/engaged', BoolSample(True)),
                            (101, '/mapping', TextSample('direct')),
                            (150, '/mapping', TextSample('other'))]
    assert session.folder.types == {  # type: ignore[attr-defined]
        '/engaged': 'std_msgs/msg/Bool', '/mapping': 'std_msgs/msg/String'}


def test_events_are_part_of_the_stream(session: LiveSession) -> None:
    session.add([text(5, 'a')])
    session.event(9, 'reset')
    session.add([text(9 - 2 * SECOND, 'b')])
    assert [(topic, sample.text) for _, topic, sample in fed(session)] == [
        ('/mapping', 'a'), (EVENT_TOPIC, 'reset'), (EVENT_TOPIC, 'segment'), ('/mapping', 'b')]
    assert [topic for _, topic, _ in session.folder.inputs] == [  # type: ignore[attr-defined]
        topic for _, topic, _ in fed(session)]
    assert session.segments == 1


def test_a_malformed_message_is_recorded_counted_and_left_out(session: LiveSession) -> None:
    session.add([text(1, 'a'), Received(2, '/mapping', 2, b'\0\1\0\0\xff\0\0\0a')])
    session.add([text(3, 'b'), Received(2_500_000_001, '/refused', 1, b'x')])
    assert [sample.text for _, _, sample in fed(session)] == ['a', 'b']
    assert len(session.folder.inputs) == 4  # type: ignore[attr-defined]
    assert session.malformed == {'/mapping': 1, '/refused': 1}
    sentences = session.malformed_sentences()
    assert sentences[0].startswith('1 of 3 messages on /mapping cannot be decoded')
    assert sentences[1].endswith(
        'it came 2.500 s after the start: This type cannot be read.')


def test_a_full_disk_is_said_and_the_evaluation_goes_on(session: LiveSession) -> None:
    session.folder.full = True  # type: ignore[attr-defined]
    windows = session.add([text(ns, 'a') for ns in range(1, 21)])
    session.flush()
    assert len(windows) == 2 and len(fed(session)) == 20
    assert session.write_problem == 'The disk is full.'
    assert session.problems == ['The disk is full.']
    session.folder.full = False  # type: ignore[attr-defined]
    session.flush()
    assert session.write_problem == ''


def test_finish_writes_all_and_gives_the_last_windows(session: LiveSession) -> None:
    session.add([text(ns, 'a') for ns in range(1, 10)], cut_ns=10)
    session.add([text(30, 'held')], cut_ns=20)
    assert len(fed(session)) == 9

    def complete(summary: dict[str, Any]) -> None:
        summary['completed'] = True

    last, whole = session.finish(complete, problems=['A sentence.'])
    assert len(last) == 1 and session.folder.windows == last  # type: ignore[attr-defined]
    assert whole['completed']
    finished = session.folder.finished  # type: ignore[attr-defined]
    assert (finished['start_ns'], finished['end_ns']) == (1, 30)
    assert finished['problems'] == ['A sentence.']


def test_a_failing_finish_is_told(session: LiveSession) -> None:
    session.folder.full = True  # type: ignore[attr-defined]
    session.finish(lambda summary: None)
    assert session.write_problem == 'The disk is full.'
