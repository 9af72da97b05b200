# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Parameter files read without ROS, held against rcl itself where rclpy is installed.

The tables were measured with rcl 10.1.3 through rclpy 9.1.2; the differential tests ask the
installed rcl again, so a table that no longer holds fails there.
"""

from __future__ import annotations

import ctypes
import json
import math
import os
import struct
import subprocess
import sys

import numpy as np
import pytest
import yaml
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from teleop_eval.core.errors import ConfigError
from teleop_eval.sources import parameter_tree
from teleop_eval.sources.parameter_file import load_parameters, to_yaml
from teleop_eval.sources.parameter_node_name import applies_to
from teleop_eval.sources.parameter_scalar import resolve_scalar

HEAD = '/**:\n  ros__parameters:\n'

SCALARS = [
    ('1e-3', 0.001), ('1e3', 1000.0), ('1.', 1.0), ('.5', 0.5), ('-.5', -0.5), ('+.5', 0.5),
    ('1.5', 1.5), ('1.e5', 1e5), ('01.5', 1.5), ('-0.0', -0.0), ('.0', 0.0), ('0x10', 16),
    ('0X1F', 31), ('-0x10', -16), ('0b101', '0b101'), ('0o17', '0o17'), ('017', 15),
    ('08', 8.0), ('010', 8), ('-010', -8), ('00', 0), ('+5', 5), ('-0', 0), ('1_000', '1_000'),
    ('1,000', '1,000'), ('yes', True), ('Yes', True), ('yEs', 'yEs'), ('on', True), ('y', True),
    ('Y', True), ('TRUE', True), ('tRUE', 'tRUE'), ('no', False), ('off', False), ('n', False),
    ('N', False), ('False', False), ('.nan', math.nan), ('nan', math.nan), ('NAN', math.nan),
    ('-.nan', '-.nan'), ('nan(1)', math.nan), ('.inf', math.inf), ('-.inf', -math.inf),
    ('+.Inf', math.inf), ('.iNF', '.iNF'), ('inf', math.inf), ('-infinity', -math.inf),
    ('9223372036854775807', 2**63 - 1), ('9223372036854775808', 2.0**63),
    ('-9223372036854775808', -(2**63)), ('0xffffffffffffffff', 2.0**64), ('1e400', '1e400'),
    ('1e-400', '1e-400'), ('1e-310', '1e-310'), ('0x1p-1074', 5e-324), ('0x1p3', 8.0),
    ('0x1.8p1', 3.0), ('0x', '0x'), ('1e', '1e'), ('.', '.'), ('+', '+'), ('--5', '--5'),
    ('2020-01-01', '2020-01-01'), ('12:30:45', '12:30:45'), ('"1"', '1'), ("'1'", '1'),
    ('"true"', 'true'), ('""', ''), ("''", ''), ('"null"', 'null'), ("'~'", '~'),
    ('!!str 1', '1'), ('!!str null', 'null'), ('!<tag:yaml.org,2002:str> 5', '5'),
    ('1.0f', '1.0f'), ('1L', '1L'), ('12abc', '12abc'), ('a\\nb', 'a\\nb'), ('"a\\nb"', 'a\nb'),
    ('é', 'é'), ('"\\U0001F600"', '\U0001F600'), ('=', '='), ('<<', '<<'), ('a::b', 'a::b'),
    ('&anchor 1', 1), ('1 # note', 1), ('|\n      5', '5\n'), ('>-\n      5', 5),
    ('|-\n      true', True), ('|1-\n      5', 5), ('1\n      2', '1 2'), ('\t1\t', 1),
    ('[1, 2]', [1, 2]), ('[1.0, 2.5]', [1.0, 2.5]), ('[true, no]', [True, False]),
    ('[a, b]', ['a', 'b']), ('["1", a]', ['1', 'a']), ('[!!str 1, a]', ['1', 'a']),
    ('[1, 2,]', [1, 2]), ('[.nan, 1.0]', [math.nan, 1.0]), ('[08, 1.0]', [8.0, 1.0]),
    ('["", a]', ['', 'a']), ('\n      - 1\n      - 2', [1, 2]), ('&x [1]', [1]),
]

# Files that rcl reads without loss: text, node name space, parameters.
FILES = [
    ('', '/', {}), ('# nothing\n', '/', {}), ('/**: {}\n', '/', {}),
    ('/**:\n  ros__parameters: {}\n', '/', {}),
    (HEAD + '    a: 1\n---\n' + HEAD + '    b: 2\n', '/', {'a': 1, 'b': 2}),
    (HEAD + '    a: 1\n' + HEAD + '    b: 2\n', '/', {'a': 1, 'b': 2}),
    ('%YAML 1.1\n---\n' + HEAD + '    a: 1\n...\n', '/', {'a': 1}),
    ('teleop_eval:\n  ros__parameters:\n    a: 1\n', '/', {'a': 1}),
    ('/ns:\n  teleop_eval:\n    ros__parameters: {a: 1}\n', '/ns', {'a': 1}),
    ('/:\n  teleop_eval:\n    ros__parameters: {a: 1}\n', '/', {'a': 1}),
    # A later section overrides, however general it is.
    ('/teleop_eval:\n  ros__parameters: {a: 1, b: 1}\n' + HEAD + '    a: 2\n', '/',
     {'a': 2, 'b': 1}),
    (HEAD + '    a: 2\n/teleop_eval:\n  ros__parameters: {a: 1}\n', '/', {'a': 1}),
    ('teleop_eval:\n  ros__parameters: {a: 3}\n/teleop_eval:\n  ros__parameters: {a: 1}\n', '/',
     {'a': 1}),
    (HEAD + '    a: {b: 1}\n    a: {c: 2}\n', '/', {'a.b': 1, 'a.c': 2}),
    (HEAD + '    a.b: {c: 1, d: 4}\n    f: 3\n', '/', {'a.b.c': 1, 'a.b.d': 4, 'f': 3}),
    (HEAD + '    a: {b: {c: 1}}\n    d: {e: [1.5]}\n    f: 1\n', '/',
     {'a.b.c': 1, 'd.e': [1.5], 'f': 1}),
    (HEAD + '    a: {<<: {b: 1}, c: 2}\n', '/', {'a.<<.b': 1, 'a.c': 2}),
    (HEAD + '    ros__parameters: {a: 1}\n', '/', {'ros__parameters.a': 1}),
    (HEAD + '    1: 2\n    ? x\n    : 3\n', '/', {'1': 2, 'x': 3}),
    ('/**:\n  foo:\n    ros__parameters: {b: 1}\n  ros__parameters: {a: 1}\n', '/', {'a': 1}),
    (HEAD + '    a: ' + '{b: ' * 20 + '1' + '}' * 20 + '\n', '/', {'a' + '.b' * 20: 1}),
    ((HEAD + '    a: 1\n').replace('\n', '\r\n'), '/', {'a': 1}),
]

# Values and files that rcl refuses too: text after HEAD, line and words of the message.
REFUSED_BY_RCL = [
    ('    a:\n', 3, "'a' has no value"), ('    a: -\n', 3, 'not valid YAML'),
    ('    a: [1, 2.5]\n', 3, "'a' mixes integer .* decimal point"),
    ('    a: [2.5, 1]\n', 3, 'mixes number .* decimal point'),
    ('    a: [x, y]\n', 3, 'mixes text .* quotes'),
    ('    a: [true, 1]\n', 3, 'mixes true/false'), ('    a: [1, "2"]\n', 3, 'mixes integer'),
    ('    a:\n      -\n      - 1\n', 4, "'a' has no value"),
    ('    a: [[1, 2], [3]]\n', 3, 'list of lists .*flat'),
    ('    a:\n      - {p: 1, q: no}\n      - {p: 3, q: 4}\n', 4, "'a' is a list of maps"),
    ('    a: &x 1\n    b: *x\n', 4, r'alias \*x .*write the value out'),
    ('\t a: 1\n', 3, 'not valid YAML .*spaces only'), ('    "": 1\n', 3, 'key is empty'),
    ('    ? [x]\n    : 1\n', 3, 'cannot be a key'), ('    ? {x: 1}\n    : 1\n', 3, 'cannot be'),
    ('    a: {}\n    b: 1\n', 3, "'a' is an empty map"), ('    foo\n', 3, 'no map'),
    ('    a: !!set {b, c}\n', 3, 'tag !!set'), ('    a: [b:c, d]\n', 3, "'b:c' .*quotes"),
    ('    a: x: 1\n', 3, 'not valid YAML'), ('    a: [1, 2\n', 4, 'not valid YAML'),
    ('    a: "x\x01"\n', None, 'plain UTF-8'),
]

# What rcl accepts and bends: here an error that names line, key and remedy.
LOST_BY_RCL = [
    ('    a: [{p: 1}]\n', 3, "'a' is a list of maps .*named maps .*parallel arrays"),
    ('    a: [1, {p: 1}]\n    b: 3\n', 3, "'a' is a list of maps"),
    ('    a: [p: 1, q: 2]\n', 3, "'a' is a list of maps"),
    ('    a: [[1, 2]]\n', 3, 'list of lists'), ('    a: [1, [2]]\n', 3, r'lists \(entry 2\)'),
    ('    a: []\n', 3, "'a' is an empty list"), ('    b: 1\n    a: {}\n', 4, 'empty map'),
    ('    a: {b: {}, c: 1}\n', 3, "'a.b' is an empty map"),
    ('    a: 1\n    a: 2\n', 4, "'a' is given again .*line 3"),
    ('    a.b: 1\n    a: {b: 2}\n', 4, "'a.b' is given again .*line 3"),
    ('    a: 1\n    a: {b: 2}\n', 4, "'a' opens a map but has a value in line 3"),
    ('    a: {b: 1}\n    a.b: {c: 2}\n', 4, "'a.b' opens a map"),
    ('    a: {b.c: {d: 1}, e: 2}\n', 3, "dotted key 'b.c'"),
    ('    a: null\n', 3, "'a' is null"), ('    a: ~\n', 3, "'a' is ~"),
    ('    a: [Null, x]\n', 3, "'a' is Null"), ('    a: "x\\0y"\n', 3, 'NUL'),
    ('    "a\\0b": 1\n', 3, 'NUL'), ('    a: !!float 1\n', 3, 'tag !!float'),
    ('    a: !!int "5"\n', 3, 'tag !!int'), ('    a: ! 5\n', 3, 'tag !'),
    ('    a: 1\n  foo:\n    ros__parameters: {b: 1}\n', 4, "'foo' follows .* of line 2"),
    ('    a: 1\n---\n5\n', 5, 'begin'),
]

# Asks rclpy for the parameters that each file of a line on stdin would give a node.
WORKER = """
import json, sys, tempfile, os
import rclpy
from rclpy.context import Context
from rclpy.node import Node
context = Context()
rclpy.init(args=[], context=context)
with tempfile.TemporaryDirectory() as folder:
    path = os.path.join(folder, 'f.yaml')
    for line in sys.stdin:
        text, namespace = json.loads(line)
        with open(path, 'wb') as file:
            file.write(text.encode())
        try:
            node = Node('teleop_eval', namespace=namespace, context=context,
                        cli_args=['--ros-args', '--params-file', path],
                        enable_rosout=False, start_parameter_services=False)
        except Exception as error:
            answer = str(error)
        else:
            answer = {}
            for name, parameter in node._parameter_overrides.items():
                value = parameter.value
                answer[name] = value.tolist() if hasattr(value, 'tolist') else value
            node.destroy_node()
        print(json.dumps(answer), flush=True)
"""


class Rcl:
    """One process with rclpy in it that answers for many files."""

    def __init__(self) -> None:
        environment = {
            **os.environ, 'ROS_DOMAIN_ID': '57', 'ROS_AUTOMATIC_DISCOVERY_RANGE': 'LOCALHOST'}
        self.process = subprocess.Popen(
            [sys.executable, '-c', WORKER], stdin=subprocess.PIPE, stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL, env=environment, text=True)

    def ask(self, text: str, namespace: str = '/') -> dict | str:
        """Return the parameters, or rcl's error message."""
        self.process.stdin.write(json.dumps([text, namespace]) + '\n')
        self.process.stdin.flush()
        return json.loads(self.process.stdout.readline())


@pytest.fixture(scope='module')
def rcl():
    pytest.importorskip('rclpy', reason='the differential test asks the real rcl')
    worker = Rcl()
    yield worker
    worker.process.stdin.close()
    worker.process.wait(timeout=30)
    worker.process.stdout.close()


def same(left: object, right: object) -> bool:
    """Equal in type and value, NaN and the sign of zero included."""
    if isinstance(left, dict):
        return (isinstance(right, dict) and left.keys() == right.keys()
                and all(same(left[key], right[key]) for key in left))
    if isinstance(left, list):
        return (isinstance(right, list) and len(left) == len(right)
                and all(map(same, left, right)))
    if isinstance(left, float) and isinstance(right, float):
        return struct.pack('d', left) == struct.pack('d', right) or (left != left != right)
    return type(left) is type(right) and left == right


def load_text(text: str, namespace: str = '/') -> dict:
    return load_parameters(text + '\n', namespace=namespace)


@pytest.mark.parametrize(('text', 'value'), SCALARS)
def test_value_is_typed_as_measured(text, value):
    assert same(load_text(f'{HEAD}    k: {text}\n'), {'k': value})


@pytest.mark.parametrize(('text', 'namespace', 'expected'), FILES)
def test_file_is_read_as_measured(text, namespace, expected):
    assert same(load_text(text, namespace), expected)


@pytest.mark.parametrize(('body', 'line', 'words'), REFUSED_BY_RCL + LOST_BY_RCL)
def test_error_names_line_and_remedy(tmp_path, body, line, words):
    path = tmp_path / 'bad.yaml'
    path.write_text(HEAD + body)
    with pytest.raises(ConfigError, match=words) as caught:
        load_parameters(path)
    assert 'bad.yaml' in str(caught.value)
    assert '\n' not in str(caught.value)
    assert line is None or f'line {line}:' in str(caught.value)


@pytest.mark.parametrize(('text', 'words'), [
    ('a: 1\n', "line 1: .*'a' stands above any 'ros__parameters'"),
    ('ros__parameters:\n  a: 1\n', "line 1: 'ros__parameters' stands without a node name"),
    ('/**:\n  ros__parameters:\n', 'line 2: .* no map'),
    ('/**:\n  ros__parameters: 5\n', 'line 2: .* no map'),
    ('/**:\n  ros__parametersX:\n    a: 1\n', 'read by ROS as ros__parameters'),
    ('/**:\n', 'line 1: '), ('- a\n', 'line 1: .* a list'), ('5\n', 'line 1: .* single value'),
    ('---\n', 'single value'), ('/a b:\n  ros__parameters: {x: 1}\n', "the part 'a b'"),
    ('//teleop_eval:\n  ros__parameters: {x: 1}\n', 'no node name'),
    ('/1a:\n  ros__parameters: {x: 1}\n', 'no node name'),
    ('a' * 256 + ':\n  ros__parameters: {x: 1}\n', 'too long'),
    ('/ns:\n  x/y:\n    ros__parameters: {x: 1}\n', 'has a slash'),
    ('/other:\n  ros__parameters: {x: 1}\n', "no section is for the node /teleop_eval .*'/other'"),
    ('%YAML 1.2\n---\n' + HEAD + '    a: 1\n', '%YAML'),
    (HEAD + '    a: ' + '{b: ' * 100 + '1' + '}' * 100 + '\n', 'nested deeper than 64'),
    # libyaml may stop even earlier, by a limit of its own.
    (HEAD + '    a: ' + '[' * 100000 + '\n', 'nested deeper than 64|maximum nesting depth'),
    (HEAD + '    a: \ud800\n', 'not valid Unicode'),
])
def test_structure_error(text, words):
    with pytest.raises(ConfigError, match=words):
        load_parameters(text)


def test_unreadable_files(tmp_path):
    with pytest.raises(ConfigError, match='missing.yaml: cannot be read .*No such file'):
        load_parameters(tmp_path / 'missing.yaml')
    with pytest.raises(ConfigError, match='not a regular file'):
        load_parameters(tmp_path)
    large = tmp_path / 'large.yaml'
    large.write_text('#' * (parameter_tree.MAX_BYTES + 1))
    with pytest.raises(ConfigError, match='larger than 512 KiB'):
        load_parameters(large)
    binary = tmp_path / 'binary.yaml'
    binary.write_bytes(HEAD.encode() + b'    a: \xff\n')
    with pytest.raises(ConfigError, match='save it as plain UTF-8'):
        load_parameters(binary)
    with pytest.raises(ConfigError, match='cannot be read'):
        load_parameters('no\0such')


def test_utf16_with_byte_order_mark(tmp_path):
    path = tmp_path / 'wide.yaml'
    path.write_bytes((HEAD + '    a: 1\n').encode('utf-16'))
    assert load_parameters(str(path)) == {'a': 1}


def test_alias_bomb_ends_at_its_first_alias():
    lines = ['    a0: &a0 [x, x]']
    lines += [f'    a{n}: &a{n} [*a{n - 1}, *a{n - 1}]' for n in range(1, 60)]
    with pytest.raises(ConfigError, match=r'line 4: the alias \*a0'):
        load_parameters(HEAD + '\n'.join(lines) + '\n')


def test_pure_python_parser_reads_the_same(monkeypatch):
    """PyYAML without libyaml must not change what a file means."""
    monkeypatch.setattr(parameter_tree, '_LOADER', yaml.BaseLoader)
    for text, value in SCALARS:
        if '\t' not in text:  # refuses tabs after a colon, never reads them differently
            assert same(load_text(f'{HEAD}    k: {text}\n'), {'k': value}), text
    for text, namespace, expected in FILES:
        assert same(load_text(text, namespace), expected), text
    for body, _, words in REFUSED_BY_RCL + LOST_BY_RCL:
        with pytest.raises(ConfigError, match=words):
            load_parameters(HEAD + body)


@pytest.mark.parametrize(('section', 'full_name', 'expected'), [
    ('teleop_eval', '/teleop_eval', True), ('teleop_eval', '/ns/teleop_eval', False),
    ('ns/teleop_eval', '/ns/teleop_eval', True), ('/*', '/teleop_eval', True),
    ('/*', '/ns/teleop_eval', False), ('/*/teleop_eval', '/teleop_eval', False),
    ('/*/teleop_eval', '/ns/teleop_eval', True), ('/**/teleop_eval', '/teleop_eval', True),
    ('/ns/**', '/ns/a/teleop_eval', True), ('/ns/**', '/nsx/teleop_eval', False),
    ('*', '/teleop_eval', True), ('**', '/a/b/teleop_eval', True),
])
def test_wildcards(section, full_name, expected, rcl):
    assert applies_to(section, full_name) is expected
    namespace = full_name.rpartition('/')[0] or '/'
    answer = rcl.ask(f'"{section}":\n  ros__parameters: {{a: 1}}\n', namespace)
    assert answer == ({'a': 1} if expected else {})


def test_tables_hold_for_the_installed_rcl(rcl):
    for text, value in SCALARS:
        answer = rcl.ask(f'{HEAD}    k: {text}\n')
        assert same(answer, {'k': value}), (text, answer)
    for text, namespace, expected in FILES:
        assert same(rcl.ask(text, namespace), expected), text
    for body, _, _ in REFUSED_BY_RCL:
        assert isinstance(rcl.ask(HEAD + body), str), body
    for body, _, _ in LOST_BY_RCL:
        assert isinstance(rcl.ask(HEAD + body), dict), body


def test_node_started_with_the_file_sees_the_same(tmp_path):
    """The whole path of a user: a process with --params-file and dynamically typed parameters."""
    pytest.importorskip('rclpy', reason='the differential test asks the real rcl')
    flat = {'a.rate': 1e-3, 'a.names': ['x', 'on'], 'b': 3, 'c': True, 'd': [1.5, 2.0]}
    path = tmp_path / 'config.yaml'
    path.write_text(to_yaml(flat))
    script = (
        'import json, sys, rclpy\n'
        'from rclpy.node import Node\n'
        'from rcl_interfaces.msg import ParameterDescriptor as D\n'
        'rclpy.init(args=["--ros-args", "--params-file", sys.argv[1]])\n'
        'n = Node("teleop_eval")\n'
        'v = {k: n.declare_parameter(k, None, D(dynamic_typing=True)).value\n'
        '     for k in n._parameter_overrides}\n'
        'print(json.dumps({k: list(x) if hasattr(x, "tolist") else x for k, x in v.items()}))\n')
    environment = {
        **os.environ, 'ROS_DOMAIN_ID': '57', 'ROS_AUTOMATIC_DISCOVERY_RANGE': 'LOCALHOST'}
    done = subprocess.run(
        [sys.executable, '-c', script, str(path)], env=environment, capture_output=True,
        text=True, timeout=60, check=True)
    live = {key: value for key, value in json.loads(done.stdout).items() if key in flat}
    assert same(live, flat)
    assert same(load_parameters(path), flat)


NUMBER_LIKE = st.one_of(
    st.text('0123456789+-.eExXpPabfinNtyYsoO_', min_size=1, max_size=9),
    st.integers(-2**65, 2**65).map(str), st.floats().map(repr),
    st.floats(allow_nan=False, allow_infinity=False).map(float.hex),
    st.sampled_from(['yes', 'No', 'off', 'nUll', 'Infinity', '.NaN', '-.INF', '1e309',
                     '0x1p-1075']),
)
TEXTS = st.text(st.characters(exclude_categories=('Cs', 'Cc')), min_size=1, max_size=12)


@settings(max_examples=400, deadline=None,
          suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.one_of(NUMBER_LIKE, TEXTS))
def test_any_plain_scalar_is_read_as_rcl_does(rcl, text):
    """Either both give the same, or this reader refuses (null words, tags, other syntax)."""
    file = f'{HEAD}    k: {text}\n'
    answer = rcl.ask(file)
    try:
        mine = load_parameters(file)
    except ConfigError as error:
        assert isinstance(answer, str) or any(
            words in str(error) for words in (
                'ROS reads as the text', 'tag', 'an empty', 'list of', 'given again')), error
    else:
        assert same(mine, answer)


NAMES = st.sampled_from(['a', 'b', 'c', 'a.b', 'b.c', '"x"', 'on', '1'])
LEAVES = st.sampled_from(
    ['1', '2.5', 'yes', 'x', '"q"', '[1, 2]', '[1, 2.0]', '[]', '~', '-', '[a, [b]]', '1e-3', ''])
TREES = st.recursive(
    LEAVES, lambda inner: st.lists(st.tuples(NAMES, inner), max_size=3), max_leaves=8)


def block(tree: list | str, indent: int) -> str:
    """Write a generated tree as block YAML."""
    if isinstance(tree, str):
        return f' {tree}\n'
    if not tree:
        return ' {}\n'
    return '\n' + ''.join(
        ' ' * indent + f'{key}:{block(value, indent + 2)}' for key, value in tree)


@settings(max_examples=400, deadline=None,
          suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(st.tuples(
    st.sampled_from(['/**', 'teleop_eval', '/teleop_eval', '/other', '/*']), TREES),
    min_size=1, max_size=3))
def test_any_tree_is_read_as_rcl_does(rcl, sections):
    """What this reader accepts, rcl reads to the same; what rcl refuses, it refuses."""
    text = ''.join(
        f'{name}:\n  ros__parameters:{block(tree, 4)}' for name, tree in sections)
    answer = rcl.ask(text)
    try:
        mine = load_parameters(text)
    except ConfigError:
        return
    assert same(mine, answer)


LIBC = ctypes.CDLL(None, use_errno=True) if sys.platform == 'linux' else None


def through_libc(text: str) -> int | float | str:
    """Let the C library of this machine read a number as rcl does."""
    buffer = ctypes.create_string_buffer(text.encode())
    end = ctypes.c_char_p()
    for function, kind, extra in (
            (LIBC.strtoll, ctypes.c_longlong, (0,)), (LIBC.strtod, ctypes.c_double, ())):
        function.restype = kind
        ctypes.set_errno(0)
        value = function(buffer, ctypes.byref(end), *extra)
        if ctypes.get_errno() == 0 and end.value == b'' and text:
            return value
    return text


@pytest.mark.skipif(LIBC is None, reason='compares with the C library of Linux')
@settings(max_examples=1500, deadline=None)
@given(NUMBER_LIKE)
@example('2.2250738585072011e-308')
@example('2.2250738585072014e-308')
@example('0x.fffffffffffffcp-1022')
@example('0x.fffffffffffff8p-1022')
@example('0x.ffffffffffffep-1022')
@example('1e-' + '0' * 5000 + '310')
@example('1' * 5000)
@example('0' * 5000 + '7')
@example('0.' + '0' * 400 + '1e401')
@example('0x0p-999999999999')
@example('nan()')
def test_numbers_are_read_as_the_c_library_does(text):
    mine = resolve_scalar(text)
    if isinstance(mine, bool) or text.lstrip('+-').startswith('.') and text[-1].isalpha():
        return
    expected = through_libc(text)
    if '0b' in text.lower() and expected != mine:
        return  # newer C libraries read binary integers
    assert same(mine, expected)


PARAMETERS = st.dictionaries(
    st.text(st.characters(exclude_categories=('Cs',), exclude_characters='\0'), min_size=1,
            max_size=8) | st.sampled_from(['a', 'a.b', 'a.b.c', 'a.c', 'x.y', 'x.', '.x', 'a..b']),
    st.one_of(
        st.booleans(), st.integers(-2**63, 2**63 - 1), st.floats(),
        st.text(st.characters(exclude_categories=('Cs',), exclude_characters='\0'), max_size=30),
        st.lists(st.booleans(), min_size=1, max_size=4),
        st.lists(st.integers(-2**63, 2**63 - 1), min_size=1, max_size=4),
        st.lists(st.floats(), min_size=1, max_size=4),
        st.lists(st.text(st.characters(exclude_categories=('Cs',), exclude_characters='\0'),
                         max_size=9), min_size=1, max_size=4)),
    max_size=6)


@settings(max_examples=300, deadline=None)
@given(PARAMETERS)
def test_written_file_is_read_back_identically(flat):
    assert same(load_parameters(to_yaml(flat)), flat)


@settings(max_examples=200, deadline=None,
          suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(PARAMETERS)
def test_rcl_reads_the_written_file_identically(rcl, flat):
    assert same(rcl.ask(to_yaml(flat)), flat)


def test_written_file_is_nested_and_plain_yaml():
    flat = {'arms.left.rate': 1e-05, 'arms.left.on': True, 'arms.n': [1, 2], 'arms.x': 'no: # "q"'}
    text = to_yaml(flat)
    assert '  ros__parameters:\n    arms:\n      left:\n        rate: 1.0e-05\n' in text
    assert yaml.safe_load(text) == {'/**': {'ros__parameters': {'arms': {
        'left': {'rate': 1e-05, True: True}, 'n': [1, 2], 'x': 'no: # "q"'}}}}


def test_to_yaml_takes_numpy_and_mixed_numbers():
    flat = {'a': np.float64(1.5), 'b': np.array([1, 2]), 'c': (1, 2.5), 'd': np.bool_(True)}
    read = load_parameters(to_yaml(flat))
    assert same(read, {'a': 1.5, 'b': [1, 2], 'c': [1.0, 2.5], 'd': True})


@pytest.mark.parametrize(('value', 'words'), [
    (None, "'k' is None"), ([], "'k' is an empty list"), ([1, 'a'], "'k' mixes types"),
    ([True, 1], 'mixes types'), ([2**53 + 1, 0.5], 'mixes types'), (2**63, '64 bits'),
    ('a\0', 'U\\+0000'), ('\ud800', 'U\\+D800'), ({'a': 1}, 'cannot hold'), ([[1]], 'cannot hold'),
])
def test_to_yaml_refuses_what_ros_cannot_store(value, words):
    with pytest.raises(ConfigError, match=words):
        to_yaml({'k': value})


@settings(max_examples=300, deadline=None)
@given(st.binary(max_size=80))
def test_any_bytes_give_parameters_or_one_clear_error(tmp_path_factory, content):
    path = tmp_path_factory.getbasetemp() / 'fuzz.yaml'
    path.write_bytes(content)
    try:
        assert isinstance(load_parameters(path), dict)
    except ConfigError as error:
        assert '\n' not in str(error)
