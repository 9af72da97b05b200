# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The mapping kinds there are: those of this package, and those of other packages."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.mappings.base import GIVES, NEEDS, MappingModel
from teleop_eval.core.mappings.joint_space import JointSpaceMapping
from teleop_eval.core.mappings.rate import RateMapping
from teleop_eval.core.mappings.relative import RelativeMapping
from teleop_eval.core.mappings.settings import MappingSettings
from teleop_eval.core.mappings.task_space import TaskSpaceMapping
from teleop_eval.core.mappings.unmodelled import UNMODELLED, UnmodelledMapping
from teleop_eval.core.parameters import NAME_PATTERN
from teleop_eval.core.sentences import shown

BUILT_IN: dict[str, type[MappingModel]] = {
    'joint_space': JointSpaceMapping,
    'task_space': TaskSpaceMapping,
    'relative': RelativeMapping,
    'rate': RateMapping,
    UNMODELLED: UnmodelledMapping,
}


@dataclass(frozen=True)
class BrokenKind:
    """A kind that another package announces and that cannot be used, with the reason."""

    why: str


_added: dict[str, type[MappingModel] | BrokenKind] = {}


def register_kind(name: str, cls: type[MappingModel]) -> None:
    """
    Add a mapping kind.

    Raises
    ------
    ConfigError
        If the name is taken or no good, or the class is not what a kind must be.

    """
    _check_name(name)
    if fault := _fault(cls):
        raise ConfigError(f'mapping kind {shown(name)}: {fault}')
    if _added.get(name, cls) is not cls:
        raise ConfigError(f'mapping kind {shown(name)} is there twice; rename one of the two.')
    _added[name] = cls


def register_broken(name: str, why: str) -> bool:
    """
    Note a kind that cannot be used: its mappings are reported, and the run goes on.

    Returns
    -------
    bool
        False if another package has a sound kind of that name, which stays.

    Raises
    ------
    ConfigError
        If the name is taken by a kind of this package or no good.

    """
    _check_name(name)
    return isinstance(_added.setdefault(name, BrokenKind(why)), BrokenKind)


def forget_kind(name: str) -> None:
    """Remove a kind that was added."""
    _added.pop(name, None)


def known_kinds() -> dict[str, type[MappingModel] | BrokenKind]:
    """Return all kinds by name, those of this package first."""
    return BUILT_IN | dict(sorted(_added.items()))


def kind_settings() -> dict[str, type[MappingSettings] | None]:
    """Return the settings of every kind by its name, None where they cannot be known."""
    return {name: None if isinstance(kind, BrokenKind) else kind.Settings
            for name, kind in known_kinds().items()}


def is_modelled(name: str) -> bool:
    """Tell whether a kind has an ideal command."""
    kind = known_kinds().get(name)
    return kind is None or isinstance(kind, BrokenKind) or kind.modelled


def _check_name(name: str) -> None:
    if name in BUILT_IN:
        raise ConfigError(f'mapping kind {shown(name)} is one of this package; give yours '
                          'another name.')
    if not NAME_PATTERN.fullmatch(name):
        raise ConfigError(f'mapping kind {shown(name)} must be lower-case letters, digits and '
                          'underscores, beginning with a letter; rename it.')


def _fault(cls: object) -> str:
    """Return what keeps a class from being a kind, '' if nothing does."""
    if not (isinstance(cls, type) and issubclass(cls, MappingModel)):
        return (f'{shown(cls)} is no class derived from '
                'teleop_eval.core.mappings.MappingModel; derive it.')
    settings = cls.Settings
    if not (isinstance(settings, type) and issubclass(settings, MappingSettings)):
        return (f'{cls.__name__}.Settings must be a class derived from '
                'teleop_eval.core.mappings.MappingSettings; derive it.')
    for base in settings.__mro__:
        if issubclass(base, MappingSettings) and '__dataclass_fields__' not in vars(base):
            return f'{base.__qualname__} must be a frozen dataclass; put @dataclass above it.'
    for field in dataclasses.fields(settings):
        if not {'parameter', 'group', 'map'} & set(field.metadata):
            return (f'{cls.__name__}.Settings.{field.name} was not made by parameter(), group() '
                    'or named_map() of teleop_eval.core.parameters; make it so.')
    if cls.modelled and cls.ideal is MappingModel.ideal:
        return f'{cls.__name__} does not define ideal(); define it.'
    for name, value, choices in (('needs', cls.needs, NEEDS), ('gives', cls.gives, GIVES)):
        if value not in choices:
            return (f'{cls.__name__}.{name} is {shown(value)}, but must be one of '
                    f'{", ".join(map(repr, choices))}; correct it.')
    return ''
