# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The simulated operator's motion: reaches between module handles, as a function of time.

Everything is invented. Without a clock: the pose at any time can be asked for, so the node
and the calculation of the truth share one motion.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from teleop_eval.core import rotations
from teleop_eval.teardown_cell.human_arm import SHOULDER_M, Array, HumanArm

# Handles of six battery modules on the bench, from the shoulder, m; and how the grip differs
# between them, rotation vectors in hand axes, rad.
HANDLES_M = np.array([
    [0.48, 0.17, -0.34], [0.60, 0.14, -0.24], [0.50, -0.02, -0.38],
    [0.64, -0.04, -0.16], [0.46, -0.20, -0.30], [0.58, -0.22, -0.20],
])
GRIPS_RAD = np.array([
    [0.10, 0.05, 0.20], [-0.15, 0.10, 0.05], [0.05, -0.15, -0.10],
    [0.20, 0.00, -0.05], [-0.10, 0.15, -0.20], [0.00, -0.10, 0.10],
])
GRIP_PITCH_RAD = 0.45
REACH_S, PAUSE_S = (0.7, 1.4), (0.2, 0.6)
MOTOR_NOISE_M, MOTOR_NOISE_RAD, MOTOR_BAND_HZ = 1.5e-3, 4e-3, (0.5, 6.0)
MOTOR_TONES = 24
TRACKER_NOISE_M, TRACKER_NOISE_RAD = 0.3e-3, 1e-3


def minimum_jerk(part: npt.ArrayLike) -> Array:
    """
    Return the share of the way of a minimum-jerk reach.

    Parameters
    ----------
    part
        Share of the time, clipped to 0..1.

    References
    ----------
    Flash and Hogan 1985, "The coordination of arm movements", J. Neuroscience 5(7),
    1688-1703: 10 x^3 - 15 x^4 + 6 x^5.

    """
    x = np.clip(np.asarray(part, dtype=float), 0.0, 1.0)
    return np.asarray(x**3 * (10.0 - 15.0 * x + 6.0 * x * x))


@dataclass(frozen=True, eq=False)
class OperatorState:
    """Hand (n, 3) m, orientation (n, 4) x, y, z, w, in the operator's frame; joints (n, 7)."""

    hand: Array
    orientation: Array
    joints: Array


class OperatorMotion:
    """
    A person who keeps reaching from handle to handle.

    Parameters
    ----------
    seed
        Fixes the order of the handles, the durations and the noise.
    duration_s
        Time for which reaches are planned; afterwards the hand rests.
    noise
        Whether the motion has motor noise and the tracker its own; without both it is the
        motion of which the true delay is computed.

    """

    def __init__(self, seed: int, duration_s: float, *, noise: bool = True) -> None:
        """Draw the reaches."""
        self._plan_reaches(np.random.default_rng([seed, 1]), duration_s)
        self._draw_tones(np.random.default_rng([seed, 2]))
        self._tracker = np.random.default_rng([seed, 3])
        self._noise = noise
        self.arm = HumanArm()

    def at(self, t: npt.ArrayLike) -> OperatorState:
        """
        Return what the tracker measures.

        Parameters
        ----------
        t
            (n,) times from the start, s.

        """
        times = np.atleast_1d(np.asarray(t, dtype=float))
        index = np.clip(np.searchsorted(self._begin, times, side='right') - 1, 0, None)
        share = minimum_jerk((times - self._begin[index]) / self._length[index])[:, None]
        goal, origin = self._order[index + 1], self._order[index]
        hand = SHOULDER_M + (1.0 - share) * HANDLES_M[origin] + share * HANDLES_M[goal]
        grip = (1.0 - share) * GRIPS_RAD[origin] + share * GRIPS_RAD[goal]
        if self._noise:
            wobble = self._wobble(times)
            hand = hand + MOTOR_NOISE_M * wobble[:, :3]
            grip = grip + MOTOR_NOISE_RAD * wobble[:, 3:]
        level = rotations.exp(np.array([0.0, GRIP_PITCH_RAD, 0.0]))
        orientation = rotations.multiply(level, rotations.exp(grip))
        joints = self.arm.inverse(hand, rotations.to_matrix(orientation))
        if self._noise:
            white = self._tracker.standard_normal((len(times), 6 + joints.shape[1]))
            hand = hand + TRACKER_NOISE_M * white[:, :3]
            orientation = rotations.multiply(
                orientation, rotations.exp(TRACKER_NOISE_RAD * white[:, 3:6]))
            joints = joints + TRACKER_NOISE_RAD * white[:, 6:]
        return OperatorState(hand, orientation, joints)

    def _plan_reaches(self, random: np.random.Generator, duration_s: float) -> None:
        order = [0]
        begin: list[float] = []
        length: list[float] = []
        clock = 0.0
        while clock < duration_s or not begin:
            goal = int(random.integers(len(HANDLES_M) - 1))
            order.append(goal + (goal >= order[-1]))
            way = float(np.linalg.norm(HANDLES_M[order[-1]] - HANDLES_M[order[-2]]))
            # Farther handles take longer, with a spread from reach to reach.
            wanted = 0.75 + 1.0 * way + 0.12 * random.standard_normal()
            begin.append(clock)
            length.append(float(np.clip(wanted, *REACH_S)))
            clock += length[-1] + random.uniform(*PAUSE_S)
        self._order = np.array(order)
        self._begin, self._length = np.array(begin), np.array(length)

    def _draw_tones(self, random: np.random.Generator) -> None:
        """Draw unit-variance noise per axis: tones in a band, amplitude falling as 1/f."""
        low, high = MOTOR_BAND_HZ
        # One tone in each of equal parts of the band, apart from its neighbours: two tones of
        # nearly one frequency would beat for minutes.
        places = np.arange(MOTOR_TONES)[:, None] + random.uniform(0.1, 0.9, (MOTOR_TONES, 6))
        self._tone_hz = low + (high - low) * places / MOTOR_TONES
        self._tone_phase = random.uniform(0.0, 2.0 * np.pi, (MOTOR_TONES, 6))
        amplitude = 1.0 / self._tone_hz
        self._tone = amplitude / np.sqrt(np.sum(amplitude**2, axis=0) / 2.0)

    def _wobble(self, times: Array) -> Array:
        angle = 2.0 * np.pi * self._tone_hz * times[:, None, None] + self._tone_phase
        return np.asarray(np.sum(self._tone * np.sin(angle), axis=1))
