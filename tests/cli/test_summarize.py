# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The command `summarize` as a process: results, errors, exit statuses."""

from __future__ import annotations

import importlib.util
import json
import os
import shutil
import signal
import sqlite3
import subprocess
import sys
from pathlib import Path

import pandas
import pytest
from rosbags.highlevel import AnyReader
from rosbags.rosbag2 import StoragePlugin

from teleop_eval.cli.summarize import resolve_topic

ROOT = Path(__file__).parents[2]


def _load(name):
    """Import a module that lies beside this file."""
    spec = importlib.util.spec_from_file_location(name, Path(__file__).with_name(f'{name}.py'))
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
    return module


synthetic = _load('synthetic_recording')
ENVIRONMENT = {**os.environ, 'PYTHONPATH': str(ROOT), 'OMP_NUM_THREADS': '1', 'COLUMNS': '80'}


def start(*arguments, cwd):
    """Start the command as a process."""
    return subprocess.Popen(
        [sys.executable, '-m', 'teleop_eval', 'summarize', *map(str, arguments)], text=True,
        cwd=cwd, env=ENVIRONMENT, stdout=subprocess.PIPE, stderr=subprocess.PIPE)


def run(*arguments, cwd):
    """Run the command; return (exit status, standard output, standard error)."""
    process = start(*arguments, cwd=cwd)
    out, err = process.communicate(timeout=300)
    assert 'Traceback' not in err, err
    return process.returncode, out, err


@pytest.fixture(scope='module')
def made(tmp_path_factory):
    """Return a recording of 40 s."""
    return synthetic.make(tmp_path_factory.mktemp('made'))


@pytest.fixture(scope='module')
def results(made):
    """Return the folder with the results of that recording."""
    status, out, err = run(made.path, '--config', made.config, cwd=made.path.parent)
    folder = made.path.parent / 'recording_summary'
    assert status == 0, err
    assert 'Results: recording_summary' in out
    return folder


def metrics_of(folder):
    """Return the metrics in a folder's summary.json."""
    summary = json.loads((folder / 'summary.json').read_text(encoding='utf-8'))
    return summary['arms']['right']['mappings']['direct']['metrics']


def test_known_delay_is_found(results):
    latency = metrics_of(results)['latency_s']
    assert latency['status'] == 'ok', latency
    assert latency['value'] == pytest.approx(synthetic.DELAY_S, abs=0.002)


def test_summary_says_what_was_read(results):
    summary = json.loads((results / 'summary.json').read_text(encoding='utf-8'))
    assert summary['problems'] == []
    session = summary['session']
    assert (session['name'], session['source']) == ('recording', 'recording')
    assert session['start_ns'] == synthetic.START_NS
    assert session['end_ns'] == synthetic.START_NS + 39_990_000_000 + 1_100_000
    inputs = summary['arms']['right']['inputs']
    assert inputs['robot_joints']['topic'].lstrip('/') == 'joint_states'
    assert inputs['robot_joints']['messages'] == 4000


def test_tables_and_bag_agree_with_the_summary(results):
    table = pandas.read_csv(results / 'metrics.csv')
    for name, metric in metrics_of(results).items():
        row = table[table.metric == name].iloc[0]
        assert row.status == metric['status']
        if metric['value'] is not None:
            assert row.value == metric['value']
    windows = pandas.read_csv(results / 'windows.csv')
    assert windows.start_s.tolist() == [2.0 * k for k in range(20)]
    assert windows.end_s.tolist()[:-1] == [2.0 * k for k in range(1, 20)]
    assert 39.9 < windows.end_s.iloc[-1] <= 40.0
    with AnyReader([results / 'summary'], default_typestore=synthetic.STORE) as reader:
        messages = [(c.topic, ns, reader.deserialize(data, c.msgtype))
                    for c, ns, data in reader.messages()]
    diagnostics = [ns for topic, ns, _ in messages if topic == '/diagnostics']
    assert 38 <= len(diagnostics) <= 40
    latencies = [m.data for topic, _, m in messages if topic == '/teleop_eval/right/latency_s']
    shown = windows.latency_s.dropna()
    assert [value for value in latencies if value == value] == shown.tolist() != []
    [final] = [m.data for topic, _, m in messages if topic == '/teleop_eval/summary']
    assert json.loads(final) == json.loads((results / 'summary.json').read_text('utf-8'))


def test_sqlite_recording_read_again_gives_the_same_bytes(made, results, tmp_path):
    """The same messages in the other storage format, with another folder for the results."""
    other = synthetic.make(tmp_path, storage=StoragePlugin.SQLITE3)
    [file] = other.path.glob('*.db3')
    with sqlite3.connect(f'file:{file}?mode=ro', uri=True) as database:
        assert database.execute('SELECT count(*) FROM messages').fetchone() == (8002,)
    status, _, err = run(other.path, '--config', other.config, '--out', 'elsewhere',
                         '--no-progress', cwd=tmp_path)
    assert (status, err) == (0, '')
    for name in ('summary.json', 'metrics.csv', 'windows.csv'):
        assert (tmp_path / 'elsewhere' / name).read_bytes() == (results / name).read_bytes()


def test_namespace_resolves_relative_topics(tmp_path):
    made = synthetic.make(tmp_path, seconds=15.0, namespace='/cell')
    status, _, err = run(made.path, '--config', made.config, cwd=tmp_path)
    assert status == 1
    assert 'has none of the configured topics' in err and '/cell/joint_states' in err
    status, _, err = run(made.path, '--config', made.config, '--namespace', 'cell',
                         '--no-progress', cwd=tmp_path)
    assert (status, err) == (0, '')
    assert (tmp_path / 'recording_summary' / 'config.yaml').read_text().count('/cell/') == 3


def test_absent_topic_is_named_and_the_rest_evaluated(tmp_path):
    made = synthetic.make(tmp_path, seconds=15.0, leave_out=['/operator/joint_states'])
    status, out, err = run(made.path, '--config', made.config, '--no-progress', cwd=tmp_path)
    assert status == 0
    assert ('teleop_eval summarize: Topic /operator/joint_states (operator joints of arm right) '
            'is not in the recording recording; the nearest there are /joint_states') in err
    summary = json.loads((tmp_path / 'recording_summary' / 'summary.json').read_text('utf-8'))
    assert any('/operator/joint_states' in problem for problem in summary['problems'])
    assert summary['arms']['right']['inputs']['robot_joints']['messages'] == 1500


@pytest.mark.parametrize(('old', 'new', 'words'), [
    ('fixed: direct', 'topic: mapping',
     'no mapping was active while the arm was evaluated; no message came on mapping; '),
    ('tip_link: tool', 'tip_link: tol', 'this arm has no usable robot description; '),
    ('joints_topic: joint_states', 'joints_topic: joint_sates',
     'no message came on joint_sates (robot_joints)')])
def test_no_number_under_any_mapping_is_status_1(made, tmp_path, old, new, words):
    config = tmp_path / 'c.yaml'
    assert old in synthetic.CONFIG
    config.write_text(synthetic.CONFIG.replace(old, new), encoding='utf-8')
    status, out, err = run(made.path, '--config', config, '--out', tmp_path / 'out',
                           '--no-progress', cwd=tmp_path)
    assert status == 1, err
    [why] = [line for line in err.splitlines() if 'Nothing was evaluated: ' in line]
    assert why.startswith(f'teleop_eval summarize: Nothing was evaluated: {words}'), why
    assert why.endswith('; correct that and evaluate again.')
    summary = json.loads((tmp_path / 'out' / 'summary.json').read_text('utf-8'))
    assert why.removeprefix('teleop_eval summarize: ') in summary['problems']
    assert 'Results: ' in out


def test_a_robot_never_described_hides_no_silent_topic(tmp_path):
    made = synthetic.make(tmp_path, seconds=15.0, leave_out=['/robot_description',
                                                             '/joint_states'])
    status, out, err = run(made.path, '--config', made.config, '--no-progress', cwd=tmp_path)
    assert status == 1
    assert 'no message came on joint_states, robot_description; correct that' in err
    summary = json.loads((tmp_path / 'recording_summary' / 'summary.json').read_text('utf-8'))
    assert summary['arms']['right']['inputs']['robot_joints'] == {
        'topic': 'joint_states', 'messages': 0}


def test_truncated_recording_is_evaluated_as_far_as_it_goes(made, tmp_path):
    [file] = made.path.glob('*.mcap')
    data = file.read_bytes()
    (tmp_path / 'cut.mcap').write_bytes(data[:int(0.6 * len(data))])
    status, out, err = run('cut.mcap', '--config', made.config, '--no-progress', cwd=tmp_path)
    summary = json.loads((tmp_path / 'cut_summary' / 'summary.json').read_text('utf-8'))
    assert (status, err.count('\n')) == (0, 1)
    assert err.startswith('teleop_eval summarize: cut.mcap ends early: ')
    assert summary['problems'] == [err.split(': ', 1)[1].rstrip('\n')]
    assert 0 < summary['arms']['right']['inputs']['robot_joints']['messages'] < 4000


def test_malformed_message_is_counted_and_noted(tmp_path):
    made = synthetic.make(tmp_path, seconds=15.0, storage=StoragePlugin.SQLITE3)
    [file] = made.path.glob('*.db3')
    with sqlite3.connect(file) as database:
        database.execute("UPDATE messages SET data = x'00010000ffffffff' WHERE id = 500")
    status, out, err = run(made.path, '--config', made.config, '--no-progress', cwd=tmp_path)
    assert (status, err.count('\n')) == (0, 1)
    assert '1 of 1500 messages on ' in err and 'left out' in err
    summary = json.loads((tmp_path / 'recording_summary' / 'summary.json').read_text('utf-8'))
    assert summary['problems'] == [err.split(': ', 1)[1].rstrip('\n')]


def test_folder_with_results_is_not_overwritten(made, results):
    before = (results / 'summary.json').read_bytes()
    status, out, err = run(made.path, '--config', made.config, cwd=results.parent)
    assert (status, out) == (1, '')
    assert 'recording_summary already holds' in err and err.count('\n') == 1
    assert (results / 'summary.json').read_bytes() == before


def test_session_folder_needs_no_configuration(made, results, tmp_path):
    """A session folder as the live node leaves it: config.yaml, summary/ and inputs/."""
    session = tmp_path / 'my_session'
    shutil.copytree(results, session)
    shutil.copytree(made.path, session / 'inputs')
    (session / 'summary.json').unlink()
    status, _, err = run('my_session', '--no-progress', cwd=tmp_path)
    assert (status, err) == (0, '')
    again = tmp_path / 'my_session_summary'
    assert metrics_of(again) == metrics_of(results)
    assert json.loads((again / 'summary.json').read_text('utf-8'))['session']['source'] == (
        'my_session')
    shutil.rmtree(session / 'inputs')
    status, _, err = run('my_session', '--out', 'x', cwd=tmp_path)
    assert status == 1
    assert 'has no inputs/' in err and 'session.record_inputs' in err


def test_description_file_is_read_beside_the_parameters_and_kept(made, tmp_path):
    (tmp_path / 'arm.urdf').write_text(synthetic.URDF, encoding='utf-8')
    config = tmp_path / 'c.yaml'
    config.write_text(synthetic.CONFIG.replace('description_topic: robot_description',
                                               'description_file: arm.urdf'))
    status, _, err = run(made.path, '--config', config, '--out', tmp_path / 'out',
                         '--no-progress', cwd=made.path.parent)
    assert (status, err) == (0, '')
    assert (tmp_path / 'out' / 'description_right.urdf').read_text() == synthetic.URDF
    (tmp_path / 'arm.urdf').unlink()
    status, _, err = run(made.path, '--config', config, '--out', tmp_path / 'out2',
                         cwd=made.path.parent)
    assert status == 1
    assert 'arms.right.robot.description_file is ' in err and 'arm.urdf' in err
    assert not (tmp_path / 'out2').exists()


@pytest.mark.parametrize('arguments, status, text', [
    (['nothing_here', '--config', '{config}'], 1, 'There is no recording nothing_here'),
    (['{recording}'], 2, '--config FILE is needed'),
    (['{recording}', '--config', 'missing.yaml'], 1, 'missing.yaml'),
    (['{recording}', '--config', '{config}', '--namespace', 'a b'], 2, "--namespace 'a b'"),
    (['{recording}', '--config', '{config}', '--outt', 'x'], 2, 'usage: teleop_eval summarize'),
    ([], 2, 'usage: teleop_eval summarize'),
    (['{config}', '--config', '{config}'], 1, 'evaluator.yaml'),
    (['{recording}', '--config', '{config}', '--out', '{config}'], 1, 'is a file'),
    (['{recording}', '--config', '{config}', '--out', '/proc/x'], 1, 'cannot be made'),
])
def test_wrong_use_is_one_clear_message(made, tmp_path, arguments, status, text):
    given = [part.format(config=made.config, recording=made.path) for part in arguments]
    found, out, err = run(*given, cwd=tmp_path)
    assert (found, out) == (status, '')
    assert text in err
    if 'usage:' not in text:
        assert err.startswith('teleop_eval summarize: ') and err.count('\n') == 1


def test_hostile_name_of_a_recording_is_only_a_name(made, tmp_path):
    name = '=cmd[red] \x1b[2J;$(touch x)\n'
    shutil.copytree(made.path, tmp_path / name)
    status, out, err = run(name, '--config', made.config, '--no-progress', cwd=tmp_path)
    assert status == 0, err
    assert '\x1b' not in out + err
    summary = json.loads((tmp_path / f'{name}_summary' / 'summary.json').read_text('utf-8'))
    assert summary['session']['source'] == name
    assert not (tmp_path / 'x').exists()


def test_interruption_finishes_what_was_read(tmp_path):
    made = synthetic.make(tmp_path, seconds=240.0, rate_hz=250.0)
    process = start(made.path, '--config', made.config, cwd=tmp_path)
    assert ': 10 %' in process.stderr.readline()
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=300)
    assert process.returncode == 1 and 'Traceback' not in err
    assert 'Interrupted after ' in err and 's of the 240.0 s recording' in err
    summary = json.loads((tmp_path / 'recording_summary' / 'summary.json').read_text('utf-8'))
    assert 0 < summary['arms']['right']['inputs']['robot_joints']['messages'] < 60000
    assert summary['session']['duration_s'] < 240.0
    assert 'Results: recording_summary' in out


def test_progress_is_a_line_each_tenth_where_there_is_no_terminal(made, tmp_path):
    status, _, err = run(made.path, '--config', made.config, cwd=tmp_path)
    assert status == 0
    assert err.splitlines() == [f'Reading recording: {k} %' for k in range(10, 101, 10)]


def test_help_has_an_example_and_the_caution(tmp_path):
    status, out, err = run('--help', cwd=tmp_path)
    assert (status, err) == (0, '')
    assert 'example:\n  teleop_eval summarize ' in out
    assert 'personal data' in out


@pytest.mark.parametrize('topic, namespace, expected', [
    ('/a/b', '/cell', '/a/b'), ('a', '/', '/a'), ('a', '/cell', '/cell/a'),
    ('~/a', '/cell', '/cell/teleop_eval/a'), ('~/a', '/', '/teleop_eval/a')])
def test_topic_names_resolve_as_in_ros(topic, namespace, expected):
    assert resolve_topic(topic, namespace) == expected
    names = pytest.importorskip(
        'rclpy.expand_topic_name', reason='compares with rclpy, which is not installed')
    assert names.expand_topic_name(topic, 'teleop_eval', namespace) == expected


def test_full_disk_is_one_message_and_the_small_files_are_written(made, tmp_path):
    """A limit on the size of a file, here for the bag, stands for the disk that fills up."""
    size = 1_100_000  # the bag reserves a mebibyte at its end while it grows
    resource = pytest.importorskip('resource', reason='limits of a process are those of Unix')
    process = subprocess.run(
        [sys.executable, '-m', 'teleop_eval', 'summarize', str(made.path), '--config',
         str(made.config), '--no-progress'], cwd=tmp_path, env=ENVIRONMENT, timeout=300,
        capture_output=True, text=True, check=False,
        preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (size, size)))
    assert process.returncode == 1
    assert process.stderr.startswith('teleop_eval summarize: Cannot write the recording ')
    assert process.stderr.count('\n') == 1 and 'File too large' in process.stderr
    folder = tmp_path / 'recording_summary'
    assert metrics_of(folder)['latency_s']['status'] == 'ok'
    assert len(pandas.read_csv(folder / 'windows.csv')) > 0
    assert len(pandas.read_csv(folder / 'metrics.csv')) > 10
    with AnyReader([folder / 'summary'], default_typestore=synthetic.STORE) as reader:
        list(reader.messages())  # however many were committed before: the bag opens
