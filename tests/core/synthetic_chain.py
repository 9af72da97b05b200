# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
A teleoperation chain stepped at 1 kHz, with the truth of its error budget.

Operator -> mapping -> (delay, low pass, offset) -> command -> (transport delay, servo) -> robot.
The chain and the decomposition are written here anew: nothing of what is tested takes part,
except that the truth's delays are those the estimator finds on the noise-free motion, since a
lag that is no delay has no other.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import synthetic_session as syn
from scipy.linalg import expm
from scipy.spatial.transform import Rotation

from teleop_eval.core.latency import DelaySettings, estimate_delay

RATE_HZ = 1000
TERMS = ('mapping', 'processing_delay', 'command', 'response_delay', 'residual')
# The budget begins with the window in which the first delay is known.
BEGIN_S = 8.0


@dataclass(frozen=True)
class Chain:
    """What is wrong in the chain; the defaults are a perfect one."""

    scale: tuple[float, float, float] = (1.0, 1.0, 1.0)
    offset: tuple[float, float, float] = (0.0, 0.0, 0.0)
    relative: bool = False
    processing_s: float = 0.0
    filter_s: float = 0.0
    command_offset: tuple[float, float, float] = (0.0, 0.0, 0.0)
    transport_s: float = 0.0
    servo: tuple[float, float] | None = None
    noise: float = 0.0
    clutch: tuple[tuple[float, float], ...] = ()
    turn_offset: tuple[float, float, float] | None = None


@dataclass(frozen=True)
class Motion:
    """Dense series: times (n,) s, the rest (n, 3) arm lengths; engaged (n,)."""

    times: np.ndarray
    operator: np.ndarray
    ideal: np.ndarray
    command: np.ndarray
    robot: np.ndarray
    engaged: np.ndarray


def simulate(chain: Chain, motion, seconds: float, *, noisy: bool = False,
             seed: int = 3) -> Motion:
    """
    Step the chain from rest, with the operator's motion as function of seconds.

    With `noisy`, what the stack gets is the hand as the tracker reports it at 100 Hz.
    """
    lead = 2 * RATE_HZ
    times = (np.arange(lead + round(seconds * RATE_HZ)) - lead) / RATE_HZ
    hand = motion(times)
    if noisy and chain.noise:
        reports = syn.clock(times[0], times[-1] + 0.02, 100.0)
        error = chain.noise / 0.6 * np.random.default_rng(seed).standard_normal(
            (len(reports), 3))
        hand = hand + np.column_stack([np.interp(times, reports, axis) for axis in error.T])
    spans = chain.clutch or ((-2.0, seconds + 1.0),)
    engaged = np.zeros(len(times), dtype=bool)
    begins = []
    for on, off in spans:
        engaged |= (times >= on) & (times < off)
        begins.append(int(np.searchsorted(times, on)))
    ideal, command, robot = (np.empty_like(hand) for _ in range(3))
    scale, offset = np.array(chain.scale), np.array(chain.offset)
    processing, transport = (round(one * RATE_HZ) for one in
                             (chain.processing_s, chain.transport_s))
    step = 1.0 if not chain.filter_s else 1.0 - math.exp(-1.0 / (RATE_HZ * chain.filter_s))
    servo = None if chain.servo is None else _servo_step(*chain.servo)
    anchor = (hand[0], scale * hand[0] + offset)
    smooth = state = None
    for k in range(len(times)):
        if chain.relative and k in begins and k:
            anchor = (hand[k], robot[k - 1])
        if not chain.relative:
            ideal[k] = scale * hand[k] + offset
        elif engaged[k]:
            ideal[k] = anchor[1] + scale * (hand[k] - anchor[0])
        else:
            ideal[k] = ideal[k - 1] if k else anchor[1]
        target = ideal[max(k - processing, 0)] if (
            not chain.relative or engaged[max(k - processing, 0)] or not k) else smooth
        smooth = target if smooth is None else smooth + step * (target - smooth)
        if engaged[k] or not k:
            command[k] = smooth + chain.command_offset
        else:
            command[k] = command[k - 1]
        driven = command[max(k - transport, 0)]
        if servo is None:
            robot[k] = driven
        else:
            state = np.vstack([driven, 0.0 * driven]) if state is None else (
                servo[0] @ state + servo[1][:, None] * driven)
            robot[k] = state[0]
    return Motion(times, hand, ideal, command, robot, engaged)


def _servo_step(omega: float, zeta: float) -> tuple[np.ndarray, np.ndarray]:
    """Return the exact step of x'' = w^2 (u - x) - 2 z w x' for u held over 1 ms."""
    system = np.zeros((3, 3))
    system[0, 1] = 1.0
    system[1] = [-omega ** 2, -2.0 * zeta * omega, omega ** 2]
    step = expm(system / RATE_HZ)
    return step[:2, :2], step[:2, 2]


def messages(chain: Chain, motion: Motion, *, command: bool = True, seed: int = 3) -> syn.Feed:
    """Return the feed of a chain's hand, command, robot and clutch."""
    rng, made = np.random.default_rng(seed + 1), syn.Feed()
    end = motion.times[-1]

    def at(series, times):
        return np.column_stack([np.interp(times, motion.times, axis) for axis in series.T])

    if chain.clutch:
        made.flag(-0.5, '/clutch', False)
        for on, off in chain.clutch:
            made.flag(on, '/clutch', True).flag(off, '/clutch', False)
    def turns(times):
        if chain.turn_offset is None:
            return None
        return Rotation.from_rotvec(
            syn.wander(7, centre=(0.0, 0.0, 0.0), size=0.3)(times))

    t = syn.clock(0.0, end, 100.0)
    turned = turns(t)
    made.poses('/hand', t, 0.6 * at(motion.operator, t),
               None if turned is None else turned.as_quat())
    t = syn.clock(0.0, end, 125.0, phase=0.7)
    # Encoders are ten times better than trackers.
    noisy = at(motion.robot, t) + 0.1 * chain.noise * rng.standard_normal((len(t), 3))
    turned = turns(t - chain.processing_s - chain.transport_s)
    if turned is not None:
        turned = turned * Rotation.from_rotvec(chain.turn_offset)
    made.joints('/joints', t, syn.joints_for(noisy, turned))
    if command:
        # The stack commands when it gets the hand, a processing time later.
        t = syn.clock(0.0, end, 100.0, phase=0.3 + 100.0 * chain.processing_s)
        made.joints('/command', t, syn.joints_for(
            at(motion.command, t), turns(t - chain.processing_s)))
    return made


def noise_free_delay(reference: np.ndarray, response: np.ndarray, good: np.ndarray) -> float:
    """Return the median delay over windows of 10 s of dense series (n, 3)."""
    factor, rate = 10, RATE_HZ / 10
    before, after = (np.gradient(one[::factor], 1.0 / rate, axis=0)
                     for one in (reference, response))
    valid = good[::factor]
    runs = np.cumsum(np.diff(valid.astype(int), prepend=0) != 0)
    size, run_in, found = round(10 * rate), round(1.5 * rate), []
    for start in range(0, len(before) - size + 1, round(2 * rate)):
        estimate = estimate_delay(
            before, after, rate, valid_reference=valid, runs=runs,
            window=(start + run_in, start + size),
            settings=DelaySettings(min_duration_s=4.0))
        if estimate.delay_s is not None:
            found.append(estimate.delay_s)
    return max(float(np.median(found)), 0.0)


def truth(motion: Motion, *, command: bool = True, settling_s: float = 1.0) -> dict:
    """Return RMS, static, varying part and share of each term, and the two delays."""
    late = _settled(motion, settling_s)
    driver = motion.command if command else motion.ideal
    a = noise_free_delay(motion.ideal, motion.command, late) if command else 0.0
    b = noise_free_delay(driver, motion.robot, late)
    u_o, u_i, u_c, u_r = motion.operator, motion.ideal, driver, motion.robot
    i_late, c_late = _earlier(motion, u_i, a), _earlier(motion, u_c, b)
    terms = {'mapping': u_i - u_o, 'processing_delay': i_late - u_i, 'command': u_c - i_late,
             'response_delay': c_late - u_c, 'residual': u_r - c_late}
    if not command:
        del terms['processing_delay'], terms['command']
    good = late & (motion.times >= BEGIN_S)
    error = (u_r - u_o)[good]
    found = {'delays': (a, b), 'discrepancy': _parts(error)}
    for name, values in terms.items():
        kept = values[good]
        found[name] = {**_parts(kept),
                       'share': float(np.sum(kept * error) / np.sum(error * error))}
    return found


def _settled(motion: Motion, settling_s: float) -> np.ndarray:
    """Return which samples are engaged and past the settling time."""
    edges = np.flatnonzero(np.diff(motion.engaged.astype(int), prepend=0) == 1)
    good = motion.engaged.copy()
    for edge in edges:
        if motion.times[edge] > 0.0:
            good[edge:edge + round(settling_s * RATE_HZ)] = False
    return good & (motion.times >= 0.0)


def _earlier(motion: Motion, series: np.ndarray, delay: float) -> np.ndarray:
    return np.column_stack([np.interp(motion.times - delay, motion.times, axis)
                            for axis in series.T])


def _parts(values: np.ndarray) -> dict[str, float]:
    mean = values.mean(axis=0)
    square = float(np.mean(np.sum(values * values, axis=1)))
    static = float(np.linalg.norm(mean))
    return {'rms': math.sqrt(square), 'static': static,
            'varying': math.sqrt(max(square - static ** 2, 0.0))}
