# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Sinks: where results go. Recordings, tables, the report, messages."""
