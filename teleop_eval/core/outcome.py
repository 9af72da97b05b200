# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Whether a summary holds any number that was measured, and if not, why."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping
from typing import Any

from teleop_eval.core.sentences import listed

# The clutch alone tells these: they say nothing of a mapping.
_OF_THE_CLUTCH = ('engaged_time_s', 'engagements', 'engagement_rate_per_min')


def unevaluated(summary: Mapping[str, Any]) -> str:
    """
    Return one sentence if no arm has a metric with a value, '' if one has.

    Parameters
    ----------
    summary
        As the evaluator gives it at the end. Predictions for candidate mappings count too.

    """
    arms = {str(name): _mapping(of_arm) for name, of_arm in _mapping(summary.get('arms')).items()}
    if any(metric.get('status') == 'ok' for of_arm in arms.values()
           for metric in _metrics(of_arm)):
        return ''
    clauses = [(f'{name}: ' if len(arms) > 1 else '') + why_unevaluated(of_arm)
               for name, of_arm in arms.items()]
    return (f'Nothing was evaluated: {"; ".join(clauses) or "there is no arm"}; correct that and '
            'evaluate again.')


def why_unevaluated(of_arm: Mapping[str, Any]) -> str:
    """Return a clause on why an arm has no metric with a value."""
    inputs = [_mapping(one) for one in _mapping(of_arm.get('inputs')).values()]
    silent = [str(one.get('topic')) for one in inputs if not one.get('messages')]
    clauses = [f'no message came on {listed(silent)}'] if silent else []
    if reasons := Counter(str(metric.get('reason') or 'no reason given')
                          for metric in _metrics(of_arm)):
        clauses.insert(0, reasons.most_common(1)[0][0].removesuffix('.'))
        # A reason often names the silent topic itself.
        return clauses[0] if all(topic in clauses[0] for topic in silent) else '; '.join(clauses)
    if _mapping(of_arm.get('time_base')).get('base'):
        clauses.insert(0, 'no mapping was active while the arm was evaluated')
    return '; '.join(clauses) or 'too few usable messages came'


def _metrics(of_arm: Mapping[str, Any]) -> Iterator[Mapping[str, Any]]:
    for kind in ('mappings', 'candidates'):
        for of_mapping in _mapping(of_arm.get(kind)).values():
            for name, metric in _mapping(_mapping(of_mapping).get('metrics')).items():
                if name not in _OF_THE_CLUTCH:
                    yield _mapping(metric)


def _mapping(value: Any) -> Mapping[str, Any]:
    return value if isinstance(value, Mapping) else {}
