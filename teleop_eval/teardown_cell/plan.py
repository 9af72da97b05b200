# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What the cell is made of and when it does what; every process derives the same plan."""

from __future__ import annotations

from dataclasses import dataclass

NAMESPACE = '/teardown_cell'
HAND_TOPIC = f'{NAMESPACE}/operator/hand'
OPERATOR_JOINTS_TOPIC = f'{NAMESPACE}/operator/joints'
ACTIVE_MAPPING_TOPIC = f'{NAMESPACE}/active_mapping'
ENGAGED_TOPIC = f'{NAMESPACE}/engaged'
COMMAND_TOPIC = f'{NAMESPACE}/command'
JOINT_STATES_TOPIC = f'{NAMESPACE}/joint_states'
DESCRIPTION_TOPIC = f'{NAMESPACE}/robot_description'
START_TOPIC = f'{NAMESPACE}/start'
LATENESS_TOPIC = f'{NAMESPACE}/command_lateness_s'
DIAGNOSTICS_TOPIC = f'{NAMESPACE}/diagnostics'

OPERATOR_FRAME = 'operator_base'
ARM_NAME = 'right'
MIRROR, REACH = 'mirror', 'reach'
OPERATOR_PSEUDONYM = 'op_07'

# How long the arm's state waits for commands that a busy machine has not delivered yet; then
# the last command is held, as a drive does whose master is silent. Below the half second that
# the evaluator waits for a late sample.
GRACE_S = 0.4

# Shortest demonstration in which both halves still hold a latency window after settling.
MIN_SECONDS, MAX_SECONDS = 20.0, 3600.0


@dataclass(frozen=True)
class CellTiming:
    """
    Rates and delays of the cell; all invented.

    Attributes
    ----------
    operator_rate_hz, joint_state_rate_hz
        Rates of the operator's tracker and of the arm's joint states; one command follows
        each tracker sample.
    processing_delay_s
        From the stamp of a tracker sample to the stamp of the command made from it.
    transport_delay_s
        From the stamp of a command to the moment at which the arm's servo sees it.
    zeta, natural_frequency_rad_s
        Damping ratio and natural frequency of the servo of every joint.

    """

    operator_rate_hz: float = 100.0
    joint_state_rate_hz: float = 125.0
    processing_delay_s: float = 0.008
    transport_delay_s: float = 0.060
    zeta: float = 0.9
    natural_frequency_rad_s: float = 25.0

    @property
    def servo_lag_s(self) -> float:
        """Return the delay of the servo at low frequency, 2 zeta/omega_n."""
        return 2.0 * self.zeta / self.natural_frequency_rad_s

    @property
    def sum_s(self) -> float:
        """Return the sum of all delays from the operator's sample to the arm."""
        return self.processing_delay_s + self.transport_delay_s + self.servo_lag_s


@dataclass(frozen=True)
class Plan:
    """
    When the cell engages, switches the mapping and ends, in seconds from the start.

    The first half runs under `mirror`, the second under `reach`. The clutch is open during
    the first second and for two seconds around the switch.
    """

    seconds: float = 40.0
    seed: int = 7
    timing: CellTiming = CellTiming()

    first_engagement_s: float = 1.0
    open_before_switch_s: float = 1.0
    open_after_switch_s: float = 1.0

    @property
    def switch_s(self) -> float:
        """Return the time of the change of mapping."""
        return self.seconds / 2.0

    @property
    def disengage_s(self) -> float:
        """Return the time at which the clutch opens before the switch."""
        return self.switch_s - self.open_before_switch_s

    @property
    def reengage_s(self) -> float:
        """Return the time at which the clutch closes after the switch."""
        return self.switch_s + self.open_after_switch_s

    def engaged(self, t: float) -> bool:
        """Return whether the operator drives the arm at t."""
        first = self.first_engagement_s <= t < self.disengage_s
        return first or self.reengage_s <= t < self.seconds

    def mapping(self, t: float) -> str:
        """Return the label of the mapping in use at t."""
        return MIRROR if t < self.switch_s else REACH

    def engaged_span(self, mapping: str) -> tuple[float, float]:
        """Return start and end of the engagement under a mapping."""
        if mapping == MIRROR:
            return self.first_engagement_s, self.disengage_s
        return self.reengage_s, self.seconds
