# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Keep the cell to itself: environment of its processes and who else may be there.

The processes of the cell are confined to this machine and to one domain. Before it commands
anything, a process of the cell looks at the nodes it can see and refuses when one lies
outside of the cell's namespace; it goes on looking while it runs and stops when one appears.
Only the nodes of the ROS command line (`ros2 topic echo`) are let in: they have no robot.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, MutableMapping

from teleop_eval.core.errors import TeleopEvalError, UsageError
from teleop_eval.teardown_cell.plan import NAMESPACE

DEFAULT_DOMAIN = 77
# Domain 0 is where robots live that nobody gave a number; above 101 the ports collide with
# those the operating system gives out (docs.ros.org, "The ROS_DOMAIN_ID").
DOMAINS = range(1, 102)
# Measured: two participants find each other at once or at the next announcement, 3 s later.
LOOK_S = 3.6
WATCH_PERIOD_S = 1.0
# Settings that could carry discovery beyond this machine.
WIDENING = (
    'ROS_STATIC_PEERS', 'ROS_DISCOVERY_SERVER', 'ROS_LOCALHOST_ONLY', 'ROS_SUPER_CLIENT',
    'FASTRTPS_DEFAULT_PROFILES_FILE', 'FASTDDS_DEFAULT_PROFILES_FILE', 'CYCLONEDDS_URI',
)
COMMAND_LINE_PREFIX = '_ros2cli'


class CellRefusedError(TeleopEvalError):
    """Something that is not of the cell shares its domain."""


def isolate(environment: MutableMapping[str, str], domain: int) -> None:
    """Confine the DDS settings in an environment to this machine and a domain."""
    if domain not in DOMAINS:
        raise UsageError(
            f'--domain is {domain}, but must be {DOMAINS.start} to {DOMAINS.stop - 1}; 0 is '
            'left out because robots without a number live there.')
    for name in WIDENING:
        environment.pop(name, None)
    environment['ROS_AUTOMATIC_DISCOVERY_RANGE'] = 'LOCALHOST'
    if environment.get('ROS_DISTRO') in ('foxy', 'galactic', 'humble'):
        environment['ROS_LOCALHOST_ONLY'] = '1'  # they do not know the discovery range yet
    environment['ROS_DOMAIN_ID'] = str(domain)


def full_name(name: str, namespace: str) -> str:
    """Return a node's full name."""
    return f'{namespace.rstrip("/")}/{name}'


def foreign_nodes(nodes: Iterable[tuple[str, str]]) -> list[str]:
    """
    Return the full names of nodes that are not of the cell, sorted.

    Parameters
    ----------
    nodes
        (name, namespace) of every visible node.

    """
    return sorted({
        full_name(name, namespace) for name, namespace in nodes
        if namespace != NAMESPACE and not namespace.startswith(NAMESPACE + '/')
        and not name.startswith(COMMAND_LINE_PREFIX)
    })


def refuse_foreign(nodes: Iterable[tuple[str, str]], domain: int) -> None:
    """
    Raise when a node outside the cell's namespace is among the visible ones.

    Raises
    ------
    CellRefusedError
        With the names and what to do.

    """
    found = foreign_nodes(nodes)
    if found:
        listed = ', '.join(found[:5]) + (f' and {len(found) - 5} more' if found[5:] else '')
        raise CellRefusedError(
            f'The cell commands an arm and wants its domain for itself, but domain {domain} '
            f'has {"a node" if len(found) == 1 else "nodes"} outside {NAMESPACE}: {listed}; '
            'choose a free domain with --domain N, or end what runs there.')


def refuse_second_cell(nodes: Iterable[tuple[str, str]], own: str, domain: int) -> None:
    """
    Raise when another cell runs in the domain.

    Raises
    ------
    CellRefusedError
        With the names and what to do.

    """
    names = [full_name(*node) for node in nodes]
    others = sorted(name for name in names if name.startswith(NAMESPACE + '/'))
    if own in others:
        others.remove(own)  # once: a second demo has the same name
    if others:
        raise CellRefusedError(
            f'Another teardown cell runs in domain {domain} ({", ".join(others[:5])}); choose '
            'a free domain with --domain N, or end the other one.')


def look_around(check: Callable[[], None], stopped: Callable[[], bool],
                seconds: float = LOOK_S) -> None:
    """Call the check again and again until discovery has had its time, or a stop is asked."""
    end = time.monotonic() + seconds
    while not stopped() and time.monotonic() < end:
        check()
        time.sleep(0.1)
    check()
