# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Use of mapping kinds whose authors are not known.

What a kind does wrong becomes one sentence about this mapping; it must cost neither the run
nor the numbers of other mappings.
"""

from __future__ import annotations

from dataclasses import fields
from typing import TYPE_CHECKING, Any

import numpy as np

from teleop_eval.core.errors import ConfigError, TeleopEvalError
from teleop_eval.core.mappings.base import (
    GIVES,
    NEEDS,
    VELOCITY,
    Anchor,
    Ideal,
    MappingModel,
    OperatorCells,
)
from teleop_eval.core.mappings.registry import BUILT_IN, BrokenKind, known_kinds
from teleop_eval.core.mappings.sane_values import ARRAYS, NothingGiven, value_fault
from teleop_eval.core.mappings.settings import MappingSettings
from teleop_eval.core.sentences import cut, listed, nearest, shown

if TYPE_CHECKING:
    from teleop_eval.core.geometry import OperatorGeometry, RobotGeometry


def make_mapping(label: str, settings: MappingSettings, operator: OperatorGeometry,
                 robot: RobotGeometry) -> MappingModel:
    """
    Return the model of one configured mapping.

    Raises
    ------
    ConfigError
        If the kind is not known, its settings do not fit the arms, or its class fails.

    """
    kinds = known_kinds()
    kind = kinds.get(settings.kind)
    if kind is None:
        near = nearest(settings.kind, kinds)
        hint = f'did you mean {near!r}?' if near else 'correct it.'
        raise ConfigError(f'mapping {label!r} has kind {shown(settings.kind)}, but there are '
                          f'only {listed(kinds)}; {hint}')
    if isinstance(kind, BrokenKind):
        raise ConfigError(f'mapping {label!r} cannot be modelled: {kind.why}')
    if settings.kind in BUILT_IN:
        return kind(label, settings, operator, robot)
    try:
        settings.fault(label)
        settings.operator_joints()
        return _Foreign(label, settings.kind, kind(label, settings, operator, robot))
    except (TeleopEvalError, KeyboardInterrupt):
        raise
    except BaseException as error:  # sys.exit() in foreign code must not end the run
        raise ConfigError(f'mapping {label!r} of kind {settings.kind} cannot be modelled, since '
                          f'{kind.__name__} failed ({_said(error)}); correct it or its '
                          'settings.') from error


class _Fault(Exception):
    """What a model did wrong before it was asked for its ideal command."""


class _Foreign(MappingModel):
    """
    A model of another package.

    What it fails to do between windows is kept and told with its next ideal command, so that
    whoever uses a model need not be on guard.
    """

    def __init__(self, label: str, kind: str, model: MappingModel) -> None:
        for name, value, choices in (('needs', model.needs, NEEDS),
                                     ('gives', model.gives, GIVES)):
            if value not in choices:
                raise ConfigError(
                    f'mapping {label!r} of kind {kind} cannot be modelled, since its {name} is '
                    f'{shown(value)}, not one of {", ".join(map(repr, choices))}; correct '
                    f'{type(model).__name__}.')
        self._model = model
        self._fault = ''
        self._nothing = NothingGiven()
        self.needs, self.gives = model.needs, model.gives
        self.anchored = bool(model.anchored)
        self.scales_by_arm_lengths = bool(model.scales_by_arm_lengths)
        self.turns_move = bool(model.turns_move)
        self.estimates_tool_rotation = bool(model.estimates_tool_rotation)

    def take_tool_rotation(self, hand_to_tool: np.ndarray) -> None:
        """Pass it on."""
        try:
            self._model.take_tool_rotation(hand_to_tool.copy())
        except KeyboardInterrupt:
            raise
        except BaseException as error:
            self._fault = f'take_tool_rotation() raised {_said(error)}'

    def restart(self) -> None:
        """Pass it on."""
        try:
            self._model.restart()
        except KeyboardInterrupt:
            raise
        except BaseException as error:
            self._fault = f'restart() raised {_said(error)}'

    def ideal(self, cells: OperatorCells) -> Ideal:
        """Return what the model makes of the cells, which it cannot change."""
        if self._fault:
            raise _Fault(self._fault)
        return self._model.ideal(_read_only(cells))

    def value_fault(self, ideal: Ideal, cells: OperatorCells) -> str:
        """Return what is wrong with the numbers of an ideal command, '' if nothing."""
        return value_fault(ideal) or self._nothing.fault(self, ideal, cells)


def _read_only(cells: OperatorCells) -> OperatorCells:
    """Return the same cells; what writes into them fails instead of changing other results."""
    def locked(value: Any) -> Any:
        if not isinstance(value, np.ndarray):
            return value
        view = value.view()
        view.flags.writeable = False
        return view

    def all_locked(of: Any) -> dict[str, Any]:
        return {one.name: locked(getattr(of, one.name)) for one in fields(of)}
    anchors = {number: Anchor(**all_locked(anchor)) for number, anchor in cells.anchors.items()}
    return OperatorCells(**{**all_locked(cells), 'anchors': anchors})


def checked_fault(settings: MappingSettings, key: str) -> str:
    """Return the sentence of a kind's own check of its settings; its failure is told later."""
    try:
        return str(settings.fault(key) or '')
    except KeyboardInterrupt:
        raise
    except BaseException:
        # make_mapping meets it again and makes a problem of it, which costs this mapping only.
        return ''


def checked_operator_joints(settings: MappingSettings) -> tuple[str, ...]:
    """Return the operator joints that a mapping needs, none if its kind fails to tell."""
    try:
        names = settings.operator_joints()
        return tuple(names) if all(isinstance(name, str) for name in names) else ()
    except KeyboardInterrupt:
        raise
    except BaseException:
        return ()  # make_mapping meets it again


def checked_ideal(model: MappingModel, cells: OperatorCells) -> Ideal | str:
    """
    Return what a model makes of the cells, or what is wrong with that.

    Returns
    -------
    Ideal or str
        An ideal command of numbers in the shapes that `Ideal` names; else a clause without
        full stop, such as 'ideal() raised ValueError: no hand'.

    """
    try:
        ideal = model.ideal(cells)
    except _Fault as earlier:
        return str(earlier)
    except KeyboardInterrupt:
        raise
    except BaseException as error:
        return f'ideal() raised {_said(error)}'
    if not isinstance(ideal, Ideal):
        return f'ideal() returned {type(ideal).__name__} where Ideal is expected'
    count, joints = len(cells), cells.robot_joints.shape[1]
    for name in ARRAYS:
        width = {'orientations': 4, 'joints': joints}.get(name, 3)
        value = getattr(ideal, name)
        if value is None and name != 'positions_m':
            continue
        if fault := _array_fault(value, count, width):
            return f'ideal() returned {name} {fault}'
    if model.gives == VELOCITY and ideal.velocities_mps is None:
        return 'ideal() returned no velocities_mps, although the kind gives velocities'
    # What a kind of this package gives is as large as its input, and NaN where that is.
    return (isinstance(model, _Foreign) and model.value_fault(ideal, cells)) or ideal


def _array_fault(value: Any, count: int, width: int) -> str:
    wanted = f'(m, {width}) is expected for m cells'
    if not isinstance(value, np.ndarray):
        return f'as {type(value).__name__} where an array of shape {wanted}'
    if value.shape[:1] != (count,):
        return f'with another number of rows than there are cells where {wanted}'
    if value.shape != (count, width):
        # The number of cells differs from window to window; the sentence should not.
        return f'of shape ({", ".join(["m", *map(str, value.shape[1:])])}) where {wanted}'
    if value.dtype != np.float64:
        return f'of type {value.dtype} where float64 is expected'
    return ''


def _said(error: BaseException) -> str:
    """Return an exception of foreign code on one line."""
    try:
        text = ' '.join(str(error).split())
    except Exception:
        text = ''
    return f'{type(error).__name__}: {cut(text)}' if text else type(error).__name__
