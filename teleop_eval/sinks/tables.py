# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The summary as a table for a terminal: mappings side by side, readable at 80 columns.

Names and reasons come from messages and recordings, so nothing in them is taken for markup
or terminal control.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from io import StringIO
from typing import Any

from rich.box import SIMPLE_HEAD
from rich.console import Console, Group, RenderableType
from rich.table import Table
from rich.text import Text

from teleop_eval.core.outcome import why_unevaluated
from teleop_eval.sinks.budget_table import advice, budget_tables
from teleop_eval.sinks.wording import (
    LONGEST_SENTENCE,
    Remarks,
    as_mapping,
    clean,
    finite,
    is_pair,
    listed,
    number,
)

# Mappings side by side that 80 characters hold; further ones follow in a table below.
ABREAST, ABREAST_WITH_TRUTH, CANDIDATES_ABREAST = 3, 2, 2
NAME_WIDTH, UNIT_WIDTH, TRUTH_WIDTH = 35, 5, 6
# By the number of mappings abreast; beside a truth column there is less room.
VALUE_WIDTHS = {1: 18, 2: 18, 3: 12}
VALUE_WIDTH_BESIDE_TRUTH = 11
UNIT_SIGNS = {'arm lengths': 'L', 'arm lengths^3': 'L^3', 'arm lengths/s': 'L/s'}
NO_ENTRY = '-'
# Rows in the order in which a practitioner asks; a name of none of these families comes last.
FAMILIES = (
    ('latency_s', 'latency_command_', 'latency_'),
    ('bandwidth_', 'phase_delay_', 'coherent_'),
    ('tracking_error_', 'orientation_error_', 'turn_rate_error_', 'joint_error_'),
    ('predicted_',),
    ('workspace_', 'reach_', 'hull_', 'not_reached_', 'joint_range_', 'joint_speed_', 'limit_',
     'at_limit_', 'manipulability_'),
    ('engaged_time_', 'engagements', 'engagement_'),
)
# Left to metrics.csv: what repeats a row in other words or says little on its own.
IN_FILE_ONLY = re.compile(
    r'.*\..*|.*_(p95|max)_m|orientation_error_(compensated_)?(p95|max)_rad|reach_p50_norm.*'
    r'|discrepancy_.*|budget_.*|joint_error_(compensated_)?p95|hull_volume_norm_operator|engagement_rate_per_min')
# Within a family: plain before compensated, robot before operator, then by the first of these
# words in the name, arm lengths before metres.
WORDS = ('rms', 'p50', 'p95', 'max', 'p5', 'min', 'static', 'varying')
# A frequency response needs long runs: rows without any number would crowd the short ones.
SENTENCE_IF_NOWHERE = ('bandwidth_', 'phase_delay_', 'coherent_')
STATUS_WORDS = {
    'unobservable': 'unobservable',
    'insufficient': 'insufficient',
    'not_configured': 'not configured',
}


def summary_table(summary: Mapping[str, Any], *,
                  truth: Mapping[str, Any] | None = None) -> RenderableType:
    """
    Return a summary as tables and sentences to print.

    Parameters
    ----------
    summary
        The content of summary.json; what is missing in it is left out.
    truth
        The content of the demonstration's truth.json. Then each mapping has a second column
        with the true value of the metrics that have one.

    Returns
    -------
    RenderableType
        For `rich.console.Console.print`. Joint by joint metrics (names with a point) are left
        to metrics.csv.

    """
    parts: list[RenderableType] = [_heading(as_mapping(summary.get('session')))]
    for arm, of_arm in as_mapping(summary.get('arms')).items():
        parts += _arm(str(arm), as_mapping(of_arm), as_mapping(as_mapping(truth).get('mappings')))
    if len(parts) == 1:
        parts.append(Text('No arm was evaluated.'))
    if truth:
        parts.append(_truth_sentence(truth))
    for title, style, key in (('Problems', 'bold red', 'problems'), ('Notes', 'bold', 'notes')):
        sentences = [clean(str(item), LONGEST_SENTENCE) for item in summary.get(key) or ()]
        if sentences:
            parts.append(Text(f'\n{title}', style=style))
            parts += [listed('-', sentence) for sentence in sentences]
    return Group(*parts, *advice(summary))


def print_summary(summary: Mapping[str, Any], *, truth: Mapping[str, Any] | None = None,
                  console: Console | None = None) -> None:
    """Print a summary; into a pipe or file as plain text of 80 columns."""
    console = console or Console(highlight=False)
    if not console.is_terminal:
        text = StringIO()
        plain = Console(file=text, width=80, highlight=False, color_system=None)
        plain.print(summary_table(summary, truth=truth))
        # Tables fill their columns with blanks, which a file need not keep.
        console.file.writelines(f'{line.rstrip()}\n' for line in text.getvalue().splitlines())
        return
    console.print(summary_table(summary, truth=truth))


def _heading(session: Mapping[str, Any]) -> Text:
    text = Text()
    text.append(clean(str(session.get('name') or 'session without a name')), style='bold')
    duration = session.get('duration_s')
    facts = [clean(str(session[key])) for key in ('condition', 'operator', 'source')
             if session.get(key)]
    if finite(duration):
        facts.append(f'{duration:.1f} s')
    if facts:
        text.append('  ' + ', '.join(facts))
    return text


def _arm(arm: str, of_arm: Mapping[str, Any],
         true_mappings: Mapping[str, Any]) -> list[RenderableType]:
    heading = Text(f'\nArm {clean(arm)}', style='bold')
    base = as_mapping(of_arm.get('time_base'))
    if base.get('base'):
        reason = clean(str(base.get('reason') or ''), LONGEST_SENTENCE)
        heading.append(f'  time base: {clean(str(base["base"]))}'
                       + (f' ({reason})' if reason else ''), style='not bold')
    geometry = as_mapping(of_arm.get('geometry'))
    lengths = [f'{whose} {number(float(geometry[key]))} m' for whose, key in (
        ('robot', 'robot_reach_m'), ('operator', 'operator_arm_length_m'))
        if finite(geometry.get(key))]
    if lengths:
        heading.append(f'; arm length: {", ".join(lengths)}', style='not bold')
    mappings = as_mapping(of_arm.get('mappings'))
    if not mappings:
        return [heading, Text(clean(
            f'Nothing was evaluated: {why_unevaluated(of_arm)}.', LONGEST_SENTENCE))]
    parts: list[RenderableType] = [heading]
    remarks = Remarks()
    labels = list(mappings)
    abreast = ABREAST_WITH_TRUTH if true_mappings else ABREAST
    for first in range(0, len(labels), abreast):
        shown = {label: as_mapping(mappings[label]) for label in labels[first:first + abreast]}
        parts += [Text('')] * (first > 0) + [_table(shown, true_mappings, remarks)]
    parts.append(Text('L = arm lengths; further metrics and single joints: metrics.csv',
                      style='dim'))
    budget = budget_tables(mappings)
    # What the budget's own tables say is not said twice.
    elsewhere = ('budget_', 'discrepancy_') if budget else ()
    return [*parts, *remarks.lines(), *_not_configured(mappings, but=elsewhere), *budget,
            *_candidates(of_arm)]


def _candidates(of_arm: Mapping[str, Any]) -> list[RenderableType]:
    """Return the predictions for the configured mappings, side by side."""
    candidates = {label: as_mapping(one) for label, one in as_mapping(
        of_arm.get('candidates')).items()}
    if not candidates:
        return []
    first = next(iter(candidates.values()))
    parts: list[RenderableType] = [
        Text('\nCandidate mappings', style='bold'),
        Text(clean(str(first.get('prediction', '')), LONGEST_SENTENCE), style='yellow')]
    known = {label: one for label, one in candidates.items() if one.get('metrics')}
    remarks, labels = Remarks(), list(known)
    for start in range(0, len(labels), CANDIDATES_ABREAST):
        shown = {label: known[label] for label in labels[start:start + CANDIDATES_ABREAST]}
        table = _table(shown, {}, remarks)
        if any(one.get('orientation') for one in shown.values()):
            table.add_row('orientation of the tool', '', *(
                _orientation(str(one.get('orientation', '')), remarks) for one in shown.values()))
        parts += [Text('')] * (start > 0) + [table]
    parts += remarks.lines()
    rules = dict.fromkeys(str(one['postures']) for one in known.values() if one.get('postures'))
    parts += [listed('-', clean(rule, LONGEST_SENTENCE)) for rule in rules]
    parts += [listed('-', f'{clean(label)}: {clean(str(note), LONGEST_SENTENCE)}')
              for label, one in known.items() for note in one.get('caveats') or ()]
    parts += [listed('-', f'{clean(label)}: not predicted: '
                     + clean(str(one['why_not']), LONGEST_SENTENCE))
              for label, one in candidates.items() if one.get('why_not')]
    return parts


def _orientation(said: str, remarks: Remarks) -> Text:
    """Return in a word whether the tool's orientation is predicted, and mark why not."""
    words = re.split(r'[:,]', said, maxsplit=1)[0]
    if not said:
        return Text(NO_ENTRY)
    return Text(clean(words)) if words == said else Text(
        f'{clean(words)} {remarks.mark(clean(said, LONGEST_SENTENCE))}', style='yellow')


def _nowhere(metrics: Any, name: str) -> bool:
    """Tell whether a metric says nothing under any mapping: no row for it, but a sentence."""
    found = {as_mapping(of.get(name)).get('status', 'not_configured') for of in metrics}
    return 'ok' not in found if name.startswith(SENTENCE_IF_NOWHERE) else (
        found == {'not_configured'})


def _not_configured(mappings: Mapping[str, Any], *,
                    but: tuple[str, ...]) -> list[RenderableType]:
    """Return a sentence for each reason why metrics are not configured anywhere."""
    metrics = [as_mapping(as_mapping(of).get('metrics')) for of in mappings.values()]
    by_reason: dict[tuple[str, str], list[str]] = {}
    for name in _names(metrics):
        found = [as_mapping(of[name]) for of in metrics if name in of]
        if _nowhere(metrics, name) and found and not name.startswith(but):
            for one in found:
                status = str(one.get('status') or 'unobservable')
                reason = clean(str(one.get('reason') or 'no reason given'), LONGEST_SENTENCE)
                names = by_reason.setdefault(
                    (STATUS_WORDS.get(status, clean(status)), reason), [])
                if name not in names:
                    names.append(clean(name))
    return [listed('-', f'{words}: {_families(names)}: {reason}')
            for (words, reason), names in by_reason.items()]


def _families(names: Sequence[str]) -> str:
    """Return names that share their first two words as one with an ending of dots."""
    heads: dict[str, list[str]] = {}
    for name in names:
        heads.setdefault('_'.join(name.split('_')[:2]), []).append(name)
    return ', '.join(of[0] if len(of) == 1 else f'{head}...' for head, of in heads.items())


def _table(shown: Mapping[str, Mapping[str, Any]], true_mappings: Mapping[str, Any],
           remarks: Remarks) -> Table:
    table = Table(box=SIMPLE_HEAD, show_edge=False, pad_edge=False, padding=0)
    table.add_column('metric', width=NAME_WIDTH, overflow='fold')
    table.add_column('unit', width=UNIT_WIDTH, overflow='fold')
    width = VALUE_WIDTH_BESIDE_TRUTH if true_mappings else VALUE_WIDTHS[len(shown)]
    for label, of_mapping in shown.items():
        condition = of_mapping.get('condition')
        title = Text(clean(label), overflow='fold')
        if condition not in (None, 'teleoperated'):
            title.append(f'\n{clean(str(condition))}')
        table.add_column(title, justify='right', overflow='fold', width=width)
        if true_mappings:
            table.add_column('truth', justify='right', style='cyan', width=TRUTH_WIDTH)
    metrics = {label: as_mapping(of_mapping.get('metrics')) for label, of_mapping in shown.items()}
    group = None
    for name in _names(metrics.values()):
        if IN_FILE_ONLY.fullmatch(name) or _nowhere(metrics.values(), name):
            continue
        if group is not None and _group(name) != group:
            table.add_row()
        group = _group(name)
        units = [str(as_mapping(of[name]).get('unit', ''))
                 for of in metrics.values() if name in of]
        unit = UNIT_SIGNS.get(units[0], clean(units[0], 24))
        row: list[RenderableType] = [Text(_broken(clean(name))), Text(unit)]
        for label, of in metrics.items():
            row.append(_cell(of.get(name), remarks))
            if true_mappings:
                row.append(_true_cell(as_mapping(true_mappings.get(label)), name))
        table.add_row(*row)
    return table


def _cell(metric: Any, remarks: Remarks) -> Text:
    metric = as_mapping(metric)
    if not metric:
        return Text(NO_ENTRY)
    value, reason = metric.get('value'), str(metric.get('reason') or '')
    if metric.get('status') == 'ok' and finite(value):
        text = Text(number(value))
        if reason:  # a caveat
            text.append(f' {remarks.mark(clean(reason, LONGEST_SENTENCE))}', style='yellow')
        interval = metric.get('ci95')
        if is_pair(interval):
            low, high = (number(float(end)) for end in interval)
            text.append(f'\n{low}..{high}', style='dim')
        return text
    status = str(metric.get('status') or 'unobservable')
    words = STATUS_WORDS.get(status, clean(status) if status != 'ok' else 'no value')
    if not reason:
        return Text(words, style='yellow')
    sentence = f'{words}: {clean(reason, LONGEST_SENTENCE)}'
    return Text(f'{words} {remarks.mark(sentence)}', style='yellow')


def _true_cell(of_mapping: Mapping[str, Any], name: str) -> Text:
    value = as_mapping(of_mapping.get('metrics')).get(name)
    return Text(number(value)) if finite(value) else Text('')


def _truth_sentence(truth: Mapping[str, Any]) -> Text:
    text = Text('\nTruth', style='bold')
    named = (('processing', 'processing_delay_s'), ('transport', 'transport_delay_s'),
             ('servo lag 2 zeta/omega_n', 'servo_lag_s'))
    shown = [f'{label} {number(float(truth[key]))} s' for label, key in named
             if finite(truth.get(key))]
    if shown and finite(truth.get('sum_s')):
        text.append(f'  {" + ".join(shown)} = {number(float(truth["sum_s"]))} s.',
                    style='not bold')
    text.append(' The truth column holds what the same estimator finds on the same motion '
                'without noise: a servo lags differently in different bands.',
                style='not bold')
    return text


def _names(metrics: Any) -> list[str]:
    """Return the metric names of all mappings, in reading order."""
    names = {str(name) for of_mapping in metrics for name in of_mapping}
    return sorted((name for name in names if '.' not in name), key=_place)


def _place(name: str) -> tuple[object, ...]:
    """Return the sorting key of a metric: group, family, variant, statistic, name."""
    families = FAMILIES[_group(name)] if _group(name) < len(FAMILIES) else ()
    family = next((place for place, start in enumerate(families) if name.startswith(start)), 0)
    words = name.split('_')
    variant = ('operator' in words, 'compensated' in words, words[-1] == 'm')
    statistic = next((place for place, word in enumerate(WORDS) if word in words), len(WORDS))
    return _group(name), family, variant, statistic, name


def _group(name: str) -> int:
    return next((place for place, starts in enumerate(FAMILIES) if name.startswith(starts)),
                len(FAMILIES))


def _broken(name: str) -> str:
    """Break a long name after an underscore, never inside a word that fits."""
    if len(name) <= NAME_WIDTH:
        return name
    lines = ['']
    for part in re.findall(r'[^_]*_|[^_]+', name):
        if len(lines[-1]) + len(part) > NAME_WIDTH and lines[-1]:
            lines.append('  ')
        lines[-1] += part
    return '\n'.join(lines)
