# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Description of one parameter: the building block of the stack file's schema.

Chart classes use it for their own keys, so this module imports nothing of the package.

"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

TYPES = (
    "double",
    "integer",
    "bool",
    "string",
    "double_array",
    "string_array",
    "double_or_array",
)
"""Types a parameter may have; "double_or_array" is one number, or one for each coordinate."""

Value = bool | int | float | str | tuple[float, ...] | tuple[str, ...] | None
"""What a parameter may hold; None: left out, and the key has no default."""


@dataclass(frozen=True, kw_only=True)
class Parameter:
    """
    One key of the stack file.

    Attributes
    ----------
    key : str
        Name within its block, e.g. ``damping``.
    type : str
        One of `TYPES`. ROS's ``double`` also takes an integer literal.
    unit : str
        Unit in words or symbols, e.g. ``N·m``; empty: a pure number, or no number.
    default : Value
        Value of a key left out; None: stays unset, `help` says what that means.
    required : bool
        The key may not be left out.
    low, high : float or None
        Range of each number, both ends included unless `exclusive`; None: open.
    exclusive : bool
        The ends of the range do not belong to it.
    choices : tuple of str or None
        The only texts allowed (in an array: for each item).
    length : int, (int, int) or None
        Length of an array: exact, or least and most; None: at least one.
    help : str
        One sentence for the user: meaning, and what 0, negative or leaving out means.
    changeable : bool
        May be set while the controller is running.

    """

    key: str
    type: str
    unit: str = ""
    default: Value = None
    required: bool = False
    low: float | None = None
    high: float | None = None
    exclusive: bool = False
    choices: tuple[str, ...] | None = None
    length: int | tuple[int, int] | None = None
    help: str
    changeable: bool = False

    def __post_init__(self) -> None:
        if self.type not in TYPES:
            raise ValueError(f"parameter '{self.key}': type '{self.type}' is none of {', '.join(TYPES)}")
        if self.required and self.default is not None:
            raise ValueError(f"parameter '{self.key}': a required key has no default")

    @property
    def is_array(self) -> bool:
        """
        Whether the value is always an array.

        """
        return self.type.endswith("_array") and self.type != "double_or_array"

    @property
    def is_number(self) -> bool:
        """
        Whether the value is a number or made of numbers.

        """
        return self.type.startswith(("double", "integer"))

    def least_and_most(self) -> tuple[int, int | None]:
        """
        Return the least and the greatest length of an array; None: no upper bound.

        """
        if self.length is None:
            return 1, None
        if isinstance(self.length, int):
            return self.length, self.length
        return self.length

    def expected(self) -> str:
        """
        Return type, range, choices and unit in words, for messages and documentation.

        """
        words = f"{self._noun()}{self._length_text()}"
        if self.choices is not None:
            words += " out of " + ", ".join(self.choices)
        return words + self._range_text() + (f" ({self.unit})" if self.unit else "")

    def _noun(self) -> str:
        return _NOUNS[self.type]

    def _length_text(self) -> str:
        least, most = self.least_and_most()
        if self.length is None or self.type not in ("double_array", "string_array", "double_or_array"):
            return ""
        return f" of length {least}" if least == most else f" of length {least} to {most}"

    def _range_text(self) -> str:
        if self.low is None and self.high is None:
            return ""
        if self.exclusive:
            below, above = "greater than", "less than"
        else:
            below, above = "at least", "at most"
        parts = ((below, self.low), (above, self.high))
        return ", " + " and ".join(f"{word} {bound:.12g}" for word, bound in parts if bound is not None)


_NOUNS: Mapping[str, str] = {
    "double": "a number",
    "integer": "a whole number",
    "bool": "true or false",
    "string": "a text",
    "double_array": "a list of numbers",
    "string_array": "a list of texts",
    "double_or_array": "a number or a list of numbers",
}


@dataclass(frozen=True, kw_only=True)
class Block:
    """
    A named group of keys.

    Attributes
    ----------
    key : str
        Name of the block.
    help : str
        One sentence for the user.
    parameters : tuple of Parameter
        Its keys with values.
    blocks : tuple of Block or Table
        Its keys with blocks.
    optional : bool
        Left out: None. Otherwise a block left out is filled with the defaults of its keys.

    """

    key: str
    help: str
    parameters: tuple[Parameter, ...] = ()
    blocks: tuple[Block | Table, ...] = ()
    optional: bool = False

    def keys(self) -> tuple[str, ...]:
        """
        Return the names of all keys of the block.

        """
        return (*(p.key for p in self.parameters), *(b.key for b in self.blocks))


@dataclass(frozen=True, kw_only=True)
class Table:
    """
    A group whose keys are names the user chooses.

    Attributes
    ----------
    key : str
        Name of the table.
    help : str
        One sentence for the user.
    entry : Block or Parameter
        What stands under each name.

    """

    key: str
    help: str
    entry: Block | Parameter
