# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The command `demo`: a simulated teardown cell beside the evaluator, in separate processes."""

from __future__ import annotations

import argparse
import json
import os
import sys
import tempfile
import time
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

from std_msgs.msg import Int64

from teleop_eval.cli.called import path_here, program_here
from teleop_eval.core.errors import OutputError, TeleopEvalError, UsageError
from teleop_eval.resources import config_file
from teleop_eval.sinks.tables import print_summary
from teleop_eval.teardown_cell import guard
from teleop_eval.teardown_cell.arm import arm_chain
from teleop_eval.teardown_cell.cell_node import KEEP_INSIDE, LATCHED, CellNode
from teleop_eval.teardown_cell.children import Children
from teleop_eval.teardown_cell.live_line import LiveValues, live_line
from teleop_eval.teardown_cell.plan import (
    COMMAND_TOPIC,
    DIAGNOSTICS_TOPIC,
    GRACE_S,
    HAND_TOPIC,
    JOINT_STATES_TOPIC,
    MAX_SECONDS,
    MIN_SECONDS,
    NAMESPACE,
    START_TOPIC,
    Plan,
)
from teleop_eval.teardown_cell.truth import truth_document

EVALUATOR = 'teleop_eval'
CELL_PROCESSES = ('operator', 'mapping', 'arm')
READY_S, EVALUATOR_END_S, LINE_EVERY_S = 60.0, 120.0, 2.0
# The evaluator waits this long for late samples before it closes a window; then some.
AFTER_END_S = 1.5
# Halves too short for the usual latency window of 10 s get one of 4 s.
SHORT_RUN_S, SHORT_WINDOW_S, WINDOW_S = 30.0, 4.0, 10.0

CAUTION = """\
This cell is simulated: operator, arm, delays and noise are invented. A real teleoperated arm
can injure: risk assessment, guarding and stop functions are for qualified persons. The
evaluator only measures; it is no safety function. Recordings of people are personal data."""

EPILOG = f"""\
example:
  teleop_eval demo --seconds 40 --out demo_sessions

Everything runs on this machine, in a domain of its own and under {NAMESPACE}; it is refused
where another node is visible in that domain, since the cell commands an arm. Ctrl-C ends the
run early and shows what was measured.

exit status: 0 success; 1 failure or interrupted; 2 usage.
"""


def main(argv: Sequence[str] | None = None) -> int:
    """
    Run the demonstration and return the exit status.

    Raises
    ------
    TeleopEvalError
        With one sentence, when the domain is shared, a process fails or a result cannot be
        written.

    """
    options = _parser().parse_args(argv)
    plan = Plan(seconds=options.seconds, seed=options.seed)
    if not MIN_SECONDS <= plan.seconds <= MAX_SECONDS:
        raise UsageError(f'--seconds is {plan.seconds:g}, but must be {MIN_SECONDS:g} to '
                         f'{MAX_SECONDS:g}: each half needs time to be measured in.')
    if plan.seed < 0:
        raise UsageError(f'--seed is {plan.seed}, but must not be negative.')
    with CellNode('demo', options.domain) as cell:
        session = _free_session(options.out)
        _look(cell)
        outcome = None if cell.stopped else _session(cell, plan, session)
    if outcome is None:
        _say('Interrupted before the start: nothing was measured.')
        return 1
    return _report(session, plan, outcome)


@dataclass(frozen=True)
class Outcome:
    """Whether the run reached its end, and how late the latest command came, s."""

    finished: bool
    lateness_s: float


def _session(cell: CellNode, plan: Plan, session: Path) -> Outcome | None:
    """Run all processes; return None when interrupted before the start."""
    with tempfile.TemporaryDirectory(prefix='teardown_cell_') as logs:
        with Children(Path(logs), os.environ) as children:
            _start_children(children, cell, plan, session)
            if not _wait_until_ready(children, cell):
                return None
            outcome = _run(children, cell, plan)
            _say('The evaluator finishes its files ...')
            children.finish(EVALUATOR, patience_s=EVALUATOR_END_S,
                            hurry=lambda: cell.signals > 1)
            return outcome


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog='teleop_eval demo', epilog=EPILOG,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description='Run a simulated battery-teardown cell beside the evaluator and show the '
                    'measured numbers next to the true ones.')
    parser.add_argument('--seconds', type=float, default=Plan().seconds, metavar='S',
                        help='length of the run (default: %(default)g)')
    parser.add_argument('--out', type=Path, default=Path('teleop_eval_sessions'), metavar='DIR',
                        help='folder in which the session gets a folder (default: %(default)s)')
    parser.add_argument('--domain', type=int, default=guard.DEFAULT_DOMAIN, metavar='N',
                        help='ROS domain, 1 to 101 (default: %(default)d)')
    parser.add_argument('--seed', type=int, default=Plan().seed, metavar='N',
                        help="fixes the operator's motion (default: %(default)d)")
    return parser


def window_s(plan: Plan) -> float:
    """Return the length of the latency windows for a plan."""
    return SHORT_WINDOW_S if plan.seconds < SHORT_RUN_S else WINDOW_S


def evaluator_command(plan: Plan, session: Path) -> list[str]:
    """Return the command line of the evaluator beside the cell."""
    # Texts are quoted as JSON, else ROS would take a folder named 2026 for a number.
    parameters = {
        'session.directory': json.dumps(str(session.parent)),
        'session.name': json.dumps(session.name),
        'latency.window_s': f'{window_s(plan):.1f}',
    }
    command = [sys.executable, '-m', 'teleop_eval.teardown_cell.evaluator_process',
               str(os.getpid()), '--ros-args', '-r', f'__ns:={NAMESPACE}', *KEEP_INSIDE,
               '-r', f'/diagnostics:={DIAGNOSTICS_TOPIC}',
               '--params-file', str(config_file('teardown_cell.yaml'))]
    for name, value in parameters.items():
        command += ['-p', f'{name}:={value}']
    return command


def _look(cell: CellNode) -> None:
    _say(f'Looking whether domain {cell.domain} is free ...')

    def check() -> None:
        cell.refuse_foreign()
        guard.refuse_second_cell(cell.nodes(), cell.full_name, cell.domain)

    guard.look_around(check, lambda: cell.stopped)
    _say(f'Domain {cell.domain} is free. To listen, in another terminal with ROS 2:\n'
         f'  ROS_DOMAIN_ID={cell.domain} ROS_AUTOMATIC_DISCOVERY_RANGE=LOCALHOST '
         f'ros2 topic echo {DIAGNOSTICS_TOPIC}')


def _free_session(out: Path) -> Path:
    """Return a folder that does not exist yet, below the one asked for."""
    base = out.expanduser().absolute() / datetime.now().strftime('teardown_cell_%Y%m%d_%H%M%S')
    path, number = base, 1
    while path.exists():
        number += 1
        path = base.with_name(f'{base.name}_{number}')
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise OutputError(f'--out {out} cannot be made: {error.strerror}; choose another '
                          'folder.') from error
    return path


def _start_children(children: Children, cell: CellNode, plan: Plan, session: Path) -> None:
    children.start(EVALUATOR, evaluator_command(plan, session))
    for name in CELL_PROCESSES:
        children.start(name, [
            sys.executable, '-m', f'teleop_eval.teardown_cell.{name}_node',
            '--domain', str(cell.domain), '--seconds', repr(plan.seconds),
            '--seed', str(plan.seed), '--parent', str(os.getpid())])


def _wait_until_ready(children: Children, cell: CellNode) -> bool:
    """Wait until all are there and hear each other; return whether that was not interrupted."""
    _say('Starting operator, mapping, arm and evaluator ...')
    deadline = time.monotonic() + READY_S
    while missing := _missing(cell):
        children.check()
        cell.watch()
        if time.monotonic() > deadline:
            raise TeleopEvalError(f'The cell did not get ready within {READY_S:.0f} s: there is '
                                  f'still no {missing[0]}; try again on a less busy machine.')
        if cell.stopped:
            return False
        time.sleep(0.1)
    return not cell.stopped


def _run(children: Children, cell: CellNode, plan: Plan) -> Outcome:
    """Give the start and watch until the end."""
    live = LiveValues(cell)
    start = cell.node.create_publisher(Int64, START_TOPIC, LATCHED)
    start_ns = time.time_ns() + 1_000_000_000
    start.publish(Int64(data=start_ns))
    finished = _watch(children, cell, plan, live, start_ns)
    return Outcome(finished, live.lateness_s)


def _watch(children: Children, cell: CellNode, plan: Plan, live: LiveValues,
           start_ns: int) -> bool:
    """Show what happens; return whether the end was reached."""
    next_line = 0.0
    while not cell.stopped:
        t = (time.time_ns() - start_ns) * 1e-9
        children.check()
        cell.watch()
        live.update()
        over = t >= plan.seconds + AFTER_END_S
        if over or next_line <= t < plan.seconds:
            next_line += LINE_EVERY_S
            _say(live_line(plan, t, live.values))
            if news := live.news():
                _say(news)
        if over:
            return True
        time.sleep(0.05)
    return False


def _missing(cell: CellNode) -> list[str]:
    """Return what is not there yet, as words."""
    visible = {guard.full_name(*node) for node in cell.nodes()}
    nodes = [name for name in (*CELL_PROCESSES, EVALUATOR)
             if f'{NAMESPACE}/{name}' not in visible]
    # Of the mapping and the evaluator; of the evaluator; of the arm and the evaluator.
    wanted = {HAND_TOPIC: 2, JOINT_STATES_TOPIC: 1, COMMAND_TOPIC: 2}
    topics = [topic for topic, count in wanted.items()
              if cell.node.count_subscribers(topic) < count]
    return ([f'node {NAMESPACE}/{name}' for name in nodes]
            + [f'listener to {topic}' for topic in topics])


def _report(session: Path, plan: Plan, outcome: Outcome) -> int:
    summary = _read_summary(session)
    _say('Computing the truth ...\n')
    chain = arm_chain(config_file('teardown_arm.urdf').read_text('utf-8'))
    truth = truth_document(chain, plan, window_s=window_s(plan))
    truth['largest_command_lateness_s'] = outcome.lateness_s
    _write(session / 'truth.json', json.dumps(truth, indent=1) + '\n')
    print_summary(summary, truth=truth)
    folder = path_here(session)
    _say(f'\n{CAUTION}\n\nSession folder: {folder}\n'
         f'Next: {program_here()} summarize {folder} --out {session.name}_again')
    if outcome.lateness_s > GRACE_S:
        _say(f'This machine was too busy: commands came up to {outcome.lateness_s:.2f} s late, '
             'so the arm waited and the numbers may differ from the truth; run it again.')
    if not outcome.finished:
        _say('The run was interrupted: the numbers cover what was measured until then.')
    return 0 if outcome.finished else 1


def _read_summary(session: Path) -> dict[str, Any]:
    path = session / 'summary.json'
    try:
        return dict(json.loads(path.read_text('utf-8')))
    except (OSError, ValueError) as error:
        raise OutputError(f'The evaluator left no readable {path} ({error}); look at '
                          f'{session}.') from error


def _write(path: Path, text: str) -> None:
    try:
        path.write_text(text, 'utf-8')
    except OSError as error:
        raise OutputError(f'{path} cannot be written: {error.strerror}.') from error


def _say(text: str) -> None:
    print(text, flush=True)
