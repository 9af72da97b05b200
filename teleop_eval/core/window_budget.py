# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The error budget of one window: which tracks, at which delays, on which cells."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from teleop_eval.core.budget import (
    NO_SAMPLE,
    TERMS,
    Positions,
    Terms,
    split,
    window_metrics,
)
from teleop_eval.core.delays import Observed
from teleop_eval.core.history import History, Track
from teleop_eval.core.metric import INSUFFICIENT, Metric, missing
from teleop_eval.core.tracking import ARM_LENGTHS
from teleop_eval.core.window import Span
from teleop_eval.core.window_latency import WindowLatency


@dataclass(frozen=True)
class Space:
    """Where a budget lives: names of its tracks, end of the metrics' names, unit."""

    operator: str
    ideal: str
    command: str
    robot: str
    suffix: str
    unit: str


POSITION = Space('u_o', 'u_i', 'u_c', 'u_r', '_norm', ARM_LENGTHS)
VELOCITY = Space('w_o', 'w_i', 'w_c', 'w_r', '_norm_s', f'{ARM_LENGTHS}/s')
# Seconds by term, for the sentence on it.
Delays = dict[str, 'float | None']


@dataclass(frozen=True)
class WindowBudget:
    """Terms of one window, their RMS as metrics, the delays they were formed at."""

    terms: Terms
    metrics: dict[str, Metric]
    delays_s: Delays = field(default_factory=dict)


def window_budget(history: History, latency: WindowLatency, span: Span, label: int,
                  here: np.ndarray, space: Space, period_s: float) -> WindowBudget | None:
    """
    Split one window's discrepancy.

    Parameters
    ----------
    history
        Tracks up to the window's end.
    latency
        Knows the delays in use.
    span, label, here
        The window, the mapping's index, its usable cells (count,).
    space
        Positions or velocities.
    period_s
        The grid's period.

    Returns
    -------
    None if nothing drives the robot; without samples or an observed delay the RMS are missing,
    with the reason.

    """
    robot = history.last(space.robot, span.count)
    ideal, command = (history.last(name, span.count) for name in (space.ideal, space.command))
    driver = ideal if command is None else command
    formed = _formed(latency, space)
    if not formed:
        return None
    if robot is None or driver is None:
        why = missing(INSUFFICIENT, space.unit, NO_SAMPLE)
        return WindowBudget(Terms({}, None), dict.fromkeys(formed, why))
    stages = {'response_delay': 'latency_s' if command is None else 'latency_response_s'}
    if command is not None and ideal is not None:
        stages['processing_delay'] = 'latency_command_s'
    seen: dict[str, Observed] = {}
    for term, name in stages.items():
        known = latency.in_use(span.end_ns, label, (name,))
        if known is None:
            why = latency.why_none(label, space.unit, (name,))
            return WindowBudget(Terms({}, None), dict.fromkeys(formed, why))
        seen[term] = known
    kept = here.copy()

    def late(name: str, term: str) -> Track | None:
        delay = seen.get(term)
        if delay is None:
            return None
        shift = delay.delay_s / period_s
        return _same_run(history, history.delayed(name, span.count, shift), span.count, shift)

    operator = history.last(space.operator, span.count)
    ideal_late = None if command is None else late(space.ideal, 'processing_delay')
    driver_late = late(space.ideal if command is None else space.command, 'response_delay')
    for track in (operator, ideal, ideal_late, command, driver_late, robot):
        if track is not None:
            kept &= track.valid

    def at(track: Track | None) -> np.ndarray | None:
        return None if track is None else track.values[kept]

    terms = split(Positions(at(operator), at(ideal), at(ideal_late), at(command),
                            at(driver_late), robot.values[kept]))
    return WindowBudget(
        terms, window_metrics(terms, suffix=space.suffix, unit=space.unit,
                              details=_delays(seen)),
        {term: one.delay_s for term, one in seen.items()})


def _delays(seen: dict[str, Observed]) -> dict[str, dict[str, object]]:
    """
    Return the delay of each term and its age, as details.

    Discrepancy and mapping are those of a split at both delays, hence at their sum.
    """
    whole = Observed(sum(one.delay_s for one in seen.values()),
                     max(one.age_s for one in seen.values()))
    of = dict.fromkeys(('discrepancy', *TERMS), whole)
    of['response_delay'] = of['residual'] = seen['response_delay']
    of['command'] = of['processing_delay'] = seen.get('processing_delay', whole)
    return {name: {'delay_s': one.delay_s, 'delay_age_s': one.age_s}
            for name, one in of.items()}


def _formed(latency: WindowLatency, space: Space) -> list[str]:
    """Return the names of the metrics that the tracks met so far can give."""
    ideal, command = latency.has(space.ideal), latency.has(space.command)
    if not latency.has(space.robot) or not (ideal or command):
        return []
    names = ['budget_response_delay', 'budget_residual']
    if ideal and command:
        names += ['budget_processing_delay', 'budget_command']
    if ideal and latency.has(space.operator):
        names += ['budget_mapping', 'discrepancy']
    return [f'{name}_rms{space.suffix}' for name in names]


def _same_run(history: History, track: Track | None, count: int, shift: float) -> Track | None:
    """Return a delayed track, valid only where no boundary lies between then and now."""
    if track is None:
        return None
    now = np.arange(len(history) - count, len(history))
    then = np.maximum(now - int(np.ceil(shift)), 0)
    return Track(track.values, track.valid & (history.run[then] == history.run[now]))
