# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Commands; one module each, none of which imports ROS."""
