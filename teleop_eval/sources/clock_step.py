# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Recordings during which the recorder's clock was put back.

Sorted by log time, what was recorded before and after such a step would be mixed. These are
read in the order in which they were written instead, and whoever reads them sees the step.
"""

from __future__ import annotations

from collections.abc import Iterable

from teleop_eval.sources.feed_order import STEP_NS
from teleop_eval.sources.stored_file import Message


def steps_back(messages: Iterable[Message], latest: dict[str, int]) -> bool:
    """
    Tell whether the log times of one topic fall back by more than a clock step.

    Parameters
    ----------
    messages
        In the order of the file. Several topics may each have been written at a time of their
        own, as in merged recordings.
    latest
        Latest log time by topic before these messages; brought up to date.

    """
    for log_ns, topic, _ in messages:
        before = latest.get(topic, log_ns)
        if log_ns < before - STEP_NS:
            return True
        latest[topic] = max(log_ns, before)
    return False


# SQLite compares neighbours first, which needs no sorting; merged recordings need the second.
_NEIGHBOURS = (
    'SELECT 1 FROM (SELECT timestamp, lag(timestamp) OVER (ORDER BY id) AS before '
    f'FROM messages) WHERE timestamp < before - {STEP_NS} LIMIT 1')
_TOPICS = (
    'SELECT 1 FROM (SELECT timestamp, lag(timestamp) OVER (PARTITION BY topic_id ORDER BY id) '
    f'AS before FROM messages) WHERE timestamp < before - {STEP_NS} LIMIT 1')
STEP_QUERIES = (_NEIGHBOURS, _TOPICS)
"""The clock was put back if each of these gives a row."""
