# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The live node: the only part of the package that needs a ROS installation."""
