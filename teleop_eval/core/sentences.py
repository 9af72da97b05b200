# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Sentences for the user, each kept once with the number of times it was said."""

from __future__ import annotations

import difflib
from collections.abc import Collection, Iterable

# A message that differs each time must not fill the memory with sentences.
MOST = 100
_MORE = 'there is more to say than is kept here.'
_LONGEST = 80
_MOST_NAMES = 12


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
        return [text if times == 1 else f'{text.removesuffix(".")} ({times} times).'
                for text, times in self._times.items()]


def shown(name: object) -> str:
    """Quote a name or value, cut where it would make the sentence unreadable."""
    return cut(repr(name))


def cut(text: str) -> str:
    """Cut a text where it would make the sentence unreadable."""
    return text if len(text) <= _LONGEST else f'{text[:_LONGEST - 4]} ...'


def listed(names: Iterable[str]) -> str:
    """Return names for a sentence, the first ones if there are many."""
    names = [cut(name) for name in names]
    if len(names) > _MOST_NAMES:
        names = [*names[:_MOST_NAMES], f'{len(names) - _MOST_NAMES} more']
    return ', '.join(names)


def nearest(name: str, known: Collection[str]) -> str:
    """Return the known name most like one that may be misspelt, '' if none is."""
    return next(iter(difflib.get_close_matches(name[:_LONGEST], sorted(known), 1)), '')
