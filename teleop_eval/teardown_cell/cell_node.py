# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What every process of the cell has in common: a confined node, signals, deadlines, arguments."""

from __future__ import annotations

import argparse
import os
import signal
import sys
import time
from collections.abc import Callable, Iterator
from typing import Any

import rclpy
from builtin_interfaces.msg import Time
from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy
from rclpy.signals import SignalHandlerOptions
from std_msgs.msg import Int64

from teleop_eval.core.errors import TeleopEvalError
from teleop_eval.teardown_cell import guard
from teleop_eval.teardown_cell.plan import NAMESPACE, START_TOPIC, Plan

# A second of the fastest stream: what a busy machine may leave lying without loss.
SAMPLED = QoSProfile(depth=200, reliability=ReliabilityPolicy.RELIABLE)
LATCHED = QoSProfile(depth=1, reliability=ReliabilityPolicy.RELIABLE,
                     durability=DurabilityPolicy.TRANSIENT_LOCAL)
# Topics that rclpy puts at the root; in the cell they lie under its namespace too.
KEEP_INSIDE = (
    '--disable-rosout-logs',
    '-r', f'/parameter_events:={NAMESPACE}/parameter_events',
)
# Longest sleep between looks at the stop flag and the inputs, s.
SLICE_S = 0.004
BEFORE_START_S = -1.0


class CellNode:
    """
    A node inside the cell's namespace and domain, with its own signal handling.

    Nothing spins: subscriptions are drained by `take`, loops keep their own deadlines.
    rclpy's signal handlers are left out because they end the context before a process can
    finish its work.

    Parameters
    ----------
    name
        Name of the node.
    domain
        ROS domain.
    parent
        Process id on whose end this process stops too, so that no orphan is left; 0: none.

    """

    def __init__(self, name: str, domain: int, *, parent: int = 0) -> None:
        """Confine this process and open the node."""
        self._environment = dict(os.environ)
        guard.isolate(os.environ, domain)
        self.domain = domain
        self.full_name = f'{NAMESPACE}/{name}'
        self.signals = 0
        self._parent = parent
        self._next_watch = 0.0
        self._handlers = {number: signal.signal(number, self._on_signal)
                          for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)}
        self._context = rclpy.Context()
        rclpy.init(args=['--ros-args', *KEEP_INSIDE], context=self._context,
                   domain_id=domain, signal_handler_options=SignalHandlerOptions.NO)
        self.node = rclpy.create_node(
            name, namespace=NAMESPACE, context=self._context, enable_rosout=False,
            start_parameter_services=False)

    def __enter__(self) -> CellNode:
        """Return the node."""
        return self

    def __exit__(self, *_: object) -> None:
        """Close node and context, give back signals and environment."""
        self.node.destroy_node()
        self._context.try_shutdown()
        for number, handler in self._handlers.items():
            signal.signal(number, handler)
        os.environ.clear()
        os.environ.update(self._environment)

    def _on_signal(self, *_: object) -> None:
        self.signals += 1

    @property
    def stopped(self) -> bool:
        """Return whether a signal came or the parent process is gone."""
        return self.signals > 0 or bool(self._parent and os.getppid() != self._parent)

    def nodes(self) -> list[tuple[str, str]]:
        """Return (name, namespace) of the visible nodes."""
        return list(self.node.get_node_names_and_namespaces())

    def refuse_foreign(self) -> None:
        """Raise `CellRefusedError` when a node outside the cell is visible."""
        guard.refuse_foreign(self.nodes(), self.domain)

    def look_around(self) -> None:
        """Look for foreign nodes until discovery has had its time."""
        guard.look_around(self.refuse_foreign, lambda: self.stopped)

    def watch(self) -> None:
        """Look for foreign nodes once a second; call it in the loop."""
        now = time.monotonic()
        if now >= self._next_watch:
            self._next_watch = now + guard.WATCH_PERIOD_S
            self.refuse_foreign()

    def subscribe(self, kind: type, topic: str, qos: QoSProfile) -> Any:
        """Return a subscription to drain with `take`."""
        return self.node.create_subscription(kind, topic, _never, qos)


class StartSignal:
    """The latched stamp at which the motion begins."""

    def __init__(self, cell: CellNode) -> None:
        """Subscribe."""
        self._subscription = cell.subscribe(Int64, START_TOPIC, LATCHED)
        self._start_ns: int | None = None

    def time_at(self, stamp_ns: int) -> float:
        """Return s from the start; before the start is known, a time before it."""
        if self._start_ns is None:
            for message in take(self._subscription):
                self._start_ns = int(message.data)
        if self._start_ns is None:
            return BEFORE_START_S
        return (stamp_ns - self._start_ns) * 1e-9


def take(subscription: Any) -> Iterator[Any]:
    """Yield the messages that wait at a subscription."""
    with subscription.handle:
        while True:
            taken = subscription.handle.take_message(subscription.msg_type, False)
            if taken is None:
                return
            yield taken[0]


def stamp(nanoseconds: int) -> Time:
    """Return a ROS time."""
    return Time(sec=nanoseconds // 10**9, nanosec=nanoseconds % 10**9)


def nanoseconds(time_message: Time) -> int:
    """Return integer nanoseconds of a ROS time."""
    return int(time_message.sec * 10**9 + time_message.nanosec)


def sleep_until(deadline_ns: int) -> None:
    """Sleep until a time of the system clock, at most one slice."""
    ahead = (deadline_ns - time.time_ns()) * 1e-9
    if ahead > 0.0:
        time.sleep(min(ahead, SLICE_S))


def run_node(name: str, text: str, body: Callable[[CellNode, Plan], None],
             argv: list[str] | None = None) -> int:
    """
    Run one process of the cell and return its exit status.

    Parameters
    ----------
    name, text
        Name of the node and what `--help` says of it.
    body
        Called with the open node and the plan.
    argv
        Arguments; not given: those of the process.

    """
    parser = argparse.ArgumentParser(
        prog=f'python -m teleop_eval.teardown_cell.{name}_node', description=text)
    parser.add_argument('--domain', type=int, default=guard.DEFAULT_DOMAIN)
    parser.add_argument('--seconds', type=float, default=Plan().seconds)
    parser.add_argument('--seed', type=int, default=Plan().seed)
    parser.add_argument('--parent', type=int, default=0, help=argparse.SUPPRESS)
    options = parser.parse_args(argv)
    try:
        with CellNode(name, options.domain, parent=options.parent) as cell:
            body(cell, Plan(seconds=options.seconds, seed=options.seed))
    except TeleopEvalError as error:
        print(f'teardown_cell {name}: {error}', file=sys.stderr, flush=True)
        return error.exit_status
    return 0


def _never(_: object) -> None:
    """Stand in for a callback: subscriptions are drained, never called back."""
