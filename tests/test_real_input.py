# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Recordings of a real robot, judged against the robot's own tracking error.

The recordings come with the source package mcap-bag-parser 0.3.1 (MIT, Copyright 2024 Neal
Tanner). The robot's controller publishes `joint_position_tracking_error` itself: a truth that
this project has no part in. An independent reader (mcap with mcap-ros2-support) reads it.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from scipy.interpolate import make_interp_spline

from teleop_eval.cli.main import main
from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.metric import Metric
from teleop_eval.core.settings import from_parameters
from teleop_eval.core.tracking import JointErrors
from teleop_eval.sources.decode import make_decoder
from teleop_eval.sources.parameter_file import load_parameters
from teleop_eval.sources.recording import open_recording

ARM = 'arms.robot'
STATE, COMMAND = '/robot/joint_state', '/robot/joint_command'


def config(folder: Path, joints: list[str], *, enabled: bool = False,
           millimetres: tuple[str, ...] = ()) -> Path:
    """Write a parameter file for command and robot joints alone."""
    scales = ''.join(f'            {joint}: {{scale: 0.001}}\n' for joint in millimetres)
    units = f'          joints:\n{scales}' if scales else ''
    text = (
        '/**:\n  ros__parameters:\n    arms:\n      robot:\n        robot:\n'
        f'          joints_topic: {STATE}\n          joint_names: [{", ".join(joints)}]\n{units}'
        f'        command:\n          topic: {COMMAND}\n          hold: true\n'
        + ('          enabled_field: enable\n' if enabled else '') + units)
    path = folder / 'config.yaml'
    path.write_text(text)
    return path


def summarize(recording: Path, parameters: Path, out: Path, *, expected: int = 0) -> dict:
    """Run the command as a user does and return the summary."""
    status = main(['summarize', str(recording), '--config', str(parameters), '--out', str(out),
                   '--no-progress'])
    # Problems of the data are no failure unless nothing is left to evaluate: they are said.
    assert status == expected
    summary: dict = json.loads((out / 'summary.json').read_text())
    return summary


def metrics_of(summary: dict) -> dict:
    """Return the metrics of the only mapping."""
    (mapping,) = summary['arms']['robot']['mappings'].values()
    return mapping['metrics']


def reported_errors(path: Path, joint: str) -> dict[int, float]:
    """Return the robot's own error by log time, read without this project."""
    reader = pytest.importorskip('mcap.reader', reason='mcap is not installed')
    support = pytest.importorskip('mcap_ros2.decoder', reason='mcap-ros2-support is missing')
    found = {}
    with path.open('rb') as stream:
        for _, _, message, state in reader.make_reader(
                stream, decoder_factories=[support.DecoderFactory()]
        ).iter_decoded_messages(topics=[STATE]):
            found[message.log_time] = state.joint_position_tracking_error[
                list(state.name).index(joint)]
    return found


def test_held_command_gives_the_error_the_robot_reports(real_recordings: Path, tmp_path: Path):
    """RMSE within 1e-4 rad; every sample within 3e-5 rad."""
    recording = real_recordings / 'alternate_bagfile'
    summary = summarize(recording, config(tmp_path, ['C1_A']), tmp_path / 'out')
    metric = metrics_of(summary)['joint_error_rms.C1_A']
    truth = reported_errors(recording / 'alternate_bagfile_0.mcap', 'C1_A')

    seen: list[JointErrors] = []
    flat = {f'{ARM}.robot.joints_topic': STATE, f'{ARM}.robot.joint_names': ['C1_A'],
            f'{ARM}.command.topic': COMMAND, f'{ARM}.command.hold': True}
    evaluator = SessionEvaluator(from_parameters(flat))
    evaluator.arms['robot'].observe_joint_errors = lambda _, errors: seen.append(errors)
    with open_recording(recording) as opened:
        decoders = {name: make_decoder(opened.topics[name].type_name,
                                       definition=opened.topics[name].definition,
                                       definition_format=opened.topics[name].definition_format)
                    for name in (STATE, COMMAND)}
        for log_ns, topic, data in opened.messages([STATE, COMMAND]):
            evaluator.add(log_ns, topic, decoders[topic](data))
    evaluator.finish()
    times = np.concatenate([errors.times_ns for errors in seen])
    errors = np.concatenate([errors.errors[:, 0] for errors in seen])
    kept = np.isfinite(errors)
    reported = np.array([truth[time] for time in times[kept].tolist()])

    # The robot counts command minus position, the evaluator robot minus command.
    assert np.abs(-errors[kept] - reported).max() < 3e-5
    assert len(reported) == metric['samples'] == 3465
    assert metric['value'] == pytest.approx(float(np.sqrt(np.mean(reported ** 2))), abs=1e-4)


def test_clock_that_is_46_s_off_and_zero_stamps_lead_to_receive_time(
        real_recordings: Path, tmp_path: Path):
    """The choice is said with its reason and the offsets."""
    summary = summarize(
        real_recordings / 'alternate_bagfile', config(tmp_path, ['C1_A']), tmp_path / 'out')
    base = summary['arms']['robot']['time_base']
    assert base['base'] == 'receive'
    assert 'command: all header stamps are zero' in base['reason']
    # 45.979 to 45.982 s between header and log clock, as the recording shows.
    assert base['offsets_s']['robot_joints'] == pytest.approx(-45.9805, abs=0.002)
    assert base['offsets_s']['command'] is None
    assert '-45.9' in base['reason']
    assert any('receive time' in note for note in summary['notes'])
    age = summary['arms']['robot']['inputs']['robot_joints']['metrics']['transport_age_s']
    assert age['value'] == pytest.approx(45.9805, abs=0.001)


def test_four_moves_begin_517_ms_after_their_commands(real_recordings: Path):
    """The onset (1 % of the step) is a property of the drive: consistent to one sample."""
    commands, states = [], []
    with open_recording(real_recordings / 'alternate_bagfile') as opened:
        decoders = {name: make_decoder(opened.topics[name].type_name,
                                       definition=opened.topics[name].definition,
                                       definition_format=opened.topics[name].definition_format)
                    for name in (STATE, COMMAND)}
        for log_ns, topic, data in opened.messages([STATE, COMMAND]):
            sample = decoders[topic](data)
            (commands if topic == COMMAND else states).append(
                (log_ns, sample.positions[sample.names.index('C1_A')]))
    times, positions = np.array([s[0] for s in states]), np.array([s[1] for s in states])
    onsets = []
    for log_ns, target in commands:
        start = positions[np.searchsorted(times, log_ns) - 1]
        moved = (times > log_ns) & (np.abs(positions - start) > 0.01 * abs(target - start))
        onsets.append((times[moved][0] - log_ns) / 1e9)
    assert onsets == pytest.approx([0.5161, 0.5180, 0.5170, 0.5162], abs=0.0101)


def test_enabled_mask_and_units_give_the_stated_figures(real_recordings: Path, tmp_path: Path):
    """C1_INSERT is in millimetres and 269 mm off until the joint is switched on at 8.16 s."""
    parameters = config(tmp_path, ['C1_INSERT', 'C1_ROLL', 'C1_A'], enabled=True,
                        millimetres=('C1_INSERT',))
    found = metrics_of(summarize(real_recordings / 'bagfile', parameters, tmp_path / 'out'))
    insert = found['joint_error_rms.C1_INSERT']
    assert insert['samples'] == 3458
    assert insert['value'] == pytest.approx(0.0404e-3, abs=0.00005e-3)
    assert found['joint_error_max.C1_INSERT']['value'] == pytest.approx(0.389e-3, abs=0.0005e-3)
    assert found['joint_error_rms.C1_ROLL']['value'] == pytest.approx(0.0016, abs=0.00005)
    assert found['joint_error_rms.C1_A']['value'] == pytest.approx(0.0028, abs=0.00005)
    # Turning and sliding joints are not added up where nobody says which is which.
    assert found['joint_error_rms']['status'] == 'not_configured'


def test_without_the_mask_the_disabled_robot_dominates(real_recordings: Path, tmp_path: Path):
    """The same recording unmasked has the stated 104.38 mm."""
    parameters = config(tmp_path, ['C1_INSERT'], millimetres=('C1_INSERT',))
    found = metrics_of(summarize(real_recordings / 'bagfile', parameters, tmp_path / 'out'))
    assert found['joint_error_rms.C1_INSERT']['value'] == pytest.approx(104.38e-3, abs=0.005e-3)


@dataclass(frozen=True)
class Raw:
    """Joint states as they were recorded: stamps (n,) ns, names (d,), positions (n, d)."""

    stamps_ns: np.ndarray
    names: tuple[str, ...]
    positions: np.ndarray

    def column(self, joint: str) -> np.ndarray:
        """Return one joint's positions (n,)."""
        return self.positions[:, self.names.index(joint)]


def raw_states(recording: Path) -> Raw:
    """Return the joint states of a recording, read without this project."""
    reader = pytest.importorskip('mcap.reader', reason='mcap is not installed')
    support = pytest.importorskip('mcap_ros2.decoder', reason='mcap-ros2-support is missing')
    with recording.open('rb') as stream:
        states = [state for _, _, _, state in reader.make_reader(
            stream, decoder_factories=[support.DecoderFactory()]
        ).iter_decoded_messages(topics=[STATE])]
    (names,) = {tuple(state.name) for state in states}
    return Raw(
        np.array([s.header.stamp.sec * 10 ** 9 + s.header.stamp.nanosec for s in states]),
        names, np.array([state.position for state in states]))


def described(folder: Path, limits: dict[str, tuple[float, float]], extra: str = '') -> Path:
    """
    Write a parameter file for a chain of joints with these limits, and its description.

    The recordings carry no description. Joint metrics need the limits and nothing else of it,
    so the lengths are invented.
    """
    parts, parent = ['<link name="base"/>'], 'base'
    for k, (name, (low, high)) in enumerate(limits.items()):
        parts.append(
            f'<link name="link{k}"/><joint name="{name}" type="revolute">'
            f'<parent link="{parent}"/><child link="link{k}"/><origin xyz="0.1 0 0"/>'
            f'<axis xyz="0 {k % 2} {1 - k % 2}"/><limit lower="{low!r}" upper="{high!r}" '
            'effort="9" velocity="9"/></joint>')
        parent = f'link{k}'
    parts.append(f'<link name="tip"/><joint name="end" type="fixed"><parent link="{parent}"/>'
                 '<child link="tip"/><origin xyz="0.1 0 0"/></joint>')
    (folder / 'arm.urdf').write_text(f'<robot name="arm">{"".join(parts)}</robot>')
    path = folder / 'config.yaml'
    path.write_text(
        f'/**:\n  ros__parameters:\n{extra}    arms:\n      robot:\n        robot:\n'
        f'          joints_topic: {STATE}\n          description_file: arm.urdf\n'
        '          base_link: base\n          tip_link: tip\n')
    return path


@dataclass(frozen=True)
class Covered:
    """Cells of 20 ms from the first stamp on: values (m,), NaN where not covered."""

    values: np.ndarray

    @property
    def found(self) -> np.ndarray:
        """Return the values of the covered cells."""
        return self.values[np.isfinite(self.values)]


def covered_cells(stamps_ns: np.ndarray, positions: np.ndarray, period_ns: int,
                  limit_ns: float) -> Covered:
    """
    Return the mean of the joined samples over each cell that no pause longer than a limit cuts.

    Computed from the definition with scipy's splines, cell by cell. The first sample opens
    the first cell.
    """
    times = stamps_ns - stamps_ns[0]
    integral = make_interp_spline(times / 1e9, positions, k=1).antiderivative()
    edges = np.arange(0, times[-1] + 1, period_ns)
    values = np.diff(integral(edges / 1e9)) / (period_ns / 1e9)
    for pause in np.flatnonzero(np.diff(times) > limit_ns):
        inside = (edges[1:] > times[pause]) & (edges[:-1] < times[pause + 1])
        values[inside] = np.nan
    return Covered(values)


def gap_limit(stamps_ns: np.ndarray, period_s: float) -> float:
    """Return the longest pause that is interpolated over, ns: of the first 5 s' periods."""
    return max(0.1e9, 3 * float(np.median(np.diff(stamps_ns)[:round(5 / period_s)])))


def test_long_run_at_20_hz_counts_its_gaps(real_recordings: Path, tmp_path: Path):
    """1276 s at 20 Hz with pauses of up to 2.1 s."""
    recording = real_recordings / 'data' / 'torque_ripple_data_0.mcap'
    # Joints without description and command give counts, but no metric.
    summary = summarize(recording, config(tmp_path, ['C1_A']), tmp_path / 'out', expected=1)
    robot = summary['arms']['robot']
    stamps = raw_states(recording).stamps_ns
    periods = np.diff(stamps)
    limit = gap_limit(stamps, 0.05)
    assert robot['grid']['rate_hz'] == pytest.approx(50.0)
    assert robot['inputs']['robot_joints']['gaps'] == int((periods > limit).sum()) > 0
    assert robot['inputs']['robot_joints']['gap_time_s'] == pytest.approx(
        periods[periods > limit].sum() / 1e9, rel=1e-9)
    # No command was recorded: said.
    assert any(COMMAND in problem for problem in summary['problems'])


def test_no_metric_of_the_long_run_bridges_a_gap(real_recordings: Path, tmp_path: Path):
    """
    The joint turns during the pauses: whatever bridged them would count turns never seen.

    Windows of half a second, so that some lie within a pause and many at its edge.
    """
    recording = real_recordings / 'data' / 'torque_ripple_data_0.mcap'
    raw = raw_states(recording)
    # Close to where the joint rests for long, so that a share of the time is near a limit.
    low, high = -0.3, 4.2 * np.pi
    parameters = described(tmp_path, {'C1_A': (low, high)}, '    time: {window_s: 0.5}\n')
    run = evaluated(recording, parameters)
    found = metrics_of(run.summary)
    limit = gap_limit(raw.stamps_ns, 0.05)
    cells = covered_cells(raw.stamps_ns, raw.column('C1_A'), 20_000_000, limit)
    joined = covered_cells(raw.stamps_ns, raw.column('C1_A'), 20_000_000, np.inf)
    # More than half of the time is pause, and the test could tell.
    assert len(cells.found) < 0.5 * len(joined.found)

    for name in ('joint_range_use', 'limit_share', 'limit_margin_min', 'manipulability_min'):
        assert found[name]['samples'] == len(cells.found), name
    near = np.minimum(cells.found - low, high - cells.found) <= 0.05 * (high - low)
    assert 0.01 < near.mean() == pytest.approx(found['limit_share']['value'], abs=1e-12)
    p5, p95 = np.percentile(cells.found, [5.0, 95.0])
    assert found['joint_range_use']['value'] == pytest.approx(
        (p95 - p5) / (high - low), abs=2e-3)
    assert found['limit_margin_min']['value'] == pytest.approx(
        min(cells.found.min() - low, high - cells.found.max()) / (high - low), abs=1e-9)

    windows = {(start_ns - int(raw.stamps_ns[0])) // 20_000_000: metric
               for start_ns, metric in run.margins}
    blank = 0
    for first in range(0, len(cells.values), 25):
        here = Covered(cells.values[first:first + 25]).found
        metric = windows.get(first)
        if not len(here):
            # Left out, or without a value.
            assert metric is None or metric.value is None and metric.samples == 0, first
            blank += 1
            continue
        assert metric is not None and metric.samples == len(here), first
        expected = np.minimum(here - low, high - here).min() / (high - low)
        assert metric.value == pytest.approx(max(expected, 0.0), abs=1e-9), first
    assert blank > 100


@dataclass(frozen=True)
class Evaluated:
    """A whole run: its summary, and each window's start, ns, with its limit margin if any."""

    summary: dict
    margins: list[tuple[int, Metric | None]]


def evaluated(recording: Path, parameters: Path) -> Evaluated:
    """Evaluate a recording and keep what every window gave."""
    settings = from_parameters(load_parameters(parameters))
    evaluator = SessionEvaluator(
        settings, descriptions={'robot': (parameters.parent / 'arm.urdf').read_text()})
    with open_recording(recording) as opened:
        info = opened.topics[STATE]
        decoder = make_decoder(info.type_name, definition=info.definition,
                               definition_format=info.definition_format)
        for log_ns, topic, data in opened.messages([STATE]):
            evaluator.add(log_ns, topic, decoder(data))
    summary = evaluator.finish()
    return Evaluated(summary, [(window.start_ns, window.metrics.get('limit_margin_min'))
                               for window in evaluator.poll()])


@pytest.mark.parametrize(('name', 'period_s'), [
    ('controlled_data_0.mcap', 0.038), ('uncontrolled_data_0.mcap', 0.01)])
def test_small_recordings_give_the_recorded_positions(
        real_recordings: Path, tmp_path: Path, name: str, period_s: float):
    """
    Two short recordings of another rig: every joint of every message, and each joint's result.

    The joints hardly move, so the limits are put close around what the recording holds, but
    for the first joint: the arm would else reach too little to count.
    """
    recording = real_recordings / 'data' / name
    raw = raw_states(recording)
    with open_recording(recording) as opened:
        info = opened.topics[STATE]
        decoder = make_decoder(info.type_name, definition=info.definition,
                               definition_format=info.definition_format)
        samples = [decoder(data) for _, _, data in opened.messages([STATE])]
    assert len(samples) == len(raw.stamps_ns) == 250
    assert {sample.names for sample in samples} == {raw.names}
    assert np.array_equal([sample.positions for sample in samples], raw.positions)
    assert np.array_equal([sample.stamp_ns for sample in samples], raw.stamps_ns)

    limits = {}
    for joint in raw.names:
        low, high = raw.column(joint).min(), raw.column(joint).max()
        room = max(high - low, 1e-4)
        limits[joint] = (float(low - 0.1 * room), float(high + 0.3 * room))
    limits[raw.names[0]] = (-3.0, 2.0)
    summary = summarize(recording, described(tmp_path, limits), tmp_path / 'out')
    robot = summary['arms']['robot']
    assert robot['inputs']['robot_joints']['messages'] == 250
    period_ns = round(1e9 / robot['grid']['rate_hz'])
    # The slowest stream's rate, at least 50 Hz.
    assert 1e9 / period_ns == pytest.approx(max(50.0, 1.0 / period_s), abs=0.5)
    found = metrics_of(summary)
    for joint, (low, high) in limits.items():
        cells = covered_cells(raw.stamps_ns, raw.column(joint), period_ns,
                              gap_limit(raw.stamps_ns, period_s)).found
        assert found['limit_margin_min']['samples'] == len(cells)
        assert len(cells) > 0.95 * 249 * period_s / (period_ns / 1e9)
        assert found['limit_margin_min']['details']['joints'][joint] == pytest.approx(
            min(cells.min() - low, high - cells.max()) / (high - low), abs=1e-6)
        p5, p95 = np.percentile(cells, [5.0, 95.0])
        assert found['joint_range_use']['details']['joints'][joint] == pytest.approx(
            (p95 - p5) / (high - low), abs=5e-3)
