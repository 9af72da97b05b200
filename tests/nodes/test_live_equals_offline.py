# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The property that users check first: live numbers are the recording's numbers."""

from __future__ import annotations

from pathlib import Path

import pytest
from live_and_offline import JOINTS, altered, differences, metrics, record_session

from teleop_eval.cli.main import main

SECONDS = 34.0

PARAMETERS = """\
/**:
  ros__parameters:
    session:
      directory: {directory}
      record_inputs: true
    arms:
      right:
        operator:
          hand_topic: hand
          joints_topic: operator_joints
          shoulder_m: [0.0, 0.0, 0.4]
          arm_length_m: 0.6
        robot:
          joints_topic: joint_states
          description_topic: robot_description
          base_link: teardown_arm_base
          tip_link: teardown_arm_tool
        command: {{topic: command}}
        engaged: {{topic: engaged}}
        active_mapping: {{topic: mapping}}
        mappings:
          direct:
            kind: joint_space
            joints:
{joints}
          reach: {{kind: task_space}}
"""


@pytest.mark.timeout(400)
def test_live_numbers_equal_those_of_the_recorded_inputs(domain: int, tmp_path: Path):
    """Every metric to 1e-9 relative; and the comparison notices one altered sample."""
    sources = '\n'.join(f'              {joint}: {{source: o_{joint}}}' for joint in JOINTS)
    session = record_session(
        tmp_path, PARAMETERS.format(directory=tmp_path / 'sessions', joints=sources),
        'publish_motion.py', SECONDS)
    live = metrics(session)
    values = {path.rsplit('/', 1)[-1]: metric['value'] for path, metric in live.items()}
    # The run is worth comparing: both mappings, delays, workspace and clutch gave numbers.
    for wanted in ('latency_s', 'tracking_error_compensated_rms_norm', 'workspace_overlap',
                   'engagements', 'joint_error_rms'):
        assert values[wanted] is not None, live
    assert {path.split('/')[3] for path in live if '/mappings/' in path} == {'direct', 'reach'}

    again = tmp_path / 'again'
    status = main(['summarize', str(session), '--out', str(again), '--no-progress'])
    assert status == 0
    assert differences(live, metrics(again)) == []

    copy = altered(session, tmp_path / 'altered', share=0.45)
    main(['summarize', str(copy), '--out', str(tmp_path / 'changed'), '--no-progress'])
    changed = differences(live, metrics(tmp_path / 'changed'))
    assert any('joint_error_max' in text or 'joint_error_rms' in text for text in changed)
