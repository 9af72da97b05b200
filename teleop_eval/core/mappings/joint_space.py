# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Joint-space mapping: each robot joint follows one operator joint."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.errors import ConfigError
from teleop_eval.core.mappings.base import OPERATOR_JOINTS, Ideal, MappingModel, OperatorCells
from teleop_eval.core.mappings.settings import MappingSettings
from teleop_eval.core.parameters import DOUBLE, STRING, named_map, parameter
from teleop_eval.core.sentences import listed, nearest, shown

if TYPE_CHECKING:
    from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry


@dataclass(frozen=True)
class SourceJointSettings:
    """How one robot joint follows one operator joint."""

    source: str = parameter(STRING, '', 'Operator joint that drives this robot joint.')
    sign: float = parameter(DOUBLE, 1.0, 'Direction, 1 or -1.', low=-1.0, high=1.0)
    scale: float = parameter(DOUBLE, 1.0, 'Robot angle per operator angle.')
    offset: float = parameter(DOUBLE, 0.0, 'Robot angle at operator angle 0.', unit='rad')


class JointSpaceMapping(MappingModel):
    """
    Robot angle = offset + sign x scale x operator angle, joint by joint.

    The ideal command is not cut at the robot's joint limits: what the limits take away
    shows as tracking error.
    """

    @dataclass(frozen=True)
    class Settings(MappingSettings):
        """The robot's joints with their sources."""

        joints: dict[str, SourceJointSettings] = named_map(
            SourceJointSettings, 'By robot joint.', free_names=True)

        def fault(self, key: str) -> str:
            """Return the sentence on a joint without source or with an odd sign, else ''."""
            for joint, source in self.joints.items():
                if not source.source:
                    return f'{key}.joints.{joint}.source is missing; name the operator joint.'
                if abs(source.sign) != 1.0:
                    return (f'{key}.joints.{joint}.sign is {source.sign:g}, but must be 1 or '
                            '-1; use scale for factors.')
            return ''

        def operator_joints(self) -> tuple[str, ...]:
            """Return the sources."""
            return tuple(source.source for source in self.joints.values())

    needs = OPERATOR_JOINTS

    def __init__(self, label: str, settings: Settings, operator: OperatorGeometry,
                 robot: RobotGeometry) -> None:
        del operator  # the link lengths of the operator's arm play no part here
        names = robot.chain.joint_names
        for name in settings.joints:
            if name not in names:
                near = nearest(name, names)
                hint = f'did you mean {near}?' if near else f'those are {listed(names)}.'
                raise ConfigError(f'mapping {label!r} names robot joint {shown(name)}, which is '
                                  f'not among the joints that move the tool; {hint}')
        lacking = [name for name in names if name not in settings.joints]
        if lacking:
            raise ConfigError(
                f'mapping {label!r} gives no source for robot joint {lacking[0]}; add '
                f'mappings.{label}.joints.{lacking[0]}.source.')
        self._robot = robot
        sources = [settings.joints[name] for name in names]
        self.sources = tuple(source.source for source in sources)
        self._gain = np.array([source.sign * source.scale for source in sources])
        self._offset = np.array([source.offset for source in sources])

    def ideal(self, cells: OperatorCells) -> Ideal:
        """Return joints (m, n), and the tool pose they would give."""
        assert cells.joints is not None  # the arm evaluator asks only if they are there
        columns = [cells.joint_names.index(source) for source in self.sources]
        joints = self._offset + self._gain * cells.joints[:, columns]
        pose = self._robot.chain.forward(joints)
        return Ideal(pose.positions, rotations.from_matrix(pose.rotations), joints)
