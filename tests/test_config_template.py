# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The parameter file that users copy: complete, valid, and with the true defaults."""

from __future__ import annotations

import re
from pathlib import Path

import yaml

from teleop_eval.core.parameters import describe
from teleop_eval.core.settings import Settings, from_parameters
from teleop_eval.sources.parameter_file import load_parameters

TEMPLATE = Path(__file__).parents[1] / 'config' / 'evaluate.yaml'


def uncommented(text: str) -> str:
    """Return the template with its optional parameters switched on."""
    return re.sub(r'^( *)# (?=( )*[a-z_0-9]+:( |$))', r'\1', text, flags=re.MULTILINE)


def flatten(tree: dict, prefix: str = '') -> dict:
    """Return dotted parameters of nested ones."""
    flat = {}
    for key, value in tree.items():
        if isinstance(value, dict):
            flat.update(flatten(value, f'{prefix}{key}.'))
        else:
            flat[prefix + key] = value
    return flat


def test_template_is_accepted_as_it_stands():
    """It loads as rcl would load it and passes every check."""
    settings = from_parameters(load_parameters(TEMPLATE))
    assert list(settings.arms) == ['right']
    assert list(settings.arms['right'].mappings) == ['direct', 'reach']


def test_template_shows_every_parameter_with_its_default():
    """Outside arms the value is the default; inside, each parameter occurs."""
    flat = flatten(yaml.safe_load(uncommented(TEMPLATE.read_text()))['/**']['ros__parameters'])
    known = dict(describe(Settings, flat))
    shown = set(flat)
    assert shown <= set(known), sorted(shown - set(known))
    general = {name for name in known if not name.startswith('arms.')}
    assert general == {name for name in shown if not name.startswith('arms.')}
    for name in general:
        if known[name].default is not None:
            assert flat[name] == known[name].default, name
    # A parameter of a joint is shown once, at whichever joint; a mapping shows all of its kind.
    def words(names):
        return {re.sub(r'\.(j1|j2)(?=\.)', '', name) for name in names}
    assert words(known) == words(shown), sorted(words(known) ^ words(shown))
