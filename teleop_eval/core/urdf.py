# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Read the kinematic tree out of a URDF text.

Only links and joints are read; shapes, masses, transmissions and the like are skipped. The text
may come from anybody on the network, so entities, document types and external references are
refused, size and nesting are bounded, and no step recurses.
"""

from __future__ import annotations

import math
import sys
from collections.abc import Iterator, Mapping
from types import MappingProxyType
from xml.etree.ElementTree import Element, ParseError, TreeBuilder

import numpy as np
from defusedxml.common import DefusedXmlException
from defusedxml.ElementTree import DefusedXMLParser

from teleop_eval.core.description import (
    KINDS,
    MOVING_KINDS,
    PRISMATIC,
    REVOLUTE,
    Joint,
    Mimic,
    RobotDescription,
)
from teleop_eval.core.errors import DescriptionError
from teleop_eval.core.rotations import Array

# Full humanoids with two hands stay under 1 MB, 10 000 elements and 10 levels; at these bounds
# a hostile text costs a few seconds at most.
MAX_CHARACTERS = 4 * 2**20
MAX_ELEMENTS = 100_000
MAX_DEPTH = 64
# Nothing in a robot is a million metres away or turns a million times: larger numbers are
# damage, and would overflow later where nobody can tell why.
MAX_NUMBER = 1e6


def parse_urdf(text: str, *, source: str = 'robot_description') -> RobotDescription:
    """
    Read and check a URDF text.

    Parameters
    ----------
    text
        The XML text.
    source
        Topic or file the text came from, named in errors.

    Returns
    -------
    The kinematic tree.

    Raises
    ------
    DescriptionError
        If the text is not a usable URDF; the sentence says where and what to do.

    References
    ----------
    URDF XML specification, wiki.ros.org/urdf/XML (defaults: axis 1 0 0, limits 0, multiplier
    1, offset 0; origin rpy about fixed axes).

    """
    root = _parse_xml(text, source)
    # With xmlns="..." on <robot> every element carries that prefix; others are foreign.
    prefix = root.tag[: root.tag.rfind('}') + 1]
    if root.tag != f'{prefix}robot':
        raise DescriptionError(
            f'{source}: the root element is <{root.tag[:80]}>, not <robot>: give a URDF'
        )
    if any('xacro' in child.tag for child in root if child.tag.startswith('{')):
        raise DescriptionError(
            f'{source}: this is a xacro file: expand it first with "xacro FILE > robot.urdf"'
        )
    links = _read_links(root, prefix, source)
    joints: dict[str, Joint] = {}
    for element in root.iterfind(f'{prefix}joint'):
        joint = _JointReader(element, prefix, source).read()
        if joint.name in joints:
            raise DescriptionError(
                f'{source}: two joints are named {_shown(joint.name)}: rename one'
            )
        joints[joint.name] = joint
    _check_tree(links, joints, source)
    _check_mimics(joints, source)
    name = root.get('name') or ''
    return RobotDescription(name, frozenset(links), MappingProxyType(joints), source)


class _BoundedBuilder(TreeBuilder):
    """Builds the element tree, gives up when it nests too deep or grows too large."""

    depth = 0
    count = 0

    def start(self, tag, attrs, /):  # type: ignore[no-untyped-def]
        self.depth += 1
        self.count += 1
        if self.count > MAX_ELEMENTS:
            raise DescriptionError(f'the robot has more than {MAX_ELEMENTS} elements')
        if self.depth > MAX_DEPTH:
            raise DescriptionError(f'elements are nested deeper than {MAX_DEPTH} levels')
        return super().start(tag, attrs)

    def end(self, tag, /):  # type: ignore[no-untyped-def]
        self.depth -= 1
        return super().end(tag)


def _parse_xml(text: str, source: str) -> Element:
    if not text.strip():
        raise DescriptionError(f'{source}: the text is empty: give a URDF')
    if len(text) > MAX_CHARACTERS:
        raise DescriptionError(
            f'{source}: {len(text)} characters are more than the {MAX_CHARACTERS} allowed: '
            'give the URDF of one robot'
        )
    parser = DefusedXMLParser(
        target=_BoundedBuilder(), forbid_dtd=True, forbid_entities=True, forbid_external=True
    )
    try:
        parser.feed(text)
        root: Element = parser.close()
    except DescriptionError as error:
        raise DescriptionError(f'{source}: {error}') from None
    except DefusedXmlException:
        raise DescriptionError(
            f'{source}: a document type, entity or external reference is not allowed in a '
            'URDF: remove it'
        ) from None
    except (ParseError, ValueError, LookupError) as error:
        raise DescriptionError(
            f'{source}: the text is not XML ({error}): give a complete URDF'
        ) from None
    return root


def _read_links(root: Element, prefix: str, source: str) -> set[str]:
    links: set[str] = set()
    for element in root.iterfind(f'{prefix}link'):
        name = element.get('name')
        if not name:
            raise DescriptionError(f'{source}: a link has no name: give it one')
        if name in links:
            raise DescriptionError(f'{source}: two links are named {_shown(name)}: rename one')
        links.add(name)
    if not links:
        raise DescriptionError(f'{source}: the robot has no links: give a complete URDF')
    return links


class _JointReader:
    """Reads one <joint> element; every fault names the joint."""

    def __init__(self, element: Element, prefix: str, source: str) -> None:
        self._element = element
        self._prefix = prefix
        name = element.get('name')
        if not name:
            raise DescriptionError(f'{source}: a joint has no name: give it one')
        self._name = name
        self._where = f'{source}: joint {_shown(name)}'

    def read(self) -> Joint:
        kind = self._element.get('type')
        if kind not in KINDS:
            raise self._fault(
                f'has the unknown type {_shown(kind)}: use one of {", ".join(KINDS)}'
            )
        origin = self._child('origin')
        lower, upper, velocity = self._limits(kind)
        return Joint(
            name=self._name,
            kind=kind,
            parent=self._link('parent'),
            child=self._link('child'),
            origin_xyz=_frozen(self._vector(origin, 'xyz', '0 0 0')),
            origin_rotation=_frozen(_rpy_matrix(self._vector(origin, 'rpy', '0 0 0'))),
            axis=_frozen(self._axis(kind)),
            lower=lower,
            upper=upper,
            velocity=velocity,
            mimic=self._mimic(),
        )

    def _fault(self, text: str) -> DescriptionError:
        return DescriptionError(f'{self._where} {text}')

    def _child(self, tag: str) -> Element | None:
        return self._element.find(self._prefix + tag)

    def _link(self, tag: str) -> str:
        element = self._child(tag)
        name = None if element is None else element.get('link')
        if not name:
            raise self._fault(f'names no {tag} link: add <{tag} link="..."/>')
        return name

    def _number(self, text: str, what: str, largest: float = MAX_NUMBER) -> float:
        try:
            number = float(text.replace('_', '?'))  # Python would read 1_0 as 10
        except ValueError:
            raise self._fault(
                f'has {what} {text[:60]!r}, which is not a number: correct it'
            ) from None
        if math.isnan(number):
            raise self._fault(f'has {what} NaN: give a finite number')
        if abs(number) > largest:
            raise self._fault(f'has {what} {text[:60]!r}, beyond +-{largest:g}: correct it')
        return number

    def _vector(self, element: Element | None, attribute: str, default: str) -> Array:
        text = default if element is None else element.get(attribute, default)
        parts = text.split()
        if len(parts) != 3:
            raise self._fault(
                f'has {attribute} {text[:60]!r}: give three numbers with spaces between'
            )
        return np.array([self._number(part, attribute) for part in parts])

    def _axis(self, kind: str) -> Array:
        if kind not in MOVING_KINDS:
            return np.zeros(3)
        axis = self._vector(self._child('axis'), 'xyz', '1 0 0')
        length = float(np.linalg.norm(axis))
        if length < 1e-9:
            raise self._fault('has a zero axis: give a direction, for example xyz="0 0 1"')
        return axis / length

    def _limits(self, kind: str) -> tuple[float, float, float]:
        element = self._child('limit')
        velocity = math.inf
        if element is not None and element.get('velocity') is not None:
            velocity = self._number(element.get('velocity', ''), 'limit velocity', math.inf)
            if velocity < 0.0:
                raise self._fault(f'has limit velocity {velocity:g}: it must not be negative')
        if kind not in (REVOLUTE, PRISMATIC):
            return -math.inf, math.inf, velocity
        if element is None:
            raise self._fault(f'is {kind} but has no limits: add <limit lower= upper=/>')
        # Files give a spinning rotor +-1e16; a slide of that length would be damage.
        largest = MAX_NUMBER if kind == PRISMATIC else sys.float_info.max
        lower = self._number(element.get('lower', '0'), 'limit lower', largest)
        upper = self._number(element.get('upper', '0'), 'limit upper', largest)
        if lower > upper:
            raise self._fault(f'has limit lower {lower:g} above upper {upper:g}: exchange them')
        return lower, upper, velocity

    def _mimic(self) -> Mimic | None:
        element = self._child('mimic')
        if element is None:
            return None
        master = element.get('joint')
        if not master:
            raise self._fault('mimics no joint: add <mimic joint="..."/>')
        return Mimic(
            master,
            self._number(element.get('multiplier', '1'), 'mimic multiplier'),
            self._number(element.get('offset', '0'), 'mimic offset'),
        )


def _check_tree(links: set[str], joints: Mapping[str, Joint], source: str) -> None:
    above: dict[str, Joint] = {}
    for joint in joints.values():
        for role, link in (('parent', joint.parent), ('child', joint.child)):
            if link not in links:
                raise DescriptionError(
                    f'{source}: joint {_shown(joint.name)} has the {role} link {_shown(link)}, '
                    'which does not exist: add the link or correct the name'
                )
        if joint.child in above:
            raise DescriptionError(
                f'{source}: link {_shown(joint.child)} has two parents, joints '
                f'{_shown(above[joint.child].name)} and {_shown(joint.name)}: a URDF is a tree'
            )
        above[joint.child] = joint
    steps = {child: joint.parent for child, joint in above.items()}
    looped = _first_on_cycle(steps)
    if looped is not None:
        raise DescriptionError(
            f'{source}: the joints form a cycle through link {_shown(looped)}: a URDF is a tree'
        )


def _check_mimics(joints: Mapping[str, Joint], source: str) -> None:
    for joint in joints.values():
        if joint.mimic is not None and joint.mimic.joint not in joints:
            raise DescriptionError(
                f'{source}: joint {_shown(joint.name)} mimics {_shown(joint.mimic.joint)}, '
                'which does not exist: correct the name'
            )
    steps = {joint.name: joint.mimic.joint for joint in joints.values() if joint.mimic}
    looped = _first_on_cycle(steps)
    if looped is not None:
        raise DescriptionError(
            f'{source}: joint {_shown(looped)} mimics itself through a loop: let one joint be free'
        )


def _first_on_cycle(step: Mapping[str, str]) -> str | None:
    """Return a node that comes back to itself; every node has at most one step."""
    done: set[str] = set()
    for start in step:
        trail: set[str] = set()
        for node in _walk(start, step):
            if node in trail:
                return node
            if node in done:
                break
            trail.add(node)
        done |= trail
    return None


def _walk(start: str, step: Mapping[str, str]) -> Iterator[str]:
    node: str | None = start
    while node is not None:
        yield node
        node = step.get(node)


def _shown(text: str | None) -> str:
    """Quote a name of the file, cut where it would make the sentence unreadable."""
    return repr(text if text is None or len(text) <= 80 else text[:77] + '...')


def _rpy_matrix(rpy: Array) -> Array:
    (cr, cp, cy), (sr, sp, sy) = np.cos(rpy), np.sin(rpy)
    return np.array(
        [
            [cy * cp, cy * sp * sr - sy * cr, cy * sp * cr + sy * sr],
            [sy * cp, sy * sp * sr + cy * cr, sy * sp * cr - cy * sr],
            [-sp, cp * sr, cp * cr],
        ]
    )


def _frozen(array: Array) -> Array:
    array.setflags(write=False)
    return array
