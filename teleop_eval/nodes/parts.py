# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The parts that the node puts together; a test may put in others."""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from teleop_eval.core.evaluator import EVENT_TOPIC, SessionEvaluator
from teleop_eval.sinks.session_folder import SessionFolder
from teleop_eval.sources.decode import SUPPORTED, make_decoder


@dataclass(frozen=True)
class Parts:
    """
    Evaluator, folder and decoder of the node.

    `supported` gives message types by kind of input, `event_topic` the name under which events
    stand in the stream.
    """

    make_evaluator: Callable[..., Any] = SessionEvaluator
    make_folder: Callable[..., Any] = SessionFolder
    make_decoder: Callable[..., Any] = make_decoder
    supported: Mapping[str, Collection[str]] = field(default_factory=lambda: SUPPORTED)
    event_topic: str = EVENT_TOPIC


def free_folder(directory: str, name: str) -> Path:
    """Return a folder that does not exist: NAME, else NAME_2, NAME_3, ..."""
    base = Path(directory).expanduser().absolute()
    path, number = base / name, 1
    while path.exists():
        number += 1
        path = base / f'{name}_{number}'
    return path
