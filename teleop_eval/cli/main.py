# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The command `teleop_eval NAME`: find the command's module, run it, report its errors."""

from __future__ import annotations

import difflib
import importlib
import os
import re
import sys
from collections.abc import Sequence
from dataclasses import dataclass

from teleop_eval import __version__
from teleop_eval.core.errors import TeleopEvalError, UsageError

PROGRAM = 'teleop_eval'
STATUS_OK, STATUS_FAILURE, STATUS_USAGE = 0, 1, 2
# Longer than any path that people give.
_ENDLESS = re.compile(r'\S{1000,}')


@dataclass(frozen=True)
class Command:
    """A command: the module whose `main(argv)` runs it, and what the help says of it."""

    module: str
    text: str
    needs_ros: bool = False


# Modules are named, not imported: summarizing a recording needs no ROS installation.
COMMANDS = {
    'evaluate': Command('teleop_eval.nodes.evaluate',
                        'Evaluate a running teleoperation (ROS 2 node).', needs_ros=True),
    'summarize': Command('teleop_eval.cli.summarize',
                         'Evaluate a recording; needs no ROS installation.'),
    'demo': Command('teleop_eval.teardown_cell.run',
                    'Run a simulated teleoperation to try the evaluator on.', needs_ros=True),
}

_HELP = f"""\
usage: {PROGRAM} NAME [ARGUMENT ...]

Measure how well a motion mapping lets an operator's arm drive a robot arm.

commands:
{{commands}}

options:
  -h, --help   show this help and exit; "{PROGRAM} NAME --help" for that of a command
  --version    show the version and exit

example:
  {PROGRAM} summarize my_recording --config evaluator.yaml

It only listens: it commands no robot and is no safety function. A teleoperated arm can
injure; motion recordings are personal data.
"""


def main(argv: Sequence[str] | None = None) -> int:
    """
    Run the command that the arguments name and return the exit status.

    Parameters
    ----------
    argv
        Arguments without the program's name; not given: those of the process.

    Returns
    -------
    int
        0 success, 1 failure, 2 usage.

    """
    arguments = list(sys.argv[1:] if argv is None else argv)
    for stream in (sys.stdout, sys.stderr):
        # Topic and joint names may hold what the terminal's encoding cannot show.
        if hasattr(stream, 'reconfigure'):
            stream.reconfigure(errors='backslashreplace')
    label = PROGRAM
    if arguments and arguments[0] in COMMANDS:
        label = f'{PROGRAM} {arguments[0]}'
    try:
        status = _run(arguments)
        sys.stdout.flush()
        return status
    except TeleopEvalError as error:
        print(f'{label}: {one_line(str(error))}', file=sys.stderr)
        return error.exit_status
    except SystemExit as exit_:  # argparse, after it has printed its own message
        return exit_.code if isinstance(exit_.code, int) else STATUS_FAILURE
    except KeyboardInterrupt:
        print(f'{label}: Interrupted.', file=sys.stderr)
        return STATUS_FAILURE
    except BrokenPipeError:
        # The reader of our output, such as `head`, has left: the interpreter's own flush at
        # exit must not complain again.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return STATUS_FAILURE


def one_line(text: str) -> str:
    """Return text without the control characters and endless names of a hostile input."""
    text = _ENDLESS.sub(lambda found: f'{found[0][:80]}...{found[0][-40:]}', text)
    return ''.join(sign if sign.isprintable() else ' ' if sign.isspace() else '?'
                   for sign in text)


def help_text() -> str:
    """Return the list of commands with a line each."""
    width = max(map(len, COMMANDS))
    lines = (f'  {name:<{width}}  {command.text}' for name, command in COMMANDS.items())
    return _HELP.format(commands='\n'.join(lines))


def _run(arguments: list[str]) -> int:
    if not arguments:
        print(help_text(), end='', file=sys.stderr)
        return STATUS_USAGE
    name, *rest = arguments
    if name in ('-h', '--help'):
        print(help_text(), end='')
        return STATUS_OK
    if name == '--version':
        print(f'{PROGRAM} {__version__}')
        return STATUS_OK
    if name not in COMMANDS:
        raise UsageError(_unknown(name))
    command = COMMANDS[name]
    if command.needs_ros:
        _require_ros(name)
    status = importlib.import_module(command.module).main(rest)
    return STATUS_OK if status is None else int(status)


def _unknown(name: str) -> str:
    near = difflib.get_close_matches(name, COMMANDS, n=1, cutoff=0.5)
    hint = f'did you mean {near[0]!r}?' if near else f'there are {", ".join(COMMANDS)}.'
    what = 'option' if name.startswith('-') else 'command'
    return f'There is no {what} {name!r}; {hint}'


def _require_ros(name: str) -> None:
    """
    Raise in one sentence what would otherwise be a long traceback.

    Raises
    ------
    TeleopEvalError
        When ROS 2's Python library cannot be imported.

    """
    try:
        importlib.import_module('rclpy')
    except ImportError as error:
        raise TeleopEvalError(
            f"{name!r} needs rclpy, ROS 2's Python library, which cannot be imported "
            f'({error}); source a ROS 2 installation first, or evaluate a recording with '
            f"'{PROGRAM} summarize', which needs no ROS.") from error
