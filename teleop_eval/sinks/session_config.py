# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The configuration that a session's folder keeps, complete in itself."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from teleop_eval.core.operator_settings import operator_key
from teleop_eval.sources.parameter_file import to_yaml

_OPERATOR = operator_key('')


def session_config(flat: Mapping[str, Any], descriptions: Mapping[str, str],
                   resolve: Callable[[str], str] | None, *, name: str,
                   simulated_time: bool = False) -> dict[str, str]:
    """
    Return the files that configure a session, text by file name.

    Parameters
    ----------
    flat
        Parameters by dotted name.
    descriptions
        Robot description by arm, that of the operator by `operator_key` of the arm; each
        becomes a file of its own beside the configuration, to which
        `arms.ARM.robot.description_file` or `arms.ARM.operator.description_file` then points.
    resolve
        Turns a configured topic into its full name, so that the folder does not depend on
        the namespace and the remappings of its run.
    name
        Name of the parameter file itself.
    simulated_time
        Whether receive times come from a simulated clock; kept as ROS' own use_sim_time.

    """
    kept = {'use_sim_time': True, **flat} if simulated_time else dict(flat)
    files: dict[str, str] = {}
    for whose, text in descriptions.items():
        arm = whose.removesuffix(_OPERATOR)
        of_robot = arm == whose
        key = f'arms.{arm}.{"robot" if of_robot else "operator"}.description_file'
        if kept.get(key):
            # Names of arms have no dot: the two files of an arm cannot meet another arm's.
            kept[key] = f'description_{arm}.urdf' if of_robot else f'description_{whose}.urdf'
            files[kept[key]] = text
    if resolve is not None:
        for key, value in flat.items():
            if _names_topic(key) and isinstance(value, str) and value:
                kept[key] = resolve(value)
    return {**files, name: to_yaml(kept)}


def _names_topic(key: str) -> bool:
    """Tell the parameters that hold a topic from those of a joint that is called so."""
    parts = key.split('.')
    return len(parts) == 4 and parts[0] == 'arms' and (
        parts[3] == 'topic' or parts[3].endswith('_topic'))
