# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Random runs of a stationary chain, fed window by window to the real accumulators.

The hand wanders (a critically damped, so smooth, Gaussian motion), or reaches from target to
target with rests and long pauses, under a clutch. Mapping, filter, transport delay, servo, slow
drift and tracker noise follow. The numbers a metric should tell are taken from the arrays
themselves (`Population`), by formulas of their own.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np
from scipy import signal
from scipy.stats import norm

from teleop_eval.core import rotations
from teleop_eval.core.accumulator import JointErrorStatistics, MappingAccumulator
from teleop_eval.core.budget import TERMS
from teleop_eval.core.delays import Observed
from teleop_eval.core.history import History, Track
from teleop_eval.core.joint_range import JointRangeUse
from teleop_eval.core.latency import DelaySettings, estimate_delay
from teleop_eval.core.window import Span
from teleop_eval.core.window_budget import POSITION, window_budget

RATE_HZ, CELLS = 50, 100
PERIOD_S = 1.0 / RATE_HZ
# Delays in use, in cells: near those that the chain has, fractional as estimates are.
COMMAND_CELLS, RESPONSE_CELLS = 5.3, 7.4
SCALE, OFFSET = np.array([1.1, 0.95, 1.05]), np.array([0.02, 0.0, -0.01])
STATIC_TURN, TURN_RMS, SPIN_RMS = np.array([0.05, -0.02, 0.0]), 0.03, 0.2
WANDER_RMS, SPREAD = 0.2, 0.35
# Near a limit: beyond 1.8 standard deviations, or in the outermost part of the targets.
NEAR = {'wander': 1.8 * WANDER_RMS, 'reach': 0.93 * SPREAD}
_RUN_IN = 10 * RATE_HZ


def wander(rng, runs, cells, *, tau_s, width=3, rms=WANDER_RMS):
    """
    Return Gaussian motions (runs, cells, width), RMS per axis.

    Their correlation is (1 + t / tau) exp(-t / tau) but for the grid: it falls to 1/e in 2.1 tau.
    The variance is that of a second-order autoregression with a double pole, in closed form.
    """
    pole, lead = math.exp(-PERIOD_S / tau_s), int(12 * tau_s * RATE_HZ)
    noise = rng.standard_normal((runs, cells + lead, width))
    motion = signal.lfilter([1.0], [1.0, -2.0 * pole, pole**2], noise, axis=1)[:, lead:]
    return rms * motion / math.sqrt((1.0 + pole**2) / (1.0 - pole**2) ** 3)


def reach(rng, runs, cells, *, long_pauses=0.15, width=3):
    """
    Return minimum-jerk reaches (runs, cells, width) to random targets, with rests and pauses.

    Minimum jerk: Flash & Hogan 1985, J. Neurosci. 5(7):1688-1703.
    """
    found, times = np.empty((runs, cells, width)), np.arange(cells) * PERIOD_S
    for run in range(runs):
        count = int(cells * PERIOD_S) + 60
        lengths, rests = rng.uniform(0.7, 1.6, count), rng.uniform(0.2, 1.0, count)
        pauses = rng.random(count) < long_pauses
        rests[pauses] = rng.uniform(2.0, 5.0, np.count_nonzero(pauses))
        # Begins long before, so that the first cell is like any other.
        starts = np.concatenate([[0.0], np.cumsum(lengths + rests)])[:-1] - rng.uniform(20.0, 40.0)
        targets = rng.uniform(-SPREAD, SPREAD, (count + 1, width))
        which = np.searchsorted(starts, times, side='right') - 1
        share = np.clip((times - starts[which]) / lengths[which], 0.0, 1.0)[:, None]
        shape = share**3 * (10.0 - 15.0 * share + 6.0 * share**2)
        found[run] = targets[which] + shape * (targets[which + 1] - targets[which])
    return found


def drift(rng, runs, cells, *, tau_s, width, rms):
    """Return first-order autoregressive noise (runs, cells, width)."""
    pole = math.exp(-PERIOD_S / tau_s)
    noise = rng.standard_normal((runs, cells, width)) * math.sqrt(1.0 - pole**2)
    noise[:, 0] /= math.sqrt(1.0 - pole**2)
    return rms * signal.lfilter([1.0], [1.0, -pole], noise, axis=1)


def later(values, cells):
    """Return values (runs, m, d) so many cells later, linearly interpolated."""
    low = math.floor(cells)
    share = cells - low

    def shifted(by):
        return np.concatenate([np.repeat(values[:, :1], by, axis=1), values[:, :-by]], axis=1)

    return shifted(low) if share == 0.0 else (1.0 - share) * shifted(low) + share * shifted(
        low + 1)


MOTIONS = {
    'wander 0.3 s': ('wander', lambda *sizes: wander(*sizes, tau_s=0.15)),
    'wander 1 s': ('wander', lambda *sizes: wander(*sizes, tau_s=0.5)),
    'wander 3 s': ('wander', lambda *sizes: wander(*sizes, tau_s=1.5)),
    'reach': ('reach', lambda *sizes: reach(*sizes, long_pauses=0.0)),
    'reach and pause': ('reach', reach),
}


@dataclass
class Runs:
    """Tracks (runs, m, 3) in arm lengths, `usable` and `stretch` (runs, m), m whole windows."""

    kind: str
    hand: np.ndarray
    ideal: np.ndarray
    command: np.ndarray
    robot: np.ndarray
    turn: np.ndarray
    spin: np.ndarray
    usable: np.ndarray
    stretch: np.ndarray

    @property
    def joint_errors(self):
        """Return errors (runs, m, 3) of three joints: one quick, one mixed, one slow."""
        quick = self.robot - self.command
        return np.stack([quick[..., 0], 0.05 * quick[..., 1] + 0.02 * self.hand[..., 1],
                         0.02 * self.hand[..., 2]], axis=-1)

    @property
    def joints(self):
        """Return positions (runs, m, 2) of two joints that come near their limits."""
        return self.hand[..., :2]


def make(rng, motion, runs, minutes, *, clutch=True):
    """Return runs of a chain, after it has run in."""
    kind, moved = MOTIONS[motion]
    cells = round(minutes * 60.0 / 2.0) * CELLS
    total = cells + _RUN_IN
    hand = moved(rng, runs, total)
    ideal = hand * SCALE + OFFSET
    start = ideal[:, :1]
    pole = math.exp(-PERIOD_S / 0.06)
    command = start + signal.lfilter([1.0 - pole], [1.0, -pole], later(ideal, 2) - start, axis=1)
    omega = 2.0 * math.pi * 2.5
    servo = signal.cont2discrete(
        ([omega**2], [1.0, 1.4 * omega, omega**2]), PERIOD_S, 'zoh')
    robot = start + signal.lfilter(servo[0][0], servo[1], later(command, 3) - start, axis=1)
    robot += drift(rng, runs, total, tau_s=1.5, width=3, rms=0.004)
    robot += 0.001 * rng.standard_normal(robot.shape)
    hand = hand + 0.001 * rng.standard_normal(hand.shape)
    usable, stretch = _clutched(rng, runs, total) if clutch else (
        np.ones((runs, total), dtype=bool), np.zeros((runs, total), dtype=np.int64))
    turn = STATIC_TURN + wander(rng, runs, cells, tau_s=0.5, rms=TURN_RMS)
    spin = wander(rng, runs, cells, tau_s=0.15, rms=SPIN_RMS)
    kept = slice(_RUN_IN, None)
    return Runs(kind, hand[:, kept], ideal[:, kept], command[:, kept], robot[:, kept], turn, spin,
                usable[:, kept], stretch[:, kept])


def _clutched(rng, runs, cells):
    """Engaged for 10 to 40 s, off for 1 to 4 s, the first second not settled."""
    usable = np.zeros((runs, cells), dtype=bool)
    stretch = np.zeros((runs, cells), dtype=np.int64)
    for run in range(runs):
        cell, number = -int(rng.integers(0, 40 * RATE_HZ)), 0
        while cell < cells:
            end = cell + int(rng.uniform(10.0, 40.0) * RATE_HZ)
            usable[run, max(cell + RATE_HZ, 0):max(end, 0)] = True
            cell = end + int(rng.uniform(1.0, 4.0) * RATE_HZ)
            number += 1
            stretch[run, max(cell, 0):] = number
    return usable, stretch


class Population:
    """The numbers of a long run, from its arrays: mean squares, products, shares."""

    def __init__(self, runs):
        self._runs = runs
        first = math.ceil(RESPONSE_CELLS + COMMAND_CELLS)
        both = runs.usable[:, first:]
        kept = both.copy()
        # A cell counts if the delayed ones lie in the same stretch and are usable too.
        for back in range(1, math.ceil(RESPONSE_CELLS) + 1):
            kept &= runs.usable[:, first - back:-back]
        self._rows = {'usable': both, 'kept': kept}
        self._first = first

    def rms(self, values, cells='usable'):
        """Return the RMS norm of values (runs, m, d)."""
        rows = values[:, self._first:][self._rows[cells]]
        return math.sqrt(np.mean(np.sum(rows * rows, axis=1)))

    def truth(self):
        """Return the value of each metric by name."""
        runs = self._runs
        ideal_late = later(runs.ideal, COMMAND_CELLS)
        driver_late = later(runs.command, RESPONSE_CELLS)
        found = {
            'tracking_error_rms_norm': self.rms(runs.robot - runs.ideal),
            'orientation_error_rms_rad': math.sqrt(
                STATIC_TURN @ STATIC_TURN + 3.0 * TURN_RMS**2),
            'turn_rate_error_rms_rad_s': math.sqrt(3.0) * SPIN_RMS,
        }
        found['tracking_error_rms_m'] = 0.8 * found['tracking_error_rms_norm']
        error = runs.robot - runs.hand
        terms = dict(zip(TERMS, (
            runs.ideal - runs.hand, ideal_late - runs.ideal, runs.command - ideal_late,
            driver_late - runs.command, runs.robot - driver_late), strict=True))
        found['discrepancy_rms_norm'] = self.rms(error, 'kept')
        rows = {name: values[:, self._first:][self._rows['kept']]
                for name, values in {**terms, 'whole': error}.items()}
        for name in TERMS:
            found[f'budget_{name}_rms_norm'] = self.rms(terms[name], 'kept')
            found[f'budget_{name}_share'] = float(
                np.sum(rows[name] * rows['whole']) / np.sum(rows['whole'] ** 2))
        joints = runs.joint_errors
        found['joint_error_rms'] = self.rms(joints) / math.sqrt(3.0)
        for column, name in enumerate(JOINTS):
            found[f'joint_error_rms.{name}'] = self.rms(joints[..., column:column + 1])
        late = later(runs.ideal, COMMAND_CELLS + RESPONSE_CELLS)
        far = self._rows['kept'].copy()
        for back in range(1, self._first + 1):
            far &= runs.usable[:, self._first - back:-back or None]
        self._rows['far'] = far
        found['tracking_error_compensated_rms_norm'] = self.rms(runs.robot - late, 'far')
        if runs.kind == 'wander':
            found['limit_share'] = 1.0 - (1.0 - 2.0 * norm.sf(NEAR['wander'] / WANDER_RMS)) ** 2
        else:
            near = np.abs(runs.joints[:, self._first:][self._rows['usable']]) >= NEAR['reach']
            found['limit_share'] = float(np.mean(near.any(axis=1)))
        return found


JOINTS = 'quick', 'mixed', 'slow'


class KnownDelays:
    """Stands in for the estimates of a run: the delays in use are known and do not change."""

    def has(self, name):
        """Tell that every track of the chain is there."""
        return name in ('u_o', 'u_i', 'u_c', 'u_r')

    def in_use(self, now_ns, label, names=()):
        """Return the sum of the named stages."""
        cells = {'latency_command_s': COMMAND_CELLS, 'latency_response_s': RESPONSE_CELLS}
        return Observed(sum(cells[name] for name in names) * PERIOD_S, 0.0)


def metrics(runs, run):
    """Feed one run window by window, and return its metrics by name."""
    accumulator = MappingAccumulator(None, (), (), PERIOD_S)
    joints = JointErrorStatistics(JOINTS, ('rad',) * 3)
    far = NEAR[runs.kind] / 0.9
    limits = JointRangeUse(np.full(2, -far), np.full(2, far), np.zeros(2, dtype=bool))
    history, delays = History(2 * CELLS), KnownDelays()
    errors = runs.joint_errors[run]
    shift = COMMAND_CELLS + RESPONSE_CELLS
    for first in range(0, runs.usable.shape[1], CELLS):
        part = slice(first, first + CELLS)
        usable = runs.usable[run, part]
        every = np.ones(CELLS, dtype=bool)
        history.extend(
            {name: Track(values[run, part], every) for name, values in (
                ('u_o', runs.hand), ('u_i', runs.ideal), ('u_c', runs.command),
                ('u_r', runs.robot))},
            usable, runs.stretch[run, part], np.where(usable, 0, -1))
        robot, ideal = runs.robot[run, part], runs.ideal[run, part]
        accumulator.raw.add(np.linalg.norm(robot - ideal, axis=1)[usable])
        late = history.delayed('u_i', CELLS, shift)
        there = late.valid & usable
        accumulator.compensated.add(np.linalg.norm(robot - late.values, axis=1)[there])
        budget = window_budget(
            history, delays, Span(0, round(1e9 * PERIOD_S), first, CELLS), 0, usable, POSITION,
            PERIOD_S)
        accumulator.budget.add(budget.terms)
        turned = rotations.exp(runs.turn[run, part][usable])
        accumulator.turn_raw.add(np.tile([0.0, 0.0, 0.0, 1.0], (len(turned), 1)), turned)
        accumulator.spin.add(np.linalg.norm(runs.spin[run, part], axis=1)[usable])
        joints.add(np.where(usable[:, None], errors[part], np.nan))
        limits.add(runs.joints[run, part][usable])
    found = accumulator.budget.metrics(why={})
    for prefix, one in (('tracking_error', accumulator.raw),
                        ('tracking_error_compensated', accumulator.compensated)):
        found |= one.metrics(prefix, '_norm', 'arm lengths')
    found |= accumulator.raw.metrics('tracking_error', '_m', 'm', factor=0.8)
    found |= accumulator.turn_raw.metrics('orientation_error', absorbed=False)
    found |= accumulator.spin.metrics('turn_rate_error', '_rad_s', 'rad/s')
    found |= joints.metrics('joint_error', reason='')
    return found | {'limit_share': limits.metrics()['limit_share']}


WINDOW = 10 * RATE_HZ


def delayed_pair(rng, motion, minutes, *, delay_s, servo_hz=None, spread_s=0.0):
    """
    Return velocities (m, 3) of an ideal command and of a robot that follows late.

    The delay may wander by `spread_s` with a correlation time of 20 s. Both sides have noise of
    1 mm of an arm of 0.6 m.
    """
    cells = round(minutes * 60.0 * RATE_HZ)
    ideal = MOTIONS[motion][1](rng, 1, cells + _RUN_IN)
    if servo_hz is None:
        robot = ideal
    else:
        omega = 2.0 * math.pi * servo_hz
        servo = signal.cont2discrete(
            ([omega**2], [1.0, 1.4 * omega, omega**2]), PERIOD_S, 'zoh')
        robot = ideal[:, :1] + signal.lfilter(
            servo[0][0], servo[1], ideal - ideal[:, :1], axis=1)
    late = np.full(cells, delay_s)
    if spread_s:
        late = late + drift(rng, 1, cells, tau_s=20.0, width=1, rms=spread_s)[0, :, 0]
    at = np.arange(_RUN_IN, _RUN_IN + cells) - late * RATE_HZ
    robot = np.stack([np.interp(at, np.arange(robot.shape[1]), robot[0, :, axis])
                      for axis in range(3)], axis=1)
    ideal = ideal[0, _RUN_IN:]
    return tuple(np.gradient(side + 0.0017 * rng.standard_normal(side.shape), PERIOD_S, axis=0)
                 for side in (ideal, robot))


def window_delays(pair):
    """Return the estimate of every window of 10 s, none overlapping another, as the run does."""
    settings = DelaySettings(min_duration_s=4.0)
    run_in = round(settings.context_s * RATE_HZ)
    return [estimate_delay(*(side[end - WINDOW:end] for side in pair), float(RATE_HZ),
                           window=(run_in, WINDOW), settings=settings)
            for end in range(WINDOW, len(pair[0]) + 1, WINDOW)]


def planar_solver(first, second):
    """Return what stands in for the search in inverse kinematics: the closed form of two links."""
    class Solver:
        def __init__(self, chain, **_):
            self._size = chain.size

        def restart(self):
            """Nothing spans windows."""

        def solve(self, positions, turns=None):
            """Follow positions (m, 3) in the plane."""
            distance = np.linalg.norm(positions[:, :2], axis=1)
            reached = (distance <= first + second) & (distance >= abs(first - second))
            asked = np.isfinite(distance)
            cosine = (distance**2 - first**2 - second**2) / (2.0 * first * second)
            elbow = np.arccos(np.clip(cosine, -1.0, 1.0))
            shoulder = np.arctan2(positions[:, 1], positions[:, 0]) - np.arctan2(
                second * np.sin(elbow), first + second * np.cos(elbow))
            joints = np.stack([shoulder, elbow], axis=1)
            return SimpleNamespace(
                joints=joints, asked=asked, reached=reached & asked,
                jumped=np.zeros(len(asked), dtype=bool),
                position_error_m=np.where(reached, 0.0, np.abs(distance - first - second)),
                at_limit=np.zeros(joints.shape, dtype=bool))

    return Solver
