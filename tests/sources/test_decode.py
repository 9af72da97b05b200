# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Message bytes to samples, held against rosbags' and rclpy's serialization and hand-made bytes.
"""

from __future__ import annotations

import struct
import tracemalloc

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from rosbags.typesys import Stores, get_types_from_msg, get_typestore

from teleop_eval.core.errors import InputError
from teleop_eval.core.samples import (
    ArraySample,
    BoolSample,
    JointSample,
    JoySample,
    PoseSample,
    TextSample,
    TrajectorySample,
    TwistSample,
)
from teleop_eval.sources.decode import SUPPORTED, full_type_name, make_decoder

STORE = get_typestore(Stores.ROS2_HUMBLE)
TYPES = STORE.types
ALL_TYPES = sorted({name for names in SUPPORTED.values() for name in names})
POSE_TYPES = SUPPORTED['pose']

# The shape of a real controller's messages: own header, masks, float32 positions in the middle.
DEFINITION = """\
# Header with a counter before the stamp
OwnHeader header

int16 FAULT_NONE = 0
int32 index_id  # which robot
string[] name  # joints
bool[] enable
bool[] fault
Detail[] details
float32[] position  # [mm or rad]
float64[] velocity
uint16[] status_word
uint32 cycle_count

================================================================================
MSG: lab_msgs/OwnHeader
int32 seq

builtin_interfaces/Time stamp
string frame_id
================================================================================
MSG: lab_msgs/Detail
uint8 level
float64[2] pair
string<=9 note
Nothing nothing
================================================================================
MSG: lab_msgs/Nothing
uint8 structure_needs_at_least_one_member
================================================================================
MSG: builtin_interfaces/Time
int32 sec
uint32 nanosec
"""
CUSTOM = 'lab_msgs/msg/State'
CUSTOM_STORE = get_typestore(Stores.EMPTY)
CUSTOM_STORE.register(get_types_from_msg(DEFINITION, CUSTOM))

FLOATS = st.floats()
NAMES = st.text(st.characters(exclude_categories=('Cs',), exclude_characters='\0'), max_size=12)
SECONDS = st.integers(-2**31, 2**31 - 1)
NANOSECONDS = st.integers(0, 10**9 - 1)


def of(name, *values):
    return TYPES[name](*values)


def header(seconds=5, nanoseconds=6, frame='base'):
    return of('std_msgs/msg/Header',
              of('builtin_interfaces/msg/Time', seconds, nanoseconds), frame)


def pose(values):
    return of('geometry_msgs/msg/Pose', of('geometry_msgs/msg/Point', *values[:3]),
              of('geometry_msgs/msg/Quaternion', *values[3:]))


def pose_message(name, head, values, child='tool'):
    """Build any of the pose types from seven numbers."""
    kind = name.rpartition('/')[2]
    covariance = np.arange(36.0)
    if kind == 'PoseStamped':
        return of(name, head, pose(values))
    if kind == 'PointStamped':
        return of(name, head, of('geometry_msgs/msg/Point', *values[:3]))
    if kind == 'PoseWithCovarianceStamped':
        return of(name, head, of('geometry_msgs/msg/PoseWithCovariance', pose(values), covariance))
    if kind == 'TransformStamped':
        return of(name, head, child, of(
            'geometry_msgs/msg/Transform', of('geometry_msgs/msg/Vector3', *values[:3]),
            of('geometry_msgs/msg/Quaternion', *values[3:])))
    zero = of('geometry_msgs/msg/Vector3', 0.0, 0.0, 0.0)
    twist = of('geometry_msgs/msg/TwistWithCovariance',
               of('geometry_msgs/msg/Twist', zero, zero), covariance)
    return of(name, head, child,
              of('geometry_msgs/msg/PoseWithCovariance', pose(values), covariance), twist)


def joint_state(names, positions, head=None, velocity=(), effort=()):
    return of('sensor_msgs/msg/JointState', head or header(), list(names),
              *(np.array(values, float) for values in (positions, velocity, effort)))


def trajectory(names, rows, offsets, head=None, velocities=()):
    points = [
        of('trajectory_msgs/msg/JointTrajectoryPoint', np.array(row, float),
           np.array(velocities, float), np.zeros(0), np.zeros(len(velocities)),
           of('builtin_interfaces/msg/Duration', *offset))
        for row, offset in zip(rows, offsets, strict=True)]
    return of('trajectory_msgs/msg/JointTrajectory', head or header(), list(names), points)


def multi_array(values, labels=(), offset=0):
    dimensions = [of('std_msgs/msg/MultiArrayDimension', label, 3, 4) for label in labels]
    return of('std_msgs/msg/Float64MultiArray',
              of('std_msgs/msg/MultiArrayLayout', dimensions, offset), np.array(values, float))


def twist(values, head=None):
    return of('geometry_msgs/msg/TwistStamped', head or header(), of(
        'geometry_msgs/msg/Twist', of('geometry_msgs/msg/Vector3', *values[:3]),
        of('geometry_msgs/msg/Vector3', *values[3:])))


def joy(axes, buttons, head=None):
    return of('sensor_msgs/msg/Joy', head or header(), np.array(axes, np.float32),
              np.array(buttons, np.int32))


def custom_message(names, positions, enable, seconds=5, notes=('a',)):
    types = CUSTOM_STORE.types
    stamp = types['builtin_interfaces/msg/Time'](seconds, 6)
    nothing = types['lab_msgs/msg/Nothing'](0)
    details = [types['lab_msgs/msg/Detail'](1, np.array([1.0, 2.0]), note, nothing)
               for note in notes]
    return types[CUSTOM](
        types['lab_msgs/msg/OwnHeader'](7, stamp, 'base'), 1, list(names),
        np.array(enable, bool), np.zeros(len(names), bool), details,
        np.array(positions, np.float32), np.arange(3.0), np.arange(2, dtype=np.uint16), 9)


def encode(message, name, *, little=True):
    store = CUSTOM_STORE if name == CUSTOM else STORE
    return bytes(store.serialize_cdr(message, name, little_endian=little))


def example_bytes(name, *, little=True):
    """Return one ordinary message of a type."""
    if name in POSE_TYPES:
        message = pose_message(name, header(), [1.0, 2.0, 3.0, 0.0, 0.6, 0.0, 0.8])
    else:
        message = {
            'sensor_msgs/msg/JointState': lambda: joint_state(['a', 'bc', 'def'], [1, 2, 3]),
            'std_msgs/msg/Float64MultiArray': lambda: multi_array([1, 2], ['row', 'column']),
            'trajectory_msgs/msg/JointTrajectory': lambda: trajectory(
                ['a', 'bc'], [[1, 2], [3, 4]], [(0, 5), (1, 0)], velocities=[1, 2, 3]),
            'geometry_msgs/msg/TwistStamped': lambda: twist([0.1, 0.2, 0.3, 0.4, 0.5, 0.6]),
            'sensor_msgs/msg/Joy': lambda: joy([0.5, -1.0, 0.0], [0, 1]),
            'std_msgs/msg/Bool': lambda: of('std_msgs/msg/Bool', True),
            'std_msgs/msg/String': lambda: of('std_msgs/msg/String', 'task_space'),
            CUSTOM: lambda: custom_message(['a', 'bc'], [1.5, 2.5], [True, False]),
        }[name]()
    return encode(message, name, little=little)


def decoder(name, **options):
    if name == CUSTOM:
        return make_decoder(name, definition=DEFINITION, enabled_field='enable', **options)
    return make_decoder(name, **options)


def same(left, right):
    """Compare two samples bit for bit."""
    if type(left) is not type(right):
        return False
    for field in left.__dataclass_fields__:
        one, two = getattr(left, field), getattr(right, field)
        if isinstance(one, np.ndarray):
            if one.dtype != two.dtype or not np.array_equal(
                    one, two, equal_nan=one.dtype.kind == 'f'):
                return False
        elif one != two:
            return False
    return True


@settings(deadline=None)
@given(st.sampled_from(POSE_TYPES), SECONDS, NANOSECONDS, NAMES, NAMES,
       st.lists(FLOATS, min_size=7, max_size=7), st.booleans())
def test_poses_equal_rosbags(name, seconds, nanoseconds, frame, child, values, little):
    message = pose_message(name, header(seconds, nanoseconds, frame), values, child)
    sample = make_decoder(name)(encode(message, name, little=little))
    point = name.endswith('PointStamped')
    assert same(sample, PoseSample(
        seconds * 10**9 + nanoseconds, np.array(values[:3]),
        None if point else np.array(values[3:]), frame))


@settings(deadline=None)
@given(SECONDS, NANOSECONDS, NAMES, st.lists(st.tuples(NAMES, FLOATS), min_size=1, max_size=9),
       st.integers(0, 3), st.booleans())
def test_joint_states_equal_rosbags(seconds, nanoseconds, frame, joints, more, little):
    names, positions = zip(*joints, strict=True)
    message = joint_state(names, positions, header(seconds, nanoseconds, frame),
                          [1.0] * more, [2.0] * more)
    sample = make_decoder('sensor_msgs/JointState')(
        encode(message, 'sensor_msgs/msg/JointState', little=little))
    assert same(sample, JointSample(
        seconds * 10**9 + nanoseconds, names, np.array(positions, float), None))


@settings(deadline=None)
@given(SECONDS, NANOSECONDS, NAMES, st.lists(FLOATS, min_size=6, max_size=6), st.booleans())
def test_twists_equal_rosbags(seconds, nanoseconds, frame, values, little):
    name = 'geometry_msgs/msg/TwistStamped'
    sample = make_decoder(name)(encode(
        twist(values, header(seconds, nanoseconds, frame)), name, little=little))
    assert same(sample, TwistSample(seconds * 10**9 + nanoseconds, np.array(values[:3]),
                                    np.array(values[3:]), frame))


@settings(deadline=None)
@given(SECONDS, NANOSECONDS, NAMES, st.lists(st.floats(width=32), max_size=9),
       st.lists(st.integers(-2**31, 2**31 - 1), max_size=12), st.booleans())
def test_joystick_states_equal_rosbags(seconds, nanoseconds, frame, axes, buttons, little):
    name = 'sensor_msgs/msg/Joy'
    sample = make_decoder(name)(encode(
        joy(axes, buttons, header(seconds, nanoseconds, frame)), name, little=little))
    assert same(sample, JoySample(seconds * 10**9 + nanoseconds, np.array(axes, float),
                                  np.array(buttons, np.int64)))


@settings(deadline=None)
@given(st.lists(NAMES, min_size=1, max_size=4), st.data(), st.booleans())
def test_trajectories_equal_rosbags(names, data, little):
    rows = data.draw(st.lists(
        st.lists(FLOATS, min_size=len(names), max_size=len(names)), max_size=4))
    offsets = data.draw(st.lists(
        st.tuples(SECONDS, NANOSECONDS), min_size=len(rows), max_size=len(rows)))
    velocities = data.draw(st.lists(FLOATS, max_size=2))
    name = 'trajectory_msgs/msg/JointTrajectory'
    message = trajectory(names, rows, offsets, header(0, 0), velocities)
    sample = make_decoder(name)(encode(message, name, little=little))
    assert same(sample, TrajectorySample(
        0, tuple(names), np.array([s * 10**9 + n for s, n in offsets], np.int64),
        np.array(rows, float).reshape(len(rows), len(names))))


@settings(deadline=None)
@given(st.lists(FLOATS, max_size=9), st.lists(NAMES, max_size=3), NAMES, st.booleans(),
       st.booleans())
def test_unstamped_messages_equal_rosbags(values, labels, text, value, little):
    name = 'std_msgs/msg/Float64MultiArray'
    sample = make_decoder(name)(encode(multi_array(values, labels), name, little=little))
    assert same(sample, ArraySample(np.array(values, float)))
    for name, content, expected in (
            ('std_msgs/msg/String', text, TextSample(text)),
            ('std_msgs/msg/Bool', value, BoolSample(value))):
        message = of(name, content)
        assert make_decoder(name)(encode(message, name, little=little)) == expected


@settings(deadline=None)
@given(st.lists(st.tuples(NAMES, st.floats(width=32), st.booleans()), min_size=1, max_size=9),
       st.lists(st.text('abc', max_size=5), max_size=3), SECONDS, st.booleans())
def test_custom_messages_equal_rosbags(joints, notes, seconds, little):
    names, positions, enable = zip(*joints, strict=True)
    raw = encode(custom_message(names, positions, enable, seconds, notes), CUSTOM, little=little)
    assert same(decoder(CUSTOM)(raw), JointSample(
        seconds * 10**9 + 6, names, np.array(positions, float), np.array(enable)))
    assert make_decoder(CUSTOM, definition=DEFINITION)(raw).enabled is None


def from_ros(name):
    """Build the example message of a type with ROS's own classes and serialize it there."""
    import importlib

    serialize = pytest.importorskip(
        'rclpy.serialization',
        reason='compares with rclpy, which is not installed').serialize_message

    def build(kind, source):
        package, _, short = kind.partition('/msg/')
        cls = getattr(importlib.import_module(f'{package}.msg'), short)
        target = cls()
        for field, slot_type in cls.get_fields_and_field_types().items():
            value = getattr(source, field)
            if '/' in slot_type and not slot_type.startswith('sequence'):
                value = build(slot_type.replace('/', '/msg/'), value)
            elif slot_type.startswith('sequence') and '/' in slot_type:
                inner = slot_type[9:-1].replace('/', '/msg/')
                value = [build(inner, item) for item in value]
            elif isinstance(value, np.ndarray):
                value = value.tolist()
            setattr(target, field, value)
        return target

    return serialize(build(name, STORE.deserialize_cdr(example_bytes(name), name)))


# ROS's generator imports lark, which imports modules that Python 3.11 calls deprecated.
@pytest.mark.filterwarnings("ignore:module 'sre_:DeprecationWarning")
@pytest.mark.parametrize('name', ALL_TYPES)
def test_bytes_of_ros_itself_are_read(name):
    raw = from_ros(name)
    assert same(make_decoder(name)(bytes(raw)), make_decoder(name)(example_bytes(name)))


def test_big_endian_bytes_by_hand():
    """Alignment counts from the end of the encapsulation header (CORBA part 2, 9.3.1)."""
    raw = bytes.fromhex(
        '00 00 00 00'                # plain CDR, big endian
        '00 00 00 05 00 00 00 06'    # stamp 5 s 6 ns
        '00 00 00 02 61 00'          # frame "a"
        '00 00'                      # to a multiple of 4
        '00 00 00 02'                # two names
        '00 00 00 02 6a 00 00 00'    # "j", padding
        '00 00 00 01 00 00 00 00'    # "", padding
        '00 00 00 02'                # two positions, ends at 36 + 4: no padding before them
        '3f f8 00 00 00 00 00 00'    # 1.5
        'bf f0 00 00 00 00 00 00')   # -1.0
    sample = make_decoder('sensor_msgs/msg/JointState')(raw)
    assert same(sample, JointSample(5 * 10**9 + 6, ('j', ''), np.array([1.5, -1.0]), None))


def test_little_endian_point_by_hand():
    raw = (b'\x00\x01\x00\x00' + struct.pack('<iI', -1, 500) + struct.pack('<I', 4) + b'map\0'
           + struct.pack('<3d', 1.0, 2.0, 3.0))
    sample = make_decoder('geometry_msgs/PointStamped')(raw)
    assert same(sample, PoseSample(-10**9 + 500, np.array([1.0, 2.0, 3.0]), None, 'map'))


@pytest.mark.parametrize('little', [True, False])
@pytest.mark.parametrize('name', [*ALL_TYPES, CUSTOM])
def test_truncation_anywhere_is_one_error_or_the_full_result(name, little):
    raw = example_bytes(name, little=little)
    warm = decoder(name)
    full = warm(raw)
    refused = 0
    for size in range(len(raw)):
        for decode in (warm, decoder(name)):
            try:
                assert same(decode(raw[:size]), full)
            except InputError as error:
                assert name in str(error) and '\n' not in str(error)
                refused += 1
    assert refused >= 2 * 4
    assert same(warm(raw), full)


@pytest.mark.parametrize('name', [*ALL_TYPES, CUSTOM])
def test_each_changed_word_gives_a_sample_or_one_error(name):
    """Counts and lengths of every size at every place, also after a good message."""
    raw = example_bytes(name)
    decode = decoder(name)
    for at in range(4, len(raw) - 3, 4):
        for value in (0, 1, 3, 5, 255, 2**16, 2**31 - 1, 2**31, 2**32 - 1):
            changed = raw[:at] + struct.pack('<I', value) + raw[at + 4:]
            decode(raw)
            try:
                sample = decode(changed)
            except InputError:
                continue
            fresh = decoder(name)(changed)
            assert same(sample, fresh)


@settings(max_examples=300, deadline=None)
@given(st.sampled_from([*ALL_TYPES, CUSTOM]), st.binary(max_size=120), st.booleans())
@example('sensor_msgs/msg/JointState', b'', False)
def test_random_bytes_never_raise_anything_else(name, content, with_header):
    raw = (b'\x00\x01\x00\x00' if with_header else b'') + content
    try:
        decoder(name)(raw)
    except InputError as error:
        assert name in str(error)


@pytest.mark.parametrize('name', [*ALL_TYPES, CUSTOM])
def test_hostile_counts_cost_no_memory(name):
    raw = example_bytes(name)
    decode = decoder(name)
    tracemalloc.start()
    try:
        for at in range(4, len(raw) - 3, 4):
            try:
                decode(raw[:at] + b'\xff\xff\xff\x7f' + raw[at + 4:])
            except InputError:
                pass
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < 2**20


@pytest.mark.parametrize('kind', [b'\x00\x02', b'\x00\x03', b'\x00\x07', b'\x00\x09', b'\x01\x00'])
@pytest.mark.parametrize('name', [*ALL_TYPES, CUSTOM])
def test_unknown_encapsulation(name, kind):
    decode = decoder(name)
    raw = example_bytes(name)
    decode(raw)
    with pytest.raises(InputError, match=f'{name} message .* plain CDR'):
        decode(kind + raw[2:])


def test_joint_state_of_several_publishers():
    """Names of one publisher never go with the positions of another."""
    name = 'sensor_msgs/msg/JointState'
    decode = make_decoder(name)
    messages = []
    for index in range(12):
        names = [f'arm{index}_{joint}' for joint in range(index % 4 + 1)]
        head = header(index, 0, 'f' * (index % 5))
        messages.append((names, encode(joint_state(names, range(len(names)), head), name,
                                       little=index % 3 > 0)))
    for _ in range(3):
        for index, (names, raw) in enumerate(messages):
            sample = decode(raw)
            assert sample.names == tuple(names)
            assert sample.stamp_ns == index * 10**9
            assert sample.positions.tolist() == list(range(len(names)))


def test_same_text_in_the_other_byte_order_is_read_anew():
    """A front that reads alike both ways must not be taken for the one seen before."""
    name = 'geometry_msgs/msg/PoseStamped'
    decode = make_decoder(name)
    for little in (True, False, True):
        values = [1.0, 2.0, 3.0, 0.0, 0.0, 0.0, 1.0]
        message = pose_message(name, header(3, 4, ''), values)
        sample = decode(encode(message, name, little=little))
        assert sample.stamp_ns == 3 * 10**9 + 4
        assert sample.position.tolist() == [1.0, 2.0, 3.0]


def test_names_are_not_decoded_again():
    name = 'sensor_msgs/msg/JointState'
    decode = make_decoder(name)
    first = decode(encode(joint_state(['a', 'b'], [1, 2]), name))
    second = decode(encode(joint_state(['a', 'b'], [3, 4]), name))
    assert second.names is first.names
    assert second.positions.tolist() == [3.0, 4.0]


@pytest.mark.parametrize(('names', 'positions', 'words'), [
    (['a', 'b'], [], 'with 2 joint names carries no positions'),
    ([], [], 'carries no positions'),
    (['a', 'b', 'c'], [1.0, 2.0], '2 positions for 3 joint names'),
    ([], [1.0], '1 positions for 0 joint names'),
])
def test_positions_must_go_with_names(names, positions, words):
    name = 'sensor_msgs/msg/JointState'
    with pytest.raises(InputError, match=words):
        make_decoder(name)(encode(joint_state(names, positions), name))
    with pytest.raises(InputError, match=words):
        decoder(CUSTOM)(encode(custom_message(names, positions, [True] * len(names)), CUSTOM))


def test_trajectory_point_without_positions():
    name = 'trajectory_msgs/msg/JointTrajectory'
    with pytest.raises(InputError, match='carries no positions'):
        make_decoder(name)(encode(trajectory(['a'], [[]], [(0, 0)]), name))


def test_trajectory_without_points_is_empty():
    name = 'trajectory_msgs/msg/JointTrajectory'
    sample = make_decoder(name)(encode(trajectory(['a', 'b'], [], []), name))
    assert sample.positions.shape == (0, 2)
    assert sample.offsets_ns.shape == (0,)


def test_not_a_number_is_passed_on():
    name = 'sensor_msgs/msg/JointState'
    sample = make_decoder(name)(encode(joint_state(['a'], [np.nan]), name))
    assert np.isnan(sample.positions).tolist() == [True]


@pytest.mark.parametrize('name', ['std_msgs/msg/String', 'sensor_msgs/msg/JointState', CUSTOM])
def test_text_that_is_not_utf8(name):
    raw = example_bytes(name)
    broken = raw.replace(b'bc\0', b'\xff\xfe\0').replace(b'task', b'\xffask')
    assert broken != raw
    with pytest.raises(InputError, match='not UTF-8'):
        decoder(name)(broken)


def test_bool_that_is_neither():
    with pytest.raises(InputError, match='the byte 7'):
        make_decoder('std_msgs/Bool')(b'\x00\x01\x00\x00\x07')


def test_array_with_offset_is_refused():
    name = 'std_msgs/msg/Float64MultiArray'
    with pytest.raises(InputError, match='data_offset 2'):
        make_decoder(name)(encode(multi_array([1, 2, 3], offset=2), name))


@pytest.mark.parametrize('name', [*ALL_TYPES, CUSTOM])
def test_samples_do_not_change_with_a_reused_buffer(name):
    raw = example_bytes(name)
    buffer = bytearray(raw)
    decode = decoder(name)
    sample = decode(buffer)
    buffer[4:] = bytes(len(buffer) - 4)
    assert same(sample, decode(raw))
    assert same(sample, decode(memoryview(raw)))


@pytest.mark.parametrize(('written', 'full'), [
    ('sensor_msgs/JointState', 'sensor_msgs/msg/JointState'),
    ('sensor_msgs/msg/JointState', 'sensor_msgs/msg/JointState'),
])
def test_type_names(written, full):
    assert full_type_name(written) == full


@pytest.mark.parametrize('name', ['', 'JointState', 'a/b/c/d', 'sensor_msgs/srv/X', 'a b/msg/C'])
def test_no_type_name(name):
    with pytest.raises(InputError, match='is no message type; write it as package/msg/Type'):
        make_decoder(name)


def test_unsupported_type_lists_what_is():
    with pytest.raises(InputError, match='sensor_msgs/msg/Image .*JointState.*name.. and'):
        make_decoder('sensor_msgs/Image')


def test_enabled_field_needs_a_message_that_has_it():
    with pytest.raises(InputError, match="JointState has no boolean array 'enable'"):
        make_decoder('sensor_msgs/JointState', enabled_field='enable')
    with pytest.raises(InputError, match="'on', .*boolean arrays of it: enable, fault"):
        make_decoder(CUSTOM, definition=DEFINITION, enabled_field='on')
    with pytest.raises(InputError, match='no boolean array'):
        make_decoder(CUSTOM, definition=DEFINITION, enabled_field='status_word')


def test_enabled_must_go_with_names():
    with pytest.raises(InputError, match=r'1 entries in enable\[\] for 2 joint names'):
        decoder(CUSTOM)(encode(custom_message(['a', 'b'], [1, 2], [True]), CUSTOM))


@pytest.mark.parametrize(('definition', 'words'), [
    ('float64[] position', r'needs the fields name\[\]'),
    ('string[] name\nint32[] position', r'needs the fields name\[\]'),
    ('string[] name\nfloat64 position', r'needs the fields name\[\]'),
    ('string name\nfloat64[] position', r'needs the fields name\[\]'),
    ('Missing m\nstring[] name\nfloat64[] position', 'uses x/msg/Missing and does not define it'),
    ('wstring w\nstring[] name\nfloat64[] position', 'uses x/msg/wstring'),
    ('uint8[0] w\nstring[] name\nfloat64[] position', 'length 0'),
    ('A a\nstring[] name\nfloat64[] position\n' + '=' * 80 + '\nMSG: x/A\nA[] again', 'itself'),
    ('string[ name ]', 'cannot be understood'),
    ('\0', 'cannot be understood'), ('#' * (2**20 + 1), 'characters'),
])
def test_definitions_that_do_not_serve(definition, words):
    with pytest.raises(InputError, match=words):
        make_decoder('x/msg/T', definition=definition)


def test_definition_format():
    with pytest.raises(InputError, match="format 'protobuf'"):
        make_decoder(CUSTOM, definition=DEFINITION, definition_format='protobuf')


def test_exponential_definition_is_compiled_at_once():
    """Thirty types of two fields each are a billion fields when written out."""
    line = '=' * 80
    text = 'N0 head\nstring[] name\nfloat64[] position\n'
    for level in range(30):
        text += f'{line}\nMSG: x/N{level}\nN{level + 1} a\nN{level + 1} b\n'
    text += f'{line}\nMSG: x/N30\nuint8 end\n'
    decode = make_decoder('x/msg/T', definition=text)
    with pytest.raises(InputError, match='ends before its content does'):
        decode(b'\x00\x01\x00\x00' + bytes(100))


IDL_MODULES = """\
module lab_msgs { module msg { struct Plain {
  std_msgs::msg::Header header;
  double stiffness;
  sequence<string> name;
  sequence<boolean> enable;
  sequence<float> position;
}; }; };
"""


@pytest.mark.parametrize('text', [
    IDL_MODULES, '=' * 80 + '\nIDL: lab_msgs/msg/Plain\n' + IDL_MODULES,
    IDL_MODULES + '\n' + '=' * 80 + '\nMSG: std_msgs/Header\nbuiltin_interfaces/Time stamp\n'
    'string frame_id\n',
])
def test_idl_definition(text):
    """Types of the standard packages may be left out of the text."""
    raw = (b'\x00\x01\x00\x00' + struct.pack('<iII', 1, 2, 2) + b'b\0' + b'\0' * 2
           + struct.pack('<d', 9.0) + struct.pack('<II', 1, 2) + b'j\0' + b'\0' * 2
           + struct.pack('<I', 1) + b'\x01' + b'\0' * 3 + struct.pack('<If', 1, 0.5))
    decode = make_decoder(
        'lab_msgs/msg/Plain', definition=text, definition_format='ros2idl',
        enabled_field='enable')
    assert same(decode(raw), JointSample(
        10**9 + 2, ('j',), np.array([0.5]), np.array([True])))


def test_fixed_arrays_and_late_header():
    definition = (
        'float64[2] position\nbool[2] on\nint64 x\nstring[2] name\nstd_msgs/Header header\n')
    raw = (b'\x00\x01\x00\x00' + struct.pack('<2d', 1.0, 2.0) + b'\x01\x00' + bytes(6)
           + struct.pack('<q', 1) + struct.pack('<I', 2) + b'a\0\0\0' + struct.pack('<I', 2)
           + b'b\0\0\0' + struct.pack('<iII', 3, 4, 1) + b'\0')
    decode = make_decoder('x/T', definition=definition, enabled_field='on')
    expected = JointSample(
        3 * 10**9 + 4, ('a', 'b'), np.array([1.0, 2.0]), np.array([True, False]))
    assert same(decode(raw), expected)
    assert same(decode(raw), expected)


@settings(max_examples=200, deadline=None)
@given(st.text(max_size=60) | st.text('string[] nameflo64posi\n=0123/', max_size=60),
       st.sampled_from(['ros2msg', 'ros2idl']))
def test_any_definition_text_is_refused_clearly_or_works(text, definition_format):
    try:
        make_decoder('x/msg/T', definition=text, definition_format=definition_format)
    except InputError as error:
        assert 'x/msg/T' in str(error)


def test_roles_name_types_that_exist():
    assert set(SUPPORTED) == {'pose', 'joints', 'command', 'rate', 'bool', 'text'}
    for name in ALL_TYPES:
        assert name in STORE.fielddefs
        make_decoder(name)
