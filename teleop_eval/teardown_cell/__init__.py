# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
A simulated battery-teardown cell: operator, mapping and arm, all invented.

The only part of the project that commands anything, and only the arm it simulates itself:
every topic lies under `/teardown_cell`, in a domain of its own, on this machine.
"""
