# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Arms and cells for mapping models, given in numbers instead of messages."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
from scipy.spatial.transform import Rotation

from teleop_eval.core.geometry import OperatorGeometry
from teleop_eval.core.mappings import OperatorCells, make_mapping
from teleop_eval.core.mappings.registry import known_kinds
from teleop_eval.core.parameters import build

IDENTITY = np.array([0.0, 0.0, 0.0, 1.0])
REACH_M = 0.9
ROBOT_SHOULDER = np.array([0.1, 0.0, 0.3])


def quaternion(axis: str, degrees: float) -> np.ndarray:
    """Return a rotation about one axis as x, y, z, w."""
    return Rotation.from_euler(axis, degrees, degrees=True).as_quat()


def operator(*, axes=IDENTITY, length_m=0.6, shoulder_m=(0.0, 0.2, 1.4),
             moves=False) -> OperatorGeometry:
    """Return an operator's arm."""
    shoulder = None if shoulder_m is None else np.array(shoulder_m)
    return OperatorGeometry(shoulder, length_m, None, np.array(axes, dtype=float), '',
                            shoulder_moves=moves)


def robot() -> SimpleNamespace:
    """Return what the hand mappings use of a robot: its reach and its shoulder."""
    def positions(joints):
        return np.broadcast_to(ROBOT_SHOULDER, (len(joints), 3))
    return SimpleNamespace(reach=SimpleNamespace(length_m=REACH_M),
                           shoulder=SimpleNamespace(positions=positions))


def model(kind, by=None, **given):
    """Return the model of a kind, its settings as a parameter file gives them."""
    settings = build(known_kinds()[kind].Settings, {'kind': kind, **given})
    assert settings.fault('x') == ''
    return make_mapping('x', settings, operator() if by is None else by, robot())


def cells(count, **given) -> OperatorCells:
    """Return cells of 0.01 s, all in stretch 0 unless told otherwise."""
    plain = {'hand_m': None, 'hand_xyzw': None, 'joints': None, 'joint_names': (),
             'robot_joints': np.zeros((count, 2)), 'period_s': 0.01,
             'stretch': np.zeros(count, dtype=np.int64)}
    return OperatorCells(**{**plain, **given})


def same_turns(found, expected) -> None:
    """Compare rotations (m, 4); q and -q are the same one."""
    dots = np.abs(np.sum(np.asarray(found) * np.asarray(expected), axis=1))
    np.testing.assert_allclose(dots, 1.0, atol=1e-12)
