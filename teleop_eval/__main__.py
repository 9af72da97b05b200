# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Run a command with `python -m teleop_eval NAME`."""

from __future__ import annotations

import sys

from teleop_eval.cli.main import main

if __name__ == '__main__':
    sys.exit(main())
