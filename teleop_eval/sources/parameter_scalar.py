# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Turn one scalar of a parameter file into a typed value, as rcl's parser does.

rcl knows no YAML 1.1 or 1.2 schema: it compares a list of words, then asks C's strtoll with
base 0 and strtod, and whatever neither reads to its last character is a string. YAML
libraries differ from that in `1e-3` (a number here), `1_000`, `0o17`, dates and `null`
(strings), `017` (15), `08` (8.0) and `nan`. Written without C's library, so that a file means
the same on every operating system.
"""

from __future__ import annotations

import math
import re
import sys
from fractions import Fraction

TRUE_WORDS = frozenset(
    ('Y', 'y', 'yes', 'Yes', 'YES', 'true', 'True', 'TRUE', 'on', 'On', 'ON'))
FALSE_WORDS = frozenset(
    ('N', 'n', 'no', 'No', 'NO', 'false', 'False', 'FALSE', 'off', 'Off', 'OFF'))
NULL_WORDS = frozenset(('null', 'Null', 'NULL', '~'))

_DOTTED = {
    '.nan': math.nan, '.NaN': math.nan, '.NAN': math.nan,
    '.inf': math.inf, '.Inf': math.inf, '.INF': math.inf,
    '+.inf': math.inf, '+.Inf': math.inf, '+.INF': math.inf,
    '-.inf': -math.inf, '-.Inf': -math.inf, '-.INF': -math.inf,
}
# What isspace() accepts in the C locale; strtoll and strtod skip it in front of a number.
_C_SPACE = ' \t\n\v\f\r'
# Base 0: a leading 0 means octal. A newer C library may read 0b101 too; the one that rcl's
# wheels are linked against does not, and a string is refused later where a number is due.
_INTEGER = re.compile(r'([+-]?)(?:0[xX]([0-9a-fA-F]+)|(0[0-7]*)|([1-9][0-9]*))')
_DECIMAL = re.compile(r'[+-]?(?:([0-9]+)\.?([0-9]*)|\.([0-9]+))(?:[eE]([+-]?[0-9]+))?')
_HEXADECIMAL = re.compile(
    r'[+-]?0[xX](?:([0-9a-fA-F]+)\.?([0-9a-fA-F]*)|\.([0-9a-fA-F]+))(?:[pP]([+-]?[0-9]+))?')
_NAMED = re.compile(r'([+-]?)(?:(inf|infinity)|nan(?:\([0-9A-Za-z_]*\))?)', re.IGNORECASE)
_INT64_MAX = 2**63 - 1
# Half a unit below the smallest normal number: what rounds up to it has not underflowed.
_TINY = Fraction(sys.float_info.min) - Fraction(1, 2**1076)
# A number with more significant decimal digits than this is no exact binary fraction of 64 bit.
_MAX_EXACT_DIGITS = 800


def resolve_scalar(text: str) -> bool | int | float | str:
    """
    Type an unquoted scalar.

    Parameters
    ----------
    text
        The scalar as the YAML parser gives it: plain, or of a literal or folded block. Quoted
        scalars and those tagged `!!str` are strings and never come here.

    Returns
    -------
    bool | int | float | str
        The value that a node gets from the same text; int within 64 bits. An integer beyond
        that is a float, a number beyond float64 (or inexact below its normal range) a string.

    """
    if text in TRUE_WORDS:
        return True
    if text in FALSE_WORDS:
        return False
    body = text.lstrip(_C_SPACE)
    integer = _strtoll(body)
    if integer is not None:
        return integer
    if text in _DOTTED:
        return _DOTTED[text]
    number = _strtod(body)
    return text if number is None else number


def _strtoll(text: str) -> int | None:
    """Read a whole 64-bit integer in C's notation, or None."""
    match = _INTEGER.fullmatch(text)
    if match is None:
        return None
    sign, hexadecimal, octal, decimal = match.groups()
    if decimal is not None and len(decimal) > 19:
        return None
    if hexadecimal is not None:
        magnitude = int(hexadecimal, 16)
    else:
        magnitude = int(octal, 8) if octal is not None else int(decimal)
    value = -magnitude if sign == '-' else magnitude
    return value if -_INT64_MAX - 1 <= value <= _INT64_MAX else None


def _strtod(text: str) -> float | None:
    """Read a whole float64 in C's notation, or None where C would report a range error."""
    named = _NAMED.fullmatch(text)
    if named is not None:
        value = math.inf if named.group(2) else math.nan
        return -value if named.group(1) == '-' else value
    match = _DECIMAL.fullmatch(text)
    if match is not None:
        base = 10
        value = float(text)
    else:
        match = _HEXADECIMAL.fullmatch(text)
        if match is None:
            return None
        base = 16
        try:
            value = float.fromhex(text)
        except OverflowError:
            return None
    if math.isinf(value):
        return None
    if abs(value) <= sys.float_info.min and _underflows(match, value=value, base=base):
        return None
    return value


def _underflows(match: re.Match[str], *, value: float, base: int) -> bool:
    """
    Whether strtod reports that rounding to a tiny `value` lost something.

    One quirk of glibc is not imitated: it overlooks the loss where the 54th significant bit is
    the only one lost, which takes a hexadecimal number or a thousand decimals to write.
    """
    whole, fraction, bare_fraction, exponent = match.groups()
    fraction = bare_fraction if fraction is None else fraction
    digits = ((whole or '') + fraction).lstrip('0')
    if not digits:
        return False
    significant = digits.rstrip('0')
    if value == 0.0 or (base == 10 and len(significant) > _MAX_EXACT_DIGITS):
        return True
    # The value is neither zero nor large, hence the exponents below are moderate.
    trailing = len(digits) - len(significant) - len(fraction)
    power = _exponent(exponent)
    scale = Fraction(10)**(power + trailing) if base == 10 else Fraction(2)**(power + 4 * trailing)
    exact = int(significant, base) * scale
    return exact < _TINY and exact != abs(Fraction(value))


def _exponent(text: str | None) -> int:
    """Read an exponent; leading zeros go first, since int() refuses thousands of them."""
    if text is None:
        return 0
    power = int(text.lstrip('+-').lstrip('0') or '0')
    return -power if text[0] == '-' else power
