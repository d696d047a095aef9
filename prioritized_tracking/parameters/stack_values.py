# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
From typed nodes to checked values: one value, one block.

Every fault is appended to a list, and the value becomes None: nothing here raises.

"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from typing import Any

from prioritized_tracking.errors import Problem, nearest
from prioritized_tracking.parameters.yaml_dialect import Node, shortened, shown_key
from prioritized_tracking.schema import Block, Parameter, Table, Value

_KINDS = {
    "double": ("double", "integer"),
    "integer": ("integer",),
    "bool": ("bool",),
    "string": ("string",),
    "double_array": ("double_array", "integer_array"),
    "string_array": ("string_array",),
    "double_or_array": ("double", "integer", "double_array", "integer_array"),
}
"""
ROS types each of our types accepts. An integer is taken for a number: ROS reads ``1`` as integer, and
refuses it for a parameter declared as double, so the node declares all numbers with dynamic typing.

"""

_NOUNS = {
    "bool": "the truth value",
    "integer": "the whole number",
    "double": "the number",
    "string": "the text",
    "map": "a block of keys",
}


class Reading:
    """
    What is known while a stack file is being read.

    Parameters
    ----------
    name : str
        What the input is called in messages, e.g. the file's name.

    Attributes
    ----------
    problems : list of Problem
        All that was found so far.
    places : dict
        Place of each key that was given: path of keys to ``stack.yaml:12``.
    homes : dict
        Keys of inner blocks, by name: the dotted key they belong under.

    """

    def __init__(self, name: str) -> None:
        self.name = name
        self.problems: list[Problem] = []
        self.places: dict[tuple[str, ...], str] = {}
        self.homes: dict[str, str] = {}

    def where(self, path: tuple[str, ...]) -> str:
        """
        Return place and dotted key; the place of a key left out is that of the block it belongs in.

        """
        place = next(
            (self.places[path[:i]] for i in range(len(path), -1, -1) if path[:i] in self.places), self.name
        )
        return f"{place} {shown_key(path)}".strip()

    def given(self, path: tuple[str, ...]) -> bool:
        """
        Return whether the user wrote the key.

        """
        return path in self.places

    def report(self, path: tuple[str, ...], what: str, **details: str) -> None:
        """
        Add a problem at a key; `details` are those of `Problem`.

        """
        self.problems.append(Problem(what=what, where=self.where(path), **details))


def shown(node: Node) -> str:
    """
    Return the value of a node for messages, cut to a readable length.

    """
    if node.kind == "map":
        return _NOUNS["map"]
    if node.kind.endswith("_array"):
        items = ", ".join(shown_scalar(item) for item in node.value[:8])
        return f"the list [{items}{', …' if len(node.value) > 8 else ''}]"
    return f"{_NOUNS[node.kind]} {shown_scalar(node.value)}"


def shown_scalar(value: Any) -> str:
    """
    Return a scalar as it would stand in the file.

    """
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return f"'{shortened(value)}'"
    return shortened(repr(value))


def convert(parameter: Parameter, node: Node, path: tuple[str, ...], reading: Reading) -> Value:
    """
    Return the value of a parameter, or None after reporting what is wrong with it.

    Parameters
    ----------
    parameter : Parameter
        What is expected.
    node : Node
        What is given.
    path : tuple of str
        Keys that lead to it.
    reading : Reading
        Takes the problems.

    """
    if node.kind == "bad":
        return None
    faults = list(_faults(parameter, node))
    for what, got, remedy in faults:
        reading.report(path, what, expected=parameter.expected(), got=got, remedy=remedy)
    if faults:
        return None
    if parameter.is_number and parameter.type != "integer":
        if isinstance(node.value, tuple):
            return tuple(float(item) for item in node.value)
        return float(node.value)
    value: Value = node.value
    return value


def _faults(parameter: Parameter, node: Node) -> Iterator[tuple[str, str, str]]:
    """
    Yield (what, got, remedy) of each fault.

    """
    if node.kind not in _KINDS[parameter.type]:
        yield "wrong type", shown(node), _type_remedy(parameter, node)
        return
    items = node.value if isinstance(node.value, tuple) else (node.value,)
    least, most = parameter.least_and_most()
    if isinstance(node.value, tuple) and not (least <= len(items) and (most is None or len(items) <= most)):
        yield "wrong length", f"{len(items)} values, {shown(node)}", ""
    for i, item in enumerate(items):
        fault = _fault_of_item(parameter, item)
        if fault:
            position = f" (value {i + 1} of {len(items)})" if isinstance(node.value, tuple) else ""
            yield fault[0], shown_scalar(item) + position, fault[1]
    if parameter.type == "string_array":
        for item in dict.fromkeys(item for item in items if items.count(item) > 1):
            yield "named twice", shown_scalar(item), "Name it once."


def _fault_of_item(parameter: Parameter, item: Any) -> tuple[str, str] | None:
    if isinstance(item, str):
        return _fault_of_text(parameter, item)
    if isinstance(item, bool):
        return None
    try:
        number = float(item)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        return "not a finite number", ""
    low, high = parameter.low, parameter.high
    inside = (low is None or low < number or (low == number and not parameter.exclusive)) and (
        high is None or number < high or (high == number and not parameter.exclusive)
    )
    return None if inside else ("out of range", "")


def _fault_of_text(parameter: Parameter, item: str) -> tuple[str, str] | None:
    if parameter.choices is not None and item not in parameter.choices:
        return "unknown choice", nearest(item, parameter.choices).strip()
    if not item and parameter.default != "":
        return "an empty text", "" if parameter.required else "Leave the key out to get its default."
    return None


def _type_remedy(parameter: Parameter, node: Node) -> str:
    if parameter.type in ("string", "string_array") and node.kind.split("_")[0] in (
        "bool",
        "integer",
        "double",
    ):
        text = "in quotes, as ROS reads it as another type without them"
        return f"Write it {text}." if parameter.type == "string" else f"Write it as a list, texts {text}."
    if parameter.type == "integer" and node.kind == "double":
        return "Write it without a decimal point."
    if parameter.is_array and node.kind + "_array" in _KINDS[parameter.type]:
        return f"Write it as a list, [{shown_scalar(node.value)}]."
    if parameter.is_number and node.kind == "string":
        return _number_remedy(node.value)
    if parameter.type == "bool":
        return "Write true or false, without quotes."
    return ""


def _number_remedy(text: str) -> str:
    plain = text.replace("_", "").replace(",", ".").strip()
    try:
        value = float(plain)
    except ValueError:
        return ""
    if math.isinf(value) or (value == 0.0 and plain.strip("+-0.")):
        return "ROS reads numbers beyond the range of a double as texts."
    return f"Write {plain}: no quotes, no thousands separators, a decimal point."


EntryReader = Callable[[str, Node, tuple[str, ...], Reading], Any]
"""Reads one entry of a table of blocks: (name, node, path, reading) to its values."""


def read_block(
    block: Block, node: Node | None, path: tuple[str, ...], reading: Reading, entries: dict[str, EntryReader]
) -> dict[str, Any]:
    """
    Return all keys of a block, defaults filled in.

    Parameters
    ----------
    block : Block
        Its schema.
    node : Node or None
        What is given; None: nothing.
    path : tuple of str
        Keys that lead to it.
    reading : Reading
        Takes problems and places.
    entries : dict
        For each table whose entries are blocks, by key: what reads one entry.

    """
    given = given_keys(node, path, reading)
    report_unknown(block, given, path, reading)
    values: dict[str, Any] = {
        p.key: read_value(p, given.get(p.key), (*path, p.key), reading) for p in block.parameters
    }
    for inner in block.blocks:
        child, inner_path = given.get(inner.key), (*path, inner.key)
        if isinstance(inner, Table):
            values[inner.key] = read_table(inner, child, inner_path, reading, entries.get(inner.key))
        elif child is None and inner.optional:
            values[inner.key] = None
        else:
            values[inner.key] = read_block(inner, child, inner_path, reading, entries)
    return values


def given_keys(node: Node | None, path: tuple[str, ...], reading: Reading) -> dict[str, Node]:
    """
    Return the entries of a block and note their places; anything but a block is reported.

    """
    if node is None or node.kind == "bad":
        return {}
    if node.kind != "map":
        reading.report(path, "wrong type", expected="a block of keys", got=shown(node))
        return {}
    reading.places.update({(*path, key): child.place for key, child in node.value.items()})
    return dict(node.value)


def read_value(parameter: Parameter, node: Node | None, path: tuple[str, ...], reading: Reading) -> Value:
    """
    Return the value of a parameter, or its default when it is left out.

    """
    if node is not None:
        return convert(parameter, node, path, reading)
    if parameter.required:
        reading.report(path, "missing", expected=parameter.expected(), remedy=f"Add it. {parameter.help}")
    return parameter.default


def read_table(
    table: Table, node: Node | None, path: tuple[str, ...], reading: Reading, read_entry: EntryReader | None
) -> dict[str, Any] | None:
    """
    Return the entries of a table; None: left out, and its entries are single values.

    """
    if isinstance(table.entry, Parameter):
        if node is None:
            return None
        flat = dict(_flattened(given_keys(node, path, reading), path, reading))
        return {key: convert(table.entry, child, (*path, key), reading) for key, child in flat.items()}
    if node is None:
        reading.report(path, "missing", expected="a block of keys", remedy=f"Add it. {table.help}")
    given = given_keys(node, path, reading)
    if read_entry is None:
        raise TypeError(f"nothing reads the entries of '{table.key}'")
    return {key: read_entry(key, child, (*path, key), reading) for key, child in given.items()}


def _flattened(given: dict[str, Node], path: tuple[str, ...], reading: Reading) -> Iterator[tuple[str, Node]]:
    # Joint names may contain dots, which ROS takes for levels.
    for key, child in given.items():
        if child.kind != "map":
            yield key, child
            continue
        for rest, grandchild in _flattened(child.value, (*path, key), reading):
            reading.places[(*path, f"{key}.{rest}")] = grandchild.place
            yield f"{key}.{rest}", grandchild


def report_unknown(block: Block, given: dict[str, Node], path: tuple[str, ...], reading: Reading) -> None:
    """
    Report every key the block does not know, with the nearest it does.

    """
    known = block.keys()
    for key in given:
        if key not in known:
            home = reading.homes.get(key, "")
            remedy = nearest(key, known).strip() or (f"It belongs to {home}." if home else "")
            reading.report((*path, key), "unknown key", expected=f"one of {', '.join(known)}", remedy=remedy)
