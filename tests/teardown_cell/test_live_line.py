# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What the demonstration says of the evaluator's numbers while it runs, without DDS."""

from __future__ import annotations

import math

import pytest

pytest.importorskip('rclpy', reason='the demo needs rclpy')

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus  # noqa: E402
from std_msgs.msg import Float64  # noqa: E402

from teleop_eval.teardown_cell import live_line  # noqa: E402
from teleop_eval.teardown_cell.plan import DIAGNOSTICS_TOPIC, Plan  # noqa: E402

RESPONSE = 'response delay: 0.048 arm lengths, 132 ms behind the command'
MAPPING = 'mapping: 0.247 arm lengths'
ERROR = 'tracking error 0.050 arm lengths RMS, 0.002 with the delay taken out; '


@pytest.mark.parametrize(('message', 'part'), [
    (f'{ERROR}mostly {RESPONSE}', RESPONSE),
    (f'{ERROR}mostly {RESPONSE}; partly cancels mapping', f'{RESPONSE}; partly cancels mapping'),
    (f'{ERROR}between hand and tool mostly {MAPPING}', MAPPING),
    (ERROR.rstrip('; '), ''), ('disengaged for 3.2 s', ''), ('', '')])
def test_the_largest_part_is_what_diagnostics_call_it(message, part):
    assert live_line.largest_part(message) == part


class Cell:
    """Stands for the cell's node: messages put at a topic wait there."""

    def __init__(self):
        self.waiting = {}

    def subscribe(self, kind, topic, profile):
        """Return the topic, which stands for the subscription."""
        self.waiting[topic] = []
        return topic

    def say(self, message, name='teleop_eval: right: tracking'):
        """Let a status be published."""
        self.waiting[DIAGNOSTICS_TOPIC].append(DiagnosticArray(
            status=[DiagnosticStatus(name=name, message=message)]))


@pytest.fixture
def cell(monkeypatch):
    """Return a cell whose messages are taken as those of DDS are."""
    cell = Cell()

    def take(topic):
        messages, cell.waiting[topic] = cell.waiting[topic], []
        return messages

    monkeypatch.setattr(live_line, 'take', take)
    return cell


def test_a_new_largest_part_is_news_once(cell):
    live = live_line.LiveValues(cell)

    def news(*messages):
        for message in messages:
            cell.say(message)
        live.update()
        return live.news()

    assert news() == ''
    assert news('waits for the robot description') == ''
    assert news(f'{ERROR}mostly {RESPONSE}') == (
        f'    between hand and tool, largest part now: {RESPONSE}')
    assert live.news() == ''
    # Another size of the same part is no news, and neither is a pause.
    assert news(f'{ERROR}mostly {RESPONSE.replace("0.048", "0.051")}') == ''
    assert news('disengaged for 3.2 s') == ''
    assert news(f'{ERROR}mostly {RESPONSE}') == ''
    assert news(f'{ERROR}between hand and tool mostly {MAPPING}').endswith(f'now: {MAPPING}')
    # The newest of several counts.
    assert news(f'{ERROR}mostly {RESPONSE}', f'{ERROR}mostly {MAPPING}') == ''


def test_other_lines_of_diagnostics_are_no_news(cell):
    live = live_line.LiveValues(cell)
    cell.say(f'{ERROR}mostly {RESPONSE}', name='teleop_eval: left: tracking')
    cell.say('mostly ideal command -> command, 150 ms', name='teleop_eval: right: latency')
    live.update()
    assert live.news() == ''


def test_the_line_has_the_newest_numbers_or_a_dash(cell):
    live, plan = live_line.LiveValues(cell), Plan(seconds=40.0, seed=1)
    assert live_line.live_line(plan, 10.0, live.values).endswith(
        'engaged;  latency -,  tracking error -')
    for topic in list(cell.waiting):
        if topic.endswith('/latency_s'):
            cell.waiting[topic] += [Float64(data=0.1), Float64(data=0.1396)]
        if topic.endswith('/tracking_error_rms_norm'):
            cell.waiting[topic] += [Float64(data=math.nan)]
    live.update()
    assert live_line.live_line(plan, 10.0, live.values) == (
        ' 10.0 of 40 s  mirror  engaged;  latency 139.6 ms,  tracking error -')
