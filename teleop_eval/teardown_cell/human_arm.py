# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The simulated operator's arm: shoulder 3, elbow 1, wrist 3 joints, solved in closed form."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

JOINT_NAMES = (
    'shoulder_yaw', 'shoulder_pitch', 'humeral_roll', 'elbow_flexion',
    'forearm_roll', 'wrist_flexion', 'wrist_deviation',
)
# Right shoulder in the operator's frame: x forward, y left, z up.
SHOULDER_M = np.array([0.0, -0.2, 1.4])


@dataclass(frozen=True)
class HumanArm:
    """
    Link lengths and how far the elbow is turned out.

    Axes: x along the link at zero, y left, z up; rotations
    Rz(yaw) Ry(pitch) Rx(humeral) | Ry(-flexion) | Rx(forearm) Ry(flexion) Rz(deviation).
    Lengths are 0.186 H, 0.146 H and 0.108 H for upper arm, forearm and hand.

    References
    ----------
    Winter, Biomechanics and Motor Control of Human Movement, fig. 4.1, after Drillis and
    Contini 1966 (second-hand; other tables differ by 10 %).

    """

    stature_m: float = 1.75
    elbow_out_rad: float = 0.25

    @property
    def upper_arm_m(self) -> float:
        """Return the distance from shoulder to elbow."""
        return 0.186 * self.stature_m

    @property
    def forearm_m(self) -> float:
        """Return the distance from elbow to wrist."""
        return 0.146 * self.stature_m

    @property
    def hand_m(self) -> float:
        """Return the distance from wrist to finger tip."""
        return 0.108 * self.stature_m

    @property
    def length_m(self) -> float:
        """Return the distance from shoulder to finger tip with the arm stretched."""
        return self.upper_arm_m + self.forearm_m + self.hand_m

    def forward(self, joints: npt.ArrayLike) -> tuple[Array, Array]:
        """
        Return the finger tip.

        Parameters
        ----------
        joints
            (n, 7) rad, in the order of `JOINT_NAMES`.

        Returns
        -------
        (n, 3) tip in the operator's frame, m, and (n, 3, 3) rotation of the hand.

        """
        q = np.asarray(joints, dtype=float)
        shoulder = _rz(q[:, 0]) @ _ry(q[:, 1]) @ _rx(q[:, 2])
        forearm = shoulder @ _ry(-q[:, 3])
        hand = forearm @ _rx(q[:, 4]) @ _ry(q[:, 5]) @ _rz(q[:, 6])
        tip = (self.upper_arm_m * shoulder[:, :, 0] + self.forearm_m * forearm[:, :, 0]
               + self.hand_m * hand[:, :, 0])
        return SHOULDER_M + tip, hand

    def inverse(self, tip: npt.ArrayLike, rotation: npt.ArrayLike) -> Array:
        """
        Return the joints that put the finger tip at a pose, elbow down and a little out.

        Parameters
        ----------
        tip
            (n, 3) in the operator's frame, m.
        rotation
            (n, 3, 3) of the hand.

        Returns
        -------
        (n, 7) rad.

        Raises
        ------
        ValueError
            If the wrist would be out of reach.

        """
        hand = np.asarray(rotation, dtype=float)
        wrist = np.asarray(tip, dtype=float) - SHOULDER_M - self.hand_m * hand[:, :, 0]
        a, b = self.upper_arm_m, self.forearm_m
        distance = np.linalg.norm(wrist, axis=1)
        if np.any(distance >= a + b) or np.any(distance <= abs(a - b)):
            raise ValueError('the wrist is out of the reach of the simulated operator')
        flexion = np.pi - np.arccos((a * a + b * b - distance**2) / (2.0 * a * b))
        shoulder = self._shoulder(wrist, distance)
        bent = shoulder @ _ry(-flexion)
        turn = np.swapaxes(bent, 1, 2) @ hand
        return np.stack([
            np.arctan2(shoulder[:, 1, 0], shoulder[:, 0, 0]),
            -np.arcsin(np.clip(shoulder[:, 2, 0], -1.0, 1.0)),
            np.arctan2(shoulder[:, 2, 1], shoulder[:, 2, 2]),
            flexion,
            np.arctan2(-turn[:, 1, 2], turn[:, 2, 2]),
            np.arcsin(np.clip(turn[:, 0, 2], -1.0, 1.0)),
            np.arctan2(-turn[:, 0, 1], turn[:, 0, 0]),
        ], axis=1)

    def _shoulder(self, wrist: Array, distance: Array) -> Array:
        """Return the upper arm's rotations (n, 3, 3): x along it, z towards the forearm."""
        a, b = self.upper_arm_m, self.forearm_m
        ahead = wrist / distance[:, None]
        up = np.array([0.0, 0.0, 1.0])
        down = _unit(ahead * ahead[:, 2:] - up)
        out = np.cross(ahead, down)
        aside = np.cos(self.elbow_out_rad) * down - np.sin(self.elbow_out_rad) * out
        cosine = (a * a + distance**2 - b * b) / (2.0 * a * distance)
        sine = np.sqrt(1.0 - cosine**2)
        x = cosine[:, None] * ahead + sine[:, None] * aside
        along = wrist - a * x
        z = _unit(along - np.sum(along * x, axis=1, keepdims=True) * x)
        return np.stack([x, np.cross(z, x), z], axis=2)


def _unit(vectors: Array) -> Array:
    return np.asarray(vectors / np.linalg.norm(vectors, axis=1, keepdims=True))


def _rotation(angle: Array, first: int, second: int) -> Array:
    """Return rotations (n, 3, 3) that turn axis `first` towards axis `second`."""
    matrix = np.zeros((len(angle), 3, 3))
    matrix[:, range(3), range(3)] = 1.0
    cosine, sine = np.cos(angle), np.sin(angle)
    matrix[:, first, first] = matrix[:, second, second] = cosine
    matrix[:, second, first], matrix[:, first, second] = sine, -sine
    return matrix


def _rx(angle: Array) -> Array:
    return _rotation(angle, 1, 2)


def _ry(angle: Array) -> Array:
    return _rotation(angle, 2, 0)


def _rz(angle: Array) -> Array:
    return _rotation(angle, 0, 1)
