# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Which cells count: engaged, settled, under which mapping, in which stretch."""

from __future__ import annotations

from collections.abc import Iterable
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
    arm's mapping labels, -1 for none. `engagements`: labels under which one began; engaged
    at the very start counts as one. `stretch`: number of the engagement or mapping a cell lies
    in, which a gap of the data does not change, -1 outside of any; `began_ns`: when each of
    them began, None if it was so from the start; `ended_ns`: when those ended that ended in this
    window.
    """

    engaged: np.ndarray
    usable: np.ndarray
    run: np.ndarray
    label: np.ndarray
    engagements: tuple[int, ...]
    stretch: np.ndarray
    began_ns: dict[int, int | None]
    ended_ns: dict[int, int]


class Boundaries:
    """Follows clutch and active mapping from window to window."""

    def __init__(self, engaged: HeldState | None, mapping: HeldState | None,
                 fixed_label: str | None, *, labels: Iterable[str] = ()) -> None:
        self.engaged = engaged
        self.mapping = mapping
        self.labels: list[str] = list(labels)
        self._fixed = None if fixed_label is None else self.index(fixed_label)
        self._settled_ns: int | None = None
        self._run = 0
        self._begun = False
        self._unlabelled = 0

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
        before = np.array([span.start_ns - 1], dtype=np.int64)
        begins_engaged = (not self._begun and self.engaged is not None
                          and bool(self._engaged_at(before)[0]))
        self._begun = True
        usable = engaged & (label >= 0)
        run = np.full(count, self._run, dtype=np.int64)
        if self._settled_ns is not None:
            usable &= starts >= self._settled_ns
        for time_ns in self._changes(span.start_ns, span.end_ns):
            cell = int((time_ns - span.start_ns) // span.period_ns)
            # A boundary inside a cell spoils it; one on its edge does not.
            inside = span.start_ns + cell * span.period_ns < time_ns
            if inside:
                usable[cell] = False
                engaged[cell] = False
            first = cell + 1 if inside else cell
            self._run += 1
            run[first:] = self._run
            self._settled_ns = time_ns + settling_ns
            usable[first:] &= starts[first:] >= self._settled_ns
        begun = self._engagements(span.start_ns, span.end_ns)
        known = label[label >= 0]
        if begins_engaged:
            begun.insert(0, int(label[0]))
        stretch = np.where(engaged & (label >= 0), self._stretch_at(starts), -1)
        return CellStates(engaged, usable, run, label,
                          self._labelled(begun, int(known[0]) if len(known) else -1),
                          stretch, self._began(stretch, starts),
                          self._ended(self._changes(span.start_ns, span.end_ns)))

    def _stretch_at(self, times_ns: np.ndarray) -> np.ndarray:
        total = np.zeros(len(times_ns), dtype=np.int64)
        for state in (self.engaged, self.mapping):
            if state is not None:
                total += state.changed_before(times_ns)
        return total

    def _ended(self, changes: list[int]) -> dict[int, int]:
        """Return when each stretch ended that one of the changes ended."""
        before = np.array(changes, dtype=np.int64) - 1
        lasted = self._engaged_at(before) & (self._label_at(before) >= 0)
        return {int(number): time_ns for number, time_ns, one in zip(
            self._stretch_at(before), changes, lasted, strict=True) if one}

    def _began(self, stretch: np.ndarray, starts: np.ndarray) -> dict[int, int | None]:
        """Return when each stretch of the cells (m,) began."""
        found: dict[int, int | None] = {}
        states = [state for state in (self.engaged, self.mapping) if state is not None]
        for number in np.unique(stretch[stretch >= 0]):
            inside = int(starts[int(np.argmax(stretch == number))])
            times = [time for state in states
                     if (time := state.last_change(inside)) is not None]
            found[int(number)] = max(times, default=None)
        return found

    def skip(self, start_ns: int, end_ns: int, *, settling_ns: int) -> tuple[int, ...]:
        """
        Pass over a stretch without samples: its boundaries count, its cells do not.

        Returns
        -------
        Labels under which an engagement began.

        """
        self._run += 1
        changes = self._changes(start_ns, end_ns)
        if changes:
            self._settled_ns = changes[-1] + settling_ns
        return self._labelled(self._engagements(start_ns, end_ns), -1)

    def _labelled(self, begun: list[int], first_known: int) -> tuple[int, ...]:
        """Return labels of engagements; those before any label wait for the first one."""
        self._unlabelled += begun.count(-1)
        found = [label for label in begun if label >= 0]
        if first_known >= 0:
            found += [first_known] * self._unlabelled
            self._unlabelled = 0
        return tuple(found)

    def _label_at(self, times_ns: np.ndarray) -> np.ndarray:
        """Return the mapping's index (n,) at each time, -1 where there is none."""
        if self.mapping is None:
            return np.full(len(times_ns), -1 if self._fixed is None else self._fixed)
        codes = [-1] + [self.index(label) if isinstance(label, str) and label else -1
                        for label in self.mapping.known()]
        return np.array(codes, dtype=np.int64)[self.mapping.place(times_ns)]

    def _engaged_at(self, times_ns: np.ndarray) -> np.ndarray:
        if self.engaged is None:
            return np.ones(len(times_ns), dtype=bool)
        values = [False] + [value is True for value in self.engaged.known()]
        return np.array(values)[self.engaged.place(times_ns)]

    def _changes(self, start_ns: int, end_ns: int) -> list[int]:
        """Return the times in [start, end) at which clutch or mapping changed."""
        found: set[int] = set()
        for state in (self.engaged, self.mapping):
            if state is not None:
                found.update(state.changes(start_ns, end_ns))
        return sorted(found)

    def _engagements(self, start_ns: int, end_ns: int) -> list[int]:
        """Return the label of each engagement that began in [start, end)."""
        if self.engaged is None:
            return []
        times = np.array(sorted(set(self.engaged.changes(start_ns, end_ns))), dtype=np.int64)
        rises = times[self._engaged_at(times)]
        return [int(label) for label in self._label_at(rises)]
