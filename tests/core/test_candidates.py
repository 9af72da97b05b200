# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Predictions for a mapping on planar arms, whose joints have closed forms, and on a 6R arm."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from teleop_eval.core import rotations
from teleop_eval.core.candidates import CandidateAccumulator, Start
from teleop_eval.core.cell_grid import CellGrid
from teleop_eval.core.geometry import RobotGeometry
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.mappings.base import Ideal
from teleop_eval.core.metric import Metric
from teleop_eval.core.reach import Reach, find_shoulder
from teleop_eval.core.reachable_cells import ReachableSet
from teleop_eval.core.urdf import parse_urdf

L1, L2 = 0.3, 0.25
REACH = L1 + L2
PERIOD = 0.02
X, Y, Z = '1 0 0', '0 1 0', '0 0 1'


def robot(
    *joints: tuple[str, str, str], tool: str, reach: float = REACH, velocity: float = 2.0,
    low: float = -3.1, high: float = 3.1,
) -> RobotGeometry:
    """Build an arm from (kind, axis, offset before the joint) and the tool's offset."""
    text = '<robot name="r"><link name="l0"/>'
    limit = f'<limit lower="{low}" upper="{high}" effort="1" velocity="{velocity}"/>'
    for index, (kind, axis, xyz) in enumerate(joints):
        text += (
            f'<link name="l{index + 1}"/><joint name="q{index}" type="{kind}">'
            f'<parent link="l{index}"/><child link="l{index + 1}"/>'
            f'<origin xyz="{xyz}"/><axis xyz="{axis}"/>{limit}</joint>')
    text += (f'<link name="tip"/><joint name="end" type="fixed"><parent link="l{len(joints)}"/>'
             f'<child link="tip"/><origin xyz="{tool}"/></joint></robot>')
    if not velocity:
        text = text.replace(' velocity="0.0"', '')
    chain = SerialChain.from_description(parse_urdf(text), 'l0', 'tip')
    posture = np.zeros(chain.size)
    return RobotGeometry(
        chain, find_shoulder(chain), Reach(reach, posture, 0, reach, 0, ''), frozenset())


def planar(**options: float) -> RobotGeometry:
    kind = 'revolute'
    return robot((kind, Z, '0 0 0'), (kind, Z, f'{L1} 0 0'), tool=f'{L2} 0 0', **options)


def six_joints() -> RobotGeometry:
    kind = 'revolute'
    return robot(
        (kind, Z, '0 0 0.2'), (kind, Y, '0 0 0'), (kind, Y, '0.3 0 0'), (kind, X, '0.15 0 0'),
        (kind, Y, '0.1 0 0'), (kind, X, '0.05 0 0'), tool='0.03 0 0', reach=0.63)


def seconds(duration: float) -> np.ndarray:
    return np.arange(0.0, duration, PERIOD)


def circle(radius: float | np.ndarray, angle: np.ndarray, *, x: float = 0.0) -> np.ndarray:
    return np.stack(
        [x + radius * np.cos(angle), radius * np.sin(angle), 0.0 * angle], axis=1)


def predicted(
    arm: RobotGeometry, ideal: Ideal, *, windows: int = 7, operator: np.ndarray | None = None,
    usable: np.ndarray | None = None, run: np.ndarray | None = None,
    robot_joints: np.ndarray | None = None, reachable: ReachableSet | None = None,
    restarts: tuple[int, ...] = (), measured: bool = True, **options: bool,
) -> dict[str, Metric]:
    count = len(ideal.positions_m)
    between = ideal.joints is not None
    candidate = CandidateAccumulator(arm, period_s=PERIOD, between_joints=between, **options)
    usable = np.ones(count, dtype=bool) if usable is None else usable
    run = np.zeros(count, dtype=np.int64) if run is None else run
    joints = np.zeros((count, arm.chain.size)) if robot_joints is None else robot_joints

    def part(values: np.ndarray | None, of: np.ndarray) -> np.ndarray | None:
        return None if values is None else values[of]

    for number, of in enumerate(np.array_split(np.arange(count), windows)):
        if number in restarts:
            candidate.restart()
        piece = Ideal(
            ideal.positions_m[of], part(ideal.orientations, of), part(ideal.joints, of),
            velocities_mps=part(ideal.velocities_mps, of))
        candidate.add(piece, usable=usable[of], run=run[of], robot_joints=joints[of],
                      operator=part(operator, of),
                      start=Start(joints[0]) if measured else Start())
    return candidate.metrics(reachable)


def of_joints(arm: RobotGeometry, joints: np.ndarray) -> Ideal:
    pose = arm.chain.forward(joints)
    return Ideal(pose.positions, rotations.from_matrix(pose.rotations), joints)


def test_a_circle_about_the_shoulder_asks_the_first_joint_alone() -> None:
    rate, radius = 0.8, 0.4
    found = predicted(planar(), Ideal(circle(radius, rate * (seconds(3.0) - 1.5))))
    # The elbow stays, the first joint turns with the tool.
    assert found['joint_speed_demand_max'].value == pytest.approx(rate / 2.0, rel=1e-3)
    assert found['joint_speed_demand_p95'].value == pytest.approx(rate / 2.0, rel=1e-3)
    joints = found['joint_speed_demand_max'].details['joints']
    assert joints['q1'] == pytest.approx(0.0, abs=2e-3)
    cosine = (radius ** 2 - L1 ** 2 - L2 ** 2) / (2.0 * L1 * L2)
    w = L1 * L2 * math.sqrt(1.0 - cosine ** 2) / REACH ** 2  # Yoshikawa 1985
    assert found['manipulability_min'].value == pytest.approx(w, rel=1e-3)
    assert found['manipulability_p5'].value == pytest.approx(w, rel=1e-3)
    assert found['not_reached_share'].value == 0.0
    assert found['at_limit_share'].value == 0.0
    assert found['limit_violation_share'].status == 'not_configured'
    assert found['reach_p95_norm'].value == pytest.approx(radius / REACH, rel=1e-3)
    assert all(metric.details['predicted'] is True for metric in found.values())


def test_a_circle_beside_the_shoulder_has_the_speeds_of_the_closed_form() -> None:
    angle = 2.0 * math.pi * 0.3 * seconds(10.0)
    targets = circle(0.12, angle, x=0.33)
    square = np.sum(targets ** 2, axis=1)
    elbow = np.arccos((square - L1 ** 2 - L2 ** 2) / (2.0 * L1 * L2))
    shoulder = np.arctan2(targets[:, 1], targets[:, 0]) - np.arctan2(
        L2 * np.sin(elbow), L1 + L2 * np.cos(elbow))
    # Both branches are mirror images with equal elbow speed but other shoulder speed.
    other = np.arctan2(targets[:, 1], targets[:, 0]) + np.arctan2(
        L2 * np.sin(elbow), L1 + L2 * np.cos(elbow))
    found = predicted(planar(), Ideal(targets))['joint_speed_demand_max'].details['joints']
    speeds = [np.abs(np.diff(q)).max() / PERIOD / 2.0 for q in (shoulder, other)]
    assert found['q1'] == pytest.approx(np.abs(np.diff(elbow)).max() / PERIOD / 2.0, abs=1e-4)
    assert min(abs(found['q0'] - speed) for speed in speeds) < 1e-4


def test_a_mapping_between_joints_needs_no_search() -> None:
    arm, time = planar(), seconds(20.0)
    joints = np.stack([3.4 * np.sin(0.5 * time), 1.0 + 0.2 * np.cos(0.3 * time)], axis=1)
    found = predicted(arm, of_joints(arm, joints))
    half = 0.5 * 0.5 * PERIOD
    assert found['joint_speed_demand_max'].value == pytest.approx(
        3.4 * 0.5 * math.sin(half) / half / 2.0, rel=1e-4)
    beyond = np.mean(np.abs(joints[:, 0]) > 3.1)
    assert found['limit_violation_share'].value == pytest.approx(beyond, abs=1e-12)
    assert 0.1 < beyond < 0.4
    assert found['at_limit_share'].status == 'not_configured'
    assert found['limit_violation_share'].details['joint'] == 'q0'
    assert found['limit_violation_share'].details['joints'] == pytest.approx(
        {'q0': beyond, 'q1': 0.0})
    assert found['limit_margin_min'].value == 0.0
    assert found['limit_margin_min'].details['overshoot'] == pytest.approx(
        (np.abs(joints[:, 0]).max() - 3.1) / 6.2)
    w = L1 * L2 * np.abs(np.sin(joints[:, 1])) / REACH ** 2
    assert found['manipulability_min'].value == pytest.approx(w.min(), rel=1e-9)
    assert found['manipulability_p5'].value == pytest.approx(np.percentile(w, 5), rel=2e-3)
    assert found['not_reached_share'].status == 'not_configured'


def test_the_margin_of_followed_postures_is_that_of_the_closed_form() -> None:
    radius = np.linspace(0.5, 0.3, 200)
    found = predicted(planar(low=-2.2, high=2.2), Ideal(circle(radius, 0.0 * radius)))
    elbow = math.acos((0.3 ** 2 - L1 ** 2 - L2 ** 2) / (2.0 * L1 * L2))
    assert found['limit_margin_min'].value == pytest.approx((2.2 - elbow) / 4.4, abs=1e-6)


def test_what_is_out_of_reach_is_counted_and_asks_no_speed() -> None:
    radius = 0.45 + 0.2 * np.sin(2.0 * math.pi * 0.1 * seconds(20.0))
    found = predicted(planar(), Ideal(circle(radius, 0.3 + 0.0 * radius)))
    lost = found['not_reached_share']
    assert lost.value == pytest.approx(np.mean(radius > REACH), abs=1e-12)
    assert lost.samples == len(radius)
    assert lost.details['miss_max_norm'] == pytest.approx(0.1 / REACH, rel=1e-6)
    steps = np.count_nonzero((radius[1:] <= REACH) & (radius[:-1] <= REACH))
    assert found['joint_speed_demand_max'].samples == pytest.approx(steps, abs=3)
    assert found['manipulability_min'].value == pytest.approx(0.0, abs=1e-4)
    assert found['reach_max_norm'].value == pytest.approx(radius.max() / REACH)


def test_time_at_a_limit_is_the_share_for_tool_mappings() -> None:
    # The elbow meets its limit of 2 rad at this radius; nearer is out of reach, at the limit.
    hole = math.sqrt(L1 ** 2 + L2 ** 2 + 2.0 * L1 * L2 * math.cos(2.0))
    radius = np.concatenate([np.linspace(0.5, 0.25, 150), np.full(50, 0.25)])
    found = predicted(planar(low=-2.0, high=2.0), Ideal(circle(radius, 0.0 * radius)))
    share = np.mean(radius < hole)
    assert found['at_limit_share'].value == pytest.approx(share, abs=1e-12)
    assert found['limit_violation_share'].status == 'not_configured'
    assert found['at_limit_share'].details['joints']['q1'] == pytest.approx(share)
    assert found['not_reached_share'].value == pytest.approx(share, abs=1e-12)
    assert found['limit_margin_min'].value == 0.0


def test_a_locked_joint_is_not_at_a_limit() -> None:
    kind = 'revolute'
    arm = robot((kind, Z, '0 0 0'), (kind, Z, f'{L1} 0 0'), (kind, Z, f'{L2} 0 0'),
                tool='0.1 0 0', reach=0.65)
    arm.chain.lower[2] = arm.chain.upper[2] = 0.4
    found = predicted(arm, Ideal(circle(0.45, 0.2 * seconds(2.0))))['at_limit_share']
    assert found.value == 0.0
    assert set(found.details['joints']) == {'q0', 'q1'}


def test_discrepancy_is_the_rms_of_the_difference() -> None:
    time = seconds(60.0)
    targets = circle(0.35, 0.2 * np.sin(time))
    operator = targets / REACH + np.stack(
        [0.05 * np.sin(3.0 * time), 0.0 * time + 0.02, 0.0 * time], axis=1)
    operator[100:130] = np.nan
    arm = planar()
    found = predicted(arm, Ideal(targets), operator=operator, windows=30)
    apart = np.linalg.norm(targets / REACH - operator, axis=1)
    rms = found['predicted_discrepancy_rms_norm']
    assert rms.value == pytest.approx(math.sqrt(np.nanmean(apart ** 2)), rel=1e-9)
    assert rms.samples == len(time) - 30
    assert rms.ci95 is not None
    assert rms.ci95[0] < rms.number < rms.ci95[1]
    assert found['predicted_discrepancy_max_norm'].value == pytest.approx(np.nanmax(apart))
    without = predicted(arm, Ideal(targets))['predicted_discrepancy_rms_norm']
    assert without.status == 'not_configured'
    assert without.reason == 'needs operator positions in arm lengths'


def test_velocities_are_compared_where_the_mapping_gives_them() -> None:
    time = seconds(4.0)
    targets = circle(0.35, 0.2 * np.sin(time))
    speeds = np.stack([0.11 * np.cos(time), 0.0 * time, 0.0 * time], axis=1)
    ideal = Ideal(targets, velocities_mps=speeds)
    found = predicted(planar(), ideal, operator=0.0 * speeds, gives_velocity=True)
    rms = found['predicted_discrepancy_rms_norm_s']
    assert rms.value == pytest.approx(math.sqrt(np.mean(speeds[:, 0] ** 2)) / REACH)
    assert rms.unit == 'arm lengths/s'
    assert found['predicted_discrepancy_rms_norm'].status == 'not_configured'
    assert found['reach_max_norm'].value == pytest.approx(0.35 / REACH)


def test_coverage_is_that_of_the_ideal_command() -> None:
    grid = CellGrid()
    targets = circle(0.4, 1.2 * np.sin(0.7 * seconds(20.0)))
    cells = np.unique(grid.cells_of(targets / REACH))
    everything = ReachableSet(grid, grid.ball, 1, (1, 1), True)
    arm = planar()
    coverage = predicted(arm, Ideal(targets), reachable=everything)['workspace_coverage_robot']
    assert coverage.value == pytest.approx(len(cells) / len(grid.ball))
    assert coverage.details['engaged_s'] == pytest.approx(20.0)
    assert predicted(arm, Ideal(targets))['workspace_coverage_robot'].status == 'not_configured'


def test_cells_that_do_not_count_are_left_out_and_nothing_spans_them() -> None:
    arm, count = planar(), 300
    joints = np.stack([np.linspace(0.0, 1.0, count), np.full(count, 1.0)], axis=1)
    joints[100:200, 0] += 1.0
    usable = np.ones(count, dtype=bool)
    usable[100:200] = False
    step = 1.0 / (count - 1) / PERIOD / 2.0
    found = predicted(arm, of_joints(arm, joints), usable=usable)
    assert found['joint_speed_demand_max'].value == pytest.approx(step)
    assert found['joint_speed_demand_max'].samples == 198
    assert found['limit_violation_share'].samples == 200
    run = np.repeat([0, 1, 2], 100)
    found = predicted(arm, of_joints(arm, joints), run=run)
    assert found['joint_speed_demand_max'].value == pytest.approx(step)
    assert found['joint_speed_demand_max'].samples == 297
    found = predicted(arm, of_joints(arm, joints), windows=3, restarts=(1, 2))
    assert found['joint_speed_demand_max'].value == pytest.approx(step)


def test_a_step_to_another_branch_is_no_speed() -> None:
    # Bent backward at first, the arm meets the limit of its first joint at 2.5 rad.
    angles = np.linspace(-1.0, 3.0, 800)
    rate = (angles[1] - angles[0]) / PERIOD / 2.0
    for path in (angles, -angles):
        found = predicted(planar(), Ideal(circle(0.4, path)))
        assert found['not_reached_share'].value == 0.0
        assert found['not_reached_share'].details['postures_searched'] == 2
        assert found['joint_speed_demand_max'].samples == 798
        assert found['joint_speed_demand_max'].value == pytest.approx(rate, rel=1e-2)


@pytest.mark.parametrize('windows', [1, 3, 60])
def test_windows_of_any_size_give_the_same_values(windows: int) -> None:
    radius = 0.45 + 0.15 * np.sin(1.3 * seconds(6.0))
    targets = circle(radius, 0.8 * np.sin(0.9 * seconds(6.0)))
    operator = 0.9 * targets / REACH
    one = predicted(planar(), Ideal(targets), operator=operator, windows=11)
    two = predicted(planar(), Ideal(targets), operator=operator, windows=windows)
    assert set(one) == set(two)
    for name, metric in one.items():
        assert two[name].status == metric.status
        assert_allclose(two[name].number, metric.number, rtol=1e-12)
        assert two[name].samples == metric.samples


def test_orientation_is_followed_with_six_joints() -> None:
    arm, time = six_joints(), seconds(4.0)
    wave = np.sin(time[:, None] * np.array([0.5, 0.7, 0.9, 1.1, 0.6, 0.8]))
    joints = np.array([0.1, -0.4, 1.1, 0.3, 0.8, 0.0]) + 0.3 * wave
    pose = arm.chain.forward(joints)
    turns = rotations.from_matrix(pose.rotations)
    found = predicted(arm, Ideal(pose.positions, turns))
    assert found['not_reached_share'].value == 0.0
    assert found['not_reached_share'].details['orientation_followed'] is True
    # Orientations the arm cannot have inside its limits at the edge of reach.
    far = predicted(arm, Ideal(pose.positions * 1.5, turns))
    assert far['not_reached_share'].number > 0.5
    free = predicted(arm, Ideal(pose.positions, turns), with_orientation=False)
    assert free['not_reached_share'].details['orientation_followed'] is False
    assert free['not_reached_share'].reason == ''
    unknown = predicted(arm, Ideal(pose.positions))
    assert unknown['not_reached_share'].status == 'insufficient'


def test_too_few_joints_follow_positions_alone_and_say_so() -> None:
    angle = 0.3 * np.sin(seconds(2.0))
    turns = np.tile([0.0, 0.0, 1.0, 0.0], (len(angle), 1))
    found = predicted(planar(), Ideal(circle(0.4, angle), turns))['not_reached_share']
    assert found.value == 0.0
    assert found.details['orientation_followed'] is False
    assert found.reason == ('Only positions are followed: the orientation of the tool needs 6 '
                            'or more joints, and there are 2.')


def test_a_sliding_shoulder_is_carried_by_the_measured_joints() -> None:
    arm = robot(('prismatic', Z, '0 0 0'), ('revolute', Z, '0 0 0.5'), ('revolute', Y, '0 0 0'),
                ('revolute', Y, f'{L1} 0 0'), tool=f'{L2} 0 0')
    count = 100
    lift = np.linspace(0.0, 0.4, count)
    measured = np.stack([lift, 0.0 * lift, 0.0 * lift, 0.0 * lift], axis=1)
    targets = np.stack([0.4 + 0.0 * lift, 0.0 * lift, 0.5 + lift], axis=1)
    found = predicted(arm, Ideal(targets), robot_joints=measured)
    assert found['reach_p50_norm'].value == pytest.approx(0.4 / REACH, rel=1e-3)
    assert found['reach_max_norm'].value == pytest.approx(0.4 / REACH)
    assert found['not_reached_share'].value == 0.0


def test_missing_limits_and_missing_motion_have_reasons() -> None:
    arm = robot(('continuous', Z, '0 0 0'), ('continuous', Z, f'{L1} 0 0'), tool=f'{L2} 0 0',
                velocity=0.0)
    found = predicted(arm, Ideal(circle(0.4, 0.2 * seconds(2.0))))
    for name in ('joint_speed_demand_p95', 'joint_speed_demand_max', 'at_limit_share',
                 'limit_margin_min'):
        assert found[name].status == 'not_configured', name
        assert found[name].reason
    nothing = predicted(planar(), Ideal(np.full((50, 3), np.nan)), operator=np.zeros((50, 3)))
    for name, metric in nothing.items():
        if name not in ('workspace_coverage_robot', 'limit_violation_share'):
            assert metric.status == 'insufficient', name
        assert metric.reason


def test_postures_begin_in_the_branch_of_the_robot() -> None:
    """A two-link arm has its elbow on either side; the prediction takes the measured one."""
    angle = 0.5 * np.sin(seconds(6.0))
    cosine = (0.4 ** 2 - L1 ** 2 - L2 ** 2) / (2.0 * L1 * L2)
    for sign in (1.0, -1.0):
        arm = planar(low=-2.0, high=2.6)
        bent = np.tile([0.0, sign * math.acos(cosine)], (len(angle), 1))
        found = predicted(arm, Ideal(circle(0.4, angle)), robot_joints=bent)
        elbow = sign * math.acos(cosine)
        joints = np.stack([angle - math.atan2(
            L2 * math.sin(elbow), L1 + L2 * math.cos(elbow)), 0.0 * angle + elbow])
        margin = np.minimum(joints + 2.0, 2.6 - joints).min() / 4.6
        assert found['limit_margin_min'].value == pytest.approx(margin, abs=1e-6)
        assert found['limit_margin_min'].reason == ''


def test_an_unknown_posture_is_told_with_what_depends_on_it() -> None:
    angle = 0.5 * np.sin(seconds(2.0))
    found = predicted(planar(), Ideal(circle(0.4, angle)), measured=False)
    said = ('postures begin at the middle of the joint ranges, since that of the robot was not '
            'measured')
    assert {name for name, one in found.items() if said in one.reason} == {
        'not_reached_share', 'at_limit_share', 'joint_speed_demand_p95',
        'joint_speed_demand_max', 'limit_margin_min', 'manipulability_min', 'manipulability_p5'}


def test_no_posture_is_searched_before_the_robot_was_seen() -> None:
    arm, count = planar(), 100
    candidate = CandidateAccumulator(arm, period_s=PERIOD, between_joints=False)
    bent = np.array([0.0, -1.0])
    for cell in (50, 20, 0):
        candidate.add(Ideal(circle(0.4, np.linspace(0.0, 0.1, 50))),
                      usable=np.ones(50, dtype=bool), run=np.zeros(50, dtype=np.int64),
                      robot_joints=np.zeros((50, 2)),
                      start=Start(None if cell == 50 else bent, cell))
    assert candidate.metrics()['not_reached_share'].samples == 80
    assert candidate.metrics()['reach_max_norm'].samples == count + 50
