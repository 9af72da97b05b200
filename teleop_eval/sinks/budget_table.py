# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The error budget for a terminal: one small table for each mapping, and what to fix first."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from rich.box import SIMPLE_HEAD
from rich.console import RenderableType
from rich.table import Table
from rich.text import Text

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

# Row titles by the beginning of the metrics' names, in the order of the chain.
ROWS = {
    'discrepancy': 'discrepancy (sum)',
    'budget_mapping': 'mapping',
    'budget_processing_delay': 'processing delay',
    'budget_command': 'command',
    'budget_response_delay': 'response delay',
    'budget_residual': 'residual',
}
PARTS = ('rms', 'static', 'varying')
LEGEND = 'static: mean; varying: RMS about it; shares of all parts add up, RMS do not'
OF_BOTH = 'without commands: delay from operator to robot, mapping and robot together'
# A share nearer to zero than this is not worth a word on what it cancels.
LEAST_CANCELLED = 0.005


def budget_tables(mappings: Mapping[str, Any]) -> list[RenderableType]:
    """Return the error budget of each mapping that has one."""
    parts: list[RenderableType] = []
    remarks = Remarks()
    for label, of_mapping in mappings.items():
        metrics = as_mapping(as_mapping(of_mapping).get('metrics'))
        if any(as_mapping(metrics.get(f'{start}_rms{end}')).get('status') not in (
                None, 'not_configured') for start in ROWS for end in ('_norm', '_norm_s')):
            parts += [Text(''), _table(clean(str(label)), metrics, remarks)]
    if not parts:
        return []
    title = Text('\nError budget', style='bold')
    title.append('  robot minus operator: which part of the chain causes how much',
                 style='not bold')
    return [title, *parts[1:], Text(LEGEND, style='dim'), *remarks.lines()]


def _table(label: str, metrics: Mapping[str, Any], remarks: Remarks) -> Table:
    rate = 'budget_residual_rms_norm_s' in metrics
    end, unit = ('_norm_s', 'L/s') if rate else ('_norm', 'L')
    table = Table(box=SIMPLE_HEAD, show_edge=False, pad_edge=False, padding=0)
    table.add_column(Text(label, overflow='fold'), width=18, overflow='fold')
    for name, width in ((f'RMS {unit}', 18), (f'static {unit}', 10), (f'varying {unit}', 11),
                        ('share', 18)):
        table.add_column(name, justify='right', width=width, overflow='fold')
    for start, title in ROWS.items():
        row: list[RenderableType] = [Text(title)]
        if start == 'budget_response_delay' and _from_operator(metrics, end):
            row = [Text(f'{title} {remarks.mark(OF_BOTH)}')]
        row += [_cell(metrics.get(f'{start}_{part}{end}'), remarks, short=part != 'rms')
                for part in PARTS]
        there = as_mapping(metrics.get(f'{start}_rms{end}')).get('status') == 'ok'
        row.append(Text('') if start == 'discrepancy' else
                   _cell(metrics.get(f'{start}_share'), remarks, short=not there, percent=True))
        table.add_row(*row)
    return table


def _from_operator(metrics: Mapping[str, Any], end: str) -> bool:
    """Tell whether the robot's delay is that behind the ideal command, for want of another."""
    there = {name for name in (f'budget_response_delay_rms{end}', f'budget_command_rms{end}',
                               'latency_response_s')
             if as_mapping(metrics.get(name)).get('status') == 'ok'}
    return there == {f'budget_response_delay_rms{end}'}


def _cell(metric: Any, remarks: Remarks, *, short: bool = False, percent: bool = False) -> Text:
    metric = as_mapping(metric)
    value, reason = metric.get('value'), str(metric.get('reason') or '')
    if metric.get('status') != 'ok' or not finite(value):
        status = clean(str(metric.get('status') or 'no value').replace('_', ' '))
        if short or not reason:
            return Text('-', style='yellow')
        mark = remarks.mark(f'{status}: {clean(reason, LONGEST_SENTENCE)}')
        return Text(f'{status} {mark}', style='yellow')
    text = Text(_shown(value, percent=percent))
    if reason and not short:
        text.append(f' {remarks.mark(clean(reason, LONGEST_SENTENCE))}', style='yellow')
    interval = metric.get('ci95')
    if is_pair(interval) and not short:
        low, high = (_shown(float(one), percent=percent) for one in interval)
        text.append(f'\n{low.removesuffix(" %")}..{high}', style='dim')
    other = as_mapping(metric.get('details')).get('partly_cancels')
    if percent and other and value < -LEAST_CANCELLED:
        text.append(f'\npartly cancels {clean(str(other)).replace("_", " ")}', style='dim')
    return text


def _shown(value: float, *, percent: bool) -> str:
    if percent:
        return f'{round(100.0 * value, 1) + 0.0:.1f} %'  # never -0.0
    # A ten-thousandth of an arm length is less than a tenth of a millimetre.
    return f'{value:.4f}' if abs(value) < 10.0 else number(value)


def advice(summary: Mapping[str, Any]) -> list[RenderableType]:
    """Return one sentence for each mapping, with the arm where there are several."""
    arms = as_mapping(summary.get('arms'))
    sentences = [
        (f'{clean(str(arm))}, ' if len(arms) > 1 else '')
        + clean(str(as_mapping(of_mapping)['advice']), LONGEST_SENTENCE)
        for arm, of_arm in arms.items()
        for of_mapping in as_mapping(as_mapping(of_arm).get('mappings')).values()
        if as_mapping(of_mapping).get('advice')]
    if not sentences:
        return []
    return [Text('\nWhat to fix first', style='bold'),
            *(listed('-', sentence) for sentence in sentences)]
