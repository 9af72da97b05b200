# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What a command shows at its end: the results, where they are, and the problems."""

from __future__ import annotations

import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from teleop_eval.sinks.tables import clean, print_summary

LONGEST_PROBLEM = 1000


def report(label: str, summary: Mapping[str, Any], folder: Path) -> None:
    """
    Print a session's summary, then its problems.

    Parameters
    ----------
    label
        What each problem is to begin with, such as 'teleop_eval summarize'.
    summary
        The whole summary.
    folder
        Where it is.

    """
    # Problems go to standard error, so that they are seen when the table goes into a file.
    print_summary({**summary, 'problems': []})
    path = ''.join(sign if sign.isprintable() else '?' for sign in str(folder))
    print(f'\nResults: {path}')
    sys.stdout.flush()
    for problem in summary.get('problems', ()):
        print(f'{label}: {clean(str(problem), LONGEST_PROBLEM)}', file=sys.stderr)
    sys.stderr.flush()
