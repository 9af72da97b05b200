# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Mapping kinds: models of the ideal command for operator samples.

What a kind of your own needs is here; see "Add a mapping kind" in DEVELOPERS.md.
"""

from teleop_eval.core.mappings.base import Anchor, Ideal, MappingModel, OperatorCells
from teleop_eval.core.mappings.guarded import make_mapping
from teleop_eval.core.mappings.settings import MappingSettings

__all__ = ['Anchor', 'Ideal', 'MappingModel', 'MappingSettings', 'OperatorCells', 'make_mapping']
