# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The tables metrics.csv and windows.csv, for spreadsheets and data frames.

Both are UTF-8 with commas, a header line and empty cells where there is no value.
"""

from __future__ import annotations

import csv
import io
import math
import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, TextIO

from teleop_eval.core.errors import OutputError
from teleop_eval.core.metric import Metric
from teleop_eval.core.results import WindowResult
from teleop_eval.sinks.messages import clean_text
from teleop_eval.sinks.summary_file import write_atomically

METRIC_COLUMNS = ('arm', 'mapping', 'metric', 'value', 'unit', 'ci95_low', 'ci95_high', 'n',
                  'samples', 'status', 'reason')
WINDOW_COLUMNS = ('arm', 'mapping', 'start_s', 'end_s')

# A spreadsheet takes a cell that starts with one of these for a formula and runs it.
_FORMULA_STARTS = ('=', '+', '-', '@')


def text_cell(text: str) -> str:
    """
    Return text as a cell that no spreadsheet runs and that keeps to its line.

    An apostrophe in front is the spreadsheets' own sign for "this is text" (common
    practice); control characters become spaces, since some programs start a formula or a
    new row after them.
    """
    shown = ''.join(' ' if ord(sign) < 32 or sign in '\x7f\x85\u2028\u2029' else sign
                    for sign in clean_text(text))
    return "'" + shown if shown.lstrip().startswith(_FORMULA_STARTS) else shown


def number_cell(value: Any) -> str:
    """Return a number as the shortest text that reads back the same, '' where there is none."""
    if value is None or isinstance(value, float) and not math.isfinite(value):
        return ''
    return repr(float(value)) if isinstance(value, float) else str(int(value))


def metrics_table(summary: Mapping[str, Any]) -> str:
    """
    Return the text of metrics.csv: one row for each arm, mapping and metric.

    A candidate's rows have '(predicted)' behind the mapping's label.
    """
    stream = io.StringIO(newline='')
    writer = csv.writer(stream, lineterminator='\n')
    writer.writerow(METRIC_COLUMNS)
    for arm, of_arm in sorted(summary.get('arms', {}).items()):
        for mapping, of_mapping in sorted(of_arm.get('mappings', {}).items()):
            for name, metric in sorted(of_mapping.get('metrics', {}).items()):
                writer.writerow(_metric_row(arm, mapping, name, metric))
        for mapping, predicted in sorted(of_arm.get('candidates', {}).items()):
            for name, metric in sorted(predicted.get('metrics', {}).items()):
                writer.writerow(_metric_row(arm, f'{mapping} (predicted)', name, metric))
    return stream.getvalue()


def write_metrics(path: Path, summary: Mapping[str, Any]) -> None:
    """
    Write metrics.csv.

    Raises
    ------
    OutputError
        When the file cannot be written.

    """
    write_atomically(path, metrics_table(summary))


def _metric_row(arm: str, mapping: str, name: str, metric: Mapping[str, Any]) -> list[str]:
    low, high = metric.get('ci95') or (None, None)
    return [text_cell(arm), text_cell(mapping), text_cell(name),
            number_cell(metric.get('value')), text_cell(metric.get('unit', '')),
            number_cell(low), number_cell(high), number_cell(metric.get('n')),
            number_cell(metric.get('samples')), text_cell(metric.get('status', '')),
            text_cell(metric.get('reason', ''))]


class WindowTable:
    """
    The file windows.csv, which grows with every closed window.

    Each row reaches the operating system before `add` returns, so that a killed process
    loses none. When a later window brings a metric the header lacks, the file is written
    anew with the wider header and renamed into place.
    """

    def __init__(self, path: Path) -> None:
        self._path = path
        self._columns: list[str] = list(WINDOW_COLUMNS)
        self._stream: TextIO | None = None

    def add(self, result: WindowResult, start_s: float, end_s: float) -> None:
        """
        Append the row of one window.

        Parameters
        ----------
        result
            The window; metrics without a value give an empty cell.
        start_s, end_s
            The window's ends, seconds from the session's first time.

        Raises
        ------
        OutputError
            When the row cannot be written.

        """
        row = {'arm': text_cell(result.arm), 'mapping': text_cell(result.mapping),
               'start_s': number_cell(float(start_s)), 'end_s': number_cell(float(end_s))}
        row.update(_window_cells(result.metrics))
        try:
            missing = [name for name in row if name not in self._columns]
            if missing or self._stream is None:
                self._widen(missing)
            self._write(row)
        except OSError as error:
            raise OutputError(
                f'{self._path} cannot be written: {error.strerror or error}.') from error

    def close(self) -> None:
        """
        Close the file; a table without a window has its header all the same.

        Raises
        ------
        OutputError
            When the file cannot be written.

        """
        try:
            if self._stream is None:
                self._widen([])
            if self._stream is not None:
                self._stream.close()
        except OSError as error:
            raise OutputError(
                f'{self._path} cannot be written: {error.strerror or error}.') from error

    def _write(self, row: Mapping[str, str]) -> None:
        assert self._stream is not None
        writer = csv.writer(self._stream, lineterminator='\n')
        writer.writerow([row.get(name, '') for name in self._columns])
        self._stream.flush()

    def _widen(self, missing: Sequence[str]) -> None:
        """Write header and rows so far under the wider header, then go on appending."""
        columns = [*self._columns, *missing]
        temporary = self._path.with_name(self._path.name + '.part')
        with open(temporary, 'w', encoding='utf-8', newline='') as stream:
            writer = csv.writer(stream, lineterminator='\n')
            writer.writerow([text_cell(name) for name in columns])
            if self._stream is not None:
                with open(self._path, encoding='utf-8', newline='') as old:
                    rows = csv.reader(old)
                    next(rows)
                    writer.writerows([*row, *[''] * len(missing)] for row in rows)
        # Opened before the rename: a failure on the way leaves the old file in use.
        stream = open(temporary, 'a', encoding='utf-8', newline='')  # noqa: SIM115
        os.replace(temporary, self._path)
        if self._stream is not None:
            self._stream.close()
        self._columns, self._stream = columns, stream


def _window_cells(metrics: Mapping[str, Metric]) -> dict[str, str]:
    """Return the cells of a window; a latency has its status beside it."""
    cells = {}
    for name, metric in metrics.items():
        cells[name] = number_cell(metric.value)
        if name.startswith('latency'):
            cells[f'{name}_status'] = metric.status
    return cells
