# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
What the node publishes: diagnostics, metrics and the summary, and nothing else.

The messages are the very bytes that the session's summary bag holds.
"""

from __future__ import annotations

from collections.abc import Sequence

from diagnostic_msgs.msg import DiagnosticArray
from rclpy.node import Node
from rclpy.publisher import Publisher
from std_msgs.msg import Float64, String

from teleop_eval.core.results import StatusLine, WindowResult
from teleop_eval.nodes import qos
from teleop_eval.sinks import messages


class LiveOutputs:
    """Publishers of one node."""

    def __init__(self, node: Node) -> None:
        self._node = node
        self._diagnostics = node.create_publisher(
            DiagnosticArray, messages.DIAGNOSTICS_TOPIC, qos.DIAGNOSTICS)
        self._summary = node.create_publisher(String, messages.SUMMARY_TOPIC, qos.LATCHED)
        self._metrics: dict[tuple[str, str], Publisher] = {}

    def diagnostics(self, now_ns: int, lines: Sequence[StatusLine]) -> None:
        """Publish one set of statuses, named '<node>: <name>'."""
        self._diagnostics.publish(
            messages.diagnostic_array(now_ns, lines, prefix=self._node.get_name()))

    def window(self, result: WindowResult) -> None:
        """Publish the metrics of one window on ~/ARM/METRIC, NaN where there is no value."""
        for name, metric in result.metrics.items():
            key = (result.arm, name)
            publisher = self._metrics.get(key)
            if publisher is None:
                publisher = self._metrics[key] = self._node.create_publisher(
                    Float64, messages.metric_topic(result.arm, name), qos.METRICS)
            publisher.publish(messages.float64(metric.number))

    def summary(self, text: str) -> None:
        """Publish the summary as JSON text; it stays for late subscribers."""
        self._summary.publish(messages.string(text))
