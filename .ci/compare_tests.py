# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Prove that two runs ran the same tests, and tell what was skipped and why.

usage: compare_tests.py PYTEST_XML COLCON_XML
"""

from __future__ import annotations

import sys
import xml.etree.ElementTree as ET
from collections import Counter
from dataclasses import dataclass
from pathlib import Path

PREFIX = 'teleop_eval'


@dataclass(frozen=True)
class Run:
    """The outcomes of one run, by the name of the test."""

    name: str
    outcomes: dict[str, str]
    reasons: dict[str, str]

    def __str__(self) -> str:
        counted = Counter(self.outcomes.values())
        parts = ', '.join(f'{counted[kind]} {kind}' for kind in ('passed', 'failed', 'skipped'))
        return f'{self.name}: {len(self.outcomes)} tests: {parts}'


def read(name: str, path: Path) -> Run:
    """Return the run that a file in JUnit's format tells of."""
    outcomes, reasons = {}, {}
    for case in ET.parse(path).getroot().iter('testcase'):
        # colcon puts the package's name before each class; a skipped file has none.
        group = case.get('classname', '').removeprefix(PREFIX).removeprefix('.')
        test = f'{group}::{case.get("name", "")}'
        skipped = case.find('skipped')
        if case.find('failure') is not None or case.find('error') is not None:
            outcomes[test] = 'failed'
        elif skipped is not None:
            outcomes[test] = 'skipped'
            reasons[test] = _reason(skipped)
        else:
            outcomes.setdefault(test, 'passed')
    return Run(name, outcomes, reasons)


def _reason(skipped: ET.Element) -> str:
    """Return why; of a whole file the reason stands at the end of the text only."""
    message, _, rest = (skipped.text or '').partition('Skipped: ')
    return rest.rstrip("')\"") or skipped.get('message', '') or message


def main() -> int:
    """Print the comparison and return the exit status."""
    first, second = read('pytest', Path(sys.argv[1])), read('colcon test', Path(sys.argv[2]))
    print(first, second, sep='\n')
    for run in (first, second):
        for test, reason in sorted(run.reasons.items()):
            if run is first or first.reasons.get(test) != reason:
                print(f'  skipped by {run.name}: {test}: {reason}')
    for one, other in ((first, second), (second, first)):
        for test in sorted(set(one.outcomes) - set(other.outcomes)):
            print(f'  only in {one.name}: {test}')
    same = set(first.outcomes) == set(second.outcomes) and bool(first.outcomes)
    print('The same tests ran.' if same else 'NOT the same tests ran.')
    counted = Counter(second.outcomes.values())
    print(f'{counted["passed"]} passed, {counted["failed"]} failed, '
          f'{counted["skipped"]} skipped', flush=True)
    return 0 if same and not counted['failed'] else 1


if __name__ == '__main__':
    sys.exit(main())
