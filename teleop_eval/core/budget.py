# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Error budget: the discrepancy between hand and tool, split by the link that causes it.

With normalised positions u_o of the operator, u_i of the ideal command, u_c of the command and
u_r of the robot, and the delays a (ideal command -> command) and b (command -> robot), the
discrepancy e = u_r - u_o is the exact sum of

    mapping           u_i(t)     - u_o(t)      the mapping's own geometry: scale, centre, axes
    processing_delay  u_i(t - a) - u_i(t)      the time the mapping takes
    command           u_c(t)     - u_i(t - a)  what is commanded beside the model, such as a filter
    response_delay    u_c(t - b) - u_c(t)      the time the robot takes
    residual          u_r(t)     - u_c(t - b)  the rest: what of the response is no delay, noise

Without a command topic, a = 0 and u_i takes the place of u_c. For rate mappings the same holds
for velocities, with the unshaped input in the place of u_o: `mapping` is then what dead band and
cap take away.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from teleop_eval.core.blocks import BatchMeans
from teleop_eval.core.metric import INSUFFICIENT, Metric, missing

TERMS = ('mapping', 'processing_delay', 'command', 'response_delay', 'residual')
# Below this discrepancy (RMS, arm lengths) shares are shares of noise.
LEAST_DISCREPANCY = 0.005
PARTS = ('rms', 'static', 'varying')
NO_SAMPLE = 'no engaged and settled sample in this window'


@dataclass(frozen=True)
class Positions:
    """
    What a stretch of cells is split from, each (m, d) in arm lengths or None if there is none.

    `ideal_late` is u_i(t - a), with a command topic, else None; `driver_late` is u_c(t - b), or
    u_i(t - b) without one.
    """

    operator: np.ndarray | None
    ideal: np.ndarray | None
    ideal_late: np.ndarray | None
    command: np.ndarray | None
    driver_late: np.ndarray | None
    robot: np.ndarray


@dataclass(frozen=True)
class Terms:
    """
    Terms cell by cell.

    `terms` (m, d) by name, only those that can be formed; `discrepancy` (m, d) is their sum,
    None if not all can be formed.
    """

    terms: dict[str, np.ndarray]
    discrepancy: np.ndarray | None


def split(positions: Positions) -> Terms:
    """Return the terms of the discrepancy, cell by cell."""
    one = positions
    driver = one.ideal if one.command is None else one.command
    found: dict[str, np.ndarray] = {}
    if one.operator is not None and one.ideal is not None:
        found['mapping'] = one.ideal - one.operator
    if one.command is not None and one.ideal is not None and one.ideal_late is not None:
        found['processing_delay'] = one.ideal_late - one.ideal
        found['command'] = one.command - one.ideal_late
    if driver is not None and one.driver_late is not None:
        found['response_delay'] = one.driver_late - driver
        found['residual'] = one.robot - one.driver_late
    whole = 'mapping' in found and 'residual' in found
    return Terms(found, one.robot - one.operator
                 if whole and one.operator is not None else None)


class BudgetStatistics:
    """
    The error budget of one arm under one mapping over a run, in constant memory.

    Parameters
    ----------
    suffix, unit
        End of the metrics' names and their unit: '_norm' in arm lengths, or '_norm_s' in arm
        lengths per second for rate mappings.

    """

    def __init__(self, *, suffix: str = '_norm', unit: str = 'arm lengths') -> None:
        self.suffix, self.unit = suffix, unit
        self.samples = 0
        self._discrepancy = _Magnitude()
        self._terms: dict[str, _Magnitude] = {}
        self._shares: dict[str, BatchMeans] = {}
        self._products = np.zeros((len(TERMS), len(TERMS)))

    def add(self, cells: Terms) -> None:
        """Add one window's cells, all of them finite."""
        count = len(next(iter(cells.terms.values()), ()))
        if not count:
            return
        self.samples += count
        for name, values in cells.terms.items():
            self._terms.setdefault(name, _Magnitude()).add(values)
        stacked = {TERMS.index(name): values.ravel() for name, values in cells.terms.items()}
        for i, one in stacked.items():
            for j, other in stacked.items():
                self._products[i, j] += float(one @ other)
        error = cells.discrepancy
        if error is None:
            return
        self._discrepancy.add(error)
        weight = float(np.sum(error * error))
        for name, values in cells.terms.items():
            share = self._shares.setdefault(name, BatchMeans())
            share.add(float(np.sum(values * error)), weight)

    def cancelled(self, name: str) -> str:
        """Return the term that a term works against most, '' if it works against none."""
        row = self._products[TERMS.index(name)]
        place = int(row.argmin())
        return TERMS[place] if row[place] < 0.0 else ''

    def cancels(self, name: str) -> str:
        """Return the term that a term of negative share works against, '' if it is positive."""
        shares = self._shares.get(name)
        return self.cancelled(name) if shares is not None and shares.mean < 0.0 else ''

    def metrics(self, *, why: Mapping[str, tuple[str, str]]) -> dict[str, Metric]:
        """
        Return discrepancy and terms: RMS, static mean, varying part, share.

        Parameters
        ----------
        why
            Status and reason, by 'discrepancy' and by term, of what could not be formed.

        """
        found = self._part('discrepancy', self._discrepancy, why)
        for name in TERMS:
            found |= self._part(f'budget_{name}', self._terms.get(name, _Magnitude()), why)
            found[f'budget_{name}_share'] = self._share(name, why)
        return found

    def _part(self, name: str, one: _Magnitude,
              why: Mapping[str, tuple[str, str]]) -> dict[str, Metric]:
        names = [f'{name}_{part}{self.suffix}' for part in PARTS]
        if not one.samples:
            status, reason = why.get(name.removeprefix('budget_'), _NO_SAMPLE)
            return {key: missing(status, self.unit, reason) for key in names}
        mean = one.mean
        values = (one.rms, float(np.linalg.norm(mean)), one.varying)
        interval = one.squares.root_mean_ci()
        found = {key: Metric(value, self.unit, interval if place == 0 else None,
                             one.squares.n_blocks, one.samples,
                             reason=one.squares.why_none(interval) if place == 0 else '')
                 for place, (key, value) in enumerate(zip(names, values, strict=True))}
        found[names[1]].details['xyz'] = [float(part) for part in mean]
        return found

    def _share(self, name: str, why: Mapping[str, tuple[str, str]]) -> Metric:
        shares = self._shares.get(name)
        if shares is None:
            status, reason = why.get(name, _NO_SAMPLE)
            if name in self._terms:
                status, reason = why.get('discrepancy', _NO_SAMPLE)
            return missing(status, '1', reason)
        if self._discrepancy.rms < LEAST_DISCREPANCY:
            return missing(
                INSUFFICIENT, '1', f'the discrepancy is {self._discrepancy.rms:.4f} {self.unit} '
                f'RMS; below {LEAST_DISCREPANCY:g} its shares are those of noise')
        # A term is often close to the discrepancy's rate times a delay: its products telescope.
        interval = shares.ci95(telescoping=True)
        metric = Metric(shares.mean, '1', interval, shares.n_blocks, self.samples,
                        reason=shares.why_none(interval))
        if metric.number < 0.0 and (other := self.cancelled(name)):
            metric.details['partly_cancels'] = other
        return metric


class _Magnitude:
    """Mean vector and mean square of a vector quantity, with the interval of its RMS."""

    def __init__(self) -> None:
        self.samples = 0
        self._sum: np.ndarray | None = None
        self.squares = BatchMeans()

    def add(self, values: np.ndarray) -> None:
        """Add one window's vectors (m, d)."""
        self.samples += len(values)
        total = values.sum(axis=0)
        self._sum = total if self._sum is None else self._sum + total
        self.squares.add(float(np.sum(values * values)), len(values))

    @property
    def mean(self) -> np.ndarray:
        """Return the static part (d,)."""
        assert self._sum is not None  # asked for only with samples
        return self._sum / self.samples

    @property
    def rms(self) -> float:
        return math.sqrt(self.squares.mean) if self.samples else 0.0

    @property
    def varying(self) -> float:
        """Return the RMS about the mean."""
        return math.sqrt(max(self.rms ** 2 - float(self.mean @ self.mean), 0.0))


_NO_SAMPLE = (INSUFFICIENT, 'no engaged and settled sample')


def window_metrics(cells: Terms, *, suffix: str = '_norm', unit: str = 'arm lengths',
                   details: Mapping[str, Mapping[str, object]] | None = None,
                   ) -> dict[str, Metric]:
    """Return the RMS of discrepancy and terms over one window, with the `details` of each."""
    found = {}
    named = {f'budget_{name}': values for name, values in cells.terms.items()}
    if cells.discrepancy is not None:
        named['discrepancy'] = cells.discrepancy
    for name, values in named.items():
        key = f'{name}_rms{suffix}'
        if not len(values):
            found[key] = missing(*_no_sample(unit))
            continue
        square = float(np.mean(np.sum(values * values, axis=1)))
        more = {} if details is None else details.get(name.removeprefix('budget_'), {})
        found[key] = Metric(math.sqrt(square), unit, None, 1, len(values), details=dict(more))
    return found


def _no_sample(unit: str) -> tuple[str, str, str]:
    return INSUFFICIENT, unit, NO_SAMPLE


__all__ = ['LEAST_DISCREPANCY', 'NO_SAMPLE', 'PARTS', 'TERMS', 'BudgetStatistics', 'Positions',
           'Terms', 'split', 'window_metrics']
