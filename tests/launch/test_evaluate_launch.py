# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""evaluate.launch.xml started for real: the node appears, publishes, ends with its files."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest
from launched import Launched, assert_complete, full_names, include, listening

launch_pytest = pytest.importorskip(
    'launch_pytest', reason='launch_pytest is missing; it comes with a ROS 2 installation')

CONFIG = """\
/**:
  ros__parameters:
    session:
      directory: {directory}
      record_inputs: true
    arms:
      right:
        operator: {{hand_topic: hand}}
        robot:
          joints_topic: robot_joints
          description_file: arm.urdf
          base_link: teardown_arm_base
          tip_link: teardown_arm_tool
        engaged: {{topic: engaged}}
        active_mapping: {{topic: mapping}}
"""
URDF = Path(__file__).parents[2] / 'config' / 'teardown_arm.urdf'


def start(folder: Path, domain: int, **arguments: str) -> Launched:
    """Return evaluate.launch.xml with a parameter file and a robot beside it."""
    (folder / 'a folder').mkdir()
    config = folder / 'a folder' / 'evaluate.yaml'
    config.write_text(CONFIG.format(directory=folder / 'sessions'), encoding='utf-8')
    # Named relative to the parameter file: found only if that one counts, not launch's own.
    (config.parent / 'arm.urdf').write_bytes(URDF.read_bytes())
    return include('evaluate.launch.xml', folder, domain, config=str(config), **arguments)


@launch_pytest.fixture
def plain(launch_domain: int, tmp_path: Path) -> tuple:
    """Launch with nothing but the parameter file."""
    launched = start(tmp_path, launch_domain)
    return launched.description, launched


@launch_pytest.fixture
def named(launch_domain: int, tmp_path: Path) -> tuple:
    """Launch in a namespace and on simulated time."""
    launched = start(tmp_path, launch_domain, namespace='/bench', use_sim_time='true')
    return launched.description, launched


@launch_pytest.fixture
def wrong(launch_domain: int, tmp_path: Path) -> tuple:
    """Launch with a parameter file that is not there."""
    launched = include('evaluate.launch.xml', tmp_path, launch_domain,
                       config=str(tmp_path / 'absent.yaml'))
    return launched.description, launched


@pytest.mark.launch(fixture=plain)
def test_the_node_appears_publishes_and_ends_with_its_files(plain: tuple) -> Iterator[None]:
    from diagnostic_msgs.msg import DiagnosticArray
    from sensor_msgs.msg import JointState

    launched = plain[-1]
    received: list[DiagnosticArray] = []
    with listening(launched.domain) as (node, until):
        node.create_subscription(DiagnosticArray, '/diagnostics', received.append, 10)
        until(lambda: '/teleop_eval' in full_names(node))
        status = until(lambda: received and received[-1].status)
        assert any('right' in one.name for one in status), [one.name for one in status]
        joints = node.create_publisher(JointState, '/robot_joints', 10)
        until(lambda: joints.get_subscription_count())
        joints.publish(JointState(name=['elbow_bend'], position=[0.5]))
        before = len(received)
        until(lambda: len(received) > before + 1)
    assert launched.exit_codes == []
    yield
    # One message without the wanted joints is nothing to evaluate.
    assert launched.exit_codes == [1]
    summary = assert_complete(launched.session(), 'summary', 'inputs')
    assert list(summary['arms']) == ['right']
    assert not any('arm.urdf' in text for text in summary['problems'])


@pytest.mark.launch(fixture=named)
def test_namespace_and_simulated_time_are_passed_on(named: tuple) -> Iterator[None]:
    from rcl_interfaces.srv import GetParameters

    launched = named[-1]
    with listening(launched.domain) as (node, until):
        until(lambda: '/bench/teleop_eval' in full_names(node))
        client = node.create_client(GetParameters, '/bench/teleop_eval/get_parameters')
        until(client.service_is_ready)
        answer = client.call_async(GetParameters.Request(names=['use_sim_time']))
        until(answer.done)
        assert answer.result().values[0].bool_value is True
    yield
    # Nothing was published, so there was nothing to evaluate.
    assert launched.exit_codes == [1]
    assert_complete(launched.session(), 'summary')


@pytest.mark.launch(fixture=wrong)
def test_a_missing_parameter_file_ends_the_launch(wrong: tuple) -> Iterator[None]:
    launched = wrong[-1]
    with listening(launched.domain) as (node, until):
        until(lambda: launched.exit_codes)
    yield
    assert launched.exit_codes == [1]
    assert not (launched.folder / 'sessions').exists()
