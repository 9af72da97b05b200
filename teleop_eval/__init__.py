# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Evaluate the motion mapping of a teleoperated robot arm, live and from recordings."""

__version__ = '0.1.0'
