# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The command `evaluate`: run the live node until it is told to stop."""

from __future__ import annotations

import re
import sys
import time
from collections.abc import Callable, Sequence
from pathlib import Path

import rclpy
from rclpy.context import Context
from rclpy.executors import SingleThreadedExecutor
from rclpy.impl.implementation_singleton import rclpy_implementation
from rclpy.signals import SignalHandlerOptions
from rclpy.utilities import remove_ros_args

from teleop_eval.core.errors import ConfigError, OutputError, UsageError
from teleop_eval.nodes.evaluator_node import NODE_NAME, EvaluatorNode
from teleop_eval.nodes.parts import Parts
from teleop_eval.nodes.stop_signals import StopSignals
from teleop_eval.sinks.report import report
from teleop_eval.sources.parameter_file import load_parameters

# Messages are collected meanwhile; their receive times are the middleware's.
CYCLE_S = 0.05
# The longest piece of deferred work: well below a cycle, so that services are answered.
SLICE_S = 0.01

HELP = """\
usage: teleop_eval evaluate --ros-args --params-file FILE [-r OLD:=NEW] [-p NAME:=VALUE]

Evaluate a running teleoperation. The node listens to the topics that the parameter file
names, publishes /diagnostics, ~/ARM/METRIC and ~/summary, and writes a session folder.
Ctrl-C finishes the files. It sends no command and is no safety function.

services (std_srvs/srv/Trigger):
  ~/start_session, ~/stop_session, ~/reset

example:
  teleop_eval evaluate --ros-args --params-file evaluate.yaml -p session.record_inputs:=true

exit status
  0  ended by Ctrl-C or SIGTERM with complete files. Problems of the data (an absent topic, NaN,
     clocks that are not synchronised, ...) are printed and stand in summary.json under
     "problems"
  1  wrong parameters, nothing could be evaluated (no metric has a value under any mapping), or
     a result could not be written
  2  usage
"""


def main(argv: Sequence[str] | None = None, *, parts: Parts | None = None) -> int:
    """
    Run the node until a signal ends it.

    Parameters
    ----------
    argv
        Arguments without the program's name; not given: those of the process.
    parts
        Evaluator, folder and decoder; not given: the real ones.

    Returns
    -------
    int
        0 when the session's files are complete; 1 when no metric has a value.

    Raises
    ------
    TeleopEvalError
        With one sentence, when arguments or parameters cannot be used or a file cannot be
        written.

    """
    arguments = list(sys.argv[1:] if argv is None else argv)
    if any(word in ('-h', '--help') for word in _before_ros(arguments)):
        sys.stdout.write(HELP)
        return 0
    files = _parameter_files(arguments)
    context = Context()
    with StopSignals() as stop:
        try:
            _start_ros(arguments, context)
            where = ', '.join(files) or 'the parameters'
            folder = Path(files[-1]).parent if files else Path()
            node = EvaluatorNode(context=context, where=where, folder=folder, parts=parts)
            try:
                run(node, context, lambda: stop.requested)
            finally:
                stop.requested = True  # from here on a signal only asks for patience
                node.close()
                _tell_end(node)
                node.destroy_node()
            if node.exit_problem:
                raise OutputError(node.exit_problem)
            if node.nothing:
                return 1  # the sentence is among the problems that were printed
        finally:
            context.try_shutdown()
    return 0


def run(node: EvaluatorNode, context: Context, stopped: Callable[[], bool]) -> None:
    """
    Evaluate and publish in the node's own loop until told to stop; a thread reads the inputs.

    The executor serves services and parameters only, without waiting: waiting in it costs
    five times more than sleeping, and spinning would take the inputs' messages.
    """
    executor = SingleThreadedExecutor(context=context)
    executor.add_node(node)
    try:
        with node.inputs.reading():
            while not stopped() and context.ok():
                begun = time.monotonic()
                executor.spin_once(timeout_sec=0.0)
                if node.step():
                    continue
                left = CYCLE_S - (time.monotonic() - begun)
                while left > 2 * SLICE_S and node.background(SLICE_S):
                    left = CYCLE_S - (time.monotonic() - begun)
                if left > 0.0:
                    time.sleep(left)
    finally:
        executor.remove_node(node)
        executor.shutdown()


def _before_ros(arguments: Sequence[str]) -> list[str]:
    words = list(arguments)
    return words[:words.index('--ros-args')] if '--ros-args' in words else words


def _parameter_files(arguments: Sequence[str]) -> list[str]:
    """
    Return the parameter files named; each is read first for the sake of its error texts.

    rcl would refuse a bad file too, but without the line and the remedy, and would lose some
    values without a word.
    """
    files = [after for before, after in zip(arguments, arguments[1:], strict=False)
             if before == '--params-file']
    name = _remapped(arguments, '__node', _remapped(arguments, '__name', NODE_NAME))
    for file in files:
        load_parameters(Path(file), node_name=name, namespace=_remapped(arguments, '__ns', '/'))
    return files


def _remapped(arguments: Sequence[str], rule: str, default: str) -> str:
    given = [word.partition(':=')[2] for word in arguments if word.startswith(f'{rule}:=')]
    return given[-1] if given else default


def _start_ros(arguments: list[str], context: Context) -> None:
    try:
        rclpy.init(args=arguments, context=context,
                   signal_handler_options=SignalHandlerOptions.NO)
        left = remove_ros_args(arguments)
    except rclpy_implementation.RCLError as error:
        # rcl appends the places in its own source.
        text = re.sub(r',? at /\S+:\d+', '', str(error)).removeprefix('failed to initialize rcl: ')
        raise ConfigError(f'ROS cannot use the arguments: {text.rstrip(".")}.') from error
    if left:
        raise UsageError(f'There is no argument {left[0]!r}; ROS arguments stand behind '
                         '--ros-args, see --help.')


def _tell_end(node: EvaluatorNode) -> None:
    if node.last_path is None or node.last_summary is None:
        return
    try:
        report('teleop_eval evaluate', node.last_summary, node.last_path)
    except OSError:
        pass  # the terminal is gone, as after SIGHUP; the files are not
