# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""When windows close and which samples are late, against a reference written from the rule."""

from __future__ import annotations

import json

import numpy as np
import pytest
import synthetic_session as syn
from hypothesis import example, given, settings
from hypothesis import strategies as st

NAMES = ('a', 'b')
WINDOW_NS, WARM_UP_NS = 2_000_000_000, 5_000_000_000


class Reference:
    """
    The closing of windows, told from the rule in the slowest and plainest way.

    A window ending at t closes when every sampled stream has a sample at or after t, or when
    the largest receive time exceeds t + that stream's frozen stamp-to-receive offset +
    lateness; later samples are dropped and counted. A window waits for some sample at or
    after its start; windows before the next sample of all are left out.
    """

    def __init__(self, roles, lateness_ns):
        self.lateness_ns = lateness_ns
        self.times = {role: [] for role in roles}
        self.late = dict.fromkeys(roles, 0)
        self.raw, self.offset, self.start = [], {}, None
        self.windows = []

    def arrive(self, receive_ns, role, stamp_ns):
        if self.start is None and self.raw and receive_ns > self.raw[0][0] + WARM_UP_NS:
            self.freeze()
        if self.start is None:
            self.raw.append((receive_ns, role, stamp_ns))
            return
        self.close(receive_ns)
        self.accept(role, stamp_ns)
        self.close(receive_ns)

    def freeze(self):
        firsts = []
        for role in self.times:
            mine = [(r, s) for r, who, s in self.raw if who == role]
            self.offset[role] = int(np.median([s - r for r, s in mine]))
            firsts.append(mine[0][1])
        self.start = max(min(firsts), max(firsts) - WARM_UP_NS)
        for _, role, stamp_ns in self.raw:
            self.accept(role, stamp_ns)

    def accept(self, role, stamp_ns):
        if self.windows and stamp_ns < self.start:
            self.late[role] += 1
        elif not self.times[role] or stamp_ns > self.times[role][-1]:
            self.times[role].append(stamp_ns)

    def close(self, receive_ns):
        while True:
            end = self.start + WINDOW_NS
            for role, times in self.times.items():
                there = times and times[-1] >= end
                overdue = receive_ns > end - self.offset[role] + self.lateness_ns
                if not there and not overdue:
                    return
            ahead = [t for times in self.times.values() for t in times if t >= self.start]
            if not ahead:
                return
            if min(ahead) >= end:
                self.start = end
                continue
            self.windows.append((self.start, end, receive_ns))
            self.start = end


def arrivals(draw_seed, lateness_s, *, pause=False):
    """Return arrivals of three streams with delays, bursts and losses."""
    rng = np.random.default_rng(draw_seed)
    made = []
    for role, rate in (('robot_joints', 40.0), ('command', 25.0), ('hand', 30.0)):
        stamps = np.sort(rng.uniform(0.0, 24.0, int(24 * rate)))
        delay = rng.uniform(0.0, 0.05) + rng.exponential(0.02, len(stamps))
        # Now and then a stretch of samples is held up beyond the lateness, and comes at once.
        for begin in rng.uniform(6.0, 22.0, 3):
            held_up = (stamps > begin) & (stamps < begin + rng.uniform(0.1, 1.5))
            delay[held_up] += rng.uniform(0.0, 2.5 * lateness_s + 0.5)
        keep = rng.random(len(stamps)) > 0.1
        if pause:
            keep &= (stamps < 9.0) | (stamps > 16.5)
        else:
            begin = rng.uniform(7.0, 20.0)
            keep &= (stamps < begin) | (stamps > begin + rng.uniform(0.0, 4.0))
        # One topic keeps its order, but for single stray messages.
        received = np.maximum.accumulate(stamps + delay)
        astray = received + rng.uniform(0.0, 0.4, len(stamps))
        newest = stamps[np.searchsorted(received, astray, side='right') - 1]
        # One that falls back by more than a second is a clock that stepped.
        stray = (rng.random(len(stamps)) < 0.02) & (newest - stamps < 0.9)
        received = np.where(stray, astray, received)
        order = np.argsort(received, kind='stable')
        made += [(r, role, s) for r, s, k in
                 zip(received[order], stamps[order], keep[order], strict=True) if k]
    return sorted(made)


def feed_of(made):
    """Return the feed of arrivals."""
    feed = syn.Feed()
    topics = {'robot_joints': '/joints', 'command': '/command', 'hand': '/hand'}
    for receive, role, stamp in made:
        if role == 'hand':
            feed.put(receive, topics[role], syn.PoseSample(syn.ns(stamp), np.zeros(3), None, 'op'))
        else:
            feed.put(receive, topics[role], syn.JointSample(
                syn.ns(stamp), NAMES, np.zeros(2), None))
    return feed


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10 ** 9), st.sampled_from([0.0, 0.1, 0.5, 1.5]), st.booleans())
# The first sample after a silence comes when its window is overdue already.
@example(1468, 0.0, False)
# A sample comes for a window that was left out.
@example(1468, 0.5, False)
def test_windows_close_exactly_by_the_rule(seed, lateness_s, pause):
    made = arrivals(seed, lateness_s, pause=pause)
    target = syn.evaluator(
        syn.arm_parameters(**{**syn.BARE, 'operator__hand_topic': '/hand'}),
        **{'time.lateness_s': lateness_s, 'time.clock_tolerance_s': 60.0,
           'time.grid_rate_hz': 50.0})
    reference = Reference(('robot_joints', 'command', 'hand'), round(lateness_s * 1e9))
    roles = {'/joints': 'robot_joints', '/command': 'command', '/hand': 'hand'}
    windows = []
    for receive_ns, topic, sample in feed_of(made).messages():
        target.add(receive_ns, topic, sample)
        reference.arrive(receive_ns, roles[topic], sample.stamp_ns)
        windows += target.poll()
        assert [(w.start_ns, w.end_ns, w.receive_ns) for w in windows] == reference.windows
    inputs = target.summary()['arms']['right']['inputs']
    assert {role: inputs[role]['late'] for role in reference.late} == reference.late
    assert len(windows) > 4


def test_the_reference_meets_late_samples_and_waits():
    """The generator reaches what it is for."""
    late, longest = 0, 0
    for seed in range(8):
        reference = Reference(('robot_joints', 'command', 'hand'), 500_000_000)
        for receive, role, stamp in arrivals(seed, 0.5):
            reference.arrive(syn.ns(receive), role, syn.ns(stamp))
        late += sum(reference.late.values())
        longest = max(longest, max(r - end for _, end, r in reference.windows))
    assert late > 100
    assert longest > 400_000_000


def test_window_is_closed_by_the_message_that_completes_it():
    """Two streams: the later one's first sample at or after the end closes the window."""
    made = syn.Feed()
    t = np.arange(0.0, 10.0, 0.02)
    made.joints('/joints', t, np.zeros((len(t), 2)), NAMES, transport=0.001)
    made.joints('/command', t, np.zeros((len(t), 2)), NAMES, transport=0.150)
    target = syn.evaluator(syn.arm_parameters(**syn.BARE))
    windows = syn.feed(target, made.messages())
    assert [w.start_ns for w in windows[2:]] == [syn.ns(4.0), syn.ns(6.0)]
    # The command of 6.000 s comes at 6.150 s.
    assert [w.receive_ns for w in windows[2:]] == [syn.ns(6.15), syn.ns(8.15)]


@pytest.mark.parametrize('lateness', [0.3, 2.0])
def test_dead_stream_delays_windows_by_the_lateness_only(lateness):
    made, t = syn.Feed(), np.arange(0.0, 20.0, 0.02)
    made.joints('/joints', t, np.zeros((len(t), 2)), NAMES, transport=0.010)
    made.joints('/command', t[t < 9.0], np.zeros((450, 2)), NAMES, transport=0.030)
    target = syn.evaluator(syn.arm_parameters(**syn.BARE), **{'time.lateness_s': lateness})
    windows = syn.feed(target, made.messages())
    for window in windows:
        if window.end_ns > syn.ns(9.0):
            waited = window.receive_ns - window.end_ns
            # First receive time beyond end + 30 ms of the dead stream + lateness.
            assert 0 < waited - 30_000_000 - round(lateness * 1e9) <= 20_000_000
            assert window.metrics['joint_error_rms'].status == 'ok' or (
                window.start_ns > syn.ns(9.0))


def test_held_states_never_close_windows():
    """Clutch and mapping messages, or a held command, let time pass but are not waited for."""
    made, t = syn.Feed(), np.arange(0.0, 12.0, 0.02)
    made.joints('/joints', t, np.zeros((len(t), 2)), NAMES)
    made.joints('/command', [0.5], [[0.0, 0.0]], NAMES)
    made.flag(0.6, '/engaged', True)
    target = syn.evaluator(syn.arm_parameters(**syn.BARE, engaged__topic='/engaged',
                                              command__hold=True))
    windows = syn.feed(target, made.messages())
    # The command has no sample beyond 0.5 s, nor the clutch, and nothing waits for them.
    assert [w.receive_ns for w in windows[2:]] == [syn.ns(k + 0.002) for k in (6, 8, 10)]
    assert windows[-1].metrics['joint_error_rms'].status == 'ok'


def test_states_alone_close_no_window():
    """With the robot silent, hundreds of clutch messages make no window."""
    made, t = syn.Feed(), np.arange(0.0, 7.0, 0.02)
    made.joints('/joints', t, np.zeros((len(t), 2)), NAMES)
    for k in range(500):
        made.flag(8.0 + 0.1 * k, '/engaged', k % 2 == 0)
    target = syn.evaluator(syn.arm_parameters(
        **{**syn.BARE, 'command__topic': None}, engaged__topic='/engaged'))
    windows = syn.feed(target, made.messages())
    assert [w.end_ns for w in windows] == [syn.ns(k) for k in (2, 4, 6, 8)]


def test_sampled_gap_is_masked_not_bridged():
    """A hole longer than max_gap leaves its cells out of the tracking error."""
    motion = syn.wander()
    made, t = syn.Feed(), syn.clock(0.0, 20.0, 100.0)
    made.poses('/hand', t, 0.6 * motion(t))
    hole = (t > 8.0) & (t < 8.6)
    made.joints('/joints', t[~hole], syn.joints_for(motion(t[~hole])))
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    syn.feed(target, made.messages())
    summary = syn.closed(target)
    found = syn.metrics(summary)
    assert found['tracking_error_max_norm']['value'] < 2e-3
    # 20 s at 100 Hz less the hole: the cells it touches, and those without a sample before
    # or after.
    assert found['tracking_error_rms_norm']['samples'] == pytest.approx(2000 - 61, abs=3)
    assert summary['arms']['right']['inputs']['robot_joints']['gaps'] == 1
    longer = syn.evaluator(syn.arm_parameters(**syn.TASK), **{'time.max_gap_s': 1.0})
    syn.feed(longer, made.messages())
    bridged = syn.metrics(syn.closed(longer))
    assert bridged['tracking_error_rms_norm']['samples'] > 1995
    assert bridged['tracking_error_max_norm']['value'] > 2e-3


def test_long_silence_costs_no_windows_and_joins_nothing():
    """Streams that pause for two hours go on in the same segment with the next sample."""
    motion = syn.wander()
    made = syn.session(20.0, motion=motion, delay=0.1)
    made._messages += syn.session(7240.0, motion=motion, delay=0.1, start=7220.0)._messages
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    windows = syn.feed(target, made.messages())
    summary = syn.closed(target)
    assert len(windows) <= 22
    assert summary['arms']['right']['segments'] == 1
    found = syn.metrics(summary)
    assert found['engaged_time_s']['value'] == pytest.approx(42.0, abs=2.1)
    assert found['latency_s']['value'] == pytest.approx(0.1, abs=1e-3)
    assert found['tracking_error_compensated_max_norm']['value'] < 0.01
    # Two minutes later the last delay no longer served.
    after = [w for w in windows if syn.ns(7220.0) <= w.start_ns < syn.ns(7226.0)]
    assert after and all(
        w.metrics['tracking_error_compensated_rms_norm'].status != 'ok' for w in after)


def test_short_pause_keeps_the_delay_in_use():
    """After 10 s without any sample the delay observed before still serves, with its age."""
    motion = syn.wander()
    made = syn.session(20.0, motion=motion, delay=0.1)
    made._messages += syn.session(40.0, motion=motion, delay=0.1, start=30.0)._messages
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    windows = syn.feed(target, made.messages())
    after = [w for w in windows if syn.ns(31.0) <= w.start_ns < syn.ns(36.0)]
    assert after
    for window in after:
        error = window.metrics['tracking_error_compensated_rms_norm']
        assert error.status == 'ok' and error.value < 0.01
        assert error.details['delay_age_s'] > 10.0


class Batches:
    """Feeds one evaluator in one way; all ways must give the same."""

    def __init__(self, seed):
        self._rng = np.random.default_rng(seed)

    def run(self, target, messages):
        windows = []
        for message in messages:
            target.add(*message)
            if self._rng.random() < 0.02:
                windows += target.poll()
            if self._rng.random() < 0.01:
                target.diagnostics(message[0] + int(self._rng.integers(0, 10 ** 9)))
            if self._rng.random() < 0.01:
                target.summary()
            if self._rng.random() < 0.003:
                target.background(1000)
        summary = syn.closed(target)
        return summary, windows + target.poll()


def plain(windows):
    """Return windows as plain types."""
    return [(w.arm, w.mapping, w.start_ns, w.end_ns, w.receive_ns,
             {name: metric.to_dict() for name, metric in w.metrics.items()}) for w in windows]


def test_only_the_sequence_counts():
    """However often poll, background, diagnostics and summary are called: the same result."""
    motion = syn.wander()
    made = syn.session(36.0, motion=motion, delay=0.1, turns=None)
    made.flag(0.5, '/engaged', True).flag(12.2, '/engaged', False).flag(14.0, '/engaged', True)
    made.text(20.0, syn_event(), 'reset').text(25.0, syn_event(), 'segment')
    messages = made.messages()
    parameters = {**syn.arm_parameters(**syn.TASK, engaged__topic='/engaged'),
                  **syn.arm_parameters('left', **syn.TASK)}
    alone = syn.evaluator(parameters)
    for message in messages:
        alone.add(*message)
    summary = syn.closed(alone)
    windows = plain(alone.poll())
    assert len(windows) > 20
    for seed in range(3):
        again, polled = Batches(seed).run(syn.evaluator(parameters), messages)
        assert plain(polled) == windows
        for one in (summary, again):
            for arm in one['arms'].values():
                for mapping in arm['mappings'].values():
                    # The reachable space is sampled in the background; finish completes it.
                    mapping['metrics'].pop('workspace_coverage_robot', None)
        assert json.dumps(again) == json.dumps(summary)


def syn_event():
    """Return the topic of events."""
    from teleop_eval.core.evaluator import EVENT_TOPIC
    return EVENT_TOPIC


def test_finish_completes_the_sampling_whatever_was_done_before():
    messages = syn.session(8.0, motion=syn.wander()).messages()
    results = []
    for slices in (0, 7):
        target = syn.evaluator(syn.arm_parameters(**syn.TASK))
        syn.feed(target, messages)
        for _ in range(slices):
            assert target.background(1234)
        results.append(json.dumps(target.finish()))
        assert not target.background()
    assert results[0] == results[1]
    assert '"workspace_coverage_robot": {"value": 0.' in results[0]
