# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""One line now and then that says what is happening in the cell."""

from __future__ import annotations

import math
from collections.abc import Mapping

from diagnostic_msgs.msg import DiagnosticArray
from std_msgs.msg import Float64

from teleop_eval.teardown_cell.cell_node import LATCHED, SAMPLED, CellNode, take
from teleop_eval.teardown_cell.plan import (
    ARM_NAME,
    DIAGNOSTICS_TOPIC,
    LATENESS_TOPIC,
    NAMESPACE,
    Plan,
)

LATENCY, TRACKING = 'latency_s', 'tracking_error_rms_norm'
_MOSTLY = 'mostly '


def phase(plan: Plan, t: float) -> str:
    """Return what is going on at t, s from the start."""
    if t < plan.first_engagement_s:
        return 'clutch open, arm moves to the operator'
    if plan.engaged(t):
        return 'engaged'
    if t < plan.switch_s:
        return 'clutch open before the change of mapping'
    if t < plan.reengage_s:
        return 'clutch open, arm moves to the new mapping'
    return 'clutch open, the run is over'


def live_line(plan: Plan, t: float, values: Mapping[str, float]) -> str:
    """
    Return the line for t.

    Parameters
    ----------
    plan, t
        The plan and the time from the start, s.
    values
        The evaluator's last window by metric name; NaN or absent: no value.

    """
    latency, tracking = (values.get(name, math.nan) for name in (LATENCY, TRACKING))
    shown = [
        f'latency {latency * 1e3:5.1f} ms' if math.isfinite(latency) else 'latency -',
        f'tracking error {tracking:.3f} arm lengths' if math.isfinite(tracking)
        else 'tracking error -',
    ]
    clock = f'{min(max(t, 0.0), plan.seconds):5.1f} of {plan.seconds:.0f} s'
    return f'{clock}  {plan.mapping(t):<6}  {phase(plan, t)};  ' + ',  '.join(shown)


def largest_part(message: str) -> str:
    """Return what a tracking line of /diagnostics calls the largest part, '' if nothing."""
    return message.partition(_MOSTLY)[2]


class LiveValues:
    """The evaluator's metrics and the lateness of commands as they are published."""

    def __init__(self, cell: CellNode) -> None:
        """Subscribe."""
        self.values: dict[str, float] = {}
        self._subscriptions = {
            name: cell.subscribe(Float64, f'{NAMESPACE}/teleop_eval/{ARM_NAME}/{name}', SAMPLED)
            for name in (LATENCY, TRACKING)}
        self._lateness = cell.subscribe(Float64, LATENESS_TOPIC, LATCHED)
        self.lateness_s = 0.0
        self._diagnostics = cell.subscribe(DiagnosticArray, DIAGNOSTICS_TOPIC, SAMPLED)
        self._part = self._shown = ''

    def news(self) -> str:
        """Return the largest part of the error budget when another one has become it."""
        name = self._part.partition(':')[0]
        if not name or name == self._shown:
            return ''
        self._shown = name
        return f'    between hand and tool, largest part now: {self._part}'

    def update(self) -> None:
        """Take what has been published."""
        for name, subscription in self._subscriptions.items():
            for message in take(subscription):
                self.values[name] = float(message.data)
        for message in take(self._lateness):
            self.lateness_s = float(message.data)
        for message in take(self._diagnostics):
            for status in message.status:
                if status.name.endswith(f'{ARM_NAME}: tracking'):
                    self._part = largest_part(status.message)
