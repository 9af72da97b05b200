# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What is searched for a delay, when it counts, and the answer that there is none."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class DelaySettings:
    """
    What is searched and when a delay counts as observable.

    Attributes
    ----------
    min_s, max_s
        Search range in seconds. A little below 0, so that a response without delay has its
        peak inside the range, and up to 1 s, where people stop moving continuously.
    low_hz
        Motion whose mean frequency is lower is called too slow: within 10 s it has no
        feature whose time could be told.
    high_hz
        Highest corner of the filters. Voluntary motion ends at 2-3 Hz, tremor at 12 Hz.
    min_speed
        Least RMS velocity of both sides in the band, arm lengths/s or rad/s: clearly under
        slow work (0.05) and over the noise of a still sensor.
    min_correlation
        Least correlation at the peak. Chance is excluded apart (`false_alarm`); this refuses
        motions that are related but of which more than half is something else.
    false_alarm
        Probability that unrelated motions of the same spectra reach the peak found.
    second_peak
        Share of the highest peak from which another one makes the answer ambiguous.
    periodic_s
        The motion's own autocorrelation is checked for such a peak up to this lag. Longer
        than the search range, because one more period back the true delay would lie just
        outside of it.
    min_duration_s
        Least duration of valid pairs of samples.
    max_standard_error_s
        Largest standard error with which a value is still given.
    context_s
        Data used before the window: the longest lag and the filters' length.

    """

    min_s: float = -0.1
    max_s: float = 1.0
    low_hz: float = 0.12
    high_hz: float = 9.0
    min_speed: float = 0.02
    min_correlation: float = 0.5
    false_alarm: float = 0.001
    second_peak: float = 0.9
    periodic_s: float = 1.3
    min_duration_s: float = 4.0
    max_standard_error_s: float = 0.1
    context_s: float = 1.5


@dataclass(frozen=True)
class Sides:
    """What the two motions are called in a sentence, and the unit of their velocities."""

    reference: str = 'reference'
    response: str = 'response'
    unit: str = ''

    @property
    def both(self) -> str:
        """Return both names."""
        return f'{self.reference} and {self.response}'

    def speed(self, value: float) -> str:
        """Return a velocity with its unit."""
        return f'{value:.4f} {self.unit}'.rstrip()


class NoDelay(Exception):
    """Carries status and sentence from the check that failed."""

    def __init__(self, status: str, reason: str) -> None:
        super().__init__(reason)
        self.status = status
        self.reason = reason
