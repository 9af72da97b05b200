# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Check single delays, lags against closed forms, and each reason for having no value."""

import importlib
import sys
from pathlib import Path

import numpy as np
import pytest
from scipy import integrate, optimize
from scipy.spatial.transform import Rotation

from teleop_eval.core.latency import DelaySettings, Sides, estimate_delay

sys.path.insert(0, str(Path(__file__).parent))
motion = importlib.import_module('synthetic_motion')

RATE = 100.0
SECONDS = 12.0


def velocity(delay=0.0, seed=1, band=(0.2, 3.0), rms=0.3, width=3, seconds=SECONDS):
    """Return the exact velocity of a random motion, delayed, at 100 Hz."""
    rng = np.random.default_rng(seed)
    position = motion.band_limited(rng, seconds, *band, rms, width)
    return position.derivative()(np.arange(int(seconds * RATE)) / RATE - delay)


@pytest.mark.parametrize('delay', [-0.05, 0.0, 0.0025, 0.1037, 0.4, 0.95])
@pytest.mark.parametrize('rate', [50.0, 77.0, 100.0, 200.0, 1000.0])
def test_delay_without_noise_is_found_to_microseconds(delay, rate):
    """A fraction of a sample is no harder than a whole one, at any rate."""
    rng = np.random.default_rng(2)
    position = motion.band_limited(rng, SECONDS, 0.2, 3.0, 0.3)
    times = np.arange(int(SECONDS * rate)) / rate
    result = estimate_delay(
        position.derivative()(times), position.derivative()(times - delay), rate
    )
    assert result.status == 'ok'
    assert result.delay_s == pytest.approx(delay, abs=5e-6)
    assert result.correlation == pytest.approx(1.0, abs=1e-3)


def test_scale_and_rotation_of_the_response_do_not_bias_the_peak():
    """
    Attenuated to a fifth and turned by 40 degrees: lower correlation, the same delay.

    The axes that the turn mixes correlate by chance, at random lags: an error that is zero
    in the mean of 60 motions and that the standard error must know of.
    """
    turn = Rotation.from_rotvec([0.0, np.radians(40.0), 0.0]).as_matrix()
    results = [
        estimate_delay(
            velocity(seed=seed), 0.2 * velocity(0.1237, seed=seed) @ turn.T, RATE
        )
        for seed in range(100, 160)
    ]
    assert all(result.status == 'ok' and result.correlation < 0.98 for result in results)
    error = np.array([result.delay_s - 0.1237 for result in results])
    score = error / [result.standard_error_s for result in results]
    assert abs(error.mean()) < 3.0 * error.std(ddof=1) / np.sqrt(60)
    assert 0.7 < np.sqrt(np.mean(score**2)) < 1.4


@pytest.mark.parametrize('band_hz', [1.0, 2.0])
def test_first_order_lag_equals_the_closed_form_of_the_correlation_peak(band_hz):
    """
    Against the peak of integral Re(exp(2 pi i f D) / (1 + 2 pi i f tau)) S(f) df.

    S is the motion's own periodogram as the estimator may weight it, so the lag lies between
    that of the flat band (49.0576 ms for 1 Hz, 46.6614 ms for 2 Hz, tau = 50 ms, closed
    form by quadrature) and tau, the limit for slow motion.
    """
    tau = 0.05

    def negative(delay):
        return -integrate.quad(
            lambda f: np.real(np.exp(2j * np.pi * f * delay) / (1 + 2j * np.pi * f * tau)),
            0.0, band_hz,
        )[0]

    flat = optimize.minimize_scalar(
        negative, bounds=(0.0, 0.2), method='bounded', options={'xatol': 1e-9}
    ).x
    assert 1e3 * flat == pytest.approx({1.0: 49.0576, 2.0: 46.6614}[band_hz], abs=0.01)
    rng = np.random.default_rng(3)
    rate, seconds = 100.0, 2000.0
    size = int(seconds * rate)
    frequency = np.fft.rfftfreq(size, 1.0 / rate)
    spectrum = rng.normal(size=(len(frequency), 3)) + 1j * rng.normal(size=(len(frequency), 3))
    spectrum[(frequency == 0) | (frequency > band_hz)] = 0.0
    lagged = spectrum / (1.0 + 2j * np.pi * frequency * tau)[:, None]
    reference, response = (np.fft.irfft(s, size, axis=0) for s in (spectrum, lagged))
    scale = 0.3 / np.sqrt(np.mean(np.sum(reference**2, axis=1)))
    results = [
        estimate_delay(
            scale * reference, scale * response, rate, window=(stop - 1000, stop)
        )
        for stop in range(1200, size, 2000)
    ]
    values = [result.delay_s for result in results if result.status == 'ok']
    assert len(values) >= 0.95 * len(results)
    mean, error = np.mean(values), np.std(values) / np.sqrt(len(values))
    assert flat - 0.0005 - 2 * error < mean < tau + 2 * error


def test_masked_data_do_not_count():
    """Nonsense behind the masks changes nothing; gaps only widen the error."""
    reference, response = velocity(), velocity(0.2)
    valid_1, valid_2 = np.ones((2, len(reference)), dtype=bool)
    valid_1[300:330] = False
    valid_2[700:760] = False
    spoiled_1 = np.where(valid_1[:, None], reference, 1e6)
    spoiled_2 = np.where(valid_2[:, None], response, np.nan)
    clean = estimate_delay(
        reference, response, RATE, valid_reference=valid_1, valid_response=valid_2
    )
    spoiled = estimate_delay(
        spoiled_1, spoiled_2, RATE, valid_reference=valid_1, valid_response=valid_2
    )
    assert clean == spoiled
    assert clean.delay_s == pytest.approx(0.2, abs=1e-5)


def test_data_outside_window_and_context_do_not_count():
    """Nothing after the window is seen, and nothing before its context."""
    reference, response = velocity(seconds=20.0), velocity(0.2, seconds=20.0)
    window = (600, 1600)
    clean = estimate_delay(reference, response, RATE, window=window)
    first = 600 - int(DelaySettings().context_s * RATE)
    for part in (slice(0, first), slice(1600, None)):
        response[part] = 99.0
        reference[part] = -99.0
    assert estimate_delay(reference, response, RATE, window=window) == clean


def test_no_pair_spans_a_change_of_run():
    """Two engagements of unlike delay on either side do not mix; a run of its own is lost."""
    reference, response = velocity(), velocity(0.2)
    runs = np.where(np.arange(len(reference)) < 500, 3, 4)
    jump = reference.copy(), response.copy()
    # A spike common to both ends of the boundary would correlate at lag 0 across it.
    whole = estimate_delay(*jump, RATE, runs=runs)
    assert whole.delay_s == pytest.approx(0.2, abs=1e-5)
    many = estimate_delay(*jump, RATE, runs=np.arange(len(reference)) // 50)
    assert many.status == 'insufficient'
    assert many.delay_s is None


def test_runs_are_correlated_each_for_itself():
    """A response shifted across the boundary has its partners in another run: no value."""
    rng = np.random.default_rng(6)
    noise = rng.normal(size=(1200, 3))
    kernel = np.hanning(21)
    slow = np.column_stack([np.convolve(column, kernel, 'same') for column in noise.T]) * 0.05
    runs = np.arange(1200) // 60
    with_runs = estimate_delay(
        slow, np.roll(slow, 60, axis=0), RATE, runs=runs,
        settings=DelaySettings(min_duration_s=1.0),
    )
    without = estimate_delay(
        slow, np.roll(slow, 60, axis=0), RATE, settings=DelaySettings(min_duration_s=1.0)
    )
    assert without.delay_s == pytest.approx(0.6, abs=1e-3)
    assert with_runs.status != 'ok'


@pytest.mark.parametrize('period', [0.5, 0.65, 0.8, 1.0, 1.2])
@pytest.mark.parametrize('noise', [0.0, 0.05])
def test_periodic_motion_is_ambiguous(period, noise):
    """Any whole period may be added to the delay: no value, and the reason says so."""
    rng = np.random.default_rng(7)
    times = np.arange(1200) / RATE

    def wave(shift):
        phase = 2.0 * np.pi * (times - shift)[:, None] / period + [0.0, 1.5, 0.7]
        return 0.2 * np.sin(phase) + noise * rng.normal(size=(1200, 3))

    result = estimate_delay(wave(0.0), wave(0.15), RATE)
    assert result.status == 'unobservable'
    assert 'periodic' in result.reason or 'second peak' in result.reason


def test_period_is_named_in_seconds():
    """One period of 1 s has no second peak in the range, but the motion repeats itself."""
    times = np.arange(1200) / RATE
    phase = 2.0 * np.pi * times[:, None]
    result = estimate_delay(0.2 * np.sin(phase), 0.2 * np.sin(phase - 1.0), RATE)
    assert result.status == 'unobservable'
    assert 'periodic, 1.00 s' in result.reason


@pytest.mark.parametrize(('reference', 'response', 'status', 'words'), [
    (velocity(), 0.01 * velocity(0.1), 'unobservable', 'response hardly moves: 0.00'),
    (0.0 * velocity(), velocity(0.1), 'unobservable', 'The reference does not move at all.'),
    (velocity(), 0.0 * velocity(), 'unobservable', 'The response does not move at all.'),
    (0.0 * velocity(), 0.0 * velocity(), 'unobservable',
     'Neither reference nor response moves at all.'),
    (velocity(), velocity(0.1, seed=9), 'unobservable', 'Correlation too low'),
    (velocity(), velocity(1.15), 'unobservable', ''),
    (velocity(), velocity(1.01), 'unobservable', 'edge of the search range'),
    (velocity(), velocity(-0.11), 'unobservable', 'edge of the search range'),
    (velocity()[:300], velocity(0.1)[:300], 'insufficient', '4.0 s are needed'),
    (velocity()[:0], velocity(0.1)[:0], 'insufficient', 'Only 0.0 s'),
    (velocity(band=(0.02, 0.1)), velocity(0.1, band=(0.02, 0.1)), 'unobservable',
     'Motion too slow'),
])
def test_each_reason_is_a_sentence_with_numbers(reference, response, status, words):
    """No value without a reason that says what was found and what is needed."""
    result = estimate_delay(reference, response, RATE)
    assert result.status == status
    assert result.delay_s is None and result.standard_error_s is None
    assert words in result.reason
    assert result.reason.endswith('.')


def test_reasons_call_the_sides_by_the_users_names():
    sides = Sides('ideal command', 'robot', 'arm lengths/s')
    times = 2.0 * np.pi * np.arange(1200)[:, None] / RATE
    for reference, response, words in (
            (velocity(), 0.01 * velocity(0.1), 'The robot hardly moves: 0.00'),
            (0.01 * velocity(), velocity(0.1), 'The ideal command hardly moves: 0.00'),
            (0.0 * velocity(), velocity(0.1), 'The ideal command does not move at all.'),
            (velocity()[:300], velocity(0.1)[:300], 'valid data of both ideal command and robot'),
            (np.sin(times), np.sin(times - 1.0), 'The ideal command is periodic')):
        reason = estimate_delay(reference, response, RATE, sides=sides).reason
        assert words in reason
        if 'hardly' in reason:
            assert ' arm lengths/s RMS in the band, 0.0200 arm lengths/s are needed.' in reason


def test_one_dimension_and_seven_joints():
    """The number of dimensions is free."""
    for width in (1, 7):
        result = estimate_delay(velocity(width=width), velocity(0.25, width=width), RATE)
        assert result.delay_s == pytest.approx(0.25, abs=1e-5)


def test_inputs_are_not_changed():
    """The caller's arrays are read only."""
    reference, response = velocity(), velocity(0.1)
    copies = reference.copy(), response.copy()
    estimate_delay(reference, response, RATE, runs=np.arange(1200) // 600)
    assert np.array_equal(reference, copies[0]) and np.array_equal(response, copies[1])


def test_wrong_input_is_named():
    """Shapes that do not fit and a rate of zero are refused."""
    with pytest.raises(ValueError, match='two velocities of one shape'):
        estimate_delay(np.ones((10, 3)), np.ones((10, 2)), RATE)
    with pytest.raises(ValueError, match='rate must be positive'):
        estimate_delay(np.ones((10, 3)), np.ones((10, 3)), 0.0)
