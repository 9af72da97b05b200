# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What is said, live and of recordings alike, of messages that cannot be used."""

from __future__ import annotations

from collections.abc import Iterable

from teleop_eval.core.sentences import listed


def malformed_sentence(topic: str, *, count: int, total: int, first_s: float,
                       reason: str) -> str:
    """
    Return the sentence on a topic with messages that were left out.

    Parameters
    ----------
    topic
        Full name.
    count, total
        Messages left out, messages received.
    first_s
        When the first one was received, seconds since the session's first message.
    reason
        Why that one could not be decoded.

    """
    verb = 'is' if count == 1 else 'are'
    which = 'it came' if count == 1 else 'the first came'
    return (f'{count} of {total} messages on {topic} cannot be decoded and {verb} left out; '
            f'{which} {first_s:.3f} s after the start: {reason.rstrip(".")}.')


def nothing_sentence(topics: Iterable[str], *, received: int) -> str:
    """
    Return the sentence on a session in which no measured sample came.

    Parameters
    ----------
    topics
        Full names of the topics that carry measured samples.
    received
        Messages that came on them, none of which could be decoded.

    """
    names = listed(sorted(topics))
    if received:
        return (f'Nothing was evaluated: none of the {received} messages on {names} can be '
                'decoded; see what is said of the first, and correct their publishers.')
    return (f'Nothing was evaluated: there is no message of {names}; check the names, and that '
            'they are published.')
