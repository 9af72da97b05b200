# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""One window's tracks in the form in which mapping models take them."""

from __future__ import annotations

import numpy as np

from teleop_eval.core.history import Track
from teleop_eval.core.mappings import Anchor, OperatorCells

_NO_TURN = (0.0, 0.0, 0.0, 1.0)


def operator_cells(tracks: dict[str, Track], joint_names: tuple[str, ...],
                   robot_joints: np.ndarray, *, stretch: np.ndarray,
                   anchors: dict[int, Anchor], period_s: float) -> OperatorCells:
    """Return one window's tracks as a mapping model wants them."""
    def values(name: str) -> np.ndarray | None:
        return tracks[name].values if name in tracks else None

    def turns(name: str) -> np.ndarray | None:
        track = tracks.get(name)
        return None if track is None else np.where(track.valid[:, None], track.values, _NO_TURN)

    return OperatorCells(
        hand_m=values('hand'), hand_xyzw=turns('hand_turn'), joints=values('operator_joints'),
        joint_names=joint_names, robot_joints=robot_joints, shoulder_m=values('shoulder'),
        rate_input=values('rate_input'), robot_m=values('p_r'), robot_xyzw=turns('turn_r'),
        period_s=period_s, stretch=stretch, anchors=anchors)
