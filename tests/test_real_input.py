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
from pathlib import Path

import numpy as np
import pytest

from teleop_eval.cli.main import main
from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.settings import from_parameters
from teleop_eval.core.tracking import JointErrors
from teleop_eval.sources.decode import make_decoder
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


def summarize(recording: Path, parameters: Path, out: Path) -> dict:
    """Run the command as a user does and return the summary."""
    status = main(['summarize', str(recording), '--config', str(parameters), '--out', str(out),
                   '--no-progress'])
    summary = json.loads((out / 'summary.json').read_text())
    assert status == (1 if summary['problems'] else 0)
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


def test_long_run_at_20_hz_masks_its_gaps(real_recordings: Path, tmp_path: Path):
    """1276 s at 20 Hz with pauses of up to 2.1 s: counted, and never bridged."""
    recording = real_recordings / 'data' / 'torque_ripple_data_0.mcap'
    summary = summarize(recording, config(tmp_path, ['C1_A']), tmp_path / 'out')
    robot = summary['arms']['robot']
    times = np.array(sorted(
        stamp for stamp in _stamps(recording)))
    periods = np.diff(times)
    limit = max(0.1e9, 3 * np.median(periods[: 5 * 20]))
    assert robot['grid']['rate_hz'] == pytest.approx(50.0)
    assert robot['inputs']['robot_joints']['gaps'] == int((periods > limit).sum()) > 0
    assert robot['inputs']['robot_joints']['gap_time_s'] == pytest.approx(
        periods[periods > limit].sum() / 1e9, rel=1e-9)
    # No command was recorded: said, and exit status 1 (checked in summarize()).
    assert any(COMMAND in problem for problem in summary['problems'])


def _stamps(recording: Path) -> list[int]:
    """Return the header stamps of the joint states, read without this project."""
    reader = pytest.importorskip('mcap.reader', reason='mcap is not installed')
    support = pytest.importorskip('mcap_ros2.decoder', reason='mcap-ros2-support is missing')
    with recording.open('rb') as stream:
        return [state.header.stamp.sec * 10 ** 9 + state.header.stamp.nanosec
                for _, _, _, state in reader.make_reader(
                    stream, decoder_factories=[support.DecoderFactory()]
                ).iter_decoded_messages(topics=[STATE])]


@pytest.mark.parametrize('name', ['controlled_data_0.mcap', 'uncontrolled_data_0.mcap'])
def test_small_recordings_parse(real_recordings: Path, tmp_path: Path, name: str):
    """Two short recordings of another rig: the joint state is read to the last message."""
    recording = real_recordings / 'data' / name
    with open_recording(recording) as opened:
        info = opened.topics[STATE]
        decoder = make_decoder(info.type_name, definition=info.definition,
                               definition_format=info.definition_format)
        joint = decoder(next(iter(opened.messages([STATE])))[2]).names[0]
    summary = summarize(recording, config(tmp_path, [joint]), tmp_path / 'out')
    assert summary['arms']['robot']['inputs']['robot_joints']['messages'] == 250
