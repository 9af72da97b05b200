# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What the sections of all mapping kinds in the parameter file have in common."""

from __future__ import annotations

from dataclasses import dataclass

from teleop_eval.core.parameters import STRING, parameter


@dataclass(frozen=True)
class MappingSettings:
    """
    One mapping the operator can be given.

    Each kind extends this by a frozen dataclass of its own, whose fields are made by
    `parameter`, `group` and `named_map` of `teleop_eval.core.parameters`.
    """

    kind: str = parameter(
        STRING, '', 'Kind of mapping: joint_space, task_space, relative, rate, unmodelled, or '
        'one of your own.')

    def fault(self, key: str) -> str:
        """
        Return one sentence on what no parameter alone can show to be wrong, '' if nothing is.

        `key` is the dotted name of this mapping's section.
        """
        del key
        return ''

    def operator_joints(self) -> tuple[str, ...]:
        """Return the operator joints that the mapping needs to be told about."""
        return ()


def quaternion_fault(key: str, quaternion: tuple[float, ...] | None) -> str:
    """Return the sentence on a configured quaternion x, y, z, w that is no rotation, else ''."""
    if quaternion is None:
        return ''
    norm = sum(part * part for part in quaternion) ** 0.5
    if abs(norm - 1.0) <= 1e-3:
        return ''
    return f'{key} has norm {norm:.4g}, but a rotation has 1 (order x, y, z, w).'
