# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Frequency response between two motions, accumulated over a run in bounded memory."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from teleop_eval.core.cross_spectra import (
    SegmentTransform,
    Spectra,
    SpectraBatches,
    null_level,
)
from teleop_eval.core.segment_buffer import SegmentBuffer

# Below this much coherence, more than a fifth of the response's power is something else.
MIN_COHERENCE = 0.8
# The band's first coherent frequency must not be higher: there is no slow motion to compare
# the fast one with.
MAX_LOWEST_HZ = 1.0


@dataclass(frozen=True, eq=False)
class Response:
    """
    Frequency response of one signal to another; arrays (f,) over `frequencies_hz`.

    Attributes
    ----------
    gain_h1, gain_h2
        Gain, too low by noise on the reference and too high by noise on the response; the
        true one lies between. NaN where a signal has no power.
    phase_rad
        Negative where the response is late; without jumps inside the coherent band, within
        one turn about the mean shift elsewhere.
    coherence
        Magnitude-squared coherence.
    coherent
        Whether it exceeds 0.8 and `null_level`.
    null_level
        What unrelated signals exceed with a probability of 1 %.
    band
        First and last index of the coherent band: the lowest coherent frequency and those
        that follow without a gap; None without at least two.
    segments
        Number of segments that do not overlap.
    segments_overlapping
        Number of all segments.
    samples
        Number of cells in the segments.
    mean_shift_s
        Mean time by which the response was read later.

    """

    frequencies_hz: np.ndarray
    gain_h1: np.ndarray
    gain_h2: np.ndarray
    phase_rad: np.ndarray
    coherence: np.ndarray
    coherent: np.ndarray
    null_level: np.ndarray
    band: tuple[int, int] | None
    segments: int
    segments_overlapping: int
    samples: int
    mean_shift_s: float


class FrequencyResponse:
    """
    Frequency response of `response` to `reference`, fed window by window.

    Segments of four seconds overlap by half and are weighted by a Hann window. Vectors give
    one response: cross and power spectra are summed over the dimensions. The response is read
    `shift_cells` later than the reference and the phase of this put back exactly, because a
    delay of a part x of the segment otherwise takes about 13 x^2 of the coherence and 7 x^2
    of the gain.

    Equal cells give equal numbers to the last bit, however they are split into calls.

    Parameters
    ----------
    rate_hz
        Cells per second.
    segment_s
        Length of a segment in seconds; the frequencies are multiples of its inverse.

    """

    def __init__(self, rate_hz: float, *, segment_s: float = 4.0) -> None:
        self._transform = SegmentTransform(rate_hz, segment_s)
        hop = self._transform.steps // 2
        self._buffer = SegmentBuffer(self._transform.cells, hop)
        self._batches = SpectraBatches(len(self._transform.frequencies_hz))
        self._shift_cells = 0
        self._samples = 0

    @property
    def segment_s(self) -> float:
        """Return the length of a segment in seconds."""
        return self._transform.steps / self._transform.rate_hz

    def add(self, reference: np.ndarray, response: np.ndarray, valid: np.ndarray,
            run: np.ndarray, *, shift_cells: int = 0) -> None:
        """
        Add consecutive cells that follow those of the last call.

        Parameters
        ----------
        reference, response
            (m, d) positions in arm lengths, or both their velocities, or joints.
        valid
            (m,) whether both have a value.
        run
            (m,) number of the stretch each cell belongs to; no segment spans a change.
        shift_cells
            Delay by which the response is read later, in cells, not negative; 0 if unknown.

        Raises
        ------
        ValueError
            If the shapes do not fit or the shift is negative.

        """
        for segment in self._buffer.add(
                np.asarray(reference, dtype=float), np.asarray(response, dtype=float),
                np.asarray(valid), np.asarray(run), shift_cells=shift_cells):
            self._batches.add(self._transform.spectra(segment), segment.index)
            self._shift_cells += segment.shift
            steps = self._transform.steps
            self._samples += steps // 2 if segment.index else self._transform.cells

    def restart(self) -> None:
        """Take the next cell as the first of a new stretch, as after a pause."""
        self._buffer.reset()

    def left_out(self) -> list[Spectra]:
        """Return the spectra without each batch of segments in turn, for the jackknife."""
        return self._batches.left_out()

    @property
    def total(self) -> Spectra:
        """Return the spectra over all segments."""
        return self._batches.total

    def result(self) -> Response:
        """Return what all segments so far give together."""
        total, batches = self._batches.total, self._batches
        level = null_level(batches.effective_segments())
        coherence = total.coherence
        coherent = coherence > np.maximum(MIN_COHERENCE, level)
        # Sharpened powers of a steep spectrum can come out negative: no gain, no answer.
        coherent &= (total.gain_h1 > 0.0) & (total.gain_h2 > 0.0)
        band = _coherent_band(coherent)
        mean_shift_s = self._shift_cells / max(batches.segments, 1) / self._transform.rate_hz
        return Response(
            frequencies_hz=self._transform.frequencies_hz,
            gain_h1=total.gain_h1, gain_h2=total.gain_h2,
            phase_rad=phase_rad(total.cross, self._transform.frequencies_hz,
                                band=band, mean_shift_s=mean_shift_s),
            coherence=coherence, coherent=coherent, null_level=level, band=band,
            segments=batches.disjoint, segments_overlapping=batches.segments,
            samples=self._samples, mean_shift_s=mean_shift_s)


def phase_rad(cross: np.ndarray, frequencies_hz: np.ndarray, *,
              band: tuple[int, int] | None, mean_shift_s: float) -> np.ndarray:
    """
    Return the phase (f,) of a cross spectrum, unwrapped inside the coherent band.

    Only what is left after the mean shift is unwrapped: up to 2 s of it, at 0.25 Hz a step,
    can be told.
    """
    about = 2.0 * np.pi * frequencies_hz * mean_shift_s
    left = np.angle(cross * np.exp(1j * about))
    if band is not None:
        inside = slice(band[0], band[1] + 1)
        left[inside] = np.unwrap(left[inside])
    return np.asarray(left - about)


def _coherent_band(coherent: np.ndarray) -> tuple[int, int] | None:
    """Return first and last index of the lowest coherent stretch of at least two."""
    found = np.flatnonzero(coherent)
    if not found.size:
        return None
    first = int(found[0])
    gaps = np.flatnonzero(~coherent[first:])
    last = first + int(gaps[0]) - 1 if gaps.size else len(coherent) - 1
    return (first, last) if last > first else None
