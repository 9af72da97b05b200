# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Print how many 95 % intervals cover the truth, by metric, motion and length of the run."""

import argparse
import importlib
import sys
from pathlib import Path

import numpy as np

from teleop_eval.core.delays import DelayStatistics

sys.path.insert(0, str(Path(__file__).parent))
random_runs = importlib.import_module('random_runs')

# So that a run of 30 minutes does not fill the memory.
AT_ONCE = 20
DELAYS = {
    'pure delay': {'delay_s': 0.1},
    'servo': {'delay_s': 0.06, 'servo_hz': 2.5},
    'delay that wanders': {'delay_s': 0.1, 'spread_s': 0.01},
}


def main():
    """Run the sweep."""
    parser = argparse.ArgumentParser(
        description=__doc__,
        epilog='example: python tests/core/sweep_intervals.py --minutes 5 --seeds 1 2 3')
    parser.add_argument('--runs', type=int, default=200, help='runs for each setting')
    parser.add_argument('--minutes', type=float, nargs='+', default=[1.0, 5.0, 30.0])
    parser.add_argument('--seeds', type=int, nargs='+', default=[1])
    parser.add_argument('--motions', nargs='+', default=list(random_runs.MOTIONS))
    parser.add_argument('--latency', action='store_true', help='latency instead of the rest')
    given = parser.parse_args()
    for motion in given.motions:
        for minutes in given.minutes:
            for seed in given.seeds:
                where = f'{motion}, {minutes:g} min, seed {seed}'
                (latencies if given.latency else accumulated)(
                    where, motion, minutes, seed, given.runs)


def accumulated(where, motion, minutes, seed, count):
    """Print a row for each metric of the accumulators."""
    hours = max(4.0, 2.0 * minutes)
    parts = [random_runs.Population(random_runs.make(
        np.random.default_rng([seed, 1, part]), motion, 1, 60.0)).truth()
        for part in range(round(hours))]
    hits = {}
    for first in range(0, count, AT_ONCE):
        runs = random_runs.make(
            np.random.default_rng([seed, 2, first]), motion, min(AT_ONCE, count - first), minutes)
        for run in range(len(runs.hand)):
            for name, metric in random_runs.metrics(runs, run).items():
                if name in parts[0]:
                    hits.setdefault(name, []).append(metric)
    for name, metrics in hits.items():
        # Of an RMS the squares are averaged over the hours.
        each = np.array([part[name] for part in parts])
        truth = np.sqrt(np.mean(each**2)) if '_rms' in name else np.mean(each)
        report(where, name, metrics, truth)


def latencies(where, motion, minutes, seed, count):
    """Print a row for each kind of delay."""
    for kind, options in DELAYS.items():
        metrics = [latency(np.random.default_rng([seed, 3, run]), motion, minutes, options)
                   for run in range(count)]
        truth = options['delay_s']
        if 'servo_hz' in options:
            truth = latency(np.random.default_rng([seed, 4]), motion,
                            max(250.0, 20.0 * minutes), options).value
        report(where, f'latency_s, {kind}', metrics, truth)


def latency(rng, motion, minutes, options):
    """Return latency_s of one run."""
    statistics = DelayStatistics()
    pair = random_runs.delayed_pair(rng, motion, minutes, **options)
    for number, estimate in enumerate(random_runs.window_delays(pair)):
        statistics.add(estimate, number * 10**10, (number + 1) * 10**10, 'tool')
    return statistics.metric(caveat='', reason='')


def report(where, name, metrics, truth):
    """Print one row: the share of runs with an interval, and of these with the truth inside."""
    ends = np.array([metric.ci95 for metric in metrics if metric.ci95 is not None])
    if not len(ends):
        print(f'{where:34} {name:40} no interval', flush=True)
        return
    below, above = np.mean(truth < ends[:, 0]), np.mean(truth > ends[:, 1])
    print(f'{where:34} {name:40} truth {truth:8.4f} interval in {len(ends):4d}/{len(metrics)}'
          f' covers {100.0 * (1.0 - below - above):5.1f} % (below {100.0 * below:4.1f},'
          f' above {100.0 * above:4.1f}) half width {np.median(np.diff(ends)) / 2.0:.4f}',
          flush=True)


if __name__ == '__main__':
    main()
