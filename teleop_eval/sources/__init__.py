# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Sources: where samples come from. Live subscriptions and recordings."""
