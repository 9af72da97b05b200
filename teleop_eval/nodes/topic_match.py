# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Choose what to subscribe to from what the publishers of a topic offer."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass

from teleop_eval.nodes.qos import Offer, Request, request_for

# Inputs whose last message stays valid until the next one.
LATCHED_ROLES = frozenset(
    {'description', 'operator_description', 'active_mapping', 'engaged'})

# Kind of message, as the decoders name it, by role.
ROLE_KINDS = {
    'hand': 'pose',
    'shoulder': 'pose',
    'rate_input': 'rate',
    'operator_joints': 'joints',
    'robot_joints': 'joints',
    'command': 'command',
    'engaged': 'bool',
    'active_mapping': 'text',
    'description': 'text',
    'operator_description': 'text',
}

ROLE_WORDS = {
    'hand': "operator's hand",
    'shoulder': "operator's shoulder",
    'rate_input': "operator's rate input",
    'operator_joints': "operator's joints",
    'robot_joints': "robot's joints",
    'command': 'command',
    'engaged': 'engaged state',
    'active_mapping': 'active mapping',
    'description': 'robot description',
    'operator_description': 'operator description',
}


@dataclass(frozen=True)
class Wanted:
    """
    What is known of a topic before its publishers are.

    `types` are those that every role of the topic can use; `kept_type` is the type already
    subscribed to, which stays, since a recording holds one type for each topic.
    """

    topic: str
    uses: tuple[str, ...]
    types: Collection[str]
    latched: bool
    kept_type: str | None = None
    rate_hz: float | None = None


@dataclass(frozen=True)
class Match:
    """The decision: nothing to subscribe to has `type_name` None."""

    type_name: str | None
    request: Request | None
    publishers: int
    problems: tuple[str, ...]


def use_words(arm: str, role: str) -> str:
    """Return what a topic is used for, in words: "the command of arm 'right'"."""
    return f'the {ROLE_WORDS.get(role, role)} of arm {arm!r}'


def match(wanted: Wanted, offers: Sequence[Offer]) -> Match:
    """Return which type and quality of service to subscribe with, and what is wrong."""
    found = sorted({offer.type_name for offer in offers})
    usable = [name for name in found if name in wanted.types]
    problems: list[str] = []
    if wanted.kept_type is not None:
        chosen = wanted.kept_type if wanted.kept_type in found else None
    else:
        chosen = usable[0] if usable else None
    uses = ' and '.join(wanted.uses)
    if found and chosen is None:
        expected = ([wanted.kept_type, 'as before'] if wanted.kept_type
                    else ['one of', ', '.join(sorted(wanted.types))])
        problems.append(
            f'{wanted.topic} has the type {", ".join(found)}, but {uses} needs '
            f'{" ".join(expected)}; name another topic or restart its publisher with that '
            'type.')
    elif len(found) > 1:
        problems.append(
            f'{wanted.topic} has publishers of several types ({", ".join(found)}); only '
            f'{chosen} is used for {uses}; stop the others or name another topic.')
    taken = [offer for offer in offers if offer.type_name == chosen]
    if not taken:
        return Match(None, None, 0, tuple(problems))
    lasting = sum(offer.transient_local for offer in taken)
    if wanted.latched and 0 < lasting < len(taken):
        problems.append(
            f'{wanted.topic} has {len(taken)} publishers, of which {len(taken) - lasting} '
            'keep no message for late subscribers, so what was sent before the start may be '
            f'missing for {uses}; let all publish transient local.')
    return Match(chosen, request_for(taken, latched=wanted.latched, rate_hz=wanted.rate_hz),
                 len(taken), tuple(problems))
