# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The error budget of a run as metrics, with the reason for each term that is not there."""

from __future__ import annotations

from typing import TYPE_CHECKING

from teleop_eval.core.budget import PARTS, TERMS
from teleop_eval.core.geometry import NO_ROBOT
from teleop_eval.core.mappings.base import HAND
from teleop_eval.core.metric import (
    INSUFFICIENT,
    NOT_CONFIGURED,
    UNOBSERVABLE,
    Metric,
    joined,
    missing,
)
from teleop_eval.core.silence import never_came
from teleop_eval.core.window_budget import POSITION, VELOCITY, Space

if TYPE_CHECKING:
    from teleop_eval.core.arm import ArmEvaluator
    from teleop_eval.core.measure import ArmMeasurement

# Terms that need the ideal command.
_OF_MODEL = ('mapping', 'processing_delay', 'command')
ONLY_VELOCITIES = (
    'a rate mapping commands velocities: positions and orientations follow from no input')


def budget_metrics(arm: ArmEvaluator, measured: ArmMeasurement, index: int, *, no_ideal: str,
                   caveat: str) -> dict[str, Metric]:
    """
    Return discrepancy and terms of one mapping's run.

    `no_ideal` says why there is no ideal command, '' if there is one; `caveat` goes with
    every value, since the terms depend on the delays.
    """
    accumulator, space = measured.accumulators[index], measured.space(index)
    why = _reasons(arm, measured, index, space, no_ideal)
    found = accumulator.budget.metrics(why=why)
    uncertainty = arm.operator.scale_uncertainty
    scaled = _with_arm_length(arm, measured, index, space)
    for name, metric in found.items():
        if metric.value is None:
            continue
        # Every share is one of a discrepancy from the operator.
        whole = 'discrepancy' if name.endswith('_share') else name
        if uncertainty is not None and whole.startswith(scaled):
            metric.details['scale_uncertainty'] = uncertainty
        if caveat:
            found[name] = Metric(metric.value, metric.unit, metric.ci95, metric.n,
                                 metric.samples, reason=joined(caveat, metric.reason),
                                 details=metric.details)
    if space is VELOCITY:
        names = ('discrepancy', *(f'budget_{term}' for term in TERMS))
        found |= {f'{name}_{part}{POSITION.suffix}':
                  missing(NOT_CONFIGURED, POSITION.unit, ONLY_VELOCITIES)
                  for name in names for part in PARTS}
    return found


def _with_arm_length(arm: ArmEvaluator, measured: ArmMeasurement, index: int,
                     space: Space) -> tuple[str, ...]:
    """
    Return the beginnings of the metrics that change with the operator's arm length.

    u_o always holds it, the ideal command under a mapping that scales by it.
    """
    model = arm.setup.models.get(arm.boundaries.labels[index])
    by_model = model is not None and model.scales_by_arm_lengths and model.needs == HAND
    terms: list[str] = []
    if by_model:
        terms += ['processing_delay', 'command']
        if not measured.latency.has(space.command):
            terms += ['response_delay', 'residual']
    if by_model or space is POSITION:
        terms.append('mapping')
    return (*(['discrepancy'] if 'mapping' in terms else []), *(f'budget_{one}' for one in terms))


def _reasons(arm: ArmEvaluator, measured: ArmMeasurement, index: int, space: Space,
             no_ideal: str) -> dict[str, tuple[str, str]]:
    """Return status and reason of what could not be formed, by term and for the whole."""
    delay = _no_delay(measured, index)
    why = dict.fromkeys((*TERMS, 'discrepancy'), delay)
    if arm.robot is None:
        return dict.fromkeys(why, (NOT_CONFIGURED, NO_ROBOT))
    has_command = measured.latency.has(space.command)
    no_command = _why_no_command(arm, space)
    if not has_command:
        why |= dict.fromkeys(('processing_delay', 'command'), no_command)
    if no_ideal:
        why |= dict.fromkeys((*_OF_MODEL, 'discrepancy'), (NOT_CONFIGURED, no_ideal))
        if not has_command:
            # There is nothing that drives the robot.
            why |= dict.fromkeys(('response_delay', 'residual'), no_command
                                 if no_command[0] == INSUFFICIENT else (NOT_CONFIGURED, no_ideal))
    elif space is POSITION and not measured.latency.has('u_o'):
        lacking = arm.operator.missing or 'operator.hand_topic'
        why |= dict.fromkeys(('mapping', 'discrepancy'),
                             (NOT_CONFIGURED, f'needs {lacking}'))
    return why


def _why_no_command(arm: ArmEvaluator, space: Space) -> tuple[str, str]:
    """Return status and reason of what there is no command for."""
    command = arm.arm.command
    if command.topic is None:
        return NOT_CONFIGURED, 'command.topic is not configured'
    if never := never_came(arm, ('command',)):
        return INSUFFICIENT, never
    if space is POSITION:
        return NOT_CONFIGURED, f'{command.topic} gives no tool position'
    held = command.hold and 'command' in arm.intakes and not arm.intakes['command'].velocities
    return NOT_CONFIGURED, f'{command.topic} gives no tool velocity' + (
        ', since positions that are held (command.hold) only step' if held else '')


def _no_delay(measured: ArmMeasurement, index: int) -> tuple[str, str]:
    delays = measured.accumulators[index].delays.values()
    if any(delay.unobservable for delay in delays):
        return UNOBSERVABLE, 'no delay could be observed to split the discrepancy by'
    if any(delay.windows for delay in delays):
        return INSUFFICIENT, 'no engaged and settled sample with an observed delay'
    return INSUFFICIENT, 'no delay was observed to split the discrepancy by'
