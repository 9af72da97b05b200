# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Whether the numbers of an arm are those of now, and if not, why: for /diagnostics."""

from __future__ import annotations

from collections.abc import Collection, Sequence

from teleop_eval.core.arm import ArmEvaluator
from teleop_eval.core.arm_setup import DESCRIPTION, OPERATOR_DESCRIPTION
from teleop_eval.core.segment import NEVER_NS
from teleop_eval.core.settings import ThresholdSettings

OPERATOR_ROLES = ('hand', 'shoulder', 'operator_joints')
# From here on seconds say more than anybody wants to know.
_MINUTES_FROM_S = 600.0


def seconds(since_ns: int, now_ns: int) -> float:
    """Return the time that has passed, in seconds; a reading from before counts as none."""
    return max(now_ns - since_ns, 0) / 1e9


def spoken(duration_s: float) -> str:
    """Return a duration as a person would say it."""
    if duration_s >= _MINUTES_FROM_S:
        return f'{duration_s / 60.0:.0f} min'
    return f'{duration_s:.1f} s' if duration_s < 10.0 else f'{duration_s:.0f} s'


def joined(names: Sequence[str], last: str = 'and') -> str:
    """Return names for a sentence, with a word before the last one."""
    if len(names) < 2:
        return ''.join(names)
    return f'{", ".join(names[:-1])} {last} {names[-1]}'


class Phase:
    """
    What one arm is doing: waiting, paused, measuring, or silent.

    It remembers receive times alone, so that an answer follows from the messages so far and
    the time of the question, not from how often it was asked.

    Attributes
    ----------
    last_receive_ns
        By role, filled in by whoever takes the messages.
    closed_ns
        Receive time at which the newest window closed, None before the first.

    """

    def __init__(self, arm: ArmEvaluator) -> None:
        self._arm = arm
        self.last_receive_ns: dict[str, int] = {}
        self.closed_ns: int | None = None
        self._held: dict[str, tuple[object, int]] = {}

    def state_came(self, role: str, receive_ns: int) -> None:
        """Note since when a held state has had its value."""
        value = self._arm.states[role].latest
        if role not in self._held or self._held[role][0] != value:
            self._held[role] = (value, receive_ns)

    def carry_on(self, earlier: Phase) -> None:
        """Take over since when the held states have been what they are."""
        self._held = dict(earlier._held)

    def silent(self, now_ns: int, stale_s: float, *, but: Collection[str] = ()) -> str:
        """Return which inputs of those that windows wait for are silent, without some roles."""
        awaited = {role: intake.stream.topic for role, intake in self._arm.intakes.items()
                   if intake.stream.closes_windows and role not in but}
        topics = [topic for role, topic in awaited.items()
                  if role not in self.last_receive_ns
                  or seconds(self.last_receive_ns[role], now_ns) > stale_s]
        if len(topics) > 1 and len(topics) == len(awaited):
            return 'all inputs are silent'
        return f'{joined(topics)} {"is" if len(topics) == 1 else "are"} silent' if topics else ''

    def waiting(self, now_ns: int) -> str:
        """Return what the first window waits for, '' once there was one."""
        arm = self._arm
        if arm.measurement is not None and arm.measurement.newest is not None:
            return ''
        if arm.time_base is None and not arm.intakes and (lacking := self._undescribed()):
            return f'waits for {joined(lacking)}'
        absent = [intake.stream.topic for role, intake in arm.intakes.items()
                  if role not in self.last_receive_ns]
        if arm.time_base is None and len(absent) == len(arm.intakes):
            return (f'waits for the first message on {joined(absent, "or")}' if absent
                    else 'cannot begin: none of the inputs can be used')
        if arm.time_base is None:
            return f'waits for the end of the warm-up{self._warm_up_left(now_ns)}'
        mapping = arm.states.get('active_mapping')
        if mapping is not None and not mapping.latest:
            return f'waits for the active mapping on {mapping.topic}'
        return f'waits for its first window of {arm.settings.time.window_s:g} s'

    def _undescribed(self) -> list[str]:
        """Return the descriptions that are to come on a topic and have not."""
        topics = {
            (DESCRIPTION, 'the robot description'): self._arm.arm.robot.description_topic,
            (OPERATOR_DESCRIPTION, 'the description of the operator side'):
                self._arm.arm.operator.description_topic}
        return [f'{words} on {topic}' for (role, words), topic in topics.items()
                if topic and role not in self._arm.described]

    def _warm_up_left(self, now_ns: int) -> str:
        if self._arm.next_check_ns == NEVER_NS:
            return ', which begins with the next usable message'
        return f', {spoken(seconds(now_ns, self._arm.next_check_ns))} to go'

    def stale(self, now_ns: int, thresholds: ThresholdSettings, *,
              closed_ns: int | None = None, every_s: float | None = None) -> str:
        """
        Return since when there is no new window, '' while they come in time.

        Parameters
        ----------
        now_ns
            Receive time of the question.
        thresholds
            How long a silence is borne.
        closed_ns, every_s
            When the newest window of this kind closed and how far they are apart; default
            those of all metrics but latency.

        """
        time = self._arm.settings.time
        last_ns = self.closed_ns if closed_ns is None else closed_ns
        if last_ns is None:
            return ''
        limit_s = (every_s or time.window_s) + thresholds.stale_s + time.lateness_s
        if seconds(max(last_ns, self._unlabelled_until(now_ns)), now_ns) <= limit_s:
            return ''
        text = f'no new window for {spoken(seconds(last_ns, now_ns))}'
        if silent := self.silent(now_ns, thresholds.stale_s):
            return f'{text}, {silent}'
        if self._arm.time_base is None:
            return f'{text}, a new segment warms up{self._warm_up_left(now_ns)}'
        return text

    def _unlabelled_until(self, now_ns: int) -> int:
        """Return until when windows closed without a mapping, which measure nothing."""
        sampled = [self.last_receive_ns[role] for role, intake in self._arm.intakes.items()
                   if intake.stream.closes_windows and role in self.last_receive_ns]
        mapping = self._arm.states.get('active_mapping')
        if mapping is None or 'active_mapping' not in self._held or not sampled:
            return 0
        value, since_ns = self._held['active_mapping']
        return min(since_ns if value else now_ns, max(sampled))

    def between_mappings(self, now_ns: int) -> str:
        """Return that no window belongs to the mapping of now, '' if the newest one does."""
        if 'active_mapping' not in self._held:
            return ''
        (value, since_ns), measured = self._held['active_mapping'], self._arm.measurement
        if not value:
            return f'no mapping is active for {spoken(seconds(since_ns, now_ns))}'
        newest = None if measured is None else measured.newest
        if newest is not None and newest.mapping == value and newest.receive_ns >= since_ns:
            return ''
        return f'waits for the first window under {value}'

    @property
    def disengaged_ns(self) -> int | None:
        """Return the receive time since which the arm is not engaged, None if it is."""
        value, since_ns = self._held.get('engaged', (True, 0))
        return None if value is True else since_ns

    def disengaged(self, now_ns: int) -> str:
        """Return since when the arm is not engaged, '' while it is or without a clutch."""
        state, since_ns = self._arm.states.get('engaged'), self.disengaged_ns
        if state is not None and state.latest is None:
            return f'not engaged: no message on {state.topic} yet'
        return '' if since_ns is None else f'disengaged for {spoken(seconds(since_ns, now_ns))}'
