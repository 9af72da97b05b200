# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Peak memory of summarize against the length of the recording."""

from __future__ import annotations

import shutil
import subprocess
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path

from tests.benchmarks.post_run import write_recording
from tests.benchmarks.streams import parameters


@dataclass(frozen=True)
class Size:
    """Rate of the three streams, and the lengths that are compared."""

    rate_hz: float
    minutes: tuple[float, ...]


# A slow stream makes hours affordable; what grows per message or per window grows there too.
SHORT, FULL = Size(50.0, (15.0, 120.0)), Size(500.0, (60.0, 480.0))

_CHILD = """\
import resource, sys
from teleop_eval.cli.main import main
main(sys.argv[1:])
print('PEAK', resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
"""


def main(*, full: bool = False) -> None:
    """Print the peak memory for a short and a long recording, and their ratio."""
    size = FULL if full else SHORT
    print(f'{"full" if full else "short"}: {" and ".join(f"{m:g}" for m in size.minutes)} min of '
          f'three {size.rate_hz:g} Hz streams (target: {FULL.minutes[0]:g} and '
          f'{FULL.minutes[-1]:g} min of {FULL.rate_hz:g} Hz)', flush=True)
    peaks = []
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch)
        config = parameters(folder, ('',))
        for minutes in size.minutes:
            name = f'bag{minutes:g}'
            write_recording(folder / name, minutes, size.rate_hz)
            done = subprocess.run(
                [sys.executable, '-c', _CHILD, 'summarize', str(folder / name), '--config',
                 str(config), '--out', str(folder / f'out{minutes:g}'), '--no-progress'],
                capture_output=True, text=True, check=True)
            peaks.append(int(done.stdout.rsplit('PEAK', 1)[1]) / 1024)
            shutil.rmtree(folder / name)  # eight hours take gigabytes
            print(f'  {minutes:g} min: peak {peaks[-1]:.0f} MB', flush=True)
    print(f'ratio longest/shortest {peaks[-1] / peaks[0]:.2f} (target: flat)')
