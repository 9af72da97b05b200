# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Post-run time: summarize against raw iteration of the same recording, in one run."""

from __future__ import annotations

import contextlib
import io
import statistics
import tempfile
import time
from pathlib import Path

from teleop_eval.cli.main import main as teleop_eval
from teleop_eval.sinks.bag_writer import BagWriter
from teleop_eval.sources.recording import open_recording
from tests.benchmarks.streams import TYPES, arm_messages, parameters

SHORT_MINUTES, FULL_MINUTES = 5.0, 60.0
RATE_HZ = 500.0
ROUNDS = 3


def write_recording(folder: Path, minutes: float, rate_hz: float) -> int:
    """Write three streams and return the number of messages."""
    count = 0
    with BagWriter(folder) as writer:
        for name, type_name in TYPES.items():
            writer.add_topic(f'/{name}', type_name)
        for log_ns, topic, data in arm_messages(minutes * 60.0, rate_hz):
            writer.write(topic, log_ns, data)
            count += 1
            if count % 5000 == 0:
                writer.flush()
    return count


def main(*, full: bool = False) -> None:
    """Print time of summarize over time of raw iteration."""
    minutes = FULL_MINUTES if full else SHORT_MINUTES
    print(f'{"full" if full else "short"}: {minutes:g} min of three {RATE_HZ:g} Hz streams '
          f'(target: {FULL_MINUTES:g} min), {ROUNDS} rounds', flush=True)
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch)
        count = write_recording(folder / 'bag', minutes, RATE_HZ)
        config = parameters(folder, ('',))
        raw, own = [], []
        for number in range(ROUNDS):
            begin = time.perf_counter()
            with open_recording(folder / 'bag') as recording:
                seen = sum(1 for _ in recording.messages())
            raw.append(time.perf_counter() - begin)
            assert seen == count
            begin = time.perf_counter()
            with contextlib.redirect_stdout(io.StringIO()):
                teleop_eval(['summarize', str(folder / 'bag'), '--config', str(config), '--out',
                             str(folder / f'out{number}'), '--no-progress'])
            own.append(time.perf_counter() - begin)
            print(f'  raw iteration {raw[-1]:.2f} s, summarize {own[-1]:.2f} s', flush=True)
        ratio = statistics.median(a / b for a, b in zip(own, raw, strict=True))
        print(f'{count} messages: raw iteration {statistics.median(raw):.2f} s, '
              f'summarize {statistics.median(own):.2f} s, ratio {ratio:.1f} (target 3)')
