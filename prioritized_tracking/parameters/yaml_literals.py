# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
How ROS types the scalars of a parameter file.

"""

from __future__ import annotations

import math
import re

Literal = bool | int | float | str

_TRUE = frozenset(("y", "Y", "yes", "Yes", "YES", "on", "On", "ON", "true", "True", "TRUE"))
_FALSE = frozenset(("n", "N", "no", "No", "NO", "off", "Off", "OFF", "false", "False", "FALSE"))
NULLS = frozenset(("", "~", "null", "Null", "NULL"))
# strtol with base 0, then strtod, each of which must use up the whole text.
_INTEGER = re.compile(r"[+-]?(0[xX][0-9a-fA-F]+|0[0-7]*|[1-9][0-9]*)")
OCTAL = re.compile(r"[+-]?0[0-7]+")
_DECIMAL = re.compile(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?")
_HEXADECIMAL = re.compile(r"[+-]?0[xX]([0-9a-fA-F]+\.?[0-9a-fA-F]*|\.[0-9a-fA-F]+)([pP][+-]?[0-9]+)?")
_NOT_FINITE = re.compile(r"[+-]?(inf|infinity|nan|nan\([A-Za-z0-9_]*\))", re.IGNORECASE)
_DOTTED = {
    **dict.fromkeys((".nan", ".NaN", ".NAN"), math.nan),
    **dict.fromkeys((".inf", ".Inf", ".INF", "+.inf", "+.Inf", "+.INF"), math.inf),
    **dict.fromkeys(("-.inf", "-.Inf", "-.INF"), -math.inf),
}
_LEAST_NORMAL = 2.2250738585072014e-308


def resolve_literal(text: str, *, quoted: bool = False) -> Literal:
    """
    Return the value ROS gives to a scalar.

    Parameters
    ----------
    text : str
        The scalar without its quotes.
    quoted : bool
        It stands in single or double quotes, and so is a text.

    Returns
    -------
    bool, int, float or str
        The type says which ROS parameter type it is. Numbers beyond the range of a double, and
        those so small that digits are lost, are texts, as ``strtod`` reports them as errors.

    """
    if quoted:
        return text
    if text in _TRUE or text in _FALSE:
        return text in _TRUE
    integer = _resolve_integer(text)
    return integer if integer is not None else _resolve_double(text)


def _resolve_integer(text: str) -> int | None:
    # 80 characters hold every 64-bit number; int() of a very long text is slow.
    if not _INTEGER.fullmatch(text):
        return None
    digits = text.lstrip("+-")
    base = 16 if digits[:2] in ("0x", "0X") else 8 if digits[0] == "0" else 10
    if len(digits) > 80:
        return None
    value = int(digits, base) * (-1 if text[0] == "-" else 1)
    return value if -(2**63) <= value < 2**63 else None


def _resolve_double(text: str) -> float | str:
    if text in _DOTTED:
        return _DOTTED[text]
    if _NOT_FINITE.fullmatch(text):
        return float(text.split("(")[0])
    if _DECIMAL.fullmatch(text):
        value = float(text)
        zero = not text.lower().split("e")[0].strip("+-.0")
    elif _HEXADECIMAL.fullmatch(text):
        try:
            value = float.fromhex(text)
        except OverflowError:
            return text
        zero = not re.split("[pP]", text.lstrip("+-")[2:])[0].strip(".0")
    else:
        return text
    return value if zero or _LEAST_NORMAL <= abs(value) < math.inf else text


def kind_of(value: Literal) -> str:
    """
    Return the ROS type of a scalar.

    Parameters
    ----------
    value : bool, int, float or str

    """
    names = {bool: "bool", int: "integer", float: "double", str: "string"}
    return names[type(value)]
