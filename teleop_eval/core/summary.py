# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""One arm's run as plain types: the part of summary.json that the core knows."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from teleop_eval.core.accumulator import MappingAccumulator
from teleop_eval.core.advice import little_agreement, what_first
from teleop_eval.core.arm import ArmEvaluator
from teleop_eval.core.arm_setup import (
    UNKNOWN_UNIT,
    has_input,
    lacks_operator_arm,
    no_mapping,
    sampled_topics,
    undescribed,
)
from teleop_eval.core.budget_summary import ONLY_VELOCITIES, budget_metrics
from teleop_eval.core.geometry import NO_ROBOT
from teleop_eval.core.mappings.base import HAND, OPERATOR_JOINTS, RATE_INPUT
from teleop_eval.core.mappings.unmodelled import NOT_MODELLED, UNMODELLED
from teleop_eval.core.measure import ArmMeasurement
from teleop_eval.core.metric import (
    INSUFFICIENT,
    NOT_CONFIGURED,
    UNOBSERVABLE,
    Metric,
    joined,
    missing,
)
from teleop_eval.core.reachable_cells import ReachableSet
from teleop_eval.core.response_summary import response_metrics
from teleop_eval.core.silence import explained, inputs_of, never_came, no_clutch
from teleop_eval.core.tracking import ARM_LENGTHS
from teleop_eval.core.window_budget import VELOCITY

CONDITION = 'teleoperated'
_TOPIC_OF = {HAND: 'operator.hand_topic', OPERATOR_JOINTS: 'operator.joints_topic',
             RATE_INPUT: 'operator.rate_topic'}


def arm_summary(arm: ArmEvaluator, reachable: ReachableSet | None, *,
                simulated_time: bool) -> dict[str, Any]:
    """Return the summary of one arm as it stands."""
    mappings: dict[str, Any] = {}
    measured = arm.measurement
    if measured is not None:
        for index in sorted(measured.accumulators, key=lambda i: arm.boundaries.labels[i]):
            metrics = mapping_metrics(arm, measured, index, reachable)
            label = arm.boundaries.labels[index]
            mappings[label] = {
                'condition': CONDITION,
                'advice': what_first(label, metrics, measured.space(index).suffix,
                                     **_kind(arm, label)),
                'metrics': {name: metrics[name].to_dict() for name in metrics},
            }
    base = arm.chosen
    return {
        'time_base': {
            'base': None if base is None else base.base,
            'reason': '' if base is None else base.reason,
            'offsets_s': {} if base is None else {
                role: None if offset is None else offset / 1e9
                for role, offset in base.offsets_ns.items()},
        },
        'grid': {'rate_hz': None if arm.period_ns is None else 1e9 / arm.period_ns},
        'segments': arm.segments,
        'depends_on_receive_time': _receive_dependent(arm, mappings),
        'geometry': _geometry(arm),
        'inputs': _inputs(arm, simulated_time=simulated_time),
        'mappings': mappings,
        **_candidates(measured, reachable),
    }


def _candidates(measured: ArmMeasurement | None,
                reachable: ReachableSet | None) -> dict[str, Any]:
    run = None if measured is None else measured.ideal.candidates
    return {} if run is None else {'candidates': run.summary(reachable)}


def _kind(arm: ArmEvaluator, label: str) -> dict[str, bool]:
    """Return what the advice must know of a mapping's kind."""
    model = arm.setup.models.get(label)
    return {} if model is None else {
        'clutched': model.anchored, 'between_joints': model.needs == OPERATOR_JOINTS}


def _receive_dependent(arm: ArmEvaluator, mappings: dict[str, Any]) -> list[str]:
    """
    Name the metrics that a recording by another process would give a little differently.

    Transport ages are made of receive times. Clutch and mapping messages have no stamps:
    where they switch is known by their arrival. On receive time everything depends on it,
    and after a calibration, whose interval is counted in it.
    """
    names = {'transport_age_min_s', 'transport_age_s', 'transport_age_jitter_s'}
    if arm.states:
        names |= {'engaged_time_s', 'engagements', 'engagement_rate_per_min'}
    if (arm.chosen is not None and not arm.chosen.by_stamp) or (
            arm.operator_side.calibration is not None):
        names |= {name for mapping in mappings.values() for name in mapping['metrics']}
    return sorted(names)


def mapping_metrics(arm: ArmEvaluator, measured: ArmMeasurement, index: int,
                    reachable: ReachableSet | None) -> dict[str, Metric]:
    """Return every metric of one arm under one mapping, by name."""
    accumulator = measured.accumulators[index]
    label = arm.boundaries.labels[index]
    model = arm.setup.models.get(label)
    no_ideal = _why_no_ideal(arm, measured, label)
    caveat = _clock_caveat(arm)
    found: dict[str, Metric] = {}
    pairs = measured.latency.pairs(index)
    for name, delay in accumulator.delays.items():
        if pairs[name] is None:
            found[name] = _no_pair(arm, name, label, no_ideal)
        else:
            metric = delay.metric(
                caveat=caveat, reason='the run is shorter than a latency window')
            if model is not None and name in ('latency_s', 'latency_command_s') and (
                    doubt := little_agreement(metric)):
                metric = replace(metric, reason=joined(metric.reason, doubt))
            found[name] = metric
    unknown = _why_no_delay(accumulator)
    reach = 1.0 if arm.robot is None else arm.robot.reach.length_m
    space = measured.space(index)
    in_metres = ('_m_s', 'm/s', reach) if space is VELOCITY else ('_m', 'm', reach)
    for prefix, one, why, hint in (
            ('tracking_error', accumulator.raw,
             {'reason': 'no engaged and settled sample'}, ''),
            ('tracking_error_compensated', accumulator.compensated, unknown, caveat)):
        for suffix, unit, factor in ((space.suffix, space.unit, 1.0), in_metres):
            found |= one.metrics(prefix, suffix, unit, factor=factor, caveat=hint,
                                 status=why.get('status', INSUFFICIENT), reason=why['reason'])
    absorbed = model is not None and model.estimates_tool_rotation
    no_turn = ('orientation of hand and tool is not both known' if not absorbed or
               measured.tool_rotation is not None else
               'the hand-to-tool rotation needs 10 s of engaged motion with an observed delay')
    found |= accumulator.turn_raw.metrics(
        'orientation_error', absorbed=absorbed, reason=no_turn)
    found |= accumulator.turn_compensated.metrics(
        'orientation_error_compensated', absorbed=absorbed, reason=no_turn, caveat=caveat)
    if space is VELOCITY:
        found = {name: missing(NOT_CONFIGURED, metric.unit, ONLY_VELOCITIES)
                 if name.startswith('orientation_error') else metric
                 for name, metric in found.items()} | _no_positions()
        found |= accumulator.spin.metrics(
            'turn_rate_error', '_rad_s', 'rad/s',
            reason='turn rates of input and tool are not both known')
    if no_ideal:
        found = {name: missing(NOT_CONFIGURED, metric.unit, no_ideal)
                 if name.startswith(('tracking_error', 'orientation_error')) else metric
                 for name, metric in found.items()}
    elif model is not None and model.scales_by_arm_lengths:
        uncertainty = arm.operator.scale_uncertainty
        if uncertainty is not None and model.needs == 'hand':
            for name, metric in found.items():
                if name.startswith('tracking_error') and metric.value is not None:
                    metric.details['scale_uncertainty'] = uncertainty
    found |= response_metrics(accumulator, found, no_ideal=no_ideal)
    found |= budget_metrics(arm, measured, index, no_ideal=no_ideal, caveat=caveat)
    found |= _joint_metrics(arm, accumulator, caveat)
    found |= accumulator.workspace_metrics(
        arm.operator, reachable, has_operator=not (arm.operator.missing or
                                                     arm.operator.lacking)
        and has_input('hand', arm.intakes, arm.operator),
        has_ideal=no_ideal or (ONLY_VELOCITIES if space is VELOCITY else ''))
    if not no_ideal and model is not None and model.scales_by_arm_lengths and (
            model.needs == HAND and found['workspace_overlap'].value is not None
            and arm.operator.scale_uncertainty is not None):
        found['workspace_overlap'].details['scale_uncertainty'] = arm.operator.scale_uncertainty
    if no_ideal and no_ideal == arm.operator.lacking:
        found = {name: missing(INSUFFICIENT, metric.unit, no_ideal)
                 if metric.reason == no_ideal else metric for name, metric in found.items()}
    return explained(found, arm, label, accumulator.heard) | _engagement(arm, accumulator)


def _no_positions() -> dict[str, Metric]:
    """Return the tracking errors in positions, of which a rate mapping has none."""
    return {f'{prefix}_{which}_{end}': missing(NOT_CONFIGURED, unit, ONLY_VELOCITIES)
            for prefix in ('tracking_error', 'tracking_error_compensated')
            for which in ('rms', 'p95', 'max')
            for end, unit in (('norm', ARM_LENGTHS), ('m', 'm'))}


def _joint_metrics(arm: ArmEvaluator, accumulator: MappingAccumulator,
                   caveat: str) -> dict[str, Metric]:
    raw = accumulator.joints_raw.metrics(
        'joint_error', reason='no sample with a valid command')
    compensated = accumulator.joints_compensated.metrics(
        'joint_error_compensated', **_why_no_delay(accumulator), caveat=caveat)
    found: dict[str, Metric] = raw | compensated
    command = arm.intakes.get('command')
    if command is None or command.posed or command.velocities:
        why = ('command.topic is not configured' if command is None else
               f'the command is a tool {"pose" if command.posed else "velocity"}, not joints')
        return {name: missing(NOT_CONFIGURED, metric.unit, why)
                for name, metric in found.items()}
    if len(arm.setup.joint_names) > 1 and UNKNOWN_UNIT in arm.setup.joint_units:
        why = (f'{NO_ROBOT}, so nobody knows which joints turn and which slide; see the value '
               'of each joint')
        found = {name: metric if '.' in name else missing(NOT_CONFIGURED, metric.unit, why)
                 for name, metric in found.items()}
    return found


def _engagement(arm: ArmEvaluator, accumulator: MappingAccumulator) -> dict[str, Metric]:
    """Return engaged time, engagements and their rate, which is per minute of engaged time."""
    seconds, times = accumulator.engaged_s, accumulator.engagements
    names = {'engaged_time_s': 's', 'engagements': '1', 'engagement_rate_per_min': '1/min'}
    if 'engaged' not in arm.states:
        why = 'engaged.topic is not configured'
        found = {name: missing(NOT_CONFIGURED, unit, why) for name, unit in names.items()}
        found['engaged_time_s'] = Metric(
            seconds, 's', samples=accumulator.engaged_cells,
            reason=f'{why}, so all time under this mapping counts as engaged')
        return found
    if never := no_clutch(arm):
        return {name: missing(INSUFFICIENT, unit, never) for name, unit in names.items()}
    return {
        'engaged_time_s': Metric(seconds, 's', samples=accumulator.engaged_cells),
        'engagements': Metric(float(times), '1', n=times),
        'engagement_rate_per_min':
            Metric(60.0 * times / seconds, '1/min', n=times, reason='per minute of engaged time')
            if seconds > 0.0 else
            missing(INSUFFICIENT, '1/min', 'never engaged under this mapping'),
    }


def _why_no_ideal(arm: ArmEvaluator, measured: ArmMeasurement, label: str) -> str:
    """Return why there is no ideal command under a mapping, '' if there is one."""
    if label not in arm.arm.mappings:
        return no_mapping(arm.arm) or (
            f'mapping {label!r} is not configured (configured: {", ".join(arm.arm.mappings)})')
    if arm.robot is None:
        return NO_ROBOT
    if arm.arm.mappings[label].kind == UNMODELLED:
        return NOT_MODELLED
    model = arm.setup.models.get(label)
    if model is None and lacks_operator_arm(arm.arm.mappings[label], arm.operator):
        return arm.operator.lacking
    if model is None:
        return f'mapping {label!r} cannot be modelled; see problems'
    if measured.ideal.faults.get(label) and label not in measured.ideal.made:
        return f'mapping {label!r} failed: {measured.ideal.faults[label]}'
    if not has_input(model.needs, arm.intakes, arm.operator):
        topic = _TOPIC_OF[model.needs]
        return f'mapping {label!r} needs {topic}'
    return ''


def _why_no_delay(accumulator: MappingAccumulator) -> dict[str, str]:
    """Return status and reason of what needs a delay where none was known."""
    if any(delay.unobservable for delay in accumulator.delays.values()):
        return {'status': UNOBSERVABLE, 'reason': 'no delay could be observed to compensate'}
    return {'status': INSUFFICIENT, 'reason': 'no delay was observed to compensate'}


def _no_pair(arm: ArmEvaluator, name: str, label: str, no_ideal: str) -> Metric:
    """Return a latency one of whose sides is not there, with the reason."""
    if name != 'latency_s' and arm.arm.command.topic is None:
        return missing(NOT_CONFIGURED, 's', 'command.topic is not configured')
    model = arm.setup.models.get(label)
    never = never_came(arm, inputs_of(arm, label, name))
    modelled = name == 'latency_command_s' or (name == 'latency_s' and model is not None)
    if never and not (modelled and no_ideal):
        return missing(INSUFFICIENT, 's', never)
    if name != 'latency_response_s' and no_ideal:
        return missing(NOT_CONFIGURED, 's', no_ideal)
    return missing(NOT_CONFIGURED, 's', 'one of the two sides cannot be computed from its input')


def _clock_caveat(arm: ArmEvaluator) -> str:
    words = []
    if arm.ever_by_receive:
        words.append('receive-based: includes the transport of both messages to this computer')
    for role, age in arm.ages.items():
        if arm.chosen is not None and arm.chosen.by_stamp and (warning := age.warning()):
            words.append(f'{role}: {warning}')
    return '; '.join(words)


def _geometry(arm: ArmEvaluator) -> dict[str, Any]:
    robot, operator = arm.robot, arm.operator
    notes = [operator.note] if operator.note else []
    if robot is not None:
        notes += [robot.shoulder.note, robot.reach.note]
    zero = None if robot is None else [0.0] * len(robot.chain.joint_names)
    return {
        'operator_arm_length_m': operator.length_m,
        'operator_scale_uncertainty': operator.scale_uncertainty,
        'operator_shoulder_m': None if operator.shoulder_m is None
        else operator.shoulder_m.tolist(),
        'operator_shoulder_moves': operator.shoulder_moves,
        'operator_calibration': arm.operator_side.calibration_summary(),
        'robot_reach_m': None if robot is None else robot.reach.length_m,
        'robot_reach_posture': None if robot is None else dict(
            zip(robot.chain.joint_names, robot.reach.posture.tolist(), strict=True)),
        'robot_shoulder_m': None if robot is None or zero is None
        else robot.shoulder.positions([zero])[0].tolist(),
        'hand_to_tool_xyzw': None if arm.measurement is None
        or arm.measurement.tool_rotation is None else arm.measurement.tool_rotation.tolist(),
        'notes': notes,
    }


def _inputs(arm: ArmEvaluator, *, simulated_time: bool) -> dict[str, Any]:
    found: dict[str, Any] = {}
    for role, intake in arm.intakes.items():
        counts = intake.stream.counts
        found[role] = {
            'topic': intake.stream.topic,
            'messages': counts.messages,
            'gaps': counts.gaps,
            'gap_time_s': counts.gap_ns / 1e9,
            'late': counts.late,
            'out_of_order': counts.out_of_order,
            'non_finite': counts.non_finite,
            'metrics': {name: metric.to_dict() for name, metric in
                        arm.ages[role].metrics(simulated_time=simulated_time).items()},
        }
    for role, state in arm.states.items():
        found[role] = {'topic': state.topic, 'messages': state.counts.messages,
                       'late': state.counts.late}
    # What nothing can be made of, such as joints of a robot that is not described.
    for role, topic in sampled_topics(arm.arm).items():
        if role not in found:
            found[role] = {'topic': topic, 'messages': arm.unused[role]}
    for role, topic in undescribed(arm.arm, arm.described).items():
        found[role] = {'topic': topic, 'messages': 0}
    return found


__all__ = ['CONDITION', 'arm_summary', 'mapping_metrics']
