# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Text for a terminal, out of names and sentences that came from elsewhere.

Nothing in them is taken for markup or terminal control.
"""

from __future__ import annotations

import math
import unicodedata
from collections.abc import Mapping, Sequence
from typing import Any, TypeGuard

from rich.console import RenderableType
from rich.table import Table
from rich.text import Text

LONGEST_LABEL, LONGEST_SENTENCE = 60, 400


def clean(text: str, longest: int = LONGEST_LABEL) -> str:
    """
    Return text that cannot move the cursor, change colours or reorder its surroundings.

    Control, format and unassigned characters become a replacement sign, white space one
    space, and a text longer than `longest` is cut.
    """
    shown = ''.join(
        ' ' if sign.isspace() else '\ufffd' if unicodedata.category(sign)[0] == 'C' else sign
        for sign in text[:4 * longest])
    shown = ' '.join(shown.split())
    return shown if len(shown) <= longest and len(text) <= 4 * longest else (
        shown[:longest - 3] + '...')


def number(value: float) -> str:
    """
    Return up to four significant digits, without an exponent where that stays readable.

    What only rounding can have left is 0.
    """
    if abs(value) < 1e-12:
        return '0'
    if abs(value) < 1e6 and value == int(value):
        return str(int(value))
    size = math.floor(math.log10(abs(value)))
    if not -3 <= size < 6:
        return f'{value:.1e}'
    return f'{value:.{min(max(3 - size, 0), 4)}f}'


class Remarks:
    """Numbers the sentences below a table; the same sentence keeps its number."""

    def __init__(self) -> None:
        self._numbers: dict[str, int] = {}

    def mark(self, sentence: str) -> str:
        """Return the mark of a sentence."""
        return f'({self._numbers.setdefault(sentence, len(self._numbers) + 1)})'

    def lines(self) -> list[RenderableType]:
        """Return the sentences behind their marks."""
        return [listed(f'({place})', sentence) for sentence, place in self._numbers.items()]


def listed(mark: str, sentence: str) -> Table:
    """Return a sentence with a hanging indent behind its mark."""
    line = Table.grid(padding=(0, 1))
    line.add_column(no_wrap=True)
    line.add_column(overflow='fold')
    line.add_row(Text(mark), Text(sentence))
    return line


def as_mapping(value: Any) -> Mapping[str, Any]:
    """Return a value that may be a mapping, an empty one if it is not."""
    return value if isinstance(value, Mapping) else {}


def finite(value: Any) -> TypeGuard[float]:
    """Tell whether a value is a finite number."""
    return (isinstance(value, int | float) and not isinstance(value, bool)
            and math.isfinite(value))


def is_pair(value: Any) -> bool:
    """Tell whether a value is two finite numbers."""
    return (isinstance(value, Sequence) and not isinstance(value, str) and len(value) == 2
            and all(finite(end) for end in value))
