# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""A mapping of which nothing is known but its label."""

from __future__ import annotations

from typing import ClassVar

from teleop_eval.core.mappings.base import MappingModel

UNMODELLED = 'unmodelled'
NO_MAPPING = 'no mapping is configured'
NOT_MODELLED = "the stack's mapping is not modelled"


class UnmodelledMapping(MappingModel):
    """
    No ideal command: the stack's mapping is not known.

    What needs the ideal command is not configured, and the latency is from hand to tool.
    """

    modelled: ClassVar[bool] = False
