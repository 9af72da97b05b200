# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Mapping kinds: models of the ideal command for operator samples."""

from teleop_eval.core.mappings.base import Ideal, MappingModel, OperatorCells, make_mapping

__all__ = ['Ideal', 'MappingModel', 'OperatorCells', 'make_mapping']
