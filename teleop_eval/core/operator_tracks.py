# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The operator's side of one window: hand, shoulder, joints, and the hand in arm lengths."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np

from teleop_eval.core.history import Track
from teleop_eval.core.intake import Intake
from teleop_eval.core.mappings.base import RATE_INPUT
from teleop_eval.core.operator_arm import OperatorArm
from teleop_eval.core.operator_settings import OperatorSettings
from teleop_eval.core.sentences import shown
from teleop_eval.core.streams import SampledStream
from teleop_eval.core.window import Span, on_grid, turned_on_grid

if TYPE_CHECKING:
    from teleop_eval.core.arm import ArmEvaluator


def operator_tracks(arm: ArmEvaluator, streams: Mapping[str, SampledStream],
                    span: Span) -> dict[str, Track]:
    """Return hand, hand_turn, operator_joints, rate_input, shoulder and u_o as far as known."""
    tracks: dict[str, Track] = {}
    geometry = arm.operator
    if 'operator_joints' in streams:
        stream = streams['operator_joints']
        tracks['operator_joints'] = on_grid(
            stream.items(span.end_ns), span, max_gap_ns=stream.max_gap_ns)
    if RATE_INPUT in streams:
        stream = streams[RATE_INPUT]
        tracks[RATE_INPUT] = on_grid(stream.items(span.end_ns), span, max_gap_ns=stream.max_gap_ns)
    if 'hand' in streams:
        stream = streams['hand']
        items = stream.items(span.end_ns)
        tracks['hand'] = on_grid(items, span, max_gap_ns=stream.max_gap_ns)
        turn = turned_on_grid(items, span, max_gap_ns=stream.max_gap_ns)
        if turn is not None:
            tracks['hand_turn'] = turn
    elif geometry.arm is not None and 'operator_joints' in tracks:
        tracks |= chain_tracks(
            geometry.arm, tracks['operator_joints'],
            joint_columns(geometry.arm, arm.setup.operator_joint_names),
            carried=geometry.shoulder_moves and not arm.arm.operator.shoulder_topic)
    fault = shoulder_fault(arm.intakes, arm.arm.operator)
    if fault and arm.operator_side.refuse_shoulder(fault):
        arm.problems.say(f'{arm.name}: {fault}.')
    if 'shoulder' in streams and not fault:
        stream = streams['shoulder']
        tracks['shoulder'] = on_grid(
            stream.items(span.end_ns), span, max_gap_ns=stream.max_gap_ns)
    if geometry.shoulder_m is not None:
        tracks['shoulder'] = Track(np.tile(geometry.shoulder_m, (span.count, 1)),
                                   np.ones(span.count, dtype=bool))
    hand, shoulder = tracks.get('hand'), tracks.get('shoulder')
    if hand is not None and shoulder is not None:
        normalised = geometry.normalise(hand.values, shoulder.values)
        if normalised is not None:
            tracks['u_o'] = Track.computed(normalised, hand.valid & shoulder.valid)
    return tracks


def chain_tracks(arm: OperatorArm, joints: Track, columns: np.ndarray, *,
                 carried: bool) -> dict[str, Track]:
    """
    Return hand and hand_turn that follow from operator joints, and a `carried` shoulder.

    `columns` picks the chain's joints out of the track's.
    """
    filled = np.where(joints.valid[:, None], joints.values, 0.0)[:, columns]
    positions, turns = arm.hand(filled)
    tracks = {'hand': Track.computed(positions, joints.valid),
              'hand_turn': Track.computed(turns, joints.valid)}
    if carried:
        tracks['shoulder'] = Track.computed(arm.shoulder.positions(filled), joints.valid)
    return tracks


def joint_columns(arm: OperatorArm, names: tuple[str, ...]) -> np.ndarray:
    """Return where the chain's joints stand among the operator joints."""
    return np.array([names.index(name) for name in arm.chain.joint_names], dtype=np.int64)


def shoulder_fault(intakes: Mapping[str, Intake], settings: OperatorSettings) -> str:
    """Return why the shoulder's messages cannot be used with the hand's, '' if they can."""
    hand, shoulder = intakes.get('hand'), intakes.get('shoulder')
    frame = hand.frame_id if hand is not None else settings.base_link
    other = None if shoulder is None else shoulder.frame_id
    if frame is None or other is None or frame == other:
        return ''
    return (f'the shoulder comes in the frame {shown(other)}, but the hand in {shown(frame)}; '
            'publish both in one frame')
