# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Sentences for the user, each kept once with the number of times it was said."""

from __future__ import annotations

# A message that differs each time must not fill the memory with sentences.
MOST = 100
_MORE = 'there is more to say than is kept here.'


class Sentences:
    """Different sentences in the order in which they were first said."""

    def __init__(self) -> None:
        self._times: dict[str, int] = {}

    def __bool__(self) -> bool:
        """Tell whether anything was said."""
        return bool(self._times)

    def say(self, sentence: str) -> None:
        """Add a sentence, or count it if it was said before."""
        if sentence not in self._times and len(self._times) >= MOST:
            sentence = _MORE
        self._times[sentence] = self._times.get(sentence, 0) + 1

    def texts(self) -> list[str]:
        """Return the sentences, with the number of times where it is not one."""
        return [text if times == 1 else f'{text} ({times} times)'
                for text, times in self._times.items()]
