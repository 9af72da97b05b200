# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Which input is to blame where a metric has no sample."""

from __future__ import annotations

import dataclasses
from collections import Counter
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np

from teleop_eval.core.history import History
from teleop_eval.core.mappings.base import VELOCITY
from teleop_eval.core.metric import INSUFFICIENT, Metric

if TYPE_CHECKING:
    from teleop_eval.core.arm import ArmEvaluator

# Tracks that show whether an input is there, by role; a command is joints, a pose or a velocity.
_TRACKS = {'hand': ('hand',), 'operator_joints': ('operator_joints',),
           'rate_input': ('rate_input',), 'robot_joints': ('q_r',),
           'command': ('q_c', 'u_c', 'w_c')}
_RESPONSES = ('bandwidth', 'phase_delay', 'coherent_up_to')
# What begins so is made of these inputs, 'ideal' being the operator's; the first match counts.
_MADE_OF = (
    ('latency_command_', ('ideal', 'command')), ('latency_response_', ('command', 'robot_joints')),
    ('latency_', ('ideal', 'robot_joints')), ('joint_error_', ('command', 'robot_joints')),
    ('tracking_error_', ('ideal', 'robot_joints')),
    ('orientation_error_', ('ideal', 'robot_joints')),
    ('turn_rate_error_', ('ideal', 'robot_joints')),
    ('workspace_coverage_operator', ('hand',)), ('workspace_overlap', ('ideal', 'robot_joints')),
    ('workspace_coverage_robot', ('robot_joints',)), ('joint_range_', ('robot_joints',)),
    ('limit_', ('robot_joints',)), ('manipulability_', ('robot_joints',)),
    ('discrepancy_', ('ideal', 'robot_joints')), ('budget_', ('ideal', 'command', 'robot_joints')),
    *((f'{begin}_response_', ('command', 'robot_joints')) for begin in _RESPONSES),
    *((f'{begin}_', ('ideal', 'robot_joints')) for begin in _RESPONSES),
)
_REACHES = ('reach_', 'hull_volume_')
# What is split without a command where none ever came.
_WITHOUT_COMMAND = ('budget_mapping_', 'budget_response_delay_', 'budget_residual_')
NO_ORIENTATION = "the hand's messages have no orientation"


class Heard:
    """Counts, of some stretch of a run, the usable cells and those with each input."""

    def __init__(self) -> None:
        self.usable = 0
        self.cells: Counter[str] = Counter()

    def add(self, history: History, usable: np.ndarray) -> None:
        """Add the newest cells of the history, where they are usable (m,)."""
        self.usable += int(np.count_nonzero(usable))
        for role, names in (*_TRACKS.items(), ('hand_turn', ('hand_turn',))):
            tracks = [track for name in names
                      if (track := history.last(name, len(usable))) is not None]
            self.cells[role] += max(
                (int(np.count_nonzero(track.valid & usable)) for track in tracks), default=0)


def inputs_of(arm: ArmEvaluator, label: str, metric: str) -> tuple[str, ...]:
    """Return the roles a metric of one mapping is made of."""
    if metric.startswith(_REACHES):
        roles: tuple[str, ...] = ('hand',) if metric.endswith('_operator') else ('robot_joints',)
    else:
        roles = next((roles for begin, roles in _MADE_OF if metric.startswith(begin)), ())
    model = arm.setup.models.get(label)
    ideal = 'hand' if model is None else model.needs
    named = [ideal if role == 'ideal' else role for role in roles]
    if metric.startswith(_WITHOUT_COMMAND) and (command := arm.intakes.get('command')) and (
            not command.stream.matched):
        named.remove('command')
    # Without a topic of its own the hand follows from the operator's joints.
    return tuple('operator_joints' if role == 'hand' and role not in arm.intakes else role
                 for role in named)


def never_came(arm: ArmEvaluator, roles: Sequence[str]) -> str:
    """Return which of the configured inputs never gave a usable message, '' if all did."""
    silent = []
    for role in roles:
        intake = arm.intakes.get(role)
        if intake is not None and not intake.stream.matched:
            usable = 'usable ' if intake.stream.counts.messages else ''
            silent.append(f'no {usable}message came on {intake.stream.topic} ({role})')
    return ' and '.join(silent)


def no_clutch(arm: ArmEvaluator) -> str:
    """Return that the configured clutch never came, '' if it did or there is none."""
    state = arm.states.get('engaged')
    if state is None or state.latest is not None:
        return ''
    return f'no message came on {state.topic} (engaged), so no time counts as engaged'


def never_engaged(arm: ArmEvaluator) -> str:
    """Return that the configured clutch never was engaged, '' if it was or there is none."""
    state = arm.states.get('engaged')
    if state is None or state.ever_true:
        return ''
    return no_clutch(arm) or f'{state.topic} was never true, so no time counts as engaged'


def no_orientation(arm: ArmEvaluator, label: str, metric: str, heard: Heard) -> str:
    """Return that only the hand's orientation is lacking for a metric, '' if it is not so."""
    model = arm.setup.models.get(label)
    if model is None or 'hand' not in inputs_of(arm, label, metric) or (
            not heard.cells['hand'] or heard.cells['hand_turn']):
        return ''
    if not metric.startswith('orientation_error_') and not (
            model.turns_move and any('ideal' in roles for begin, roles in _MADE_OF
                                     if metric.startswith(begin))):
        return ''
    return NO_ORIENTATION


def why_no_sample(arm: ArmEvaluator, roles: Sequence[str], heard: Heard, *,
                  where: str = '') -> str:
    """
    Return why what is made of these inputs has no sample, '' if no single one is to blame.

    `where` is put behind a sentence on a part of the run.
    """
    if never := never_engaged(arm):
        return never
    if never := never_came(arm, roles):
        return never
    if not heard.usable:
        return f'no engaged and settled sample{where}'
    silent = [f'{arm.intakes[role].stream.topic} ({role})' for role in roles
              if role in arm.intakes and not heard.cells[role] and _has_track(arm, role)]
    if not silent:
        return ''
    return f'{" and ".join(silent)} gave no sample while engaged{where}'


def _has_track(arm: ArmEvaluator, role: str) -> bool:
    """Tell whether what comes for a role is counted: velocities are for rate mappings only."""
    return role in _TRACKS and (not arm.intakes[role].velocities or role != 'command' or any(
        model.gives == VELOCITY for model in arm.setup.models.values()))


def explained(metrics: Mapping[str, Metric], arm: ArmEvaluator, label: str, heard: Heard, *,
              where: str = '') -> dict[str, Metric]:
    """Return metrics; what has no sample at all for lack of an input names that input."""
    found = {}
    for name, metric in metrics.items():
        roles = inputs_of(arm, label, name)
        if metric.status == INSUFFICIENT and not metric.samples and roles and (
                why := why_no_sample(arm, roles, heard, where=where)
                or no_orientation(arm, label, name, heard)):
            metric = dataclasses.replace(metric, reason=why)
        found[name] = metric
    return found
