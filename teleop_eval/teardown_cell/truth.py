# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The true delays of the cell: what went into it, and what a correlation of it must show."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.latency import DelaySettings, estimate_delay
from teleop_eval.core.metric import OK
from teleop_eval.core.window_latency import MIN_SHARE
from teleop_eval.teardown_cell.arm import HOME, SimulatedArm
from teleop_eval.teardown_cell.commander import Commander
from teleop_eval.teardown_cell.mappings import Mirror, Reach
from teleop_eval.teardown_cell.operator_motion import OperatorMotion, OperatorState
from teleop_eval.teardown_cell.plan import MIRROR, REACH, Plan
from teleop_eval.teardown_cell.servo import Array

SETTLING_S = 1.0
HOP_S = 2.0


@dataclass(frozen=True, eq=False)
class Run:
    """
    A run of the cell without processes, on the grid of the operator's samples.

    Attributes
    ----------
    times
        (n,) s from the start.
    operator
        What the tracker measured at these times.
    commands, joints
        (n, 6) rad: commanded and reached positions at these times.

    """

    times: Array
    operator: OperatorState
    commands: Array
    joints: Array


def simulate(chain: SerialChain, plan: Plan, *, noise: bool) -> Run:
    """Run operator, mapping and arm of a plan without processes."""
    timing = plan.timing
    times = np.arange(round(plan.seconds * timing.operator_rate_hz)) / timing.operator_rate_hz
    operator = OperatorMotion(plan.seed, plan.seconds, noise=noise).at(times)
    commander = Commander(chain, plan)
    arm = SimulatedArm(chain.lower, chain.upper, chain.velocity_limits, home=HOME,
                       start_ns=0, timing=timing)
    stamps, commands = times + timing.processing_delay_s, np.empty((len(times), chain.size))
    for index, t in enumerate(times):
        commands[index] = commander.command(
            t, joints=operator.joints[index], hand=operator.hand[index],
            orientation=operator.orientation[index])
        arm.add_command(round(stamps[index] * 1e9), commands[index])
    reached_times, reached = [0.0], [HOME]
    while arm.next_ns <= times[-1] * 1e9:
        state = arm.advance()
        reached_times.append(state.stamp_ns * 1e-9)
        reached.append(state.positions)
    return Run(times, operator, _resample(times, stamps, commands),
               _resample(times, np.array(reached_times), np.array(reached)))


def truth_document(chain: SerialChain, plan: Plan, *, window_s: float = 10.0) -> dict:
    """
    Return the true delays as plain types, the content of truth.json.

    Parameters
    ----------
    chain
        The cell's arm.
    plan
        The plan of the run.
    window_s
        Length of the latency windows of the evaluator.

    Returns
    -------
    dict
        The delays put in, their sum, and per mapping `noise_free_correlation_delay_s`: what
        the evaluator's own estimator finds on the same motion without any noise, the only
        number that a measured latency can be held against, since a servo's lag depends on
        the band of the motion. Under `metrics` stand the true values by metric name.

    """
    timing = plan.timing
    run = simulate(chain, plan, noise=False)
    mappings = {}
    for name in (MIRROR, REACH):
        ideal, response = _ideal_and_response(chain, run, name)
        command_response = _correlation_delay(run.commands, run.joints, plan, name, window_s)
        whole = _correlation_delay(ideal, response, plan, name, window_s)
        mappings[name] = {
            'noise_free_correlation_delay_s': whole,
            'metrics': {
                'latency_s': whole,
                'latency_command_s': timing.processing_delay_s,
                'latency_response_s': command_response,
            },
        }
    return {
        'schema_version': 1,
        'invented': 'A simulated cell: motion, arm, delays and noise are invented.',
        'seconds': plan.seconds,
        'seed': plan.seed,
        'processing_delay_s': timing.processing_delay_s,
        'transport_delay_s': timing.transport_delay_s,
        'servo_lag_s': timing.servo_lag_s,
        'servo': {'zeta': timing.zeta,
                  'natural_frequency_rad_s': timing.natural_frequency_rad_s,
                  'lag': '2 zeta / omega_n, at low frequency'},
        'sum_s': timing.sum_s,
        'latency_window_s': window_s,
        'mappings': mappings,
    }


def _ideal_and_response(chain: SerialChain, run: Run, name: str) -> tuple[Array, Array]:
    """Return what the mapping asks for and what the arm did, joints (rad) or tool (m)."""
    if name == MIRROR:
        return Mirror().joints(run.operator.joints), run.joints
    return Reach.of(chain).target(run.operator.hand), chain.positions(run.joints)


def _correlation_delay(reference: Array, response: Array, plan: Plan, name: str,
                       window_s: float) -> float | None:
    """Return the median delay of the engagement's windows, None without a valid one."""
    rate = plan.timing.operator_rate_hz
    begin, end = plan.engaged_span(name)
    first, last = round((begin + SETTLING_S) * rate), round(end * rate)
    part = slice(first, last)
    # Both sides pass the same difference, so it adds no delay.
    before, after = (np.gradient(side[part], 1.0 / rate, axis=0)
                     for side in (reference, response))
    # As the evaluator does it: the filters run in inside the window.
    settings = DelaySettings(min_duration_s=MIN_SHARE * window_s)
    size, hop = round(window_s * rate), round(HOP_S * rate)
    run_in = round(settings.context_s * rate)
    found = []
    for start in range(0, max(len(before) - size, 0) + 1, hop):
        estimate = estimate_delay(before, after, rate, window=(start + run_in, start + size),
                                  settings=settings)
        if estimate.status == OK and estimate.delay_s is not None:
            found.append(estimate.delay_s)
    return float(np.median(found)) if found else None


def _resample(times: Array, from_times: Array, values: Array) -> Array:
    columns = [np.interp(times, from_times, column) for column in values.T]
    return np.stack(columns, axis=1)
