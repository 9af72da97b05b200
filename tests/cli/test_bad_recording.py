# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Recordings that are cut, empty or none at all, and folders that cannot be written.

What a cut recording still holds is evaluated; where nothing can be, no folder is made and
what stood in its place is untouched.
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import faulty_recording as faulty
import pytest
from faulty_recording import CONFIG, short
from rosbags.rosbag2 import StoragePlugin

ROOT = Path(__file__).parents[2]


@pytest.fixture(scope='module')
def files(tmp_path_factory):
    """Return one sound MCAP and one sound SQLite file as bytes."""
    folder = tmp_path_factory.mktemp('files')
    found = {}
    for name, storage in (('mcap', StoragePlugin.MCAP), ('db3', StoragePlugin.SQLITE3)):
        [path] = faulty.write(folder / name, short(), storage=storage).glob(f'*.{name}')
        found[name] = path.read_bytes()
    return found


def summarize(bench, path, out='out'):
    """Run the command on a recording with the sound parameter file."""
    config = bench.folder / 'evaluator.yaml'
    config.write_text(CONFIG, encoding='utf-8')
    return bench.command(path, '--config', config, '--out', bench.folder / out, '--no-progress')


def refused(done, *words):
    """Check that nothing was evaluated or made, and why."""
    assert (done.status, done.out) == (1, '')
    assert not done.folder.exists()
    return done.sentence(*words)


@pytest.mark.parametrize(('kind', 'size', 'words'), [
    ('mcap', 0, ('is empty', 'nothing was recorded')),
    ('mcap', 1, ('neither an MCAP file nor an SQLite database', 'give a rosbag2 folder')),
    ('mcap', 7, ('neither an MCAP file nor',)),
    ('mcap', 8, ('holds no topic', 'cut before its first message')),
    ('mcap', 40, ('holds no topic', 'cut before its first message')),
    ('db3', 0, ('is empty', 'nothing was recorded')),
    ('db3', 15, ('neither an MCAP file nor',)),
    ('db3', 16, ('not a database', 'cut too early or damaged')),
    ('db3', 5000, ('malformed', 'cut too early or damaged')),
])
def test_a_file_cut_too_early_is_refused(bench, files, kind, size, words):
    path = bench.folder / f'cut.{kind}'
    path.write_bytes(files[kind][:size])
    refused(summarize(bench, path), f'cut.{kind}', *words)


@pytest.mark.parametrize('kind', ['mcap', 'db3'])
@pytest.mark.parametrize('share', [0.3, 0.5, 0.8])
def test_a_cut_file_is_evaluated_as_far_as_it_goes(bench, files, kind, share):
    data = files[kind]
    path = bench.folder / f'cut.{kind}'
    path.write_bytes(data[:int(share * len(data))])
    done = summarize(bench, path)
    assert done.status == 0
    done.sentence(f'cut.{kind} ends early', 'cut or damaged', 'are used')
    for arm in ('right', 'left'):
        messages = done.summary['arms'][arm]['inputs']['robot_joints']['messages']
        assert 0.15 * 400 < messages < 0.95 * 400
        assert done.metrics(arm)['direct.joint_error_max']['status'] == 'ok'


@pytest.mark.parametrize('lost', [1, 8, 9, 100, 2000])
def test_a_file_without_its_end_loses_nothing(bench, files, short_sound, lost):
    path = bench.folder / 'cut.mcap'
    path.write_bytes(files['mcap'][:-lost])
    done = summarize(bench, path)
    assert done.status == 0
    done.sentence('cut.mcap ends early', 'closing part is missing', 'all messages')
    assert done.summary['arms'] == short_sound.summary['arms']


def test_a_file_cut_before_most_topics_names_them_once(bench, files):
    path = bench.folder / 'cut.mcap'
    path.write_bytes(files['mcap'][:1000])
    done = summarize(bench, path)
    assert done.status == 1 and len(done.sentences) == 3
    assert 'Nothing was evaluated: there is no message of /left/command, /left/' in done.err
    assert 'cut.mcap ends early' in done.err
    assert 'What is left of cut.mcap holds nothing of /' in done.err


def test_unusable_metadata_costs_nothing(bench, short_sound):
    path = faulty.write(bench.folder / 'rec', short())
    (path / 'metadata.yaml').write_text('{[', encoding='utf-8')
    done = summarize(bench, path)
    assert (done.status, done.err) == (0, '')
    assert any('metadata.yaml' in note for note in done.summary['notes'])
    assert done.summary['arms'] == short_sound.summary['arms']


def test_a_split_recording_with_one_empty_part(bench, short_sound):
    path = faulty.write(bench.folder / 'rec', short())
    (path / 'rec_1.mcap').write_bytes(b'')
    meta = (path / 'metadata.yaml').read_text(encoding='utf-8')
    (path / 'metadata.yaml').write_text(meta.replace(
        '- rec.mcap', '- rec.mcap\n  - rec_1.mcap', 1), encoding='utf-8')
    shutil.copy(path / 'metadata.yaml', bench.folder / 'kept.yaml')
    done = summarize(bench, path)
    assert done.status == 0
    done.sentence('One file is left out', 'rec_1.mcap is empty')
    assert done.summary['arms'] == short_sound.summary['arms']


@pytest.mark.parametrize(('make', 'words'), [
    (lambda folder: folder / 'nothing', ('There is no recording', 'nothing', 'check the path')),
    (lambda folder: folder / ('x' * 5000), ('cannot be read', 'too long', 'check the path')),
    (lambda folder: 'a\0b', ('There is no recording', 'check the path')),
    (lambda folder: os.mkdir(folder / 'empty') or folder / 'empty',
     ('is empty', 'ros2 bag record')),
    (lambda folder: folder, ('holds no .mcap or .db3 file', 'ros2 bag record')),
    (lambda folder: folder / 'text.mcap', ('neither an MCAP file nor',)),
    (lambda folder: folder / 'old.bag', ('ROS 1 bag', 'convert it to rosbag2')),
    (lambda folder: faulty.write(folder / 'inner' / 'rec', short()).parent,
     ('no recording itself', 'such as', 'inner/rec')),
])
def test_what_is_no_recording_is_refused(bench, make, words):
    folder = bench.folder / 'here'
    folder.mkdir()
    (folder / 'text.mcap').write_text('hello', encoding='utf-8')
    (folder / 'old.bag').write_bytes(b'#ROSBAG V2.0\n')
    path = make(folder)
    if path == folder:
        (folder / 'text.mcap').unlink()
    refused(summarize(bench, path), *words)


def test_topics_without_messages(bench):
    """The recorder was started, and nothing was published."""
    store = faulty.STORE
    with faulty.Writer(bench.folder / 'rec', version=9,
                       storage_plugin=StoragePlugin.MCAP) as writer:
        for topic, kind in {(event.topic, event.type_name) for event in short()}:
            writer.add_connection(topic, kind, typestore=store)
    refused(summarize(bench, bench.folder / 'rec'), 'holds no message of the configured topics',
            'record while they are published')


def test_other_topics_only(bench):
    path = faulty.write(bench.folder / 'rec', [
        replace(event, topic=f'/cell{event.topic}') for event in short()])
    refused(summarize(bench, path), 'none of the configured topics', '/cell/left/hand',
            'check the names and --namespace')


@pytest.mark.parametrize(('out', 'words'), [
    ('file', ('is a file', 'give the name of a new folder')),
    ('file/below', ('cannot be made', 'Not a directory', 'choose another')),
    ('/proc/results', ('/proc/results cannot be made', 'choose another')),
    ('full', ('already holds kept.txt', 'no result is overwritten')),
    ('x' * 300, ('cannot be made', 'too long', 'choose another')),
    ('a\0b', ('cannot be made', 'null byte')),
    ('read_only/results', ('cannot be made', 'Read-only file system', 'choose another')),
])
def test_a_folder_that_cannot_be_written(bench, out, words):
    (bench.folder / 'file').write_text('kept', encoding='utf-8')
    (bench.folder / 'full').mkdir()
    (bench.folder / 'full' / 'kept.txt').write_text('kept', encoding='utf-8')
    mounted = out.startswith('read_only')
    if mounted and not _mount_read_only(bench.folder / 'read_only'):
        pytest.skip('no right to mount a read-only file system here')
    try:
        path = faulty.write(bench.folder / 'rec', short())
        before = sorted(bench.folder.rglob('*'))
        done = summarize(bench, path, out)
        assert (done.status, done.out) == (1, '')
        done.sentence(*words)
        assert [one for one in sorted(bench.folder.rglob('*')) if one not in before] == [
            bench.folder / 'evaluator.yaml']
        assert (bench.folder / 'file').read_text(encoding='utf-8') == 'kept'
        assert (bench.folder / 'full' / 'kept.txt').read_text(encoding='utf-8') == 'kept'
    finally:
        if mounted:
            subprocess.run(['umount', str(bench.folder / 'read_only')], check=False)


def _mount_read_only(path: Path) -> bool:
    """Mount an empty read-only file system, since permission bits do not bind root."""
    path.mkdir()
    if os.geteuid() or shutil.which('mount') is None:
        return False
    done = subprocess.run(['mount', '-t', 'tmpfs', '-o', 'ro,size=64k', 'none', str(path)],
                          capture_output=True, check=False)
    return done.returncode == 0


def test_a_folder_that_becomes_unwritable_on_the_way(bench, monkeypatch):
    """The bag cannot be written any more; everything small is written all the same."""
    from teleop_eval.core.errors import OutputError
    from teleop_eval.sinks.bag_writer import BagWriter

    write = BagWriter.write
    count = 0

    def fail(self, *arguments):
        nonlocal count
        count += 1
        if count > 20:
            raise OutputError(f'Cannot write the recording {self.path}: no space is left; free '
                              'some.')
        write(self, *arguments)
    monkeypatch.setattr(BagWriter, 'write', fail)
    done = summarize(bench, faulty.write(bench.folder / 'rec', short()))
    assert done.status == 1
    done.sentence('Cannot write the recording', 'no space is left')
    summary = json.loads((done.folder / 'summary.json').read_text(encoding='utf-8'))
    assert summary['arms']['right']['inputs']['hand']['messages'] == 400
    assert (done.folder / 'metrics.csv').stat().st_size > 1000


@pytest.mark.parametrize(('arguments', 'words'), [
    ([], ('usage:', 'RECORDING')), (['{rec}', '--outt', 'x'], ('usage:', '--outt')),
    (['{rec}'], ('--config FILE is needed',)),
    (['{rec}', '--config', 'c', '--namespace', 'a b'], ("--namespace 'a b' is not valid",)),
])
def test_wrong_use_is_status_2(bench, arguments, words):
    path = faulty.write(bench.folder / 'rec', short())
    done = bench.command(*(one.format(rec=path) for one in arguments))
    assert (done.status, done.out) == (2, '')
    assert all(word in done.err for word in words) and 'Traceback' not in done.err
    assert 'usage:' in done.err or len(done.sentences) == 1


def test_as_a_process(tmp_path, files):
    (tmp_path / 'cut.mcap').write_bytes(files['mcap'][:200_000])
    (tmp_path / 'evaluator.yaml').write_text(CONFIG, encoding='utf-8')
    done = subprocess.run(
        [sys.executable, '-m', 'teleop_eval', 'summarize', 'cut.mcap', '--config',
         'evaluator.yaml', '--no-progress'], cwd=tmp_path, capture_output=True, text=True,
        timeout=120, check=False, env={'PYTHONPATH': str(ROOT), 'PATH': ''})
    assert done.returncode == 0
    assert done.stderr.startswith('teleop_eval summarize: cut.mcap ends early: ')
    assert done.stderr.count('\n') == 1
    assert 'Results: cut_summary' in done.stdout
