# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Bandwidth and phase delay against closed forms, with and without noise.

The response is made in the frequency domain from a periodic motion, so it is exact at every
frequency and for every fraction of a cell.
"""

from __future__ import annotations

import numpy as np
import pytest

from teleop_eval.core import frequency_metrics
from teleop_eval.core.delay_opinion import second_opinion
from teleop_eval.core.frequency_response import FrequencyResponse
from teleop_eval.core.metric import INSUFFICIENT, OK, UNOBSERVABLE, Metric

RATE = 50.0
# 1 mm of a tracker with an arm of 0.6 m; the robot's joints are far better known.
TRACKER, ENCODER = 0.0017, 0.0003


def delay(seconds):
    return lambda s: np.exp(-s * seconds)


def first_order(tau):
    return lambda s: 1.0 / (1.0 + tau * s)


def second_order(zeta, natural_hz):
    omega = 2.0 * np.pi * natural_hz
    return lambda s: omega**2 / (s * s + 2.0 * zeta * omega * s + omega**2)


def rich(rng, seconds, *, up_to_hz=6.0):
    """Return (m, 3) positions of noise with a flat velocity up to 6 Hz, RMS 0.15."""
    cells = int(seconds * RATE)
    hz = np.fft.rfftfreq(cells, 1.0 / RATE)
    shape = np.where((hz > 0.0) & (hz < up_to_hz), 1.0 / np.maximum(hz, 0.1), 0.0)
    x = np.fft.irfft(np.fft.rfft(rng.standard_normal((cells, 3)), axis=0) * shape[:, None],
                     cells, axis=0)
    return 0.15 * x / x.std()


def reaches(rng, seconds):
    """Return (m, 3) positions of minimum-jerk reaches of 0.7 to 1.4 s, back at the end."""
    cells = int(seconds * RATE)
    t, place = np.arange(cells) / RATE, np.zeros(3)
    p, start = np.zeros((cells, 3)), 0.0
    while start < seconds:
        last = start > seconds - 3.5
        goal = np.zeros(3) if last else rng.uniform(-0.4, 0.4, 3)
        x = np.clip((t - start) / rng.uniform(0.7, 1.4), 0.0, 1.0)
        share = x**3 * (10.0 - 15.0 * x + 6.0 * x * x)  # Flash and Hogan 1985
        begun = t >= start
        p[begun] = (place + (goal - place) * share[:, None])[begun]
        if last:
            break
        place, start = goal, start + 1.4 + rng.uniform(0.0, 0.6)
    return p


def measured(system, x, *, shift=0, rng=None, tracker=0.0, encoder=0.0):
    s = 2j * np.pi * np.fft.rfftfreq(len(x), 1.0 / RATE)
    y = np.fft.irfft(np.fft.rfft(x, axis=0) * system(s)[:, None], len(x), axis=0)
    if rng is not None:
        x = x + tracker * rng.standard_normal(x.shape)
        y = y + encoder * rng.standard_normal(y.shape)
    found = FrequencyResponse(RATE)
    found.add(x, y, np.ones(len(x), dtype=bool), np.zeros(len(x), dtype=np.int64),
              shift_cells=shift)
    return found


def noisy(system, seed, *, seconds=100.0, shift=0, motion=rich, tracker=TRACKER):
    rng = np.random.default_rng([11, seed])
    return measured(system, motion(rng, seconds), shift=shift, rng=rng, tracker=tracker,
                    encoder=ENCODER)


@pytest.mark.parametrize('motion', [rich, reaches])
@pytest.mark.parametrize('seconds, shift', [(0.1, 5), (0.093, 5), (0.093, 0), (0.61, 30)])
def test_pure_delay(motion, seconds, shift):
    # LG1: gain 1, phase -360 f D degrees.
    found = measured(delay(seconds), motion(np.random.default_rng(1), 120.0), shift=shift)
    known = frequency_metrics.metrics(found)
    # Exact where the shift is; else what is left of the window's smear, 2 % of what the
    # shift leaves of the delay.
    left = abs(seconds - shift / RATE)
    assert known['phase_delay_s'].value == pytest.approx(seconds, abs=1e-5 + 0.02 * left)
    assert known['bandwidth_hz'].status == UNOBSERVABLE
    assert known['coherent_up_to_hz'].value >= 5.75
    result = found.result()
    low = slice(result.band[0], 9)
    np.testing.assert_allclose(
        result.phase_rad[low], -2.0 * np.pi * result.frequencies_hz[low] * seconds,
        atol=1e-5 + 2.0 * left)
    np.testing.assert_allclose(result.gain_h1[low], 1.0, atol=1e-5 + left)


@pytest.mark.parametrize('tau', [0.05, 0.1])
def test_first_order_lag(tau):
    # LG4: -3.01 dB at 1 / (2 pi tau), relative to 0 Hz; relative to 0.25 Hz, by hand from
    # 1 + (w tau)^2 = 2 (1 + (w0 tau)^2), a little higher.
    x = rich(np.random.default_rng(2), 300.0)
    found = measured(first_order(tau), x, shift=round(tau * RATE))
    bandwidth = frequency_metrics.metrics(found)['bandwidth_hz']
    exact = 1.0 / (2.0 * np.pi * tau)
    beside = np.sqrt(exact**2 + 2.0 * 0.25**2)
    assert bandwidth.value == pytest.approx(beside, rel=0.01)
    assert bandwidth.value == pytest.approx(exact, rel=0.03)
    result = found.result()
    hz = result.frequencies_hz[:20]  # to 5 Hz
    np.testing.assert_allclose(
        result.gain_h1[:20], 1.0 / np.sqrt(1.0 + (2.0 * np.pi * hz * tau) ** 2), rtol=0.02)
    np.testing.assert_allclose(
        result.phase_rad[:20], -np.arctan(2.0 * np.pi * hz * tau), atol=0.02)


@pytest.mark.parametrize('zeta, factor', [(0.5, 1.272020), (0.7, 1.010049), (1.0, 0.643594)])
def test_second_order_lag(zeta, factor):
    # LG9: w_3dB / w_n; LG10: the delay of slow motion tends to 2 zeta / w_n.
    natural_hz = 2.5
    slow = 2.0 * zeta / (2.0 * np.pi * natural_hz)
    found = measured(second_order(zeta, natural_hz), rich(np.random.default_rng(3), 300.0),
                     shift=round(slow * RATE))
    bandwidth = frequency_metrics.metrics(found)['bandwidth_hz']
    assert bandwidth.value == pytest.approx(factor * natural_hz, rel=0.02)
    result = found.result()
    lowest = -result.phase_rad[0] / (2.0 * np.pi * result.frequencies_hz[0])
    assert lowest == pytest.approx(slow, rel=0.03)
    # LG13 in another scale: gain and phase at half the natural frequency.
    exact = second_order(zeta, natural_hz)(2j * np.pi * 1.25)
    assert result.gain_h1[4] == pytest.approx(abs(exact), rel=0.01)
    assert result.phase_rad[4] == pytest.approx(np.angle(exact), abs=0.02)


def test_reaches_through_a_servo_give_its_bandwidth_within_five_percent():
    # Without noise even reaches excite up to 5 Hz; their spectrum is so steep that the
    # window's resolution is felt.
    found = measured(second_order(0.7, 2.0), reaches(np.random.default_rng(4), 300.0), shift=5)
    assert frequency_metrics.metrics(found)['bandwidth_hz'].value == pytest.approx(
        2.0 * 1.010049, rel=0.05)


@pytest.mark.parametrize('motion', [rich, reaches])
@pytest.mark.parametrize('shift', [5, 0])
def test_a_pure_delay_under_tracker_noise_gets_no_bandwidth(motion, shift):
    for seed in range(25):
        for seconds in (45.0, 120.0):
            found = noisy(delay(0.1), seed, seconds=seconds, shift=shift, motion=motion)
            bandwidth = frequency_metrics.metrics(found)['bandwidth_hz']
            assert bandwidth.status == UNOBSERVABLE, (seed, bandwidth)
            assert 'above' in bandwidth.reason and 'end of the coherent band' in bandwidth.reason


def test_a_dip_by_chance_at_the_end_of_the_band_is_no_bandwidth():
    # -3 dB at 3.2 Hz, where reaches end to be coherent: the estimate is below it in many
    # runs, surely below in few.
    found = [frequency_metrics.metrics(noisy(
        first_order(0.05), seed, shift=2, motion=reaches, tracker=0.0005)) for seed in range(40)]
    bandwidths = [one['bandwidth_hz'] for one in found]
    assert sum(one.status == OK for one in bandwidths) <= 6
    unsure = [one.reason for one in bandwidths if 'not surely below' in one.reason]
    assert len(unsure) >= 10


def test_an_interval_never_reaches_beyond_the_coherent_band():
    # Runs without a value in the band give none: an interval over its end would be of those
    # runs whose gain came out low. The seed is one where it would.
    found = noisy(second_order(0.7, 3.0), 31, shift=3, tracker=0.02,
                  motion=lambda rng, seconds: rich(rng, seconds, up_to_hz=3.4))
    bandwidth = frequency_metrics.metrics(found)['bandwidth_hz']
    assert bandwidth.status == OK and bandwidth.ci95 is None
    assert 'beyond the coherent band' in bandwidth.reason
    beside = bandwidth.value + 1.96 * bandwidth.details['standard_error_hz']
    assert beside > 0.98 * bandwidth.details['coherent_up_to_hz']


def test_voluntary_motion_does_not_show_the_bandwidth_of_a_fast_servo():
    known = frequency_metrics.metrics(
        noisy(first_order(0.03), 1, seconds=200.0, shift=1, motion=reaches), of='_response')
    bandwidth = known['bandwidth_response_hz']  # 5.3 Hz, beyond what the hand excites
    end = known['coherent_up_to_response_hz'].value
    assert bandwidth.status == UNOBSERVABLE
    assert bandwidth.reason.startswith(f'above {end:.2f} Hz, end of the coherent band')
    assert 1.5 <= end <= 3.5
    assert known['phase_delay_response_s'].value == pytest.approx(0.03, abs=0.002)


def test_too_few_segments_say_how_many():
    x = rich(np.random.default_rng(5), 38.0)
    for one in frequency_metrics.metrics(measured(delay(0.1), x, shift=5)).values():
        assert one.status == INSUFFICIENT
        assert '9 segments of 4 s' in one.reason and '10 are needed' in one.reason
    x = rich(np.random.default_rng(5), 41.0)
    assert frequency_metrics.metrics(measured(delay(0.1), x))['phase_delay_s'].status == OK


def test_unrelated_motions_have_no_response():
    rng = np.random.default_rng(6)
    found = FrequencyResponse(RATE)
    x, y = rich(rng, 100.0), rich(rng, 100.0)
    found.add(x, y, np.ones(len(x), dtype=bool), np.zeros(len(x), dtype=np.int64))
    for one in frequency_metrics.metrics(found).values():
        assert one.status == UNOBSERVABLE and 'coherence' in one.reason


def test_without_slow_motion_there_is_nothing_to_compare_with():
    # The slow part of the response is another motion: coherent from 1.5 Hz on only.
    rng = np.random.default_rng(7)
    x = rich(rng, 200.0)
    y = x + 3.0 * rich(rng, 200.0, up_to_hz=1.5)
    found = FrequencyResponse(RATE)
    found.add(x, y, np.ones(len(x), dtype=bool), np.zeros(len(x), dtype=np.int64))
    bandwidth = frequency_metrics.metrics(found)['bandwidth_hz']
    assert bandwidth.status == UNOBSERVABLE and 'no slow motion' in bandwidth.reason


def covered(system, truth, name, *, shift, runs=200, **given):
    """Return how many runs gave an interval and which share of these holds the truth."""
    inside = []
    for seed in range(runs):
        found = noisy(system, seed, shift=shift, **given)
        one = frequency_metrics.metrics(found)[name]
        assert one.status == OK
        if one.ci95 is not None:
            low, high = one.ci95
            assert low < one.value < high
            inside.append(low <= truth <= high)
    return len(inside), float(np.mean(inside))


def test_intervals_of_the_phase_delay_cover_the_delay():
    runs, share = covered(delay(0.093), 0.093, 'phase_delay_s', shift=5)
    assert runs >= 190 and 0.90 <= share <= 0.98


def test_intervals_of_the_bandwidth_cover_the_bandwidth():
    # By hand as above, relative to the lowest coherent frequency.
    truth = np.sqrt((1.0 / (0.1 * np.pi)) ** 2 + 2.0 * 0.25**2)
    runs, share = covered(first_order(0.05), truth, 'bandwidth_hz', shift=2)
    assert runs >= 180 and 0.90 <= share <= 0.98


def test_no_interval_where_the_resolution_counts():
    found = noisy(second_order(0.5, 2.0), 1, seconds=240.0, shift=4, motion=reaches)
    phase = frequency_metrics.metrics(found)['phase_delay_s']
    assert phase.status == OK and phase.ci95 is None and 'cannot resolve' in phase.reason
    assert phase.details['resolution_s'] > phase.details['standard_error_s'] > 0.0


def test_standard_error_is_the_scatter_of_repeated_runs():
    found = [frequency_metrics.metrics(noisy(delay(0.1), seed, shift=5))['phase_delay_s']
             for seed in range(60)]
    scatter = np.std([one.value for one in found], ddof=1)
    told = np.mean([one.details['standard_error_s'] for one in found])
    assert told == pytest.approx(scatter, rel=0.3)


def test_the_curve_is_short_and_plain():
    known = frequency_metrics.metrics(noisy(delay(0.1), 1, shift=5))
    curve = known['coherent_up_to_hz'].details['curve']
    assert {len(values) for values in curve.values()} == {60}
    assert all(x is None or isinstance(x, float) for values in curve.values() for x in values)


def latency(value, error=0.0005):
    return Metric(value, 's', n=20, details={'standard_error_s': error, 'spread_s': error})


def test_equal_delays_need_no_second_opinion():
    phase = frequency_metrics.metrics(noisy(delay(0.1), 1, shift=5))['phase_delay_s']
    assert second_opinion(phase, latency(0.1005)) == ''
    assert second_opinion(phase, Metric(None, 's', status=UNOBSERVABLE)) == ''
    assert 'no lag' in second_opinion(phase, latency(0.12))
    assert second_opinion(phase, latency(0.12, error=0.1)) == ''


@pytest.mark.parametrize('system, words', [
    (first_order(0.1), 'a lag (servo or filter) and not a pure delay'),
    (second_order(0.3, 4.0), 'little damped'),
])
def test_a_lag_is_told_from_a_delay(system, words):
    phase = frequency_metrics.metrics(noisy(
        system, 1, shift=2, motion=lambda rng, seconds: rich(rng, seconds, up_to_hz=3.5)))[
            'phase_delay_s']
    sentence = second_opinion(phase, latency(phase.value + 0.01))
    assert words in sentence and f'{phase.value * 1e3:.1f} ms' in sentence
