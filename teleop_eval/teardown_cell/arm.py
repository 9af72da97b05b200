# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The simulated arm: transport delay, limits and servos, on the stamps of the commands."""

from __future__ import annotations

import bisect
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.urdf import parse_urdf
from teleop_eval.teardown_cell.plan import CellTiming
from teleop_eval.teardown_cell.servo import Array, Servo

BASE_LINK, TIP_LINK, SHOULDER_LINK = 'teardown_arm_base', 'teardown_arm_tool', 'upper_arm'
INNER_STEP_NS = 2_000_000
# Commands older than this are no longer needed by any state still to be computed.
HISTORY_NS = 2_000_000_000
# Posture at rest, near the middle of what both mappings ask for.
HOME = np.array([-0.2, 1.0, -1.3, 0.1, 0.6, 0.0])


@dataclass(frozen=True, eq=False)
class ArmState:
    """Joint positions (n,) in rad and velocities (n,) in rad/s at a stamp."""

    stamp_ns: int
    positions: Array
    velocities: Array


def arm_chain(urdf: str) -> SerialChain:
    """Return the chain from base to tool of the cell's arm."""
    return SerialChain.from_description(
        parse_urdf(urdf, source='teardown_arm.urdf'), BASE_LINK, TIP_LINK)


class SimulatedArm:
    """
    Arm whose state at a stamp follows from the commands' stamps alone.

    A command takes effect `transport_delay_s` after its stamp, whenever the message really
    arrived; the set point runs linearly from command to command and keeps the position and
    rate limits; a servo follows it. Nothing depends on the wall clock or on scheduling, so
    the true delay is exact on a loaded machine too.

    Parameters
    ----------
    lower, upper, rates
        (n,) position limits, rad, and rate limits, rad/s.
    home
        (n,) posture at the start, rad.
    start_ns
        Stamp of the first state.
    timing
        Delay, servo and rate of the states.

    """

    def __init__(self, lower: npt.ArrayLike, upper: npt.ArrayLike, rates: npt.ArrayLike, *,
                 home: npt.ArrayLike, start_ns: int, timing: CellTiming) -> None:
        """Start at rest in the home posture."""
        self._lower = np.asarray(lower, dtype=float)
        self._upper = np.asarray(upper, dtype=float)
        self._largest_step = np.asarray(rates, dtype=float) * INNER_STEP_NS * 1e-9
        self._servo = Servo(home, zeta=timing.zeta,
                            natural_frequency_rad_s=timing.natural_frequency_rad_s,
                            step_s=INNER_STEP_NS * 1e-9)
        self._delay_ns = round(timing.transport_delay_s * 1e9)
        self._inner_steps = round(1e9 / timing.joint_state_rate_hz / INNER_STEP_NS)
        self._stamps: list[int] = []
        self._commands: list[Array] = []
        self.now_ns = start_ns
        self.refused = 0
        self.saturated = 0

    @property
    def next_ns(self) -> int:
        """Return the stamp of the state that `advance` computes next."""
        return self.now_ns + self._inner_steps * INNER_STEP_NS

    def add_command(self, stamp_ns: int, positions: npt.ArrayLike) -> None:
        """
        Accept a command.

        Parameters
        ----------
        stamp_ns
            Stamp of the command; one that is not newer than the last one is refused and
            counted in `refused`.
        positions
            (n,) rad; a command that is not finite is refused too.

        """
        command = np.array(positions, dtype=float)
        stale = bool(self._stamps) and stamp_ns <= self._stamps[-1]
        if stale or command.shape != self._lower.shape or not np.all(np.isfinite(command)):
            self.refused += 1
            return
        self._stamps.append(stamp_ns)
        self._commands.append(np.clip(command, self._lower, self._upper))

    def ready(self) -> bool:
        """Return whether the commands that the next state needs are known."""
        return not self._stamps or self._stamps[-1] >= self.next_ns - self._delay_ns

    def advance(self) -> ArmState:
        """Compute the state at `next_ns`; beyond the last command, the last one is held."""
        for _ in range(self._inner_steps):
            self.now_ns += INNER_STEP_NS
            wanted = self._command_at(self.now_ns - self._delay_ns) - self._servo.set_point
            allowed = np.clip(wanted, -self._largest_step, self._largest_step)
            self.saturated += int(np.any(np.abs(wanted - allowed) > 1e-9))
            self._servo.step(self._servo.set_point + allowed)
        self._forget()
        # A servo below critical damping overshoots by a fraction: the mechanical stop holds.
        position = np.clip(self._servo.position, self._lower, self._upper)
        return ArmState(self.now_ns, position.copy(), self._servo.velocity.copy())

    def _command_at(self, stamp_ns: int) -> Array:
        if not self._stamps or stamp_ns < self._stamps[0]:
            return self._servo.set_point
        after = bisect.bisect_right(self._stamps, stamp_ns)
        if after == len(self._stamps):
            return self._commands[-1]
        first, second = self._stamps[after - 1], self._stamps[after]
        part = (stamp_ns - first) / (second - first)
        return (1.0 - part) * self._commands[after - 1] + part * self._commands[after]

    def _forget(self) -> None:
        keep = bisect.bisect_left(self._stamps, self.now_ns - self._delay_ns - HISTORY_NS)
        keep = min(keep, max(len(self._stamps) - 1, 0))
        del self._stamps[:keep], self._commands[:keep]
