# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Find the mapping kinds that other installed packages bring along."""

from __future__ import annotations

from collections.abc import Mapping
from importlib.metadata import EntryPoint, entry_points
from typing import Any

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.mappings.registry import register_broken, register_kind
from teleop_eval.core.sentences import cut

GROUP = 'teleop_eval.mappings'


def load_mapping_kinds(flat: Mapping[str, Any]) -> list[str]:
    """
    Register the kinds of all installed packages, before parameters are read.

    Parameters
    ----------
    flat
        The parameters by dotted name. A broken kind that one of them asks for is told by the
        evaluation itself, beside the mapping that it costs.

    Returns
    -------
    list of str
        One sentence for each other kind that cannot be used.

    """
    used = {value for key, value in flat.items()
            if key.endswith('.kind') and isinstance(value, str)}
    found = sorted(entry_points(group=GROUP), key=lambda entry: (entry.name, entry.value))
    problems = []
    for entry in found:
        if (sentence := _load(entry)) and not (_keep(entry.name, sentence) and
                                               entry.name in used):
            problems.append(sentence)
    return problems


def _load(entry: EntryPoint) -> str:
    """Register one kind; return why it cannot be used, '' if it can."""
    try:
        register_kind(entry.name, entry.load())
    except ConfigError as error:
        return f'{_origin(entry)}: {error}'
    except (Exception, SystemExit) as error:  # foreign code runs when its module is imported
        text = cut(' '.join(str(error).split()))
        return (f'{_origin(entry)}: mapping kind {entry.name!r} ({entry.value}) could not be '
                f'loaded ({type(error).__name__}: {text}); correct or remove that package.')
    return ''


def _keep(name: str, sentence: str) -> bool:
    """Note a kind as broken; return False where the name belongs to a sound one."""
    try:
        return register_broken(name, sentence)
    except ConfigError:
        return False


def _origin(entry: EntryPoint) -> str:
    return 'an installed package' if entry.dist is None else (
        f'package {entry.dist.name} {entry.dist.version}')
