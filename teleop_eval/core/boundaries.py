# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Which cells count: engaged, settled, under which mapping, in which stretch."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from teleop_eval.core.streams import HeldState
from teleop_eval.core.window import Span


@dataclass(frozen=True)
class CellStates:
    """
    State of the cells of one window, each (count,).

    `engaged`: engaged during the whole cell; `usable`: engaged, settled and under a known
    mapping; `run`: number of the stretch between two boundaries; `label`: index into the
    arm's mapping labels, -1 for none. `engagements`: labels under which one began.
    """

    engaged: np.ndarray
    usable: np.ndarray
    run: np.ndarray
    label: np.ndarray
    engagements: tuple[int, ...]


class Boundaries:
    """Follows clutch and active mapping from window to window."""

    def __init__(self, engaged: HeldState | None, mapping: HeldState | None,
                 fixed_label: str | None) -> None:
        self.engaged = engaged
        self.mapping = mapping
        self.labels: list[str] = []
        self._fixed = None if fixed_label is None else self.index(fixed_label)
        self._settled_ns: int | None = None
        self._run = 0

    def index(self, label: str) -> int:
        """Return the number of a mapping label, a new one for a new label."""
        if label not in self.labels:
            self.labels.append(label)
        return self.labels.index(label)

    def restart(self) -> None:
        """Begin a new stretch, as at the start of a segment."""
        self._run += 1
        self._settled_ns = None

    def states(self, span: Span, *, settling_ns: int) -> CellStates:
        """Return the state of the span's cells; `settling_ns` follows each boundary."""
        starts, count = span.cell_starts_ns, span.count
        label = self._label_at(starts)
        engaged = self._engaged_at(starts)
        usable = engaged & (label >= 0)
        run = np.full(count, self._run, dtype=np.int64)
        if self._settled_ns is not None:
            usable &= starts >= self._settled_ns
        changes = self._changes(span)
        for time_ns in changes:
            cell = int(span.cell_of(np.array([time_ns]))[0])
            # A boundary inside a cell spoils it; one on its edge does not.
            inside = span.start_ns + cell * span.period_ns < time_ns
            if inside and cell < count:
                usable[cell] = False
                engaged[cell] = False
            first = cell + 1 if inside else cell
            self._run += 1
            run[first:] = self._run
            self._settled_ns = time_ns + settling_ns
            usable[first:] &= starts[first:] >= self._settled_ns
        engagements = tuple(
            int(label[min(max(int(span.cell_of(np.array([time_ns]))[0]), 0), count - 1)])
            for time_ns in self._rises(span))
        return CellStates(engaged, usable, run, label, engagements)

    def _label_at(self, times_ns: np.ndarray) -> np.ndarray:
        if self.mapping is None:
            return np.full(len(times_ns), -1 if self._fixed is None else self._fixed)
        found = self.mapping.at(times_ns)
        return np.array([self.index(label) if isinstance(label, str) and label else -1
                         for label in found], dtype=np.int64)

    def _engaged_at(self, times_ns: np.ndarray) -> np.ndarray:
        if self.engaged is None:
            return np.ones(len(times_ns), dtype=bool)
        return np.array([value is True for value in self.engaged.at(times_ns)], dtype=bool)

    def _changes(self, span: Span) -> list[int]:
        found: set[int] = set()
        for state in (self.engaged, self.mapping):
            if state is not None:
                found.update(state.changes(span.start_ns - 1, span.end_ns - 1))
        return sorted(found)

    def _rises(self, span: Span) -> list[int]:
        if self.engaged is None:
            return []
        times = self.engaged.changes(span.start_ns - 1, span.end_ns - 1)
        return [time for time, value in zip(times, self.engaged.at(np.array(times)), strict=True)
                if value is True]
