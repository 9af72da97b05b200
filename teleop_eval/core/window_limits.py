# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""How near the joints of one window come to their limits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from teleop_eval.core.kinematics import SerialChain

# Time over which the limit margin is compared to tell approaching from leaving.
APPROACH_S = 0.2


@dataclass(frozen=True)
class LimitState:
    """
    How near the joints were to their limits at the end of a window.

    `least` is the smallest margin within the window, a share of the joint's span; all are None
    without a sample.
    """

    margin: float | None = None
    joint: str = ''
    approaching: bool = False
    least: float | None = None


def limited_joints(chain: SerialChain) -> np.ndarray:
    """Tell which joints (n,) have limits with a range between them."""
    limited: np.ndarray = (np.isfinite(chain.lower) & np.isfinite(chain.upper)
                           & (chain.upper > chain.lower))
    return limited


def limit_state(chain: SerialChain, q: np.ndarray, period_s: float) -> LimitState:
    """Return the margins of joint positions (m, n), one row a cell of the window."""
    limited = limited_joints(chain)
    if not len(q) or not limited.any():
        return LimitState()
    low, high = chain.lower[limited], chain.upper[limited]
    margins = np.clip(np.minimum(q[:, limited] - low, high - q[:, limited]) / (high - low),
                      0.0, 0.5)
    names = [name for name, has in zip(chain.joint_names, limited, strict=True) if has]
    joint = int(margins[-1].argmin())
    before = margins[max(0, len(margins) - 1 - round(APPROACH_S / period_s)), joint]
    return LimitState(float(margins[-1, joint]), names[joint],
                      bool(margins[-1, joint] < before), float(margins.min()))
