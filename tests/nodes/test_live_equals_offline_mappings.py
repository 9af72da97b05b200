# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Live numbers are the recording's numbers: mapping kinds, error budget, frequency response."""

from __future__ import annotations

from pathlib import Path

import pytest
from live_and_offline import altered, differences, metrics, record_session, summary

from teleop_eval.cli.main import main

# Ten segments of 4 s without a gap are needed for a frequency response.
SECONDS = 46.0
TERMS = ('mapping', 'processing_delay', 'command', 'response_delay', 'residual')

PARAMETERS = """\
/**:
  ros__parameters:
    session:
      directory: {directory}
      record_inputs: true
    time:
      max_gap_s: 2.0  # a busy machine may stop the publisher for a moment
    latency: {{window_s: 6.0, max_s: 0.5}}
    arms:
      changing:
        operator:
          joints_topic: leader
          description_topic: leader_description
          base_link: teardown_arm_base
          tip_link: teardown_arm_tool
          rate_topic: stick
        robot:
          joints_topic: joint_states
          description_topic: robot_description
          base_link: teardown_arm_base
          tip_link: teardown_arm_tool
        command: {{topic: command}}
        engaged: {{topic: engaged}}
        active_mapping: {{topic: mapping}}
        mappings:
          reach: {{kind: task_space, scale: 0.9}}
          ratchet: {{kind: relative, scaling: metric, scale: 0.8}}
          driven: {{kind: rate, dead_band_mps: 0.02, max_speed_mps: 0.4}}
      steady:
        operator:
          hand_topic: hand
          shoulder_topic: shoulder
          arm_length_m: 0.6
        robot:
          joints_topic: joint_states
          description_topic: robot_description
          base_link: teardown_arm_base
          tip_link: teardown_arm_tool
        mappings:
          reach: {{kind: task_space}}
"""


@pytest.mark.timeout(400)
def test_live_numbers_of_all_mapping_kinds_equal_those_of_the_recorded_inputs(
        domain: int, tmp_path: Path) -> None:
    """Values to 1e-9 relative, statuses, reasons, advice; and one altered sample is noticed."""
    session = record_session(
        tmp_path, PARAMETERS.format(directory=tmp_path / 'sessions'), 'publish_mappings.py',
        SECONDS)
    live = summary(session)
    ok_where_it_must_be(live)
    again = tmp_path / 'again'
    assert main(['summarize', str(session), '--out', str(again), '--no-progress']) == 0
    assert differences(metrics(session), metrics(again)) == []
    assert differences(evaluated(live), evaluated(summary(again))) == []
    # Window by window too.
    assert (session / 'windows.csv').read_text() == (again / 'windows.csv').read_text()

    copy = altered(session, tmp_path / 'altered', share=0.85)
    main(['summarize', str(copy), '--out', str(tmp_path / 'changed'), '--no-progress'])
    changed = '\n'.join(differences(evaluated(live), evaluated(summary(tmp_path / 'changed'))))
    for name in ('/changing/mappings/driven/metrics/budget_residual_rms_norm_s/value',
                 '/changing/mappings/driven/metrics/turn_rate_error_rms_rad_s/value',
                 '/changing/mappings/driven/metrics/tracking_error_max_norm_s/value',
                 '/steady/mappings/reach/metrics/discrepancy_rms_norm/value',
                 '/steady/mappings/reach/metrics/phase_delay_s/value'):
        assert name in changed, changed
    # Nothing of what was over by then.
    assert '/changing/mappings/ratchet/' not in changed


def evaluated(of: dict) -> dict:
    """Return what was evaluated of each arm: all but what is told of the topics themselves."""
    return {name: {key: value for key, value in arm.items() if key != 'inputs'}
            for name, arm in of['arms'].items()}


def ok_where_it_must_be(live: dict) -> None:
    """Check that the run is worth comparing: no equality of what is not there."""
    changing = live['arms']['changing']['mappings']
    assert set(changing) == {'reach', 'ratchet', 'driven'}
    for label, end in (('reach', '_norm'), ('ratchet', '_norm'), ('driven', '_norm_s')):
        names = [f'discrepancy_rms{end}', f'tracking_error_rms{end}',
                 f'tracking_error_compensated_rms{end}', 'latency_s', 'latency_command_s',
                 'latency_response_s', 'joint_error_compensated_rms']
        names += [f'budget_{term}_{part}{end}' for term in TERMS for part in ('rms', 'static')]
        names += [f'budget_{term}_share' for term in TERMS]
        for name in names:
            metric = changing[label]['metrics'][name]
            assert metric['status'] == 'ok', (label, name, metric)
    assert changing['ratchet']['metrics']['engagements']['value'] == 2.0
    assert changing['driven']['metrics']['turn_rate_error_rms_rad_s']['status'] == 'ok'
    steady = live['arms']['steady']['mappings']['reach']['metrics']
    for name in ('phase_delay_s', 'coherent_up_to_hz', 'budget_response_delay_rms_norm',
                 'workspace_overlap'):
        assert steady[name]['status'] == 'ok', steady[name]
    assert steady['bandwidth_hz']['status'] in ('ok', 'unobservable')
