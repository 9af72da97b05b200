# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The error budget in plain words: which term is largest, and what to mend first."""

from __future__ import annotations

from collections.abc import Mapping

from teleop_eval.core.budget import LEAST_DISCREPANCY, TERMS
from teleop_eval.core.mappings.unmodelled import NO_MAPPING
from teleop_eval.core.metric import NOT_CONFIGURED, Metric
from teleop_eval.core.sentences import listed

# How a term is called in a sentence.
WORDS = {
    'mapping': 'mapping',
    'processing_delay': 'processing delay',
    'command': 'command',
    'response_delay': 'response delay',
    'residual': 'residual',
}
_UNITS = {'arm lengths': 'arm lengths', 'arm lengths/s': 'arm lengths/s'}
_JOINTS = "the mapping's own geometry (joint offsets, or links of unlike lengths)"
# A static part above this share of the power is called an offset.
_OFFSET_SHARE = 0.5
# Two motions of one chain that agree less than this are hardly cause and effect.
LEAST_AGREEMENT = 0.8
# What a command is off by, in arm lengths, that no filter of a usable stack explains.
_LARGE = 0.1


def largest_term(metrics: Mapping[str, Metric], suffix: str = '_norm', *,
                 but: str = '') -> str:
    """Return the name of the term of largest RMS but one, '' if none has a value."""
    known = {name: metrics[key].number for name in TERMS
             if name != but and (key := f'budget_{name}_rms{suffix}') in metrics
             and metrics[key].value is not None}
    return max(known, key=lambda name: known[name], default='')


def plain_words(metrics: Mapping[str, Metric], *, delays_s: Mapping[str, float | None],
                cancels: str = '', suffix: str = '_norm', has_command: bool = True,
                but: str = '') -> str:
    """
    Return the largest term in plain words, '' if there is none.

    Parameters
    ----------
    metrics
        With the budget's RMS by name, of a window or a run.
    delays_s
        Seconds by 'processing_delay' and 'response_delay', None where not known.
    cancels
        Term that the largest one partly cancels, '' if its share is positive.
    has_command
        Whether the robot's delay is that behind a command, not behind the ideal command.
    but
        Term that is left out.

    """
    name = largest_term(metrics, suffix, but=but)
    if not name:
        return ''
    metric = metrics[f'budget_{name}_rms{suffix}']
    text = f'{WORDS[name]}: {metric.number:.3f} {_UNITS.get(metric.unit, metric.unit)}'
    delay = delays_s.get(name)
    if delay is not None:
        behind = ('the command' if name == 'response_delay' and has_command
                  else 'the ideal command')
        text += f', {delay * 1e3:.0f} ms behind {behind}'
    if cancels:
        text += f'; partly cancels {WORDS[cancels]}'
    return text


def meant_apart(*, clutched: bool, suffix: str) -> str:
    """Return the term that clutching leaves on purpose, '' if there is none."""
    return 'mapping' if clutched and suffix == '_norm' else ''


def little_agreement(latency: Metric) -> str:
    """Return the doubt about a delay from motions that are hardly alike, '' if there is none."""
    if latency.value is None or not _agrees_little(latency):
        return ''
    return (f'the two motions agree little (correlation {latency.details["correlation"]:.2f}): '
            'is the mapping configured as the stack applies it?')


def _agrees_little(latency: Metric | None) -> bool:
    correlation = None if latency is None else latency.details.get('correlation')
    return isinstance(correlation, float) and correlation < LEAST_AGREEMENT


def what_first(label: str, metrics: Mapping[str, Metric], suffix: str = '_norm', *,
               clutched: bool = False, between_joints: bool = False) -> str:
    """
    Return one sentence on a mapping: what to fix first, and how sure that is.

    Parameters
    ----------
    label
        Of the mapping.
    metrics
        Of the whole run under that mapping.
    clutched
        Whether the mapping is anchored anew at each engagement. Hand and tool are then meant
        to be apart, and the mapping's own term holds that offset.
    between_joints
        Whether the mapping sets joints by joints: it has no centre or scale in space.

    """
    total = metrics.get(f'discrepancy_rms{suffix}')
    meant = meant_apart(clutched=clutched, suffix=suffix)
    name = largest_term(metrics, suffix, but=meant)
    if not name:
        residual = metrics.get(f'budget_residual_rms{suffix}')
        reason = 'nothing was measured' if residual is None else residual.reason
        return f'{label}: cannot say what to fix first: {reason}.'
    metric = metrics[f'budget_{name}_rms{suffix}']
    if total is not None and total.value is not None and total.value < LEAST_DISCREPANCY:
        ends = 'hand and tool' if suffix == '_norm' else 'input and tool'
        return (f'{label}: nothing to fix first: {ends} differ by {total.value:.4f} '
                f'{total.unit} RMS only{_cancelled(name, metric)}.')
    share = metrics.get(f'budget_{name}_share')
    part = ''
    if share is not None and share.value is not None:
        part = f', {100.0 * share.value:.0f} % of the discrepancy'
        if share.value < 0.0:
            other = WORDS.get(str(share.details.get('partly_cancels', '')), 'other terms')
            part = f', and partly cancels {other}'
    aside = ''
    if meant and (offset := metrics.get(f'budget_mapping_rms{suffix}')) and offset.value:
        aside = (f'; the {offset.value:.3f} of the mapping hold the offset between hand and '
                 'tool that clutching leaves, which is meant')
    aside += _unknown(total, metrics, suffix)
    what = (_JOINTS if name == 'mapping' and between_joints
            else _what(name, metrics, suffix))
    part += _not_those_of_the_stack(name, metrics, suffix, between_joints=between_joints)
    return (f'{label}: fix first {what}, which is {metric.number:.3f} '
            f'{metric.unit} RMS{part}; {_how_sure(name, metrics, suffix, but=meant)}{aside}.')


def _cancelled(name: str, metric: Metric) -> str:
    """Return the warning that parts cancel each other, '' where they are small themselves."""
    if metric.number < 2.0 * LEAST_DISCREPANCY:
        return ''
    return (f'; but other parts cancel {WORDS[name]}, which is {metric.number:.3f}: see whether '
            'the parameters of the mapping are those of your stack')


def _what(name: str, metrics: Mapping[str, Metric], suffix: str) -> str:
    """Return the term as something that can be mended."""
    if name == 'mapping':
        whole = metrics[f'budget_mapping_rms{suffix}'].number
        static = metrics[f'budget_mapping_static{suffix}'].number
        if suffix != '_norm':
            return 'dead band and cap of the mapping'
        return ("the mapping's centre or offset" if static ** 2 > _OFFSET_SHARE * whole ** 2
                else "the mapping's scale, axes or joint assignment")
    if name == 'processing_delay':
        return f'the time the mapping takes{_milliseconds(metrics, "latency_command_s")}'
    if name == 'command':
        return 'what the stack does to the command beside the mapping (filter, limits, offsets)'
    if name == 'response_delay':
        has_command = metrics['latency_response_s'].value is not None
        return ('the time the robot takes to follow'
                + _milliseconds(metrics, 'latency_response_s' if has_command else 'latency_s'))
    return "the robot's following beside its delay (servo lag, limits, noise)"


def _not_those_of_the_stack(name: str, metrics: Mapping[str, Metric], suffix: str, *,
                            between_joints: bool) -> str:
    """
    Return that the mapping may be configured wrongly, '' if nothing speaks for that.

    What is wrong with the model looks like a fault of what follows it: of the command, or of
    the robot where no command is known.
    """
    command = metrics.get('budget_command_rms' + suffix)
    followed = 'residual' if command is None or command.value is None else 'command'
    if name != followed:
        return ''
    latency = metrics.get('latency_command_s' if followed == 'command' else 'latency_s')
    large = suffix == '_norm' and metrics[f'budget_{name}_rms{suffix}'].number > _LARGE
    if not large and not _agrees_little(latency):
        return ''
    if between_joints:
        what = 'joints, signs, scales or offsets'
    else:
        what = 'axes, scale or centre' if suffix == '_norm' else 'axes, gain, dead band or cap'
    return f', or {what} in the parameter file are not those of the stack: check them first'


def _unknown(total: Metric | None, metrics: Mapping[str, Metric], suffix: str) -> str:
    """Return of which terms nothing is known, and why, '' if that does not spoil the sum."""
    if total is None or total.status != NOT_CONFIGURED:
        return ''
    if total.reason.startswith(NO_MAPPING):  # then the rest was never asked for
        return f'; {total.reason}'
    terms = [WORDS[name] for name in TERMS
             if (metric := metrics.get(f'budget_{name}_rms{suffix}')) is not None
             and metric.value is None and metric.reason == total.reason]
    return f'; nothing is known of {listed(terms)}: {total.reason}' if terms else ''


def _milliseconds(metrics: Mapping[str, Metric], name: str) -> str:
    metric = metrics.get(name)
    return '' if metric is None or metric.value is None else f', {metric.value * 1e3:.0f} ms'


def _how_sure(name: str, metrics: Mapping[str, Metric], suffix: str, *, but: str) -> str:
    """Return how sure it is that this term is the largest."""
    first = metrics[f'budget_{name}_rms{suffix}']
    others = {other: metrics[key] for other in TERMS
              if other not in (name, but) and (key := f'budget_{other}_rms{suffix}') in metrics
              and metrics[key].value is not None}
    if not others:
        return 'no other term could be formed beside it'
    second = max(others, key=lambda other: others[other].number)
    interval = others[second].ci95
    if first.ci95 is None or interval is None:
        return (f'not sure: {first.n} windows are too few for an interval; the next, '
                f'{WORDS[second]}, is {others[second].number:.3f}')
    low, high = first.ci95
    if low > interval[1]:
        return (f'sure: its 95 % interval {low:.3f} to {high:.3f} lies above that of the next, '
                f'{WORDS[second]}')
    return (f'not sure: its 95 % interval {low:.3f} to {high:.3f} overlaps that of '
            f'{WORDS[second]} ({interval[0]:.3f} to {interval[1]:.3f})')
