# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Numeric core: no ROS, no files, no clock."""
