# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The command `summarize`: evaluate a recording as the live node would have done."""

from __future__ import annotations

import argparse
import re
import sys
from collections.abc import Sequence
from pathlib import Path

from teleop_eval.cli.main import STATUS_FAILURE, STATUS_OK, one_line
from teleop_eval.cli.offline_run import OfflineRun
from teleop_eval.core.errors import RecordingError, UsageError
from teleop_eval.core.settings import from_parameters
from teleop_eval.sinks.report import report
from teleop_eval.sinks.session_folder import CONFIG_FILE, INPUTS_BAG, SUMMARY_BAG
from teleop_eval.sources.description_file import read_descriptions
from teleop_eval.sources.mapping_kinds import load_mapping_kinds
from teleop_eval.sources.parameter_file import load_parameters

NODE_NAME = 'teleop_eval'

# Parameters that ROS itself gives to every node; they say nothing about an evaluation.
_OF_ROS = re.compile(r'use_sim_time|start_type_description_service|qos_overrides\..*')

_EPILOG = """\
example:
  teleop_eval summarize my_recording --config evaluator.yaml --out my_results

To see what the other configured mappings would have asked of the robot:
  teleop_eval summarize my_recording --config evaluator.yaml --candidates

A session folder that the live node wrote with session.record_inputs needs no --config:
  teleop_eval summarize teleop_eval_sessions/2026-01-31_14-05-00 --out again

exit status
  0  evaluated. Problems of the data (an absent topic, NaN, a cut recording, clocks that are
     not synchronised, ...) are printed and stand in summary.json under "problems"
  1  nothing could be evaluated (no metric has a value under any mapping), a result could not
     be written, or interrupted
  2  usage

Motion recordings are personal data: keep them, and what is computed from them, as your
consent forms say.
"""


def main(argv: Sequence[str] | None = None) -> int:
    """
    Run the command and return the exit status.

    Raises
    ------
    TeleopEvalError
        With one sentence, when nothing can be evaluated or a result cannot be written.

    """
    options = _parser().parse_args(argv)
    recording, config = _locate(options.recording, options.config)
    namespace = _namespace(options.namespace)
    parameters = load_parameters(config, node_name=NODE_NAME, namespace=namespace)
    flat = {key: value for key, value in parameters.items() if not _OF_ROS.fullmatch(key)}
    if recording != options.recording and config.parent == options.recording:
        # A session is called as its folder is; the name asked for may have been taken.
        flat.pop('session.name', None)
    for problem in load_mapping_kinds(flat):
        print(f'teleop_eval summarize: {one_line(problem)}', file=sys.stderr)
    settings = from_parameters(flat, where=str(config))
    name = options.recording.resolve().name
    run = OfflineRun(
        recording, settings, flat, source=name,
        out=options.out or Path(f'{name.removesuffix(".mcap").removesuffix(".db3")}_summary'),
        descriptions=read_descriptions(settings, config.parent),
        resolve=lambda topic: resolve_topic(topic, namespace), progress=options.progress,
        simulated_time=parameters.get('use_sim_time') is True, candidates=options.candidates)
    outcome = run.run()
    report('teleop_eval summarize', outcome.summary, outcome.folder)
    return STATUS_OK if outcome.complete else STATUS_FAILURE


def resolve_topic(topic: str, namespace: str) -> str:
    """
    Return a topic's full name as ROS 2 resolves it for the node.

    Parameters
    ----------
    topic
        Absolute ('/a'), relative ('a') or private ('~/a') name.
    namespace
        The node's namespace, '/' or such as '/cell'.

    """
    if topic.startswith('/'):
        return topic
    base = namespace.rstrip('/')
    if topic.startswith('~'):
        return f'{base}/{NODE_NAME}{topic[1:]}'
    return f'{base}/{topic}'


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog='teleop_eval summarize', epilog=_EPILOG,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description='Evaluate a recording and write a session folder. Needs no ROS installation.')
    parser.add_argument(
        'recording', type=Path, metavar='RECORDING',
        help='rosbag2 folder, single .mcap or .db3 file, or session folder with inputs/')
    parser.add_argument(
        '--config', type=Path, metavar='FILE',
        help='ROS parameter file (default for a session folder: its own config.yaml)')
    parser.add_argument(
        '--out', type=Path, metavar='DIR',
        help='new folder for the results (default: RECORDING_summary in the current folder)')
    parser.add_argument(
        '--namespace', default='/', metavar='NS',
        help='namespace in which relative topic names were recorded (default: /)')
    parser.add_argument(
        '--candidates', action='store_true',
        help='also predict what every configured mapping would have asked of the robot for the '
        "same operator motion (a prediction without the operator's adaptation)")
    parser.add_argument(
        '--no-progress', dest='progress', action='store_false', help='show no progress')
    return parser


def _locate(recording: Path, config: Path | None) -> tuple[Path, Path]:
    """
    Return where the messages are and where the parameters are.

    Raises
    ------
    RecordingError
        For a session folder without inputs, and where there is nothing to read.
    UsageError
        When a recording comes without --config.

    """
    own_config = recording / CONFIG_FILE
    try:
        exists = recording.exists()
        is_session = own_config.is_file() and (
            (recording / SUMMARY_BAG).is_dir() or (recording / INPUTS_BAG).is_dir())
    except OSError as error:
        raise RecordingError(
            f'{recording} cannot be read: {error.strerror or error}; check the path.') from error
    if is_session:
        if not (recording / INPUTS_BAG).is_dir():
            raise RecordingError(
                f'The session folder {recording} has no {INPUTS_BAG}/, so there is nothing to '
                'evaluate again; record with session.record_inputs: true next time.')
        return recording / INPUTS_BAG, config or own_config
    if not exists:
        raise RecordingError(f'There is no recording {recording}; check the path.')
    if config is None:
        raise UsageError(
            f'{recording} is no session folder, so --config FILE is needed: the parameter file '
            'that names its topics.')
    return recording, config


def _namespace(text: str) -> str:
    """
    Return a namespace with its leading slash.

    Raises
    ------
    UsageError
        When ROS 2 would refuse it.

    """
    parts = [part for part in text.split('/') if part]
    for part in parts:
        if not re.fullmatch('[A-Za-z_][A-Za-z0-9_]*', part):
            raise UsageError(
                f'--namespace {text!r} is not valid: {part!r} must start with a letter and hold '
                'only letters, digits and underscores.')
    return '/' + '/'.join(parts)
