# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Memory does not grow with the length of the run."""

from __future__ import annotations

import sys
from array import array
from collections import deque

import numpy as np
import pytest
import synthetic_session as syn

from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.samples import TwistSample
from teleop_eval.core.settings import from_parameters
from teleop_eval.core.streams import MOST_ROWS


def size_of(thing, seen=None):
    """Return the bytes of an object and of all it holds."""
    seen = set() if seen is None else seen
    if id(thing) in seen or isinstance(thing, (type, str, int, float, type(None))):
        return 0
    seen.add(id(thing))
    size = sys.getsizeof(thing)
    if isinstance(thing, np.ndarray):
        return size + (thing.nbytes if thing.base is not None else 0)
    if isinstance(thing, dict):
        return size + sum(size_of(one, seen) for pair in thing.items() for one in pair)
    if isinstance(thing, (list, tuple, set, frozenset, deque)):
        return size + sum(size_of(one, seen) for one in thing)
    if isinstance(thing, array):
        return size
    for name in getattr(type(thing), '__slots__', ()):
        size += size_of(getattr(thing, name, None), seen)
    return size + size_of(vars(thing), seen) if hasattr(thing, '__dict__') else size


def long_run(minutes):
    """Feed a low-rate session; return the size of each arm's state at the end."""
    target = syn.evaluator(syn.arm_parameters(
        **{**syn.TASK, 'active_mapping__fixed': None}, command__topic='/command',
        command__hold=True, engaged__topic='/engaged', active_mapping__topic='/mapping'))
    motion = syn.wander()
    sizes = {}
    for minute in range(minutes):
        begin = 60.0 * minute
        # Ten seconds of every minute are enough to visit every part.
        made = syn.session(begin + 20.0, motion=motion, delay=0.1, start=begin, hand_rate=50.0,
                           robot_rate=50.0)
        t = syn.clock(begin, begin + 20.0, 50.0, phase=0.5)
        made.joints('/command', t, syn.joints_for(motion(t)))
        made.text(begin, '/mapping', 'direct').flag(begin, '/engaged', True)
        made.flag(begin + 15.0, '/engaged', False)
        made.poses('/hand', [begin + 5.0001], [[np.nan, 0.0, 0.0]])
        for receive_ns, topic, sample in made.messages():
            target.add(receive_ns, topic, sample)
        target.poll()
        sizes[minute + 1] = size_of(target.arms['right'])
    return target, sizes


def test_state_does_not_grow_with_the_run():
    target, sizes = long_run(30)
    # Histograms fill up to their fixed number of bins, and slower and slower; every latency
    # window adds one number.
    # Each of the two frequency responses fills up to 40 batches of 60 frequencies: 173 kB.
    assert sizes[10] < 1.10 * sizes[1] + 2 * 173_000
    assert sizes[30] < 1.02 * sizes[15]
    accumulator, = target.arms['right'].measurement.accumulators.values()
    # 24 bytes for a window of 10 s: 70 kB in 8 h.
    delays = accumulator.delays['latency_s']
    assert size_of(delays) < 20_000
    assert len(delays._delays) <= 30 * 2
    assert delays._delays.itemsize == 8


LABELS = ('reach', 'ratchet', 'driven')
RATE_HZ = 20.0


def turn(begin, seconds, label):
    """Return one turn under a mapping: hand, robot, command, stick, and the clutch twice."""
    motion, rate = syn.wander(), RATE_HZ
    made = syn.session(begin + seconds, motion=motion, delay=0.1, start=begin, hand_rate=rate,
                       robot_rate=rate)
    t = syn.clock(begin, begin + seconds, rate, phase=0.5)
    made.joints('/command', t, syn.joints_for(motion(t - 0.04)))
    velocities = syn.REACH_M * (motion(t + 0.01) - motion(t - 0.01)) / 0.02
    for moment, row in zip(t, velocities, strict=True):
        made.put(moment + 0.002, '/stick', TwistSample(
            syn.ns(moment), row, np.zeros(3), 'base'))
    made.text(begin, '/mapping', label).flag(begin, '/clutch', False)
    made.flag(begin + 1.0, '/clutch', True).flag(begin + 5.0, '/clutch', False)
    return made.flag(begin + 6.0, '/clutch', True)


def predicted_run(turns):
    """Feed turns of all mapping kinds with predictions; return sizes by number of turns."""
    target = SessionEvaluator(from_parameters(syn.arm_parameters(
        operator__rate_topic='/stick', command__topic='/command', engaged__topic='/clutch',
        active_mapping__topic='/mapping', mappings__reach__kind='task_space',
        mappings__ratchet__kind='relative', mappings__driven__kind='rate',
        mappings__pushed__kind='rate', mappings__pushed__input='displacement',
        ) | {'time.grid_rate_hz': RATE_HZ}), descriptions={'right': syn.urdf()}, candidates=True)
    begin, sizes = 0.0, {}
    for number in range(1, turns + 1):
        # First a long one each: frequency responses fill up to 40 batches.
        seconds = 84.0 if number <= len(LABELS) else 12.0
        label = LABELS[number % len(LABELS)]
        for message in turn(begin, seconds, label).messages():
            target.add(*message)
        target.poll()
        begin += seconds + 20.0
        if number % len(LABELS) == 0:
            arm = target.arms['right']
            sizes[number] = {
                'all': size_of(arm), 'history': size_of(arm.measurement.history),
                'anchors': size_of(arm.measurement.ideal.anchors)}
    return target, sizes


def test_mapping_kinds_and_predictions_do_not_grow_with_the_run():
    """Engagement after engagement under each kind; every mapping predicted all the time."""
    target, sizes = predicted_run(15)
    # Histograms fill up as above; one turn's cells alone would be half a per cent.
    assert sizes[15]['all'] < 1.02 * sizes[6]['all']
    for part in ('history', 'anchors'):
        assert sizes[15][part] <= 1.001 * sizes[6][part], part
    measured = target.arms['right'].measurement
    assert len(measured.accumulators) == len(LABELS)
    for index, accumulator in measured.accumulators.items():
        # Had nothing come of a mapping, nothing could grow.
        assert accumulator.budget.samples > 200, index
        assert accumulator.responses['latency_s'].result().segments >= 10
        # Shares and RMS in at most 40 batches each; responses as above.
        assert size_of(accumulator.budget) < 60_000, index
        assert size_of(accumulator.responses) < 360_000, index
    for label, one in measured.ideal.candidates._candidates.items():
        assert one.accumulator is not None and one.accumulator._visited.samples > 200, label
        assert len(one._anchors) <= 1, label
    assert len(target.problems) == 0 and len(target.notes) <= 3


def test_one_clock_far_ahead_does_not_pile_up():
    """A stream whose samples no window reaches is kept to a bound."""
    stream = syn.evaluator(syn.arm_parameters(**syn.BARE)).arms['right'].intakes[
        'robot_joints'].stream
    stream.freeze(by_stamp=True, offset_ns=0, max_gap_ns=10 ** 9)
    for k in range(2 * MOST_ROWS):
        stream.add([(k + 1, k + 1, np.zeros(0), None, None)])
    assert len(stream._times) <= MOST_ROWS + 1
    assert stream.last_ns == 2 * MOST_ROWS


@pytest.mark.parametrize('what', ['held', 'plans'])
def test_command_without_any_robot_does_not_pile_up(what):
    """The robot is off, the command runs on for hours."""
    target = syn.evaluator(syn.arm_parameters(**syn.BARE, command__hold=what == 'held'))
    stream = target.arms['right'].intakes['command'].stream
    for k in range(40_000):
        if what == 'held':
            sample = syn.JointSample(syn.ns(0.1 * k), ('a', 'b'), np.zeros(2), None)
        else:
            sample = syn.TrajectorySample(syn.ns(0.1 * k), ('a', 'b'), np.array([10 ** 8]),
                                          np.zeros((1, 2)))
        target.add(syn.ns(0.1 * k), '/command', sample)
    assert len(stream.raw) < 200
    assert stream.newest is not None


def test_state_topic_at_a_high_rate_does_not_pile_up():
    target = syn.evaluator(syn.arm_parameters(**syn.TASK, engaged__topic='/engaged'))
    for k in range(20_000):
        target.add(syn.ns(0.01 * k), '/engaged', syn.BoolSample(k < 10_000))
    assert len(target.arms['right'].states['engaged'].known()) == 2


def test_sentences_are_bounded():
    """Messages that are wrong in a new way each time."""
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    for k in range(2000):
        target.add(syn.ns(0.01 * k), '/joints', syn.JointSample(
            syn.ns(0.01 * k), ('yaw', f'joint_{k}'), np.zeros(2), None))
    assert len(target.problems) < 200
