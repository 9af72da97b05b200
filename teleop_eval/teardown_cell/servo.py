# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Second-order servos of all joints, stepped exactly."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.linalg import expm

Array = npt.NDArray[np.float64]


class Servo:
    """
    q'' = wn^2 (u - q) - 2 zeta wn q', for set points u that change linearly over a step.

    The step is the matrix exponential of the closed loop together with the ramp of the set
    point, so it is exact for any length: no error grows with a step that a busy machine
    made late.

    Parameters
    ----------
    position
        (n,) rest position at the start, rad.
    zeta, natural_frequency_rad_s
        Damping ratio and natural frequency, the same for all joints.
    step_s
        Length of one step.

    References
    ----------
    Van Loan 1978, "Computing integrals involving the matrix exponential", IEEE Trans.
    Automatic Control 23(3), 395-404 (citation from memory): input and ramp as extra states.

    """

    def __init__(self, position: npt.ArrayLike, *, zeta: float,
                 natural_frequency_rad_s: float, step_s: float) -> None:
        """Start at rest with the set point at the position."""
        self.position = np.array(position, dtype=float)
        self.velocity = np.zeros_like(self.position)
        self.set_point = self.position.copy()
        self.step_s = step_s
        stiffness = natural_frequency_rad_s**2
        damping = 2.0 * zeta * natural_frequency_rad_s
        system = np.array([
            [0.0, 1.0, 0.0, 0.0],
            [-stiffness, -damping, stiffness, 0.0],
            [0.0, 0.0, 0.0, 1.0],
            [0.0, 0.0, 0.0, 0.0],
        ])
        self._transition = expm(system * step_s)[:2]

    def step(self, set_point: npt.ArrayLike) -> Array:
        """
        Advance by one step while the set point moves linearly to a new value.

        Parameters
        ----------
        set_point
            (n,) set point at the end of the step, rad.

        Returns
        -------
        (n,) position at the end of the step, rad.

        """
        target = np.asarray(set_point, dtype=float)
        ramp = (target - self.set_point) / self.step_s
        state = np.stack([self.position, self.velocity, self.set_point, ramp])
        self.position, self.velocity = self._transition @ state
        self.set_point = target.copy()
        return self.position
