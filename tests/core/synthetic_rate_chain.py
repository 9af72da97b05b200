# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
A chain under a rate mapping stepped at 1 kHz, with the truth of its error budget.

Input -> gain, dead band, cap -> (delay, low pass) -> velocity command -> (transport delay, servo
on the velocity) -> robot, which integrates. The chain and the decomposition are written here
anew: nothing of what is tested takes part, except that the truth's delays are those that the
estimator finds on the noise-free velocities.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import synthetic_chain as positions
import synthetic_session as syn
from scipy.integrate import cumulative_trapezoid
from scipy.signal import lfilter

from teleop_eval.core.latency import DelaySettings, estimate_delay
from teleop_eval.core.samples import JoySample, TwistSample

RATE_HZ = positions.RATE_HZ
TWIST, STICK, DISPLACEMENT = 'twist', 'stick', 'displacement'
# Where the tool rests before the first engagement, arm lengths.
START = np.array([0.5, 0.1, 0.1])


@dataclass(frozen=True)
class RateChain:
    """
    What the stack does to the input; the defaults change nothing.

    `gain` per unit of input, `dead_band` and `cap` m/s; `command_offset` arm lengths/s; `servo`
    rad/s and damping; `noise` of the input in its own unit, as tracker or stick report it at
    100 Hz; `encoder_noise` of the tool's position as read from the joints, arm lengths.
    """

    source: str = TWIST
    gain: float = 1.0
    dead_band: float = 0.0
    cap: float | None = None
    processing_s: float = 0.0
    filter_s: float = 0.0
    command_offset: tuple[float, float, float] = (0.0, 0.0, 0.0)
    transport_s: float = 0.0
    servo: tuple[float, float] | None = None
    noise: float = 0.0
    encoder_noise: float = 0.0
    clutch: tuple[tuple[float, float], ...] = ()
    command: str = TWIST


@dataclass(frozen=True)
class RateMotion:
    """Dense series: times (n,) s; input as sent, its unit; velocities (n, 3) arm lengths/s."""

    times: np.ndarray
    sent: np.ndarray
    raw: np.ndarray
    ideal: np.ndarray
    command: np.ndarray
    robot: np.ndarray
    engaged: np.ndarray


def simulate(chain: RateChain, motion: Callable[[np.ndarray], np.ndarray], seconds: float, *,
             noisy: bool = False, seed: int = 3) -> RateMotion:
    """
    Step the chain from rest, with the input about its neutral place as function of seconds.

    A displaced hand starts at its neutral place at each engagement: an operator centres the
    hand before closing the clutch. With `noisy`, the stack gets the input as it is reported.
    """
    lead = 2 * RATE_HZ
    times = (np.arange(lead + round(seconds * RATE_HZ)) - lead) / RATE_HZ
    engaged = np.zeros(len(times), dtype=bool)
    size = np.zeros(len(times))
    for on, off in chain.clutch or ((-2.0, seconds + 1.0),):
        engaged |= (times >= on) & (times < off)
        size += np.interp(times, [on, on + 0.6, off, off + 0.6], [0.0, 1.0, 1.0, 0.0])
    sent = motion(times) * (size[:, None] if chain.source == DISPLACEMENT else 1.0)
    if noisy and chain.noise:
        reports = syn.clock(times[0], times[-1] + 0.02, 100.0)
        error = chain.noise * np.random.default_rng(seed).standard_normal((len(reports), 3))
        sent = sent + np.column_stack([np.interp(times, reports, axis) for axis in error.T])
    displaced = sent
    if chain.source == DISPLACEMENT:
        begins = [int(np.searchsorted(times, on)) for on, _ in chain.clutch]
        since = np.maximum.accumulate(np.where(np.isin(np.arange(len(times)), begins),
                                               np.arange(len(times)), 0))
        displaced = sent - sent[since]
    raw = chain.gain * displaced
    speed = np.linalg.norm(raw, axis=1)
    wanted = np.clip(speed - chain.dead_band, 0.0, math.inf if chain.cap is None else chain.cap)
    ideal = raw * np.divide(wanted, speed, out=np.zeros_like(speed), where=speed > 0.0)[:, None]
    # With the clutch open the stack commands rest.
    driven = _late(np.where(engaged[:, None], ideal, 0.0), chain.processing_s)
    command = driven
    if chain.filter_s:
        step = 1.0 - math.exp(-1.0 / (RATE_HZ * chain.filter_s))
        command = lfilter([step], [1.0, step - 1.0], driven, axis=0)
    command = command + syn.REACH_M * np.array(chain.command_offset)
    robot = _late(command, chain.transport_s)
    if chain.servo is not None:
        robot = _served(robot, *chain.servo)
    return RateMotion(times, sent, *(one / syn.REACH_M for one in (raw, ideal, command, robot)),
                      engaged)


def _late(series: np.ndarray, delay_s: float) -> np.ndarray:
    count = round(delay_s * RATE_HZ)
    return np.concatenate([np.repeat(series[:1], count, axis=0), series[:len(series) - count]])


def _served(driven: np.ndarray, omega: float, zeta: float) -> np.ndarray:
    """Return what a second-order servo on the velocity makes of it."""
    step, served = positions._servo_step(omega, zeta), np.empty_like(driven)
    state = np.vstack([driven[0], 0.0 * driven[0]])
    for k, row in enumerate(driven):
        state = step[0] @ state + step[1][:, None] * row
        served[k] = state[0]
    return served


def messages(chain: RateChain, motion: RateMotion, *, seed: int = 4) -> syn.Feed:
    """Return the feed of input, command, robot and clutch."""
    made, end = syn.Feed(), motion.times[-1]

    def at(series: np.ndarray, times: np.ndarray) -> np.ndarray:
        return np.column_stack([np.interp(times, motion.times, axis) for axis in series.T])

    def place(velocities: np.ndarray, times: np.ndarray, noise: float = 0.0) -> np.ndarray:
        way = cumulative_trapezoid(velocities, dx=1.0 / RATE_HZ, axis=0, initial=0.0)
        error = noise * np.random.default_rng(seed).standard_normal((len(times), 3))
        return syn.joints_for(START + at(way, times) + error)

    if chain.clutch:
        made.flag(-0.5, '/clutch', False)
        for on, off in chain.clutch:
            made.flag(on, '/clutch', True).flag(off, '/clutch', False)
    t = syn.clock(0.0, end, 100.0)
    if chain.source == DISPLACEMENT:
        made.poses('/hand', t, [0.3, 0.0, 0.1] + at(motion.sent, t))
    for moment, row in zip(t, at(motion.sent, t), strict=True):
        if chain.source == TWIST:
            made.put(moment + 0.002, '/input', TwistSample(syn.ns(moment), row, np.zeros(3), ''))
        elif chain.source == STICK:
            made.put(moment + 0.002, '/input', JoySample(
                syn.ns(moment), np.concatenate([row, np.zeros(3)]), np.zeros(0, dtype=np.int64)))
    t = syn.clock(0.0, end, 125.0, phase=0.7)
    made.joints('/joints', t, place(motion.robot, t, chain.encoder_noise))
    # The stack commands when it gets the input, a processing time later.
    t = syn.clock(0.0, end, 100.0, phase=0.3 + 100.0 * chain.processing_s)
    if chain.command == TWIST:
        for moment, row in zip(t, syn.REACH_M * at(motion.command, t), strict=True):
            made.put(moment + 0.002, '/command', TwistSample(
                syn.ns(moment), row, np.zeros(3), 'base'))
    elif chain.command == 'joints':
        made.joints('/command', t, place(motion.command, t))
    return made


def noise_free_delay(reference: np.ndarray, response: np.ndarray, good: np.ndarray) -> float:
    """Return the median delay over windows of 10 s of dense velocities (n, 3)."""
    factor, rate = 10, RATE_HZ / 10
    valid = good[::factor]
    runs = np.cumsum(np.diff(valid.astype(int), prepend=0) != 0)
    size, run_in, found = round(10 * rate), round(1.5 * rate), []
    for start in range(0, len(valid) - size + 1, round(2 * rate)):
        estimate = estimate_delay(
            reference[::factor], response[::factor], rate, valid_reference=valid, runs=runs,
            window=(start + run_in, start + size), settings=DelaySettings(min_duration_s=4.0))
        if estimate.delay_s is not None:
            found.append(estimate.delay_s)
    return max(float(np.median(found)), 0.0)


def truth(motion: RateMotion, *, command: bool = True, settling_s: float = 1.0) -> dict:
    """Return RMS, static, varying part and share of each term, and the two delays."""
    late = positions._settled(motion, settling_s)
    driver = motion.command if command else motion.ideal
    a = noise_free_delay(motion.ideal, motion.command, late) if command else 0.0
    b = noise_free_delay(driver, motion.robot, late)

    def earlier(series: np.ndarray, delay: float) -> np.ndarray:
        return np.column_stack([np.interp(motion.times - delay, motion.times, axis)
                                for axis in series.T])
    ideal_late, driver_late = earlier(motion.ideal, a), earlier(driver, b)
    terms = {'mapping': motion.ideal - motion.raw, 'processing_delay': ideal_late - motion.ideal,
             'command': driver - ideal_late, 'response_delay': driver_late - driver,
             'residual': motion.robot - driver_late}
    if not command:
        del terms['processing_delay'], terms['command']
    good = late & (motion.times >= positions.BEGIN_S)
    error = (motion.robot - motion.raw)[good]
    found = {'delays': (a, b), 'discrepancy': positions._parts(error)}
    for name, values in terms.items():
        kept = values[good]
        found[name] = {**positions._parts(kept),
                       'share': float(np.sum(kept * error) / np.sum(error * error))}
    return found
