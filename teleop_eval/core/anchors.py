# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Where hand and tool were when each stretch (engagement, mapping) of a run began."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.boundaries import CellStates
from teleop_eval.core.history import Track
from teleop_eval.core.mappings import Anchor
from teleop_eval.core.window import Span

# Track that gives each part of an anchor.
_SOURCES = {'hand_m': 'hand', 'hand_xyzw': 'hand_turn', 'robot_m': 'p_r', 'robot_xyzw': 'turn_r'}


class AnchorBook:
    """
    Follows the anchors from window to window.

    An anchor is read between the two cells around the beginning of its stretch. Of a stretch
    that began before there was data, or in a gap, it cannot be read. Only the very first one is
    then anchored at the first cell that has hand and tool: `from_first_cell` tells so.

    `ends` are the poses at the end of each stretch that ended in the last window.
    """

    def __init__(self) -> None:
        self.from_first_cell = False
        self.unknown = 0
        self.ends: dict[int, Anchor] = {}
        self._last: tuple[int, Anchor | None] | None = None
        self._seen = False
        self.interrupt()

    def notes(self, name: str) -> list[str]:
        """Return the sentences on anchors of arm `name` that could not be read."""
        found = []
        if self.from_first_cell:
            found.append(
                f'{name}: the first engagement began before hand and tool were both there, so '
                'relative and rate mappings are anchored at the first sample of both; the '
                'constant part of their error is not seen until the next engagement.')
        if self.unknown:
            found.append(
                f'{name}: {self.unknown} engagements began where hand or tool was not seen; for '
                'relative and rate mappings there is no ideal command until the next one.')
        return found

    def interrupt(self) -> None:
        """Forget the last cell, which the next window does not follow."""
        self._before: dict[str, Track] = {}
        self._end_ns: int | None = None

    def of_window(self, span: Span, states: CellStates,
                  tracks: Mapping[str, Track]) -> dict[int, Anchor]:
        """Return the anchor of each stretch of the window, left out where it is not known."""
        found: dict[int, Anchor] = {}
        for stretch in np.unique(states.stretch[states.stretch >= 0]).tolist():
            if self._last is None or self._last[0] != stretch:
                anchor = self._read(span, states, stretch, tracks)
                if anchor is None and not self._seen:
                    continue
                self.unknown += anchor is None
                self._last, self._seen = (stretch, anchor), True
            if (known := self._last[1]) is not None:
                found[stretch] = known
        self.ends = {
            stretch: end for stretch, time_ns in states.ended_ns.items()
            if (end := self._at(span, time_ns, tracks)) is not None}
        self._before = {name: Track(track.values[-1:], track.valid[-1:])
                        for name, track in tracks.items() if name in _SOURCES.values()}
        self._end_ns = span.end_ns
        return found

    def _read(self, span: Span, states: CellStates, stretch: int,
              tracks: Mapping[str, Track]) -> Anchor | None:
        began_ns = states.began_ns.get(stretch)
        anchor = None if began_ns is None else self._at(span, began_ns, tracks)
        if anchor is None and not self._seen:
            return self._first(states.stretch == stretch, tracks)
        return anchor

    def _at(self, span: Span, time_ns: int, tracks: Mapping[str, Track]) -> Anchor | None:
        """Read at a time, None where there is no cell on both sides of it."""
        place = (time_ns - span.start_ns) / span.period_ns - 0.5
        follows = self._end_ns == span.start_ns
        return self._between(place, tracks) if place >= (-1.0 if follows else 0.0) else None

    def _between(self, place: float, tracks: Mapping[str, Track]) -> Anchor | None:
        """Read at a place among the cells' centres, -1 being the last one before the window."""
        low = int(np.floor(place))
        share = np.array([place - low])
        parts: dict[str, np.ndarray | None] = {}
        for part, name in _SOURCES.items():
            track = tracks.get(name)
            parts[part] = None
            if track is None:
                continue
            values, valid = [], []
            for cell in (low, low + 1):
                source, at = (self._before.get(name), -1) if cell < 0 else (track, cell)
                inside = source is not None and at < len(source.valid)
                values.append(source.values[at] if source is not None and inside else None)
                valid.append(bool(source is not None and inside and source.valid[at]))
            if not all(valid):
                continue
            start, end = np.asarray(values[0])[None], np.asarray(values[1])[None]
            turn = part.endswith('xyzw')
            parts[part] = (rotations.slerp(start, end, share)[0] if turn
                           else (start + share[:, None] * (end - start))[0])
        return _complete(parts)

    def _first(self, here: np.ndarray, tracks: Mapping[str, Track]) -> Anchor | None:
        good = here.copy()
        for name in _SOURCES.values():
            if name in tracks:
                good &= tracks[name].valid
        if not good.any():
            return None
        cell = int(np.argmax(good))
        anchor = _complete({part: tracks[name].values[cell] if name in tracks else None
                            for part, name in _SOURCES.items()})
        self.from_first_cell |= anchor is not None
        return anchor


def _complete(parts: dict[str, np.ndarray | None]) -> Anchor | None:
    """Return an anchor if it has at least one of hand and tool."""
    if parts['hand_m'] is None and parts['robot_m'] is None:
        return None
    return Anchor(**parts)
