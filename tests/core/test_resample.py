# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Check the grid against closed forms, scipy, and itself cut into chunks."""

import numpy as np
import pytest
from scipy import integrate
from scipy.spatial.transform import Rotation, Slerp

from teleop_eval.core.resample import (
    Cells,
    cell_average,
    cell_average_held,
    cell_slerp,
    complete_cells,
    default_max_gap_ns,
    edge_velocity,
)

MS = 1_000_000


def irregular_times(rng, count, step_ms):
    """Return strictly increasing times with steps between 0.2 and 1.8 of the mean."""
    return np.cumsum(rng.integers(int(0.2 * step_ms * MS), int(1.8 * step_ms * MS), count))


def test_average_of_a_straight_line_is_its_value_at_the_cell_centre():
    """The interpolant of a line is the line, whatever the sample times."""
    rng = np.random.default_rng(1)
    times = irregular_times(rng, 400, 7)
    seconds = times * 1e-9
    values = np.column_stack([2.0 + 3.0 * seconds, -seconds])
    count = complete_cells(int(times[-1]), 20 * MS) - 1
    cells = cell_average(times, values, 1, count, period_ns=20 * MS, max_gap_ns=100 * MS)
    centre = (np.arange(1, count + 1) + 0.5) * 0.02
    expected = np.column_stack([2.0 + 3.0 * centre, -centre])
    assert cells.valid.all()
    np.testing.assert_allclose(cells.values, expected, rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize('step_ms', [1, 5, 20, 33])
def test_average_equals_quadrature_of_the_interpolant(step_ms):
    """The mean of numpy.interp over a cell, by scipy.integrate.quad with its kinks given."""
    rng = np.random.default_rng(step_ms)
    times = irregular_times(rng, 60 + 300 // step_ms, step_ms)
    values = rng.normal(size=(len(times), 1))
    first = int(times[0] // (20 * MS)) + 1
    count = min(6, complete_cells(int(times[-1]), 20 * MS) - first)
    cells = cell_average(times, values, first, count, period_ns=20 * MS, max_gap_ns=100 * MS)
    assert count > 0 and cells.valid.all()
    for row in range(count):
        low, high = (first + row) * 20.0, (first + row + 1) * 20.0
        kinks = times[(times > low * MS) & (times < high * MS)] / MS
        area = integrate.quad(
            lambda t: np.interp(t, times / MS, values[:, 0]), low, high, points=kinks,
            limit=200,
        )[0]
        assert cells.values[row, 0] == pytest.approx(area / 20.0, rel=1e-9, abs=1e-12)


def test_average_attenuates_a_fast_sine_as_a_moving_average_does():
    """Gain of an average over T is sinc(f T), phase 0 (textbook closed form)."""
    times = np.arange(0, 4_000) * MS
    for frequency in (3.0, 20.0, 45.0):
        values = np.exp(2j * np.pi * frequency * times * 1e-9)
        samples = np.column_stack([values.real, values.imag])
        cells = cell_average(times, samples, 0, 190, period_ns=20 * MS, max_gap_ns=100 * MS)
        centre = (np.arange(190) + 0.5) * 0.02
        gain = (cells.values @ [1.0, 1.0j]) * np.exp(-2j * np.pi * frequency * centre)
        # Linear interpolation at 1 kHz loses sinc^2(f / 1000), below 0.7 % here.
        expected = np.sinc(frequency * 0.02) * np.sinc(frequency * 0.001) ** 2
        np.testing.assert_allclose(gain, expected, atol=2e-4)


def test_large_offset_costs_no_more_than_rounding():
    """A million metres away the average still resolves to double precision."""
    rng = np.random.default_rng(2)
    times = irregular_times(rng, 500, 3)
    values = rng.normal(size=(500, 3))
    settings = {'period_ns': 10 * MS, 'max_gap_ns': 100 * MS}
    near = cell_average(times, values, 2, 100, **settings)
    far = cell_average(times, values + 1e6, 2, 100, **settings)
    assert np.abs(far.values - 1e6 - near.values).max() < 1e-9


@pytest.mark.parametrize('kind', ['average', 'held', 'slerp'])
def test_hop_by_hop_equals_at_once_to_the_last_bit(kind):
    """Chunks of random length, each with only the samples it needs, change no bit."""
    rng = np.random.default_rng(3)
    times = irregular_times(rng, 3000, 4)
    times = times[rng.random(3000) > 0.1]
    times = times[(times < 3_000 * MS) | (times > 3_300 * MS)]
    values = rng.normal(size=(len(times), 4))
    values[rng.integers(0, len(times), 20)] = np.nan
    period, gap = 10 * MS + 1, 60 * MS

    def compute(rows, first, count):
        if kind == 'held':
            return cell_average_held(
                times[rows], values[rows], first, count, period_ns=period
            )
        function = cell_average if kind == 'average' else cell_slerp
        return function(
            times[rows], values[rows], first, count, period_ns=period, max_gap_ns=gap
        )

    total = complete_cells(int(times[-1]), period)
    whole = compute(slice(None), 0, total)
    finite = np.flatnonzero(np.isfinite(values).all(axis=1))
    parts, first = [], 0
    while first < total:
        count = int(min(rng.integers(1, 40), total - first))
        before = finite[times[finite] <= first * period]
        after = finite[times[finite] >= (first + count) * period]
        low = before[-1] if len(before) else 0
        high = after[0] + 1 if len(after) else len(times)
        parts.append(compute(slice(low, high), first, count))
        first += count
    assert 0.3 < whole.valid.mean() < 1.0
    joined = np.concatenate([part.values for part in parts])
    assert joined.tobytes() == whole.values.tobytes()
    assert np.array_equal(np.concatenate([part.valid for part in parts]), whole.valid)


def test_velocity_hop_by_hop_equals_at_once():
    """The last cell of one hop is the first difference of the next."""
    rng = np.random.default_rng(4)
    cells = Cells(rng.normal(size=(50, 2)), rng.random(50) > 0.1)
    whole = edge_velocity(cells, period_ns=10 * MS)
    first = edge_velocity(Cells(cells.values[:20], cells.valid[:20]), period_ns=10 * MS)
    second = edge_velocity(
        Cells(cells.values[20:], cells.valid[20:]),
        period_ns=10 * MS,
        previous=Cells(cells.values[:20], cells.valid[:20]),
    )
    assert not whole.valid[0]
    assert np.array_equal(np.concatenate([first.valid, second.valid]), whole.valid)
    joined = np.concatenate([first.values, second.values])
    assert np.array_equal(joined, whole.values, equal_nan=True)
    expected = (cells.values[1:] - cells.values[:-1]) / 0.01
    np.testing.assert_allclose(whole.values[1:], expected, rtol=1e-12)


def test_gap_is_masked_and_never_bridged():
    """A cell that touches an interval longer than the limit has no value."""
    times = np.concatenate([np.arange(0, 500, 10), np.arange(620, 1010, 10)]) * MS
    values = np.ones((len(times), 1))
    cells = cell_average(times, values, 0, 50, period_ns=20 * MS, max_gap_ns=100 * MS)
    # The last sample before the gap is at 490 ms, the first one after it at 620 ms.
    expected = np.ones(50, dtype=bool)
    expected[24:31] = False
    assert np.array_equal(cells.valid, expected)
    assert np.isnan(cells.values[24:31]).all()
    bridged = cell_average(times, values, 0, 50, period_ns=20 * MS, max_gap_ns=130 * MS)
    assert bridged.valid.all()


def test_nothing_is_extrapolated():
    """Cells before the first and after the last sample have no value."""
    times = np.arange(30, 111, 10) * MS
    cells = cell_average(
        times, np.ones((9, 1)), -2, 10, period_ns=20 * MS, max_gap_ns=100 * MS
    )
    assert cells.valid.tolist() == [False] * 4 + [True] * 3 + [False] * 3
    assert complete_cells(110 * MS, 20 * MS) == 5


def test_sample_that_is_not_finite_counts_as_missing():
    """One NaN coordinate removes the sample; a long row of them is a gap."""
    times = np.arange(0, 1000, 10) * MS
    values = np.column_stack([np.arange(100.0), np.zeros(100)])
    clean = cell_average(times, values, 0, 49, period_ns=20 * MS, max_gap_ns=60 * MS)
    values[7, 1] = np.nan
    values[50:60, 0] = np.inf
    cells = cell_average(times, values, 0, 49, period_ns=20 * MS, max_gap_ns=60 * MS)
    np.testing.assert_allclose(cells.values[:24], clean.values[:24])
    assert not cells.valid[25:29].any() and cells.valid[:24].all() and cells.valid[30:].all()


def test_held_average_of_a_step_in_the_middle_of_a_cell():
    """A step from 0 to 1 a quarter into the cell averages to 0.75."""
    times = np.array([5, 45]) * MS
    cells = cell_average_held(times, np.array([[0.0], [1.0]]), 0, 4, period_ns=20 * MS)
    assert cells.valid.tolist() == [False, True, True, True]
    assert cells.values[1:, 0].tolist() == [0.0, 0.75, 1.0]


def test_slerp_equals_scipy():
    """Same orientations as scipy.spatial.transform.Slerp at the cell centres."""
    rng = np.random.default_rng(5)
    times = irregular_times(rng, 200, 8)
    steps = Rotation.from_rotvec(rng.normal(scale=0.3, size=(200, 3)))
    rotations = [steps[0]]
    for step in steps[1:]:
        rotations.append(step * rotations[-1])
    quaternions = np.array([rotation.as_quat() for rotation in rotations])
    quaternions *= rng.choice([-1.0, 1.0], size=(200, 1)) * rng.uniform(0.5, 2.0, (200, 1))
    count = complete_cells(int(times[-1]), 20 * MS) - 1
    cells = cell_slerp(times, quaternions, 1, count, period_ns=20 * MS, max_gap_ns=100 * MS)
    centres = (np.arange(1, count + 1) + 0.5) * 0.02
    expected = Slerp(times * 1e-9, Rotation.from_quat(quaternions))(centres)
    error = (expected.inv() * Rotation.from_quat(cells.values)).magnitude()
    assert cells.valid.all()
    assert error.max() < 1e-7
    np.testing.assert_allclose(np.linalg.norm(cells.values, axis=1), 1.0, rtol=1e-12)


def test_slerp_of_equal_orientations_and_of_a_zero_quaternion():
    """No rotation gives the same orientation; a zero quaternion is a missing sample."""
    times = np.arange(0, 110, 10) * MS
    quaternions = np.tile([0.0, 0.6, 0.0, 0.8], (11, 1))
    quaternions[3] = 0.0
    cells = cell_slerp(times, quaternions, 0, 5, period_ns=20 * MS, max_gap_ns=100 * MS)
    np.testing.assert_allclose(cells.values, quaternions[:5] * 0 + [0.0, 0.6, 0.0, 0.8])


def test_default_gap_is_three_periods_but_at_least_a_tenth_of_a_second():
    """The rule of the time base: max(0.1 s, 3 median periods)."""
    assert default_max_gap_ns(np.arange(10) * 5 * MS) == 100 * MS
    assert default_max_gap_ns(np.arange(10) * 50 * MS) == 150 * MS
    assert default_max_gap_ns(np.array([], dtype=np.int64)) == 100 * MS


def test_empty_stream_gives_cells_without_a_value():
    """No sample, one sample and no cell are all answered, not raised."""
    empty = np.array([], dtype=np.int64)
    settings = {'period_ns': 10 * MS, 'max_gap_ns': 100 * MS}
    assert not cell_average(empty, np.empty((0, 3)), 0, 5, **settings).valid.any()
    assert not cell_average(np.array([5]), np.ones((1, 3)), 0, 5, **settings).valid.any()
    assert not cell_slerp(empty, np.empty((0, 4)), 0, 5, **settings).valid.any()
    assert cell_average(empty, np.empty((0, 3)), 0, 0, **settings).values.shape == (0, 3)
    held = cell_average_held(empty, np.empty((0, 1)), 0, 5, period_ns=10 * MS)
    assert held.values.shape == (5, 1) and not held.valid.any()


def test_wrong_input_is_named():
    """Each misuse has its own sentence."""
    settings = {'period_ns': 10 * MS, 'max_gap_ns': 100 * MS}
    with pytest.raises(ValueError, match='row 2 is at 5 ns'):
        cell_average(np.array([0, 5, 5]), np.ones((3, 1)), 0, 1, **settings)
    with pytest.raises(ValueError, match=r'times \(n,\) and values \(n, d\)'):
        cell_average(np.array([0, 5]), np.ones((3, 1)), 0, 1, **settings)
    with pytest.raises(ValueError, match='period must be positive'):
        cell_average_held(np.array([0]), np.ones((1, 1)), 0, 1, period_ns=0)
    with pytest.raises(ValueError, match=r'shape \(n, 4\)'):
        cell_slerp(np.array([0, 5]), np.ones((2, 3)), 0, 1, **settings)
