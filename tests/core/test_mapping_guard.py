# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The registry's checks, and what comes back from a model that misbehaves."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from mapping_cells import IDENTITY, cells, operator, robot

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.mappings import Anchor, Ideal, MappingModel, MappingSettings, make_mapping
from teleop_eval.core.mappings.guarded import checked_ideal
from teleop_eval.core.mappings.registry import (
    BUILT_IN,
    BrokenKind,
    forget_kind,
    is_modelled,
    known_kinds,
    register_broken,
    register_kind,
)
from teleop_eval.core.parameters import DOUBLE, parameter
from teleop_eval.core.settings import from_parameters


class Still(MappingModel):
    """Commands the origin, or what a test puts in its place."""

    answer = staticmethod(lambda seen: Ideal(np.zeros((len(seen), 3))))

    def ideal(self, cells):
        return self.answer(cells)


@pytest.fixture
def still():
    """Return a class that is registered as the kind `still` while the test runs."""
    class Mine(Still):
        pass
    register_kind('still', Mine)
    yield Mine
    forget_kind('still')


def made(kind='still'):
    return make_mapping('x', MappingSettings(kind), operator(), robot())


def said(still, answer, count=3):
    """Return what is said about an answer."""
    still.answer = staticmethod(answer)
    return checked_ideal(made(), cells(count, hand_m=np.zeros((count, 3))))


def test_kinds_of_this_package_come_first_and_cannot_be_replaced(still) -> None:
    assert list(known_kinds()) == [*BUILT_IN, 'still']
    assert list(BUILT_IN) == ['joint_space', 'task_space', 'relative', 'rate', 'unmodelled']
    for name in BUILT_IN:
        with pytest.raises(ConfigError, match='is one of this package'):
            register_kind(name, still)
        with pytest.raises(ConfigError, match='is one of this package'):
            register_broken(name, 'why')
    register_kind('still', still)  # the same one again, as when a second node starts
    with pytest.raises(ConfigError, match='is there twice'):
        register_kind('still', type('Other', (Still,), {}))
    assert not register_broken('still', 'why') and known_kinds()['still'] is still
    assert is_modelled('still') and not is_modelled('unmodelled')


def test_a_broken_kind_is_told_when_it_is_used_and_takes_any_parameter() -> None:
    assert register_broken('gone', 'it is gone.')
    try:
        assert known_kinds()['gone'] == BrokenKind('it is gone.')
        settings = from_parameters({
            'arms.a.robot.joints_topic': 'j', 'arms.a.robot.joint_names': ['b'],
            'arms.a.mappings.x.kind': 'gone', 'arms.a.mappings.x.deep.er': 3})
        assert settings.arms['a'].mappings['x'] == MappingSettings('gone')
        with pytest.raises(ConfigError, match="^mapping 'x' cannot be modelled: it is gone.$"):
            made('gone')
    finally:
        forget_kind('gone')


class PlainSettings(MappingSettings):
    """Not made a dataclass."""

    gain: float = parameter(DOUBLE, 1.0, 'x')


@dataclass(frozen=True)
class BareField(MappingSettings):
    """With a field that is no parameter."""

    gain: float = 1.0


@pytest.mark.parametrize(('given', 'words'), [
    ({'Settings': PlainSettings}, 'PlainSettings must be a frozen dataclass'),
    ({'Settings': BareField}, 'Settings.gain was not made by parameter'),
    ({'Settings': dict}, 'Settings must be a class derived from'),
    ({'needs': 'eyes'}, "needs is 'eyes', but must be one of 'hand', 'operator_joints'"),
    ({'gives': 'force'}, "gives is 'force', but must be one of 'pose', 'velocity'"),
    ({'ideal': MappingModel.ideal}, 'does not define ideal'),
])
def test_a_class_that_is_no_kind_is_refused(given, words: str) -> None:
    with pytest.raises(ConfigError, match=words):
        register_kind('odd', type('Odd', (Still,), given))
    assert 'odd' not in known_kinds()
    for foreign in (None, 3, dict, lambda label: None):
        with pytest.raises(ConfigError, match='no class derived from'):
            register_kind('odd', foreign)


@pytest.mark.parametrize('name', ['', 'Upper', '2d', 'a-b', 'ä', 'a b'])
def test_a_name_that_cannot_stand_in_a_file_is_refused(name: str) -> None:
    with pytest.raises(ConfigError, match='must be lower-case'):
        register_kind(name, Still)


def test_what_comes_back_is_passed_on(still) -> None:
    answer = Ideal(np.ones((3, 3)), np.tile(IDENTITY, (3, 1)), np.zeros((3, 2)))
    assert said(still, lambda seen: answer) is answer
    assert isinstance(said(still, lambda seen: Ideal(np.full((3, 3), np.nan))), Ideal)


@pytest.mark.parametrize(('answer', 'words'), [
    (lambda seen: None, 'ideal() returned NoneType where Ideal is expected'),
    (lambda seen: Ideal([[0.0] * 3] * 3), 'positions_m as list where an array of shape (m, 3)'),
    (lambda seen: Ideal(None), 'positions_m as NoneType where an array'),
    (lambda seen: Ideal(np.zeros((2, 3))), 'positions_m with another number of rows'),
    (lambda seen: Ideal(np.array(1.0)), 'another number of rows'),
    (lambda seen: Ideal(np.zeros(3)), 'positions_m of shape (m) where (m, 3)'),
    (lambda seen: Ideal(np.zeros((3, 3), dtype=object)), 'of type object where float64'),
    (lambda seen: Ideal(np.zeros((3, 3), dtype=int)), 'of type int64 where float64'),
    (lambda seen: Ideal(np.zeros((3, 3)), np.zeros((3, 3))), 'orientations of shape (m, 3)'),
    (lambda seen: Ideal(np.zeros((3, 3)), joints=np.zeros((3, 7))), 'joints of shape (m, 7)'),
    (lambda seen: Ideal(np.zeros((3, 3)), velocities_mps=np.zeros((3, 2))),
     'velocities_mps of shape (m, 2)'),
    (lambda seen: Ideal(np.zeros((3, 3)), turn_rates_rad_s=np.zeros((3, 2))), 'turn_rates_rad_s'),
    (lambda seen: Ideal(np.zeros((3, 3)), raw_velocities_mps=np.zeros((3, 2))), 'raw_velocities'),
    (lambda seen: 1 / 0, 'ideal() raised ZeroDivisionError: division by zero'),
    (lambda seen: seen.hand_m.fill(0.0), 'ideal() raised ValueError'),
    (lambda seen: seen.no_such_field, 'ideal() raised AttributeError'),
])
def test_what_is_no_ideal_command_is_a_clause(still, answer, words: str) -> None:
    found = said(still, answer)
    assert isinstance(found, str) and words in found and found[-1] not in '.?', found


def test_a_velocity_kind_must_give_velocities(still) -> None:
    still.gives = 'velocity'
    assert said(still, lambda seen: Ideal(np.zeros((3, 3)))) == (
        'ideal() returned no velocities_mps, although the kind gives velocities')


def test_anchors_cannot_be_changed_either(still) -> None:
    still.answer = staticmethod(lambda seen: seen.anchors[0].hand_m.fill(1.0))
    anchor = Anchor(np.zeros(3))
    found = checked_ideal(made(), cells(1, anchors={0: anchor}))
    assert 'read-only' in found and not anchor.hand_m.any() and anchor.hand_m.flags.writeable


def test_what_fails_between_windows_is_told_with_the_next_one(still) -> None:
    def fail(self, *given):
        raise RuntimeError('no')
    for name, call in (('restart', lambda model: model.restart()),
                       ('take_tool_rotation', lambda model: model.take_tool_rotation(IDENTITY))):
        setattr(still, name, fail)
        model = made()
        call(model)
        assert checked_ideal(model, cells(2)) == f'{name}() raised RuntimeError: no'


def test_what_fails_at_the_beginning_is_one_sentence(still) -> None:
    def refuse(self, label, settings, operator, robot):
        raise KeyError('arm')
    still.__init__ = refuse
    with pytest.raises(ConfigError, match=r"kind still cannot be modelled, since Mine failed "
                                          r"\(KeyError: 'arm'\); correct it or its settings"):
        made()


def test_a_settings_class_that_fails_costs_its_mapping_only(still) -> None:
    @dataclass(frozen=True)
    class Odd(MappingSettings):
        def fault(self, key):
            raise RuntimeError('no check')
    still.Settings = Odd
    settings = from_parameters({
        'arms.a.robot.joints_topic': 'j', 'arms.a.robot.joint_names': ['b'],
        'arms.a.mappings.x.kind': 'still'}).arms['a'].mappings['x']
    assert isinstance(settings, Odd)
    with pytest.raises(ConfigError, match='RuntimeError: no check'):
        make_mapping('x', settings, operator(), robot())


def test_a_settings_class_that_refuses_its_values_is_a_wrong_parameter(still) -> None:
    @dataclass(frozen=True)
    class Odd(MappingSettings):
        gain: float = parameter(DOUBLE, 1.0, 'x')

        def __post_init__(self):
            if self.gain == 2.0:
                raise ValueError('two is too much')
    still.Settings = Odd
    with pytest.raises(ConfigError, match=r'arms\.a\.mappings\.x cannot be used as still, since '
                       r'its settings refuse it \(ValueError: two is too much\)'):
        from_parameters({
            'arms.a.robot.joints_topic': 'j', 'arms.a.robot.joint_names': ['b'],
            'arms.a.mappings.x.kind': 'still', 'arms.a.mappings.x.gain': 2.0})
