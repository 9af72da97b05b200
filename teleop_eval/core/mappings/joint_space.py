# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Joint-space mapping: each robot joint follows one operator joint."""

from __future__ import annotations

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.errors import ConfigError
from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry
from teleop_eval.core.mappings.base import Ideal, OperatorCells
from teleop_eval.core.sentences import listed, nearest, shown
from teleop_eval.core.settings import MappingSettings


class JointSpaceMapping:
    """
    Robot angle = offset + sign x scale x operator angle, joint by joint.

    The ideal command is not cut at the robot's joint limits: what the limits take away
    shows as tracking error.
    """

    needs = 'operator_joints'
    estimates_tool_rotation = False

    def __init__(self, label: str, settings: MappingSettings, operator: OperatorGeometry,
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

    def take_tool_rotation(self, hand_to_tool: np.ndarray) -> None:
        """Do nothing: the tool's orientation follows from the joints."""

    def ideal(self, cells: OperatorCells) -> Ideal:
        """Return joints (m, n), and the tool pose they would give."""
        assert cells.joints is not None  # the arm evaluator asks only if they are there
        columns = [cells.joint_names.index(source) for source in self.sources]
        joints = self._offset + self._gain * cells.joints[:, columns]
        pose = self._robot.chain.forward(joints)
        return Ideal(pose.positions, rotations.from_matrix(pose.rotations), joints)
