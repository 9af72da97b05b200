# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""metrics.csv and windows.csv, read back by pandas and by the standard library."""

from __future__ import annotations

import csv
import math

import numpy as np
import pandas
import pytest
from hypothesis import given
from hypothesis import strategies as st

from teleop_eval.core.errors import OutputError
from teleop_eval.core.metric import Metric, missing
from teleop_eval.core.results import WindowResult
from teleop_eval.sinks import csv_tables
from teleop_eval.sinks.csv_tables import WindowTable


def window(metrics, *, arm='right', mapping='direct', start_s=0.0):
    """Return a window of 2 s."""
    start = int(start_s * 1e9)
    return WindowResult(arm, mapping, start, start + 2 * 10**9, start + 2 * 10**9, metrics)


def test_metrics_table_read_by_pandas(tmp_path):
    summary = {'arms': {'right': {'mappings': {'direct': {'metrics': {
        'latency_s': Metric(0.1234567890123456, 's', (0.1, 0.15), 40, 8000).to_dict(),
        'hull_volume_norm': missing('insufficient', 'L^3', 'Too few, "cells", yet.').to_dict(),
    }}}}, 'left': {'mappings': {}}}}
    csv_tables.write_metrics(tmp_path / 'metrics.csv', summary)
    table = pandas.read_csv(tmp_path / 'metrics.csv')
    assert list(table.columns) == ['arm', 'mapping', 'metric', 'value', 'unit', 'ci95_low',
                                   'ci95_high', 'n', 'samples', 'status', 'reason']
    latency = table[table.metric == 'latency_s'].iloc[0]
    assert latency.value == 0.1234567890123456
    assert (latency.ci95_low, latency.ci95_high, latency.n) == (0.1, 0.15, 40)
    assert latency.samples == 8000
    hull = table[table.metric == 'hull_volume_norm'].iloc[0]
    assert math.isnan(hull.value) and math.isnan(hull.ci95_low)
    assert hull.reason == 'Too few, "cells", yet.'
    assert hull.status == 'insufficient'


def test_predictions_follow_the_measured_rows_and_are_marked(tmp_path):
    value = {'value': 0.25, 'unit': '1', 'ci95': [0.125, 0.5], 'n': 20, 'samples': 800,
             'status': 'ok', 'reason': ''}
    summary = {'arms': {'right': {
        'candidates': {label: {'prediction': 'x', 'why_not': '', 'metrics': of} for label, of in (
            ('reach', {'not_reached_share': value, 'limit_violation_share': value}),
            ('=cmd|x', {'not_reached_share': value}), ('vendor', {}))},
        'mappings': {'reach': {'metrics': {'latency_s': Metric(0.1, 's').to_dict()}}}}}}
    csv_tables.write_metrics(tmp_path / 'metrics.csv', summary)
    table = pandas.read_csv(tmp_path / 'metrics.csv')
    assert list(zip(table.mapping, table.metric, strict=True)) == [
        ('reach', 'latency_s'), ("'=cmd|x (predicted)", 'not_reached_share'),
        ('reach (predicted)', 'limit_violation_share'), ('reach (predicted)', 'not_reached_share')]
    assert table.iloc[-1].tolist()[3:9] == [0.25, '1', 0.125, 0.5, 20, 800]


@pytest.mark.parametrize('text', ['=1+1', '+1', '-1', '@SUM(A1)', '\t=1', '\r=1', ' =1', '\x00=1'])
def test_text_that_a_spreadsheet_would_run_is_marked(text):
    """The signs are those of OWASP's page on CSV injection (common practice)."""
    cell = csv_tables.text_cell(text)
    assert cell.lstrip()[0] not in '=+-@\t\r'


@given(st.text())
def test_any_text_keeps_to_its_cell(text):
    cell = csv_tables.text_cell(text)
    assert not cell.startswith(('=', '+', '-', '@', '\t', '\r', '\n'))
    assert len(cell.splitlines()) <= 1
    if text.isalnum():
        assert cell == text


@given(st.floats() | st.integers() | st.none())
def test_numbers_read_back_exactly(value):
    cell = csv_tables.number_cell(value)
    if value is None or isinstance(value, float) and not math.isfinite(value):
        assert cell == ''
    else:
        assert float(cell) == float(value)


def test_negative_numbers_stay_numbers():
    assert csv_tables.number_cell(np.float64(-0.25)) == '-0.25'
    assert csv_tables.number_cell(np.int64(-3)) == '-3'


def test_rows_are_in_the_file_before_the_end_and_header_widens(tmp_path):
    path = tmp_path / 'windows.csv'
    table = WindowTable(path)
    table.add(window({'a_m': Metric(1.5, 'm')}), 0.0, 2.0)
    assert path.read_text() == ('arm,mapping,start_s,end_s,a_m\n'
                                'right,direct,0.0,2.0,1.5\n')
    table.add(window({'latency_s': missing('unobservable', 's', 'still')}), 2.0, 4.0)
    table.add(window({'latency_s': Metric(0.1, 's'), 'a_m': missing('insufficient', 'm', 'x')},
                     mapping='=cmd|x'), 4.0, 6.0)
    read = pandas.read_csv(path)
    assert list(read.columns) == ['arm', 'mapping', 'start_s', 'end_s', 'a_m', 'latency_s',
                                  'latency_s_status']
    assert read.a_m.isna().tolist() == [False, True, True]
    assert read.latency_s.isna().tolist() == [True, True, False]
    assert read.latency_s_status.fillna('').tolist() == ['', 'unobservable', 'ok']
    assert read.mapping[2] == "'=cmd|x"
    table.close()
    assert [file.name for file in tmp_path.iterdir()] == ['windows.csv']


def test_table_without_a_window_has_its_header(tmp_path):
    table = WindowTable(tmp_path / 'windows.csv')
    table.close()
    with open(tmp_path / 'windows.csv', newline='') as stream:
        assert list(csv.reader(stream)) == [list(csv_tables.WINDOW_COLUMNS)]


def test_folder_that_vanished_is_named(tmp_path):
    path = tmp_path / 'gone' / 'windows.csv'
    with pytest.raises(OutputError, match=r'gone/windows\.csv cannot be written: No such file'):
        WindowTable(path).add(window({}), 0.0, 2.0)


def test_widening_that_fails_goes_on_with_the_old_columns(tmp_path):
    path = tmp_path / 'windows.csv'
    table = WindowTable(path)
    table.add(window({'a_m': Metric(1.0, 'm')}), 0.0, 2.0)
    blocker = tmp_path / 'windows.csv.part'
    blocker.mkdir()
    with pytest.raises(OutputError, match='windows.csv cannot be written'):
        table.add(window({'b_m': Metric(2.0, 'm')}), 2.0, 4.0)
    table.add(window({'a_m': Metric(3.0, 'm')}), 4.0, 6.0)
    blocker.rmdir()
    table.add(window({'b_m': Metric(4.0, 'm')}), 6.0, 8.0)
    table.close()
    read = pandas.read_csv(path)
    assert read.start_s.tolist() == [0.0, 4.0, 6.0]
    assert read.b_m.isna().tolist() == [True, True, False]
