# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The whole demonstration over real DDS: numbers, topics, endings, nothing left behind."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

pytestmark = pytest.mark.timeout(300)

# A machine that delivers commands later than the simulated arm waits for them has changed the
# arm's motion, and with it the truth: the demo says so, and is run again. What does not depend
# on the machine is checked every time.
ATTEMPTS = 3

# Named like a node of the ROS command line, which is let in; prints the graph as JSON.
WATCHER = """
import json, sys, time, rclpy
rclpy.init(args=['--ros-args', '--disable-rosout-logs', '-r',
                 '/parameter_events:=/teardown_cell/watched'], domain_id=int(sys.argv[1]))
node = rclpy.create_node('_ros2cli_watcher', enable_rosout=False,
                         start_parameter_services=False)
time.sleep(float(sys.argv[2]))
nodes = sorted(set(node.get_node_names_and_namespaces()))
found = {
    'nodes': nodes,
    'topics': [name for name, _ in node.get_topic_names_and_types()],
    'services': [name for name, _ in node.get_service_names_and_types()],
    'publishers': {
        f'{space}/{name}': [
            topic for topic, _ in node.get_publisher_names_and_types_by_node(name, space)]
        for name, space in nodes},
}
print(json.dumps(found))
"""


def start_demo(domain: int, out: Path, seconds: float) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, '-m', 'teleop_eval', 'demo', '--domain', str(domain), '--out',
         str(out), '--seconds', str(seconds)],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


def read_until(process: subprocess.Popen[str], words: str) -> list[str]:
    """Return the lines printed up to one that has the words."""
    lines = []
    assert process.stdout is not None
    for line in process.stdout:
        lines.append(line)
        if words in line:
            return lines
    raise AssertionError(f'never said {words!r}:\n{"".join(lines)}')


def processes_of(domain: int) -> list[str]:
    """Return the command lines of living processes of a cell in a domain."""
    found = []
    for folder in Path('/proc').glob('[0-9]*'):
        try:
            words = (folder / 'cmdline').read_bytes().split(b'\0')
            environment = (folder / 'environ').read_bytes().split(b'\0')
        except OSError:
            continue
        if (f'ROS_DOMAIN_ID={domain}'.encode() in environment
                and any(b'teardown_cell' in word for word in words)):
            found.append(b' '.join(words).decode())
    return found


def wait_until_gone(domain: int) -> None:
    deadline = time.monotonic() + 60.0
    while processes_of(domain) and time.monotonic() < deadline:
        time.sleep(0.2)
    assert processes_of(domain) == []


@pytest.fixture
def demo(cell_domain: int, tmp_path: Path) -> Iterator[subprocess.Popen[str]]:
    process = start_demo(cell_domain, tmp_path, 20.0)
    yield process
    process.send_signal(signal.SIGTERM)
    try:
        process.communicate(timeout=60)
    except subprocess.TimeoutExpired:
        process.kill()
        process.communicate()


@pytest.mark.timeout(300 * ATTEMPTS)
def test_the_demo_measures_the_truth_and_stays_inside(cell_domain: int, tmp_path: Path) -> None:
    for attempt in range(ATTEMPTS):
        if _run_once(cell_domain, tmp_path / str(attempt)):
            return
    pytest.skip(f'The machine was too busy for the simulated arm in {ATTEMPTS} runs: no numbers '
                'to check.')


def _run_once(domain: int, out: Path) -> bool:
    """Check a whole run of the demo; return whether the machine was fast enough for numbers."""
    demo = start_demo(domain, out, 20.0)
    try:
        read_until(demo, 'engaged')
        watched = subprocess.run(
            [sys.executable, '-c', WATCHER, str(domain), '8'], capture_output=True, text=True,
            env={**os.environ, 'ROS_AUTOMATIC_DISCOVERY_RANGE': 'LOCALHOST'}, timeout=90,
            check=True)
        output, errors = demo.communicate(timeout=200)
    finally:
        demo.kill()
        demo.communicate()
    assert demo.returncode == 0, errors
    assert errors == ''
    _check_graph(json.loads(watched.stdout))
    (session,) = out.iterdir()
    summary = json.loads((session / 'summary.json').read_text())
    truth = json.loads((session / 'truth.json').read_text())
    assert 'mirror' in output and 'reach' in output and 'truth' in output
    assert str(session) in output and 'teleop_eval summarize' in output
    assert 'injure' in output and 'no safety function' in output
    assert max(map(len, output.split('Computing the truth')[1].split('This cell is')[0]
                   .splitlines())) <= 80
    assert processes_of(domain) == []
    assert ('too busy' in output) == (truth['largest_command_lateness_s'] > 0.4)
    if 'too busy' in output:
        return False
    assert 'largest part now: mapping: 0.' in output  # arm and operator have unlike links
    assert output.count(': fix first ') == 2
    _check_numbers(summary, truth)
    return True


def _check_graph(graph: dict) -> None:
    nodes = {f'{space.rstrip("/")}/{name}' for name, space in graph['nodes']}
    assert {f'/teardown_cell/{name}' for name in (
        'demo', 'operator', 'mapping', 'arm', 'teleop_eval')} <= nodes
    outside = [name for name in graph['topics'] + graph['services']
               if not name.startswith(('/teardown_cell/', '/_ros2cli_watcher/'))]
    assert outside == []
    commanding = [node for node, topics in graph['publishers'].items()
                  if '/teardown_cell/command' in topics]
    assert commanding == ['/teardown_cell/mapping']


def _check_numbers(summary: dict, truth: dict) -> None:
    arm = summary['arms']['right']
    assert arm['time_base']['base'] == 'stamp'
    assert set(arm['mappings']) == {'mirror', 'reach'}
    for label, mapping in arm['mappings'].items():
        metrics = mapping['metrics']
        true = truth['mappings'][label]
        latency = metrics['latency_s']
        assert latency['status'] == 'ok', latency['reason']
        # Within three standard errors, as the evaluator states them for one window. No
        # allowance for the grid: the delay is found between its steps. Windows that lie
        # elsewhere in the same motion than those of the truth differ by less than that. A
        # statement of more than 2 ms would be no excuse (0.8 to 1.7 ms were seen in eight).
        claimed = latency['details']['window_standard_error_s']
        assert claimed < 0.002
        assert abs(latency['value'] - true['noise_free_correlation_delay_s']) < 3.0 * claimed
        assert abs(metrics['latency_command_s']['value'] - 0.008) < 0.001
        # Without the delay, only noise is left between ideal and arm.
        assert metrics['tracking_error_compensated_rms_norm']['value'] < 0.01
        assert 0.02 < metrics['tracking_error_rms_norm']['value'] < 0.2
        assert metrics['engagements']['value'] == 1
    assert abs(arm['geometry']['robot_reach_m'] - 0.9) < 0.002


def test_ctrl_c_ends_early_with_what_was_measured(
        demo: subprocess.Popen[str], cell_domain: int, tmp_path: Path) -> None:
    read_until(demo, 'engaged')
    demo.send_signal(signal.SIGINT)
    output, errors = demo.communicate(timeout=120)
    assert demo.returncode == 1
    assert 'interrupted' in output and errors == ''
    (session,) = tmp_path.iterdir()
    assert (session / 'summary.json').is_file() and (session / 'truth.json').is_file()
    assert processes_of(cell_domain) == []


def test_a_process_that_dies_ends_the_demo_with_one_sentence(
        demo: subprocess.Popen[str], cell_domain: int) -> None:
    read_until(demo, 'engaged')
    (mapping,) = [folder for folder in Path('/proc').glob('[0-9]*')
                  if _is_mapping(folder, cell_domain)]
    os.kill(int(mapping.name), signal.SIGKILL)
    _, errors = demo.communicate(timeout=120)
    assert demo.returncode == 1
    assert errors.startswith('teleop_eval demo: The process mapping of the cell ended by signal')
    assert len(errors.strip().splitlines()) == 1
    assert processes_of(cell_domain) == []


def _is_mapping(folder: Path, domain: int) -> bool:
    try:
        words = (folder / 'cmdline').read_bytes().split(b'\0')
    except OSError:
        return False
    return b'teleop_eval.teardown_cell.mapping_node' in words and str(domain).encode() in words


def test_a_killed_demo_leaves_no_process_behind(
        demo: subprocess.Popen[str], cell_domain: int) -> None:
    read_until(demo, 'engaged')
    assert len(processes_of(cell_domain)) >= 4
    demo.kill()
    wait_until_gone(cell_domain)
