# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Print bias, spread and standard error of the delay over many settings: a wider sweep."""

import argparse
import importlib
import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent))
motion = importlib.import_module('synthetic_motion')
checks = importlib.import_module('test_latency_montecarlo')


def main():
    """Run the sweep."""
    parser = argparse.ArgumentParser(
        description=__doc__, epilog='example: python tests/core/sweep_latency.py --windows 500'
    )
    parser.add_argument('--windows', type=int, default=200, help='windows for each setting')
    count = parser.parse_args().windows
    print('rates [Hz]     delay [ms]   SNR [dB]  faults  values  bias [ms] +- 2 SE   RMSE [ms]'
          '  reported / observed')
    for rates in ((50, 50), (200, 200), (50, 1000), (1000, 50)):
        for delay in (0.0, 0.0237, 0.1037, 0.2513, 0.4):
            for decibel in (10, 20, 30):
                for faults in ({}, checks.FAULTS):
                    report(count, rates, delay, decibel, faults)


def report(count, rates, delay, decibel, faults):
    """Print one row."""
    rng = np.random.default_rng(int(1e4 * delay) + decibel)
    position = motion.band_limited(rng, checks.duration(count), 0.2, 3.0, 0.3)
    noises = [
        motion.position_noise_for(10 ** (decibel / 10), (0.2, 3.0), 0.3, rate) for rate in rates
    ]
    pair = checks.streams(position, delay, count, rates, noises, rng, **faults)
    error, standard_error = checks.errors(checks.estimates(*pair, 50.0, count), delay)
    spread = error.std(ddof=1)
    print(
        f'{rates!s:14} {1e3 * delay:10.1f} {decibel:10d} {bool(faults)!s:>8}'
        f' {len(error):4d}/{count}'
        f' {1e3 * error.mean():9.3f} +- {2e3 * spread / np.sqrt(len(error)):5.3f}'
        f' {1e3 * np.sqrt(np.mean(error**2)):11.3f}'
        f' {np.sqrt(np.mean(standard_error**2)) / spread:12.2f}',
        flush=True,
    )


if __name__ == '__main__':
    main()
