# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Count lost messages of one topic by the publishers' own numbers."""

from __future__ import annotations


class LossCount:
    """
    Counter of the gaps in publication sequence numbers.

    Each publisher numbers its messages, and the numbers of several publishers interleave.
    Where the middleware says which publisher a message comes from (Kilted), each is counted
    apart; where it does not (Jazzy), only a single publisher can be counted.
    """

    def __init__(self) -> None:
        self._last: dict[bytes | None, int] = {}
        self.begin()

    def begin(self) -> None:
        """Count from zero; what is lost between the last message and the next one counts."""
        self._lost = 0
        self._reason = '' if self._last else 'no message yet'

    def add(self, publisher: bytes | None, number: int | None, publishers: int) -> None:
        """
        Count one message.

        Parameters
        ----------
        publisher
            Identity of the publisher, None where the middleware gives none.
        number
            Publication sequence number, None where the middleware gives none.
        publishers
            Number of publishers matched now.

        """
        if number is None:
            self._reason = 'the middleware numbers no messages'
            return
        if publisher is None and publishers != 1:
            # The numbers of several publishers cannot be told apart, nor trusted afterwards.
            self._reason = f'{publishers} publishers, whose messages cannot be told apart here'
            self._last.clear()
            return
        last = self._last.get(publisher)
        if last is not None and number > last + 1:
            self._lost += number - last - 1
        # A smaller number is a publisher that started anew: count from there.
        self._last[publisher] = number
        if self._reason == 'no message yet':
            self._reason = ''

    @property
    def lost(self) -> int | None:
        """Return the number of lost messages, None where it cannot be observed."""
        return None if self._reason else self._lost

    @property
    def reason(self) -> str:
        """Return why the number cannot be observed, '' where it can."""
        return self._reason
