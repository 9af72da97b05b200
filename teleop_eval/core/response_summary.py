# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The frequency responses of a run as metrics, with the reason for each that is not there."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping

from teleop_eval.core import frequency_metrics
from teleop_eval.core.accumulator import MappingAccumulator
from teleop_eval.core.delay_opinion import second_opinion
from teleop_eval.core.metric import NOT_CONFIGURED, Metric, missing

# Ends of the metrics' names by the latency that has the same two sides.
ENDS = {'latency_s': '', 'latency_response_s': '_response'}


def response_metrics(accumulator: MappingAccumulator, latencies: Mapping[str, Metric], *,
                     no_ideal: str) -> dict[str, Metric]:
    """
    Return bandwidth, phase delay and coherent band of both responses.

    `latencies` are the run's metrics; where one is not configured, its response is not
    either, for the same reason. `no_ideal` says why there is no ideal command, '' if there is
    one: without it there is a latency from the bare hand, but no response to it. Where phase
    and correlation tell different delays, the phase delay carries the sentence on what that
    means.
    """
    found: dict[str, Metric] = {}
    for name, response in accumulator.responses.items():
        end, latency = ENDS[name], latencies[name]
        why = no_ideal if name == 'latency_s' else ''
        if latency.status == NOT_CONFIGURED:
            why = why or latency.reason
        if why:
            found |= {
                f'bandwidth{end}_hz': missing(NOT_CONFIGURED, 'Hz', why),
                f'phase_delay{end}_s': missing(NOT_CONFIGURED, 's', why),
                f'coherent_up_to{end}_hz': missing(NOT_CONFIGURED, 'Hz', why)}
            continue
        found |= frequency_metrics.metrics(response, of=end)
        if opinion := second_opinion(found[f'phase_delay{end}_s'], latency):
            found[f'phase_delay{end}_s'] = dataclasses.replace(
                found[f'phase_delay{end}_s'], reason=opinion)
    return found
