# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The posture of the robot in which all predictions of a recording begin."""

from __future__ import annotations

import numpy as np

from teleop_eval.core.candidates import Start
from teleop_eval.core.history import Track


class StartPosture:
    """
    Looks for the first usable cell in which the robot's joints were measured.

    Without a stream of joints there is none, and predictions begin at the middle of the ranges;
    with one they wait for it.
    """

    def __init__(self) -> None:
        self._posture: np.ndarray | None = None

    def of_window(self, usable: np.ndarray, joints: Track | None,
                  robot_joints: np.ndarray) -> Start:
        """
        Return where predictions begin, as far as it is known by this window.

        Parameters
        ----------
        usable
            (m,) cells that count.
        joints
            Every evaluated joint as measured, None where none comes.
        robot_joints
            (m, n) those of the chain.

        """
        if self._posture is None and joints is not None:
            here = np.flatnonzero(np.asarray(usable, dtype=bool) & joints.valid)
            if not len(here):
                return Start(cell=len(usable))
            self._posture = robot_joints[here[0]].copy()
            return Start(self._posture, int(here[0]))
        return Start(self._posture)
