# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Print the ratios of the benchmarks.

python -m tests.benchmarks [--full] [live] [post_run] [memory]
"""

from __future__ import annotations

import argparse

from tests.benchmarks import live, memory, post_run

BENCHMARKS = {'live': live.main, 'post_run': post_run.main, 'memory': memory.main}

_EPILOG = """\
Without --full, recordings are short enough for a coffee break: 5 min for post_run, 15 and
120 min of 50 Hz for memory. With --full they are as long as the targets say: one hour of three
500 Hz streams for post_run; one and eight hours of three 500 Hz streams for memory, which
needs about 15 GB of disk in $TMPDIR and hours. live has one size: two arms of three 1 kHz
streams, five rounds of 20 s each.

example:
  python -m tests.benchmarks --full post_run
"""


def main() -> None:
    """Run the benchmarks that are named, or all."""
    parser = argparse.ArgumentParser(
        prog='python -m tests.benchmarks', description='Print ratios of speed and memory.',
        epilog=_EPILOG, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument('names', nargs='*', metavar='NAME',
                        help=f'{", ".join(BENCHMARKS)} (default: all)')
    parser.add_argument('--full', action='store_true',
                        help='recordings as long as the targets say')
    options = parser.parse_args()
    unknown = [name for name in options.names if name not in BENCHMARKS]
    if unknown:
        parser.error(f'there is no benchmark {unknown[0]!r}; there are {", ".join(BENCHMARKS)}')
    for name in options.names or BENCHMARKS:
        print(f'\n== {name}', flush=True)
        BENCHMARKS[name](full=options.full)


if __name__ == '__main__':
    main()
