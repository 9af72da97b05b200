# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The summary as the live node knows it: with the counts of lost messages."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from teleop_eval.core.settings import Settings
from teleop_eval.nodes.live_inputs import LiveInputs, RouteLike
from teleop_eval.nodes.live_session import LiveSession
from teleop_eval.sinks.summary_file import SessionFacts, document, to_json


def add_losses(summary: dict[str, Any], inputs: LiveInputs,
               routes: Mapping[str, Sequence[RouteLike]]) -> None:
    """Put the number of lost messages of each input into an evaluator's summary."""
    for topic, uses in routes.items():
        lost, reason = inputs.lost(topic)
        for route in uses:
            entry = summary.get('arms', {}).get(route.arm, {}).get('inputs', {}).get(route.role)
            if entry is not None:
                entry['lost'] = lost
                if reason:
                    entry['lost_reason'] = reason
                else:
                    entry.pop('lost_reason', None)


def summary_text(session: LiveSession, settings: Settings, inputs: LiveInputs,
                 routes: Mapping[str, Sequence[RouteLike]], *,
                 whole: Mapping[str, Any] | None = None) -> str:
    """Return the summary as JSON text in one line; `whole` is that of a finished session."""
    if whole is None:
        summary = session.evaluator.summary()
        add_losses(summary, inputs, routes)
        facts = SessionFacts(
            name=session.folder.path.name, operator=settings.session.operator, source='live',
            start_ns=session.first_ns, end_ns=session.last_ns)
        whole = document(summary, facts, notes=session.malformed_sentences(),
                         problems=session.problems)
    return to_json(whole, indent=None)
