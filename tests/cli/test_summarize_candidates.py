# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
What `summarize --candidates` says of mappings that were not driven, and where it says it.

Operator and robot have the same planar arm, so every prediction follows from the angles of the
recording by school geometry.
"""

from __future__ import annotations

import re

import numpy as np
import pandas
import pytest
import synthetic_recording as synthetic

SECONDS, SCALE, OFFSET = 40.0, 1.6, 2.5
UPPER_M, FORE_M, LIMIT_RAD = 0.4, 0.3, 3.0
OPERATOR = re.sub(r'joint name="(shoulder|elbow)"', r'joint name="human_\1"', synthetic.URDF)
CONFIG = synthetic.CONFIG.replace(
    'joints_topic: operator/joint_states\n',
    'joints_topic: operator/joint_states\n          description_file: suit.urdf\n'
    '          base_link: base\n          tip_link: tool\n') + f"""\
          bent:
            kind: joint_space
            joints:
              shoulder: {{source: human_shoulder}}
              elbow: {{source: human_elbow, offset: {OFFSET}}}
          far: {{kind: task_space, scaling: normalized, scale: {SCALE}}}
          vendor: {{kind: unmodelled}}
"""


def reach(elbow):
    """Return the distance of the tool from the shoulder, arm lengths, by the law of cosines."""
    square = UPPER_M ** 2 + FORE_M ** 2 + 2.0 * UPPER_M * FORE_M * np.cos(elbow)
    return np.sqrt(square) / (UPPER_M + FORE_M)


@pytest.fixture(scope='module')
def folder(tmp_path_factory):
    """Return a folder with recording, parameter file and the operator's description."""
    folder = tmp_path_factory.mktemp('candidates')
    synthetic.make(folder, seconds=SECONDS).config.write_text(CONFIG, encoding='utf-8')
    (folder / 'suit.urdf').write_text(OPERATOR, encoding='utf-8')
    return folder


@pytest.fixture
def summarize(bench, folder):
    """Return a function that summarizes the recording into a new folder."""
    def run(*arguments):
        done = bench.command(folder / 'recording', '--config', folder / 'evaluator.yaml',
                             '--out', bench.folder / 'out', '--no-progress', *arguments)
        assert (done.status, done.sentences) == (0, [])
        return done

    return run


def test_every_configured_mapping_is_predicted(summarize):
    done = summarize('--candidates')
    arm = done.summary['arms']['right']
    assert list(arm['mappings']) == ['direct']
    found = arm['candidates']
    assert set(found) == {'direct', 'bent', 'far', 'vendor'}
    assert list(arm).index('candidates') == list(arm).index('mappings') + 1
    for of in found.values():
        assert list(of) == ['prediction', 'why_not', 'postures', 'orientation', 'caveats',
                            'metrics']
        assert 'without the adaptation of the operator' in of['prediction']
        assert all(metric['details']['predicted'] for metric in of['metrics'].values())
    assert {label: bool(of['why_not']) for label, of in found.items()} == {
        'direct': False, 'bent': False, 'far': False, 'vendor': True}
    assert found['vendor']['metrics'] == {}

    elbow = synthetic.angles(np.arange(int(SECONDS * 100)) / 100.0)[:, 1]
    value = {(label, name): metric['value'] for label, of in found.items()
             for name, metric in of['metrics'].items()}
    assert value['direct', 'predicted_discrepancy_rms_norm'] < 1e-9
    for label, offset in (('direct', 0.0), ('bent', OFFSET)):
        assert value[label, 'limit_violation_share'] == pytest.approx(
            np.mean(abs(elbow + offset) > LIMIT_RAD), abs=0.003)
        assert value[label, 'at_limit_share'] is None
    assert value['far', 'limit_violation_share'] is None
    assert value['far', 'at_limit_share'] is not None
    assert value['bent', 'limit_violation_share'] > 0.3
    assert value['far', 'predicted_discrepancy_rms_norm'] == pytest.approx(
        (SCALE - 1.0) * np.sqrt(np.mean(reach(elbow) ** 2)), abs=0.01)
    assert value['far', 'not_reached_share'] == pytest.approx(
        np.mean(SCALE * reach(elbow) > 1.0), abs=0.01)
    assert value['far', 'not_reached_share'] > 0.5
    assert value['far', 'reach_max_norm'] == pytest.approx(SCALE * reach(elbow).max(), abs=0.01)

    table = pandas.read_csv(done.folder / 'metrics.csv')
    rows = table[table.mapping == 'far (predicted)'].set_index('metric')
    assert set(rows.index) == set(found['far']['metrics'])
    assert rows.value['not_reached_share'] == value['far', 'not_reached_share']
    assert set(table.mapping) == {'direct', *(
        f'{label} (predicted)' for label in ('direct', 'bent', 'far'))}

    # A path is not folded, so that it can be copied.
    lines = [line for line in done.out.splitlines() if not line.startswith('Results: ')]
    assert max(map(len, lines)) <= 80
    shown = done.out.partition('Candidate mappings')[2]
    assert 'without the adaptation of the operator' in shown
    assert re.search(
        r'^orientation of the tool +by the joints +by the joints$', shown,
        re.MULTILINE)
    assert re.search(r'^orientation of the tool +positions only \(\d\)$', shown, re.MULTILINE)
    assert 'postures begin near the one in which the robot was' in ' '.join(shown.split())
    assert re.search(r'^not_reached_share .* 0\.\d+ \(\d\)$', shown, re.MULTILINE)
    assert "- vendor: not predicted: the stack's mapping is not modelled" in shown


def test_nothing_is_predicted_unasked(summarize):
    done = summarize()
    assert 'candidates' not in done.summary['arms']['right']
    assert 'andidate' not in done.out
    assert '(predicted)' not in (done.folder / 'metrics.csv').read_text(encoding='utf-8')


@pytest.mark.parametrize('arguments', [(), ('--candidates',)])
def test_what_to_fix_first_is_the_last_that_is_printed(summarize, arguments):
    done = summarize(*arguments)
    advice = done.summary['arms']['right']['mappings']['direct']['advice']
    assert re.match(r'direct: fix first the time the robot takes to follow, 1(19|20) ms, which '
                    r'is 0\.\d{3} arm lengths RMS, \d+ % of the discrepancy; ', advice)
    end = done.out.partition('\nWhat to fix first\n')[2].partition('\n\nResults: ')[0]
    assert ' '.join(end.split()) == f'- {advice}'
    [final] = [line for line in done.out.splitlines() if line.startswith('Results: ')]
    assert done.out.endswith(f'{final}\n')


def test_help_tells_what_is_predicted(bench):
    done = bench.command('--help')
    assert done.status == 0
    assert '--candidates' in done.out.partition('example:')[2]
    assert "a prediction without the operator's adaptation" in ' '.join(done.out.split())
