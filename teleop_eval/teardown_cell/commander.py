# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""From operator samples to commands: engagement, change of mapping and ramps between."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.teardown_cell.arm import HOME
from teleop_eval.teardown_cell.mappings import Mirror, Reach
from teleop_eval.teardown_cell.operator_motion import minimum_jerk
from teleop_eval.teardown_cell.plan import MIRROR, Plan
from teleop_eval.teardown_cell.servo import Array

# The ramp ends before the clutch closes, so that the servo has settled by then.
RAMP_SHARE = 0.9
# Share of the arm's rate limits up to which commands may move: a tracker that loses the hand
# for a moment must not throw the arm.
RATE_SHARE = 0.95


class Commander:
    """
    Commands for a stream of operator samples.

    While the clutch is open the command stands still until the mapping of the coming
    engagement is active, then runs on a minimum-jerk ramp to what that mapping asks for: it
    never jumps.
    """

    def __init__(self, chain: SerialChain, plan: Plan) -> None:
        """Start in the arm's home posture."""
        self._plan = plan
        self._lower, self._upper = chain.lower, chain.upper
        self._mirror = Mirror()
        self._reach = Reach.of(chain)
        self._held = HOME.copy()
        self._solution = HOME.copy()
        self._last = HOME.copy()
        self._last_t = 0.0
        self._rates = RATE_SHARE * chain.velocity_limits
        self.limited = 0

    def command(self, t: float, *, joints: npt.ArrayLike, hand: npt.ArrayLike,
                orientation: npt.ArrayLike) -> Array:
        """
        Return the command for the operator sample at t.

        Parameters
        ----------
        t
            Time of the sample from the start, s; increasing from call to call.
        joints, hand, orientation
            (7,) rad; (3,) m and (4,) x, y, z, w in the operator's frame.

        Returns
        -------
        (6,) rad, within the arm's limits.

        """
        step = self._wanted(t, joints, hand, orientation) - self._last
        largest = self._rates * max(t - self._last_t, 0.0)
        allowed = np.clip(step, -largest, largest)
        self.limited += int(np.any(allowed != step))
        self._last, self._last_t = self._last + allowed, t
        if self._plan.engaged(t):
            self._held = self._last
        return self._last

    def _wanted(self, t: float, joints: npt.ArrayLike, hand: npt.ArrayLike,
                orientation: npt.ArrayLike) -> Array:
        plan = self._plan
        if t < plan.first_engagement_s:
            begin, end = 0.0, plan.first_engagement_s
        elif plan.disengage_s <= t < plan.reengage_s:
            begin, end = plan.switch_s, plan.reengage_s
        else:
            begin, end = -1.0, 0.0
        if t < begin or t >= plan.seconds:
            return self._held
        asked = self._asked(t, joints, hand, orientation)
        share = float(minimum_jerk((t - begin) / (RAMP_SHARE * (end - begin))))
        return np.asarray((1.0 - share) * self._held + share * asked)

    def _asked(self, t: float, joints: npt.ArrayLike, hand: npt.ArrayLike,
               orientation: npt.ArrayLike) -> Array:
        if self._plan.mapping(t) == MIRROR:
            asked = np.clip(self._mirror.joints(joints), self._lower, self._upper)
            self._solution = asked
            return asked
        self._solution = self._reach.joints(hand, orientation, self._solution)
        return self._solution
