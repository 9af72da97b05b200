# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The dispatcher: help, versions, names, exit statuses; in process and as a process."""

from __future__ import annotations

import os
import subprocess
import sys
import types
from pathlib import Path

import pytest

from teleop_eval import __version__
from teleop_eval.cli import main as cli
from teleop_eval.core.errors import ConfigError, UsageError

ROOT = Path(__file__).parents[2]


def run(*arguments, code=None, **kwargs):
    """Run `python -m teleop_eval`, or the code given, as a process."""
    start = ['-c', code] if code else ['-m', 'teleop_eval']
    environment = {**os.environ, 'PYTHONPATH': str(ROOT)}
    return subprocess.run([sys.executable, *start, *arguments], capture_output=True, text=True,
                          env=environment, timeout=120, check=False, **kwargs)


@pytest.fixture
def command(monkeypatch):
    """Return a function that puts a command of its own behind the name 'summarize'."""
    def put(body):
        module = types.ModuleType('a_command')
        module.main = body
        monkeypatch.setitem(sys.modules, 'a_command', module)
        monkeypatch.setitem(cli.COMMANDS, 'summarize', cli.Command('a_command', 'Try.'))
    return put


def test_help_lists_every_command_and_an_example():
    process = run('--help')
    assert process.returncode == 0 and process.stderr == ''
    for name, described in cli.COMMANDS.items():
        assert f'  {name}' in process.stdout and described.text in process.stdout
    assert 'example:' in process.stdout
    assert max(map(len, process.stdout.splitlines())) <= 99


def test_version_and_no_command():
    process = run('--version')
    assert (process.returncode, process.stdout) == (0, f'teleop_eval {__version__}\n')
    process = run()
    assert process.returncode == 2 and process.stdout == ''
    assert process.stderr.startswith('usage: ')


@pytest.mark.parametrize('name, text', [
    ('sumarize', "There is no command 'sumarize'; did you mean 'summarize'?"),
    ('Evaluate', "did you mean 'evaluate'?"),
    ('xyzzy', 'there are evaluate, summarize, demo.'),
    ('--verbose', "There is no option '--verbose'"),
    ('a\x1b[31m\nb', r"There is no command 'a\x1b[31m\nb'"),
    ('', "There is no command ''"),
])
def test_unknown_name_is_a_usage_error_in_one_line(name, text, capsys):
    assert cli.main([name]) == 2
    read = capsys.readouterr()
    assert read.out == ''
    assert text in read.err and read.err.startswith('teleop_eval: ')
    assert read.err.count('\n') == 1 and '\x1b' not in read.err


def test_every_command_exists():
    for command in cli.COMMANDS.values():
        assert (ROOT / (command.module.replace('.', '/') + '.py')).is_file(), command.module


def test_arguments_and_status_pass_through(command):
    seen = []
    command(lambda argv: seen.append(argv) or 7)
    assert cli.main(['summarize', 'a', '--b']) == 7
    assert seen == [['a', '--b']]
    command(lambda argv: None)
    assert cli.main(['summarize']) == 0


@pytest.mark.parametrize('error, status', [(ConfigError('A is\n\x1b[2J wrong.'), 1),
                                           (UsageError('A is\n\x1b[2J wrong.'), 2)])
def test_errors_of_ours_are_one_line_without_control_characters(command, capsys, error, status):
    def fail(argv):
        raise error
    command(fail)
    assert cli.main(['summarize']) == status
    assert capsys.readouterr().err == 'teleop_eval summarize: A is ?[2J wrong.\n'


def test_other_errors_show_their_traceback(command):
    def fail(argv):
        raise KeyError('a bug')
    command(fail)
    with pytest.raises(KeyError, match='a bug'):
        cli.main(['summarize'])


def test_interruption_is_a_sentence(command, capsys):
    def fail(argv):
        raise KeyboardInterrupt
    command(fail)
    assert cli.main(['summarize']) == 1
    assert capsys.readouterr().err == 'teleop_eval summarize: Interrupted.\n'


def test_usage_error_of_a_command_is_status_2(command):
    def fail(argv):
        raise SystemExit(2)
    command(fail)
    assert cli.main(['summarize']) == 2


def test_reader_that_leaves_early_is_no_error():
    """Stands for `teleop_eval --help | head -0`: nobody reads the other end."""
    read_end, write_end = os.pipe()
    os.close(read_end)
    process = subprocess.run(
        [sys.executable, '-m', 'teleop_eval', '--help'], stdout=write_end,
        stderr=subprocess.PIPE, text=True, timeout=120, check=False,
        env={**os.environ, 'PYTHONPATH': str(ROOT)})
    os.close(write_end)
    assert (process.returncode, process.stderr) == (1, '')


def test_terminal_that_shows_only_ascii_is_enough(monkeypatch):
    monkeypatch.setenv('PYTHONIOENCODING', 'ascii')
    process = run(code="""
import sys, types
from teleop_eval.cli import main as cli
module = types.ModuleType('m')
module.main = lambda argv: print('\\u9759 \\ud800')
sys.modules['m'] = module
cli.COMMANDS['summarize'] = cli.Command('m', '')
sys.exit(cli.main(['summarize']))
""")
    assert (process.returncode, process.stdout) == (0, '\\u9759 \\ud800\n'), process.stderr


BLOCKED = """
import sys
class Block:
    def find_spec(self, name, path=None, target=None):
        if name.split('.')[0] == 'rclpy':
            raise ModuleNotFoundError("No module named 'rclpy'", name='rclpy')
sys.meta_path.insert(0, Block())
from teleop_eval.cli.main import main
status = main(sys.argv[1:])
assert not any(name.split('.')[0] == 'rclpy' for name in sys.modules)
sys.exit(status)
"""


@pytest.mark.parametrize('name', ['evaluate', 'demo'])
def test_without_ros_the_live_commands_say_so_in_one_line(name):
    process = run(name, code=BLOCKED)
    assert process.returncode == 1
    assert process.stderr.startswith(f"teleop_eval {name}: '{name}' needs rclpy, ROS 2's")
    assert process.stderr.count('\n') == 1


def test_without_ros_the_rest_works():
    assert run('--help', code=BLOCKED).returncode == 0
    process = run('summarize', '--help', code=BLOCKED)
    assert process.returncode == 0, process.stderr


def test_help_imports_no_command():
    code = """
import sys
from teleop_eval.cli.main import main
main(['--help'])
parts = ('teleop_eval.nodes', 'teleop_eval.sinks', 'numpy', 'rclpy')
print([name for name in sys.modules if name.startswith(parts)])
"""
    assert run(code=code).stdout.endswith('[]\n')
