# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What continuous integration says of two runs, by their files in JUnit's format."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

SCRIPT = Path(__file__).parents[1] / '.ci' / 'compare_tests.py'
FIRST = """<testsuites><testsuite>
<testcase classname="tests.test_a" name="test_one[1]"/>
<testcase classname="tests.test_a" name="test_two"><skipped message="no disk"
>x</skipped></testcase>
<testcase classname="" name="tests.launch.test_b"><skipped message="collection skipped"
>('/x/test_b.py', 14, 'Skipped: launch_pytest is missing')</skipped></testcase>
</testsuite></testsuites>"""
# colcon puts the package's name before the classes.
SECOND = FIRST.replace('classname="tests', 'classname="teleop_eval.tests').replace(
    'classname=""', 'classname="teleop_eval"')


def compare(folder: Path, second: str) -> tuple[int, list[str]]:
    """Return status and lines of the comparison of FIRST with another run."""
    (folder / 'a.xml').write_text(FIRST, encoding='utf-8')
    (folder / 'b.xml').write_text(second, encoding='utf-8')
    done = subprocess.run([sys.executable, str(SCRIPT), 'a.xml', 'b.xml'], cwd=folder,
                          capture_output=True, text=True, timeout=60)
    assert done.stderr == ''
    return done.returncode, done.stdout.splitlines()


def test_the_same_tests_are_the_same(tmp_path: Path) -> None:
    assert compare(tmp_path, SECOND) == (0, [
        'pytest: 3 tests: 1 passed, 0 failed, 2 skipped',
        'colcon test: 3 tests: 1 passed, 0 failed, 2 skipped',
        '  skipped by pytest: ::tests.launch.test_b: launch_pytest is missing',
        '  skipped by pytest: tests.test_a::test_two: no disk',
        'The same tests ran.',
        '1 passed, 0 failed, 2 skipped',
    ])


@pytest.mark.parametrize('old, new, said', [
    ('name="test_one[1]"', 'name="test_one[2]"', '  only in pytest: tests.test_a::test_one[1]'),
    ('name="test_one[1]"/>', 'name="test_one[1]"><failure/></testcase>',
     '0 passed, 1 failed, 2 skipped'),
    ('name="test_one[1]"/>', 'name="test_one[1]"><error/></testcase>',
     '0 passed, 1 failed, 2 skipped'),
    ('no disk', 'no time', '  skipped by colcon test: tests.test_a::test_two: no time'),
])
def test_a_difference_is_told(tmp_path: Path, old: str, new: str, said: str) -> None:
    assert old in SECOND
    status, lines = compare(tmp_path, SECOND.replace(old, new))
    assert said in lines
    assert status == (0 if 'no time' in new else 1)
