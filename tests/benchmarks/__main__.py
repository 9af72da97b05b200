# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Print the ratios of all benchmarks: python -m tests.benchmarks [live|post_run|memory]."""

from __future__ import annotations

import sys

from tests.benchmarks import live, memory, post_run

BENCHMARKS = {'live': live.main, 'post_run': post_run.main, 'memory': memory.main}

if __name__ == '__main__':
    for name in sys.argv[1:] or BENCHMARKS:
        print(f'\n== {name}', flush=True)
        BENCHMARKS[name]()
