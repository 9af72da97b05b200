# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Cells, visits, reachable space and their metrics against closed forms."""

import itertools
import json
import math
from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from teleop_eval.core.errors import DescriptionError
from teleop_eval.core.histogram import StreamingHistogram
from teleop_eval.core.workspace import (
    CellGrid,
    ReachableCells,
    ReachableSet,
    VisitedCells,
    coverage_at,
    coverage_operator,
    coverage_robot,
    hull_volume,
    overlap,
    reach_metrics,
    reachable_cells,
)

GRID = CellGrid()


@dataclass
class Arm:
    """Joints about z, y, y (spherical) or z, z (planar) with two links; shoulder at `foot`."""

    links: tuple
    lower: np.ndarray
    upper: np.ndarray
    kinds: tuple
    planar: bool = False
    foot: tuple = (0.0, 0.0, 0.0)

    @property
    def joint_names(self):
        return tuple(f'joint_{i}' for i in range(len(self.kinds)))

    def positions(self, q):
        near, far = self.links
        first, second = q[:, -2], q[:, -2] + q[:, -1]
        along = near * np.cos(first) + far * np.cos(second)
        across = near * np.sin(first) + far * np.sin(second)
        if self.planar:
            # Rounding noise about the plane, as a real description gives.
            noise = 1e-16 * np.sign(np.sin(1e4 * first))
            return np.stack([along, across, noise], axis=1) + self.foot
        yaw = q[:, 0]
        return np.stack([along * np.cos(yaw), along * np.sin(yaw), across], axis=1) + self.foot


@dataclass
class Point:
    """A fixed shoulder."""

    at: tuple = (0.0, 0.0, 0.0)

    def positions(self, q):
        return np.broadcast_to(np.array(self.at), (len(q), 3))


def spherical(near, far):
    free = np.full(3, math.inf)
    return Arm((near, far), -free, free, ('continuous',) * 3)


def visits(cells, grid=GRID, **options):
    """Visit the centres of cells given by indices (k, 3), one sample each."""
    visited = VisitedCells(grid, **{'period_s': 0.02, **options})
    visited.add((np.asarray(cells, dtype=float) + 0.5) * grid.edge)
    return visited


def box(low, size):
    return np.array(list(itertools.product(*(range(a, a + n) for a, n in zip(
        low, size, strict=True)))))


# --- cells -------------------------------------------------------------------------------


def test_cells_of_the_unit_ball_are_counted_exactly():
    # Centres are half-integers over 10: count odd a, b, c with a^2 + b^2 + c^2 <= 20^2.
    odd = [a * a for a in range(-19, 20, 2)]
    count = sum(a + b + c <= 400 for a in odd for b in odd for c in odd)
    assert GRID.ball.size == count
    # Those cubes cover the ball shrunk by half a diagonal and fit in the ball grown by it.
    for sign in (-1.0, 1.0):
        volume = 4.0 / 3.0 * math.pi * (10.0 + sign * math.sqrt(0.75)) ** 3
        assert sign * count < sign * volume


@settings(max_examples=50, deadline=None)
@given(st.lists(st.tuples(*[st.floats(-2.0, 2.0)] * 3), min_size=1, max_size=20))
def test_a_position_lies_in_its_cell(points):
    u = np.array(points)
    codes = GRID.cells_of(u)
    near = np.linalg.norm(u, axis=1) <= 1.5 - 1e-9
    assert np.all(codes[near] >= 0)
    assert np.all(codes[np.linalg.norm(u, axis=1) > 1.5 + 1e-9] == -1)
    stored = codes >= 0
    offset = np.abs(u[stored] - GRID.centres(codes[stored]))
    assert np.all(offset <= 0.05 + 1e-9)


def test_codes_go_back_to_themselves():
    assert np.array_equal(GRID.cells_of(GRID.centres(GRID.ball)), GRID.ball)


def test_no_cell_for_positions_that_are_none():
    codes = GRID.cells_of(np.array([[np.nan, 0, 0], [np.inf, 0, 0], [1.6, 0, 0], [0, 0, 0]]))
    assert list(codes[:3]) == [-1, -1, -1] and codes[3] >= 0


def test_closing_takes_cells_with_four_of_six_neighbours():
    faces = np.array([[1, 0, 0], [-1, 0, 0], [0, 1, 0], [0, -1, 0], [0, 0, 1], [0, 0, -1]])
    middle = GRID.cells_of(np.array([[0.05, 0.05, 0.05]]))
    for chosen in itertools.chain(*(itertools.combinations(faces, k) for k in range(7))):
        around = GRID.cells_of((np.array(chosen).reshape(-1, 3) + 0.5) * 0.1)
        closed = GRID.closed(around)
        assert np.isin(around, closed).all()
        assert (middle[0] in closed) == (len(chosen) >= 4)
    # One pass only: a cell that would follow from a new one does not come.
    assert GRID.closed(np.array([], dtype=np.int64)).size == 0


def test_an_impossible_edge_is_refused():
    with pytest.raises(ValueError, match='got 0.9'):
        CellGrid(0.9)


# --- visits ------------------------------------------------------------------------------


def random_walk(n, seed=2):
    rng = np.random.default_rng(seed)
    return np.clip(np.cumsum(rng.normal(0.0, 0.03, (n, 3)), axis=0), -0.79, 0.79)


@pytest.mark.parametrize('chunk', [1, 7, 333, 5000])
def test_visits_do_not_depend_on_the_chunks(chunk):
    u, valid = random_walk(2000), np.random.default_rng(1).random(2000) < 0.8
    whole = VisitedCells(GRID, period_s=0.02, block_s=1.0)
    whole.add(u, valid)
    parts = VisitedCells(GRID, period_s=0.02, block_s=1.0)
    for start in range(0, 2000, chunk):
        parts.add(u[start:start + chunk], valid[start:start + chunk])
    codes = whole.cells()
    assert np.array_equal(parts.cells(), codes)
    assert np.array_equal(parts.dwell_s(codes), whole.dwell_s(codes))
    assert np.array_equal(parts.first_visit_s(codes), whole.first_visit_s(codes))
    assert parts.rarefied(0.37) == whole.rarefied(0.37)
    assert parts.blocks == whole.blocks == math.ceil(np.count_nonzero(valid) / 50)


def test_dwell_and_first_visit_follow_a_plain_count():
    u = random_walk(900)
    visited = VisitedCells(GRID, period_s=0.01, block_s=1.0)
    visited.add(u)
    seen = {}
    for i, point in enumerate(np.floor(u / 0.1).astype(int)):
        first, count = seen.get(tuple(point), (i, 0))
        seen[tuple(point)] = (first, count + 1)
    assert visited.cells().size == len(seen)
    for index, (first, count) in seen.items():
        code = GRID.cells_of((np.array([index]) + 0.5) * 0.1)
        assert visited.dwell_s(code)[0] == pytest.approx(0.01 * count)
        assert visited.first_visit_s(code)[0] == pytest.approx(0.01 * first)
    assert visited.duration_s == pytest.approx(9.0)
    assert math.isnan(visited.first_visit_s(GRID.cells_of(np.array([[0.0, 0.0, -1.2]])))[0])


def test_rarefaction_is_the_mean_over_all_choices_of_blocks():
    # 7 blocks of 30 samples: the formula against every choice of b of them, by hand.
    u = random_walk(210, seed=9) * 0.5
    visited = VisitedCells(GRID, period_s=0.1, block_s=3.0)
    visited.add(u)
    blocks = [set(GRID.cells_of(u[i:i + 30]).tolist()) for i in range(0, 210, 30)]
    for b in range(8):
        sizes = [len(set().union(*chosen)) for chosen in itertools.combinations(blocks, b)]
        assert visited.rarefied(b / 7) == pytest.approx(np.mean(sizes), rel=1e-9)
    assert visited.rarefied(2.5 / 7) == pytest.approx(
        0.5 * (visited.rarefied(2 / 7) + visited.rarefied(3 / 7)))
    assert visited.rarefied(1.0) == pytest.approx(visited.cells_inside().size)


def test_rarefaction_predicts_a_shorter_run():
    # 64 targets in random order, 1 s each: the expected number met in k draws is
    # 64 (1 - (63/64)^k), the closed form of the coupon problem.
    rng = np.random.default_rng(3)
    targets = (box((-2, -2, -2), (4, 4, 4)) + 0.5) * 0.1
    expected = 64 * (1 - (63 / 64) ** 60)
    found = []
    for _ in range(40):
        visited = VisitedCells(GRID, period_s=0.1, block_s=10.0)
        visited.add(np.repeat(targets[rng.integers(0, 64, 120)], 10, axis=0))
        found.append(visited.rarefied(0.5))
    assert np.mean(found) == pytest.approx(expected, rel=0.03)


def test_misuse_of_visits_is_refused():
    with pytest.raises(ValueError, match='got 0.0'):
        VisitedCells(GRID, period_s=0.0)
    with pytest.raises(ValueError, match=r'between 0 and 1 are needed, got \[1.2\]'):
        visits([[0, 0, 0]]).rarefied(1.2)


# --- reachable space ---------------------------------------------------------------------


def test_an_arm_of_equal_links_reaches_the_whole_ball():
    found = reachable_cells(spherical(0.4, 0.4), Point(), 0.8, seed=1)
    assert found.complete and found.last_growth < 0.005
    assert found.samples == 100_000 * len(found.growth)
    cells = found.with_visited(np.array([], dtype=np.int64))
    assert np.isin(cells, GRID.ball).all()
    assert cells.size >= 0.995 * GRID.ball.size


def test_an_arm_of_unequal_links_reaches_a_shell():
    # Links 0.7 and 0.3 of the reach: the shell from 0.4 to 1, known cell by cell up to its
    # boundary: all cubes wholly inside are found, none that does not touch it.
    found = reachable_cells(spherical(0.7, 0.3), Point(), 1.0, seed=1)
    cells = found.with_visited(np.array([], dtype=np.int64))
    corners = np.array(list(itertools.product((-0.05, 0.05), repeat=3)))
    every = GRID.centres(GRID.ball)
    norms = np.linalg.norm(every[:, None] + corners, axis=2)
    nearest = np.linalg.norm(np.maximum(np.abs(every) - 0.05, 0.0), axis=1)
    whole = GRID.ball[(nearest >= 0.4) & (norms.max(axis=1) <= 1.0)]
    touching = GRID.ball[(norms.max(axis=1) >= 0.4)]
    assert np.isin(cells, touching).all()
    assert np.isin(whole, cells).mean() >= 0.995
    # Volume of the shell, plus about half a cube over the inner sphere of area 4 pi 0.4^2.
    shell = 4.0 / 3.0 * math.pi * (1.0 - 0.4**3)
    assert cells.size * 1e-3 == pytest.approx(shell + 0.05 * 4 * math.pi * 0.4**2, rel=0.02)


def test_planar_area_has_its_closed_form():
    # Check value KN5: links 0.3 and 0.25 m, q1 over d = pi/2, q2 in [0, pi]: area 2 d l1 l2 =
    # 0.235619 m^2. A lattice of edge e in general position touches on average
    # A + (2 / pi) P e of area for a boundary P (integral geometry, from memory).
    arm = Arm((0.3, 0.25), np.array([0.3, 0.0]), np.array([0.3 + math.pi / 2, math.pi]),
              ('revolute',) * 2, planar=True, foot=(0.1, -0.2, 0.4))
    grid = CellGrid(0.02)
    sampling = ReachableCells(arm, Point((0.1, -0.2, 0.4)), 0.55, seed=5, grid=grid)
    while not sampling.step(50_000):
        pass
    cells = sampling.result().cells
    assert np.unique(grid.centres(cells)[:, 2]).size == 1, 'a planar arm fills one layer'
    area = math.pi * 0.3 * 0.25 / 0.55**2
    assert area == pytest.approx(0.235619 / 0.55**2, rel=1e-5)
    boundary = (math.pi / 2 * (0.55 + 0.05) + 2 * math.pi * 0.25) / 0.55
    expected = area + 2.0 / math.pi * boundary * 0.02
    assert cells.size * 0.02**2 == pytest.approx(expected, rel=0.02)


def test_cells_are_counted_from_the_shoulder():
    here = reachable_cells(spherical(0.7, 0.3), Point(), 1.0, seed=6)
    moved = spherical(0.7, 0.3)
    moved.foot = (0.5, -0.25, 2.0)
    there = reachable_cells(moved, Point(moved.foot), 1.0, seed=6)
    # Rounding may move single positions over a boundary.
    assert np.setxor1d(here.cells, there.cells).size <= 0.002 * here.cells.size


def test_result_depends_on_the_seed_alone():
    arm = spherical(0.6, 0.4)
    whole = reachable_cells(arm, Point(), 1.0, seed=3)
    slices = ReachableCells(arm, Point(), 1.0, seed=3)
    while not slices.step(7_777):
        pass
    again = slices.result()
    assert np.array_equal(again.cells, whole.cells)
    assert (again.samples, again.growth) == (whole.samples, whole.growth)
    assert slices.step() and slices.result().samples == whole.samples
    other = reachable_cells(arm, Point(), 1.0, seed=4)
    assert not np.array_equal(other.cells, whole.cells)


def test_sampling_can_be_stopped_and_says_so():
    calls = iter([False, False, True])
    found = reachable_cells(
        spherical(0.5, 0.5), Point(), 1.0, seed=3, should_stop=lambda: next(calls))
    assert found.samples == 40_000 and not found.complete and found.last_growth is None
    limited = ReachableCells(spherical(0.5, 0.5), Point(), 1.0, seed=3, max_rounds=1)
    while not limited.step():
        pass
    assert limited.result().samples == 100_000 and not limited.result().complete


def test_limits_that_cannot_be_sampled_are_named():
    arm = Arm((0.5, 0.5), np.array([0.0, -math.inf]), np.array([1.0, math.inf]),
              ('revolute', 'prismatic'), planar=True)
    with pytest.raises(DescriptionError, match="'joint_1' has the limits -inf to inf"):
        ReachableCells(arm, Point(), 1.0, seed=0)
    with pytest.raises(DescriptionError, match='positive number of metres, got 0.0'):
        ReachableCells(spherical(0.5, 0.5), Point(), 0.0, seed=0)


# --- metrics -----------------------------------------------------------------------------


def test_operator_coverage_of_half_the_ball_is_a_half():
    centres = GRID.centres(GRID.ball)
    visited = VisitedCells(GRID, period_s=0.02)
    visited.add(centres[centres[:, 2] > 0.0])
    metric = coverage_operator(visited, engaged_s=50.0)
    assert metric.value == 0.5
    assert metric.details['engaged_s'] == 50.0
    assert metric.details['cells_total'] == GRID.ball.size
    assert (metric.samples, metric.n) == (GRID.ball.size // 2, visited.blocks)
    assert metric.reason == ''


def test_coverage_leaves_out_what_lies_beyond_and_says_so():
    visited = VisitedCells(GRID, period_s=0.02)
    visited.add(np.array([[0.05, 0.05, 0.05], [1.25, 0.05, 0.05], [3.0, 0.0, 0.0]]))
    metric = coverage_operator(visited, engaged_s=1.0)
    assert metric.value == 1 / GRID.ball.size
    assert metric.reason.startswith('1 visited cells beyond reach and 1 samples beyond 1.5')
    assert metric.details['share_beyond_bound'] == pytest.approx(1 / 3)


def test_robot_coverage_counts_sampled_visited_and_closed_cells():
    reachable = ReachableSet(
        GRID, visits(box((0, 0, 0), (3, 3, 3))).cells(), 200_000, (27, 27), True)
    # Nine of the sampled cells, and one that the sampling missed: 10 of 28.
    visited = visits(np.concatenate([box((0, 0, 0), (3, 3, 1)), [[-5, -5, -5]]]))
    metric = coverage_robot(visited, reachable, engaged_s=2.0)
    assert metric.value == pytest.approx(10 / 28)
    assert metric.details['reachable_samples'] == 200_000
    assert metric.details['reachable_last_growth'] == 0.0
    hollow = np.array([cell for cell in box((0, 0, 0), (3, 3, 3)) if tuple(cell) != (1, 1, 1)])
    closed = ReachableSet(GRID, visits(hollow).cells(), 200_000, (26, 26), True)
    metric = coverage_robot(visits(box((0, 0, 0), (3, 3, 1))), closed, engaged_s=2.0)
    assert metric.value == pytest.approx(9 / 27)


def test_robot_coverage_without_a_reachable_set_is_no_number():
    visited = visits([[0, 0, 0]])
    assert coverage_robot(visited, None, engaged_s=1.0).status == 'not_configured'
    half = ReachableSet(GRID, visited.cells(), 40_000, (), False)
    metric = coverage_robot(visited, half, engaged_s=1.0)
    assert (metric.status, metric.value) == ('insufficient', None)
    assert '40000 postures' in metric.reason
    with pytest.raises(ValueError, match='edge 0.2 and 0.1'):
        coverage_robot(visits([[0, 0, 0]], CellGrid(0.2)), half, engaged_s=1.0)


def test_coverage_at_a_common_duration():
    # 40 blocks of 1 s, each in a cell of its own: coverage is proportional to time.
    visited = VisitedCells(GRID, period_s=0.1, block_s=1.0)
    visited.add(np.repeat((box((0, 0, 0), (5, 4, 2)) + 0.5) * 0.1, 10, axis=0))
    metric = coverage_operator(visited, engaged_s=40.0)
    for duration in (0.0, 2.0, 11.0, 40.0):
        assert coverage_at(metric, duration) == pytest.approx(duration / GRID.ball.size)
    assert coverage_at(metric, 41.0) is None
    assert coverage_at(coverage_operator(
        VisitedCells(GRID, period_s=0.1), engaged_s=0.0), 1.0) is None


def test_overlap_of_shifted_boxes():
    # 4 x 4 x 4 cells shifted by two: 32 common of 96.
    ideal, robot = visits(box((0, 0, 0), (4, 4, 4))), visits(box((2, 0, 0), (4, 4, 4)))
    metric = overlap(ideal, robot, engaged_s=3.0)
    assert metric.value == pytest.approx(1 / 3)
    assert overlap(ideal, ideal, engaged_s=3.0).value == 1.0
    assert overlap(ideal, visits(box((-5, 0, 0), (2, 2, 2))), engaged_s=3.0).value == 0.0
    assert overlap(robot, ideal, engaged_s=3.0).value == metric.value


def test_overlap_reports_what_the_robot_cannot_follow():
    ideal = visits(np.array([[0, 0, 0], [11, 0, 0], [12, 0, 0]]))
    metric = overlap(ideal, visits([[0, 0, 0]]), engaged_s=3.0)
    assert metric.value == 1.0 and metric.details['cells_ideal_beyond_reach'] == 2
    beyond = overlap(visits([[12, 0, 0]]), visits([[11, 0, 0]]), engaged_s=3.0)
    assert beyond.status == 'insufficient' and 'inside reach' in beyond.reason


def test_hull_volumes_have_their_closed_forms():
    # A box of 6 x 4 x 3 cells spans 5 x 3 x 2 edges between centres; a corner tetrahedron of
    # 5 edges has 5^3 / 6.
    assert hull_volume(visits(box((-3, -2, 0), (6, 4, 3))), engaged_s=1.0).value == (
        pytest.approx(30 * 1e-3, rel=1e-9))
    corner = visits([[0, 0, 0], [5, 0, 0], [0, 5, 0], [0, 0, 5]])
    metric = hull_volume(corner, engaged_s=7.0)
    assert metric.value == pytest.approx(125 / 6 * 1e-3, rel=1e-9)
    assert metric.unit == 'arm lengths^3' and metric.details['engaged_s'] == 7.0


@pytest.mark.parametrize('cells', [
    [[0, 0, 0]], [[0, 0, 0], [1, 0, 0], [0, 1, 0]], box((0, 0, 0), (5, 5, 1)),
    [[i, i, 0] for i in range(6)],
])
def test_no_hull_of_flat_sets(cells):
    metric = hull_volume(visits(cells), engaged_s=1.0)
    assert metric.status == 'insufficient' and 'one plane' in metric.reason


def test_reach_percentiles_of_a_uniform_ball():
    # |u| = r^(1/3) for points uniform in the unit ball: the median is 2^(-1/3).
    norms = StreamingHistogram()
    norms.add(((np.arange(20000) + 0.5) / 20000) ** (1.0 / 3.0))
    metrics = reach_metrics(norms, blocks=12, engaged_s=60.0)
    assert metrics['reach_p50_norm'].value == pytest.approx(0.5 ** (1 / 3), rel=1e-3)
    assert metrics['reach_p95_norm'].value == pytest.approx(0.95 ** (1 / 3), rel=1e-3)
    assert metrics['reach_max_norm'].value == pytest.approx(1.0, rel=1e-4)
    assert metrics['reach_max_norm'].n == 12 and metrics['reach_p50_norm'].samples == 20000


def test_nothing_seen_is_insufficient_everywhere():
    nothing = VisitedCells(GRID, period_s=0.02)
    nothing.add(np.full((5, 3), np.nan))
    reachable = ReachableSet(GRID, GRID.ball, 200_000, (4000, 4001), True)
    metrics = [
        coverage_operator(nothing, engaged_s=0.0),
        coverage_robot(nothing, reachable, engaged_s=0.0),
        overlap(nothing, nothing, engaged_s=0.0),
        hull_volume(nothing, engaged_s=0.0),
        *reach_metrics(StreamingHistogram(), blocks=0, engaged_s=0.0).values(),
    ]
    for metric in metrics:
        assert (metric.status, metric.value) == ('insufficient', None)
        assert metric.reason.endswith('.')


def test_metrics_are_plain_documents():
    metric = coverage_operator(visits(random_walk(500) / 0.1), engaged_s=10.0)
    assert json.loads(json.dumps(metric.to_dict()))['value'] == metric.value


def test_an_arm_that_reaches_no_cube_has_no_coverage():
    """Joint limits so tight that no cube is reached: a reason, not a division by zero."""
    visited = VisitedCells(period_s=0.02)
    visited.add(np.array([[2.0, 0.0, 0.0]]))
    nothing = ReachableSet(visited.grid, np.zeros(0, dtype=np.int64), 1, (0,), True)
    metric = coverage_robot(visited, nothing, engaged_s=0.02)
    assert metric.status == 'insufficient'
