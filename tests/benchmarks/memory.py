# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Peak memory of summarize against the length of the recording."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
from pathlib import Path

from tests.benchmarks.post_run import write_recording
from tests.benchmarks.streams import parameters

# Length is what counts, not rate: a slow stream makes hours affordable.
RATE_HZ = 50.0
MINUTES = tuple(float(m) for m in os.environ.get('BENCH_MEMORY_MINUTES', '15,120').split(','))

_CHILD = """\
import resource, sys
from teleop_eval.cli.main import main
main(sys.argv[1:])
print('PEAK', resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
"""


def main() -> None:
    """Print the peak memory for a short and a long recording, and their ratio."""
    peaks = []
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch)
        config = parameters(folder, ('',))
        for minutes in MINUTES:
            name = f'bag{minutes:g}'
            write_recording(folder / name, minutes, RATE_HZ)
            done = subprocess.run(
                [sys.executable, '-c', _CHILD, 'summarize', str(folder / name), '--config',
                 str(config), '--out', str(folder / f'out{minutes:g}'), '--no-progress'],
                capture_output=True, text=True, check=True)
            peaks.append(int(done.stdout.rsplit('PEAK', 1)[1]) / 1024)
            print(f'{minutes:g} min at {RATE_HZ:g} Hz: peak {peaks[-1]:.0f} MB', flush=True)
    print(f'ratio longest/shortest {peaks[-1] / peaks[0]:.2f} (target: flat)')
