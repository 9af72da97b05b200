# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Foreign kinds that end the process, or whose numbers cannot be those of a command."""

from __future__ import annotations

import dataclasses
import sys

import numpy as np
import pytest
import synthetic_session as syn
from mapping_cells import IDENTITY, cells, operator, robot

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.mappings import Anchor, Ideal, MappingModel, MappingSettings, make_mapping
from teleop_eval.core.mappings.guarded import (
    checked_fault,
    checked_ideal,
    checked_operator_joints,
)
from teleop_eval.core.mappings.registry import forget_kind, register_kind

ZERO = np.zeros((3, 3))


@pytest.fixture
def foreign():
    """Return a class that is registered as the kind `foreign` while the test runs."""
    class Foreign(MappingModel):
        answer = staticmethod(lambda seen: Ideal(np.zeros((len(seen), 3))))

        def ideal(self, cells):
            return self.answer(cells)

    register_kind('foreign', Foreign)
    yield Foreign
    forget_kind('foreign')


def made():
    return make_mapping('x', MappingSettings('foreign'), operator(), robot())


def engaged(count=3, **more):
    """Return cells of a hand at rest, engaged all the time; a second each."""
    given = {'hand_m': np.zeros((count, 3)), 'stretch': np.zeros(count, dtype=np.int64),
             'period_s': 1.0} | more
    return cells(count, **given)


class Ends(BaseException):
    """As of libraries that end a process in a way of their own."""

    def __str__(self):
        raise RuntimeError('no text')


@pytest.mark.parametrize(('how', 'words'), [
    (lambda *given: sys.exit(3), 'SystemExit: 3'), (lambda *given: 1 / 0, 'ZeroDivisionError'),
    (lambda *given: (_ for _ in ()).throw(Ends()), 'Ends')])
def test_a_kind_cannot_end_the_run(foreign, how, words: str) -> None:
    foreign.answer = staticmethod(how)
    assert f'ideal() raised {words}' in checked_ideal(made(), engaged())
    foreign.answer = staticmethod(lambda seen: Ideal(np.zeros((len(seen), 3))))
    for name, given in (('restart', ()), ('take_tool_rotation', (IDENTITY,))):
        model = made()
        setattr(foreign, name, how)
        getattr(model, name)(*given)
        delattr(foreign, name)
        assert f'{name}() raised {words}' in checked_ideal(model, engaged())
    foreign.__init__ = how
    with pytest.raises(ConfigError, match=words):
        made()


def test_settings_cannot_end_the_run(foreign) -> None:
    class Leaves(MappingSettings):
        def fault(self, key):
            sys.exit(4)

        def operator_joints(self):
            sys.exit(5)
    assert checked_fault(Leaves('foreign'), 'x') == ''
    assert checked_operator_joints(Leaves('foreign')) == ()


def test_ctrl_c_is_never_swallowed(foreign) -> None:
    def interrupted(*given):
        raise KeyboardInterrupt
    foreign.answer = staticmethod(interrupted)
    with pytest.raises(KeyboardInterrupt):
        checked_ideal(made(), engaged())


@pytest.mark.parametrize(('ideal', 'words'), [
    (Ideal(ZERO + 1e300), 'numbers beyond 1e+06 in positions_m'),
    (Ideal(ZERO - 1.1e6), 'numbers beyond 1e+06 in positions_m'),
    (Ideal(ZERO, velocities_mps=ZERO + 1e160), 'numbers beyond 1e+06 in velocities_mps'),
    (Ideal(ZERO, joints=np.full((3, 2), 1e200)), 'numbers beyond 1e+06 in joints'),
    (Ideal(ZERO + [[np.nan] * 3, [0.0] * 3, [0.0, -np.inf, 0.0]]), 'infinity in positions_m'),
    (Ideal(ZERO, np.zeros((3, 4))), 'orientations that are no unit quaternions'),
    (Ideal(ZERO, np.vstack([IDENTITY, [np.nan] * 4, [0.0] * 4])), 'no unit quaternions'),
    (Ideal(ZERO, np.tile(IDENTITY, (3, 1)) * 1.02), 'no unit quaternions'),
])
def test_numbers_that_cannot_be_are_a_fault(foreign, ideal: Ideal, words: str) -> None:
    foreign.answer = staticmethod(lambda seen: ideal)
    found = checked_ideal(made(), engaged())
    assert isinstance(found, str) and words in found, found


def test_large_but_sane_numbers_and_unknown_rows_pass(foreign) -> None:
    good = Ideal(ZERO + [[0.999e6] * 3, [np.nan] * 3, [0.0] * 3],
                 np.vstack([IDENTITY, [np.nan] * 4, IDENTITY * 1.001]))
    foreign.answer = staticmethod(lambda seen: good)
    assert checked_ideal(made(), engaged()) is good


def nothing(seen):
    return Ideal(np.full((len(seen), 3), np.nan))


def test_nothing_but_nan_is_told_once_it_lasts(foreign) -> None:
    """10 s of cells with a hand, in windows of 3 s: at the fourth, until there is something."""
    foreign.answer = staticmethod(nothing)
    model, window = made(), engaged(hand_xyzw=np.tile(IDENTITY, (3, 1)))
    found = [checked_ideal(model, window) for _ in range(5)]
    assert [isinstance(one, str) for one in found] == [False] * 3 + [True] * 2
    assert found[3] == ('ideal() returned nothing but NaN in positions_m for 10 s or more of '
                        'engaged motion with its input, hand')
    foreign.answer = staticmethod(lambda seen: Ideal(ZERO + [[0.0], [np.nan], [np.nan]]))
    assert isinstance(checked_ideal(model, window), Ideal)
    foreign.answer = staticmethod(nothing)
    assert isinstance(checked_ideal(model, window), Ideal)  # counted anew


def test_nan_without_an_input_is_right(foreign) -> None:
    foreign.answer = staticmethod(nothing)
    model = made()
    for lacking in (engaged(hand_m=np.full((3, 3), np.nan)), engaged(hand_m=None),
                    engaged(stretch=np.full(3, -1)), engaged(stretch=None)):
        assert all(isinstance(checked_ideal(model, lacking), Ideal) for _ in range(9))
    foreign.anchored = True
    model = made()
    for anchors in ({}, {0: Anchor(np.zeros(3))}, {0: Anchor(robot_m=np.zeros(3))}):
        assert all(isinstance(checked_ideal(model, engaged(anchors=anchors)), Ideal)
                   for _ in range(9))
    whole = engaged(anchors={0: Anchor(np.zeros(3), None, np.zeros(3))})
    last = [checked_ideal(model, whole) for _ in range(4)][-1]
    assert isinstance(last, str) and last.endswith('hand, whose messages have no orientation')


def test_velocities_count_for_a_kind_that_gives_them(foreign) -> None:
    foreign.gives = 'velocity'
    for array, bad in ((ZERO, False), (ZERO * np.nan, True)):
        foreign.answer = staticmethod(lambda seen, array=array: dataclasses.replace(
            nothing(seen), velocities_mps=array))
        model = made()
        last = [checked_ideal(model, engaged()) for _ in range(4)][-1]
        assert isinstance(last, str) == bad


@pytest.mark.parametrize(('answer', 'words'), [
    (lambda seen: sys.exit(3), 'raised SystemExit: 3'),
    (lambda seen: Ideal(np.full((len(seen), 3), 1e300)), 'numbers beyond 1e+06'),
    (lambda seen: Ideal(np.full((len(seen), 3), np.inf)), 'infinity in positions_m'),
    (nothing, 'nothing but NaN in positions_m'),
])
def test_a_run_ends_with_the_sentence_on_the_kind(foreign, answer, words: str) -> None:
    """The run is whole, the mapping has no numbers, and problem and reason say why."""
    foreign.answer = staticmethod(answer)
    target = syn.evaluator(syn.arm_parameters(
        active_mapping__fixed='odd', mappings__odd__kind='foreign',
        mappings__plain__kind='task_space'))
    syn.feed(target, syn.session(18.0, motion=syn.wander(), delay=0.1).messages())
    summary = syn.closed(target)
    assert any(words in problem and "mapping 'odd' of kind foreign" in problem
               for problem in summary['problems']), summary['problems']
    found = syn.metrics(summary, 'odd')
    for name in ('tracking_error_rms_norm', 'discrepancy_rms_norm'):
        assert found[name]['status'] == 'not_configured' and words in found[name]['reason']
    assert found['workspace_coverage_operator']['status'] != 'not_configured'
