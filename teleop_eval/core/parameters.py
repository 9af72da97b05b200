# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Turn flat parameters into typed settings, and describe every parameter there is.

Settings are frozen dataclasses whose fields carry unit, range and text. From them come the
typed values, the error texts and the descriptors of the live node: one source for all.
"""

from __future__ import annotations

import dataclasses
import difflib
import math
import re
from collections.abc import Callable, Collection, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.sentences import cut, listed, nearest, shown

NAME_PATTERN = re.compile(r'[a-z][a-z0-9_]*')

# Kinds a parameter can have; each has a ROS parameter type of the same meaning.
BOOL, INTEGER, DOUBLE, STRING = 'bool', 'integer', 'double', 'string'
DOUBLES, STRINGS, INTEGERS = 'double_array', 'string_array', 'integer_array'
# A file of another tool has nothing but unknown parameters.
_MOST_UNKNOWN = 5


@dataclass(frozen=True)
class Parameter:
    """
    What one parameter means.

    A default of None stands for "not given"; as a ROS parameter it is NaN, '' or [].
    """

    kind: str
    default: Any
    text: str
    unit: str = ''
    low: float | None = None
    high: float | None = None
    size: int | None = None
    choices: tuple[str, ...] = ()


@dataclass(frozen=True)
class NamedMap:
    """
    A map from names that the user chooses to settings of one class.

    Joint names are the robot's; all other names match [a-z][a-z0-9_]*. With `kinds` the class
    of an entry is chosen by its parameter `kind`; a kind whose class is None cannot be loaded,
    and its entry is an `of` that knows nothing but the kind.
    """

    of: type
    text: str
    free_names: bool = False
    kinds: Callable[[], Mapping[str, type | None]] | None = None


def parameter(kind: str, default: Any, text: str, **limits: Any) -> Any:
    """Return a dataclass field that is one parameter."""
    described = Parameter(kind, default, text, **limits)
    if isinstance(default, list):
        default = tuple(default)
    return dataclasses.field(default=default, metadata={'parameter': described})


def group(of: type) -> Any:
    """Return a dataclass field that is a group of parameters."""
    return dataclasses.field(default_factory=of, metadata={'group': of})


def named_map(of: type, text: str, *, free_names: bool = False,
              kinds: Callable[[], Mapping[str, type | None]] | None = None) -> Any:
    """Return a dataclass field that is a map from names to groups."""
    described = NamedMap(of, text, free_names, kinds)
    return dataclasses.field(default_factory=dict, metadata={'map': described})


def build(settings: type, flat: Mapping[str, Any], *, where: str = 'the parameters') -> Any:
    """
    Return `settings` filled from flat dotted parameters.

    Parameters
    ----------
    settings
        Dataclass whose fields were made by `parameter`, `group` and `named_map`.
    flat
        Values by dotted name, as ROS resolves them.
    where
        Name of the file, for the error text.

    Raises
    ------
    ConfigError
        For an unknown name, a value of the wrong kind or out of range, a bad user name.

    """
    used: set[str] = set()
    built = _build(settings, flat, '', used, where)
    unknown = [key for key in flat if key not in used]
    if unknown:
        sections = set(_sections(settings, flat, ''))
        strangers = dict.fromkeys(_stranger(key, sections) for key in unknown)
        hints = ' '.join(
            _unknown(name, settings, flat) if name in flat else _unknown_section(name, sections)
            for name in [*strangers][:_MOST_UNKNOWN])
        more = len(strangers) - _MOST_UNKNOWN
        raise ConfigError(f'{where}: {hints}' + (f' And {more} more.' if more > 0 else ''))
    return built


def describe(settings: type, flat: Mapping[str, Any]) -> Iterator[tuple[str, Parameter]]:
    """Yield (dotted name, parameter) of every parameter, maps filled with the names in use."""
    yield from _describe(settings, flat, '')


def _build(cls: type, flat: Mapping[str, Any], prefix: str, used: set[str], where: str) -> Any:
    values: dict[str, Any] = {}
    for field in dataclasses.fields(cls):
        key = prefix + field.name
        if 'parameter' in field.metadata:
            if key in flat:
                used.add(key)
                values[field.name] = convert(field.metadata['parameter'], flat[key], key, where)
        elif 'group' in field.metadata:
            values[field.name] = _build(field.metadata['group'], flat, key + '.', used, where)
        else:
            described: NamedMap = field.metadata['map']
            values[field.name] = {
                name: _build_entry(described, flat, f'{key}.{name}.', used, where)
                for name in _names(flat, key + '.', described, where)
            }
    return cls(**values)


def _build_entry(described: NamedMap, flat: Mapping[str, Any], prefix: str, used: set[str],
                 where: str) -> Any:
    """Build one entry of a named map, of the class that its kind asks for."""
    if described.kinds is None:
        return _build(described.of, flat, prefix, used, where)
    kinds, key, entry = described.kinds(), prefix + 'kind', prefix.removesuffix('.')
    if flat.get(key, '') == '':
        raise ConfigError(f'{where}: {key} is missing; give one of {listed(kinds)}.')
    kind = convert(Parameter(STRING, '', ''), flat[key], key, where)
    if kind not in kinds:
        near = nearest(kind, kinds)
        hint = f'did you mean {near!r}?' if near else 'correct it.'
        raise ConfigError(f'{where}: {key} is {shown(kind)}, but the known kinds are '
                          f'{listed(kinds)}; {hint}')
    cls = kinds[kind]
    if cls is None:
        used.update(name for name in flat if name.startswith(prefix))
        return described.of(kind=kind)
    own = {field.name for field in dataclasses.fields(cls)}
    for name in flat:
        word = name[len(prefix):].partition('.')[0] if name.startswith(prefix) else ''
        if word and word not in own and (others := _having(kinds, word)):
            raise ConfigError(
                f'{where}: {prefix}{word} is a parameter of the kind {others}, but {entry} is of '
                f'the kind {kind}; remove it or change the kind.')
    try:
        return _build(cls, flat, prefix, used, where)
    except ConfigError:
        raise
    except Exception as error:  # a class of another package may check its values itself
        text = cut(' '.join(str(error).split()))
        raise ConfigError(f'{where}: {entry} cannot be used as {kind}, since its settings refuse '
                          f'it ({type(error).__name__}: {text}); correct its values.') from error


def _having(kinds: Mapping[str, type | None], word: str) -> str:
    """Return the kinds that have a parameter, '' if none has."""
    return ' or '.join(
        kind for kind, cls in kinds.items() if cls is not None
        and any(field.name == word for field in dataclasses.fields(cls)))


def _describe(cls: type, flat: Mapping[str, Any], prefix: str) -> Iterator[tuple[str, Parameter]]:
    for field in dataclasses.fields(cls):
        key = prefix + field.name
        if 'parameter' in field.metadata:
            yield key, field.metadata['parameter']
        elif 'group' in field.metadata:
            yield from _describe(field.metadata['group'], flat, key + '.')
        else:
            described: NamedMap = field.metadata['map']
            for name in _names(flat, key + '.', described, ''):
                yield from _describe(_class_in_use(described, flat, f'{key}.{name}.kind'), flat,
                                     f'{key}.{name}.')


def _class_in_use(described: NamedMap, flat: Mapping[str, Any], key: str) -> type:
    """Return the class of an entry, the common one where its kind is not known."""
    kind = flat.get(key)
    found = None if described.kinds is None or not isinstance(kind, str) else (
        described.kinds().get(kind))
    return described.of if found is None else found


def _names(flat: Mapping[str, Any], prefix: str, described: NamedMap, where: str) -> list[str]:
    """
    Return the user's names under a prefix in alphabetical order.

    The order of keys in a file and in a ROS node differ, so neither may matter.
    """
    names = set()
    for key in flat:
        if key.startswith(prefix):
            name, dot, _ = key[len(prefix):].partition('.')
            if dot:
                names.add(name)
    for name in names:
        if not described.free_names and not NAME_PATTERN.fullmatch(name):
            raise ConfigError(
                f'{where}: the name {shown(name)} in {prefix}{cut(name)} must be lower-case '
                'letters, digits and underscores, beginning with a letter; rename it.'
            )
    return sorted(names)


def convert(described: Parameter, value: Any, key: str, where: str) -> Any:
    """
    Return a parameter's value in its own kind; integers are accepted for numbers.

    Raises
    ------
    ConfigError
        If the kind, the length, the range or the choice does not fit.

    """
    kind = described.kind
    fits: bool
    if kind == BOOL:
        fits = isinstance(value, bool)
    elif kind == INTEGER:
        fits = _is_whole(value)
    elif kind == DOUBLE:
        fits = _is_number(value)
        value = float(value) if fits else value
        if fits and math.isnan(value) and described.default is None:
            return None
    elif kind == STRING:
        fits = isinstance(value, str)
    else:
        fits = isinstance(value, (list, tuple))
        if fits and kind == DOUBLES:
            fits = all(_is_number(item) for item in value)
            value = tuple(float(item) for item in value) if fits else value
        elif fits:
            fits = all(isinstance(item, str) if kind == STRINGS else _is_whole(item)
                       for item in value)
            value = tuple(value) if fits else value
    if not fits:
        hint = '; quote it if it is a text' if kind == STRING else '; correct it'
        raise ConfigError(
            f'{where}: {key} must be {_KIND_WORDS[kind]}, but is {_typed(value)}{hint}.'
        )
    _check_limits(described, value, key, where)
    if described.default is None and value in ('', ()):
        return None
    return value


def _typed(value: Any) -> str:
    """Return a value with its kind in words."""
    kind = next((words for kind, words in _VALUE_WORDS if isinstance(value, kind)), 'the value')
    return f'{kind} {shown(list(value) if isinstance(value, tuple) else value)}'


_VALUE_WORDS = ((bool, 'the truth value'), ((int, float), 'the number'), (str, 'the text'),
                ((list, tuple), 'the list'))
_KIND_WORDS = {
    BOOL: 'true or false',
    INTEGER: 'a whole number',
    DOUBLE: 'a number',
    STRING: 'a text',
    DOUBLES: 'a list of numbers',
    STRINGS: 'a list of texts',
    INTEGERS: 'a list of whole numbers',
}


def _is_number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool)


def _is_whole(value: Any) -> bool:
    return isinstance(value, int) and not isinstance(value, bool)


def _check_limits(described: Parameter, value: Any, key: str, where: str) -> None:
    unit = f' {described.unit}' if described.unit else ''
    if described.choices and value not in described.choices:
        near = difflib.get_close_matches(str(value)[:80], described.choices, 1)
        hint = f'; did you mean {near[0]!r}?' if near else '.'
        listed = ', '.join(repr(choice) for choice in described.choices)
        raise ConfigError(
            f'{where}: {key} is {shown(value)}, but must be one of {listed}{hint}')
    if described.size is not None and value and len(value) != described.size:
        raise ConfigError(
            f'{where}: {key} needs {described.size} numbers, but has {len(value)}; correct it.'
        )
    numbers = value if isinstance(value, tuple) else (value,)
    for number in numbers:
        if not _is_number(number):
            return
        if not math.isfinite(number):
            raise ConfigError(
                f'{where}: {key} is {number}, but must be a finite number; correct it.')
        low, high = described.low, described.high
        if (low is not None and number < low) or (high is not None and number > high):
            raise ConfigError(
                f'{where}: {key} is {number:g}{unit}, outside its range '
                f'{"-inf" if low is None else f"{low:g}"} to '
                f'{"inf" if high is None else f"{high:g}"}{unit}; correct value or unit.'
            )


def _sections(cls: type, flat: Mapping[str, Any], prefix: str) -> Iterator[str]:
    """Yield the dotted name of every section, maps filled with the names in use."""
    for field in dataclasses.fields(cls):
        key = prefix + field.name
        if 'group' in field.metadata:
            yield key
            yield from _sections(field.metadata['group'], flat, key + '.')
        elif 'map' in field.metadata:
            yield key
            described: NamedMap = field.metadata['map']
            for name in _names(flat, key + '.', described, ''):
                yield f'{key}.{name}'
                yield from _sections(_class_in_use(described, flat, f'{key}.{name}.kind'), flat,
                                     f'{key}.{name}.')


def _stranger(key: str, sections: Collection[str]) -> str:
    """Return the outermost section around an unknown parameter that is unknown, else itself."""
    words = key.split('.')
    around = ('.'.join(words[:count]) for count in range(1, len(words)))
    return next((name for name in around if name not in sections), key)


def _unknown_section(name: str, sections: Collection[str]) -> str:
    head, _, word = name.rpartition('.')
    beside = [one.rpartition('.')[2] for one in sections if one.rpartition('.')[0] == head]
    near = nearest(word, beside) or next(
        iter(sorted(one for one in sections if one.rpartition('.')[2] == word)), '')
    hint = f'; did you mean {near}?' if near else '; remove it or see config/evaluate.yaml.'
    return f'there is no section {cut(name)}{hint}'


def _unknown(key: str, settings: type, flat: Mapping[str, Any]) -> str:
    known = [name for name, _ in describe(settings, flat)]
    near = difflib.get_close_matches(key[:200], known, 1, cutoff=0.6)
    if not near:  # a wrong word deep inside: compare within the same group only
        head = key.rpartition('.')[0]
        near = difflib.get_close_matches(
            key[:200], [name for name in known if name.startswith(head + '.')], 1, cutoff=0.3)
    hint = f'; did you mean {near[0]}?' if near else '; remove it or see config/evaluate.yaml.'
    return f'there is no parameter {cut(key)}{hint}'
