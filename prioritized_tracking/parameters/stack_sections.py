# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The part of a parameter file that is meant for us, and values that come from elsewhere.

"""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterator, Mapping
from typing import Any

from prioritized_tracking.errors import InputError, Problem, nearest
from prioritized_tracking.parameters.stack_values import Reading, shown
from prioritized_tracking.parameters.yaml_dialect import Node, fault_of_items, is_unprintable, shortened
from prioritized_tracking.parameters.yaml_literals import kind_of

NODES = ("tracking_controller", "simulated_arm")
"""Names of the nodes that read a stack file."""

_HEADER = "Begin the file with '/**:', below it '  ros__parameters:', and indent the keys under that."


def select_parameters(root: Node | None, reading: Reading) -> Node:
    """
    Return the keys of all sections of a parameter file that are meant for our nodes, as one block.

    A section counts when its name is ``/**``, ``/*``, or ends in the name of one of our nodes; in a
    file with no such section, its only one (the node was renamed). Other sections belong to other
    nodes. Dotted keys are put into their blocks.

    Parameters
    ----------
    root : Node or None
        The document.
    reading : Reading
        Takes the problems.

    Raises
    ------
    InputError
        There is no such section, so that nothing else can be said.

    """
    sections = list(_sections(root, (), reading)) if root is not None else []
    if not sections and not reading.problems:
        reading.report((), "the file holds no parameters", remedy=_HEADER)
    chosen = [node for name, node in sections if _is_ours(name)]
    others = [name for name, _ in sections if not _is_ours(name)]
    if not chosen and len(sections) == 1:
        chosen, others = [sections[0][1]], []
    if not chosen and sections:
        _report_foreign(others, reading)
    _report_misspelt(others, reading)
    if not chosen:
        raise InputError(reading.problems)
    return _merged(chosen, reading)


def _merged(sections: list[Node], reading: Reading) -> Node:
    merged: dict[str, Node] = {}
    for node in sections:
        for key, child in node.value.items():
            _insert(merged, key.split("."), child, (), reading)
    return Node("map", merged, sections[0].place)


def _report_foreign(names: list[tuple[str, ...]], reading: Reading) -> None:
    got = ", ".join(shortened("/".join(name)) for name in names[:6])
    reading.report((), "no section is meant for this node", expected=f"/** or {NODES[0]}", got=got)


def _sections(node: Node, name: tuple[str, ...], reading: Reading) -> Iterator[tuple[tuple[str, ...], Node]]:
    """
    Yield (parts of the node's name, its parameters) for each section below `node`.

    """
    if node.kind != "map":
        if node.kind != "bad":
            _report_no_section(node, name, reading)
        return
    for key, child in node.value.items():
        if key == "ros__parameters":
            if not name:
                where = f"{child.place} ros__parameters"
                reading.problems.append(Problem(what="no node name above it", where=where, remedy=_HEADER))
            if child.kind == "map":
                yield name, child
            elif child.kind != "bad":
                _report_no_section(child, (*name, key), reading)
        else:
            yield from _sections(child, (*name, key), reading)


def _report_no_section(node: Node, name: tuple[str, ...], reading: Reading) -> None:
    typo = nearest(name[-1], ["ros__parameters"]).strip() if name and name[-1] != "ros__parameters" else ""
    if any(problem.what == _OUTSIDE for problem in reading.problems):
        return
    reading.problems.append(
        Problem(
            what=_OUTSIDE,
            where=f"{node.place} {shortened('.'.join(name))}".strip(),
            expected="a block of keys below a node's name and ros__parameters",
            got=shown(node),
            remedy=typo or _HEADER,
        )
    )


_OUTSIDE = "a value outside of ros__parameters, which ROS refuses"


def _is_ours(name: tuple[str, ...]) -> bool:
    return not name or "/".join(name).split("/")[-1] in ("*", "**", *NODES)


def _report_misspelt(names: list[tuple[str, ...]], reading: Reading) -> None:
    # 0.9: one or two letters off. A node may be renamed, and other nodes may share the file.
    for name in names:
        last = "/".join(name).split("/")[-1]
        close = difflib.get_close_matches(last[:100], NODES, n=1, cutoff=0.9)
        if close:
            what = f"section '{shortened(last)}' is meant for no node of ours"
            reading.report((), what, remedy=f"Did you mean '{close[0]}'?")


def _insert(
    block: dict[str, Node], keys: list[str], node: Node, path: tuple[str, ...], reading: Reading
) -> None:
    """
    Put a node under dotted keys into a block; blocks are merged, a value given twice is reported.

    """
    key, rest = keys[0], keys[1:]
    path = (*path, key)
    if not key:
        _report_at(node, path, reading, "a key with a dot at its end, or two dots")
        return
    if path[0] == "qos_overrides":
        block[key] = node
        return
    if rest or node.kind == "map":
        _insert_block(block, key, rest, node, path, reading)
    elif key in block:
        _report_at(node, path, reading, "key given twice", got=f"first at {block[key].place}")
    else:
        block[key] = node


def _insert_block(
    block: dict[str, Node], key: str, rest: list[str], node: Node, path: tuple[str, ...], reading: Reading
) -> None:
    inner = block.setdefault(key, Node("map", {}, node.place))
    if inner.kind != "map":
        _report_at(node, path, reading, "both a value and a block", got=f"first at {inner.place}")
        return
    children = [(rest, node)] if rest else [(name.split("."), child) for name, child in node.value.items()]
    for names, child in children:
        _insert(inner.value, names, child, path, reading)


def _report_at(node: Node, path: tuple[str, ...], reading: Reading, what: str, **details: str) -> None:
    where = f"{node.place} {shortened('.'.join(path), 160)}"
    reading.problems.append(Problem(what=what, where=where, **details))


def apply_values(parameters: Node, values: Mapping[str, Any], label: str, reading: Reading) -> None:
    """
    Put values given in Python into the block of parameters, in place of those of the file.

    Parameters
    ----------
    parameters : Node
        The block, changed in place.
    values : mapping
        By dotted key: bool, number, text, path, list, array, mapping; None: as if left out.
    label : str
        What the values are called in messages, e.g. "override".
    reading : Reading
        Takes the problems.

    """
    for key, value in values.items():
        if not isinstance(key, str):
            reading.report((), f"{label}: a key must be a text", got=shortened(repr(key)))
        elif isinstance(value, Mapping):
            apply_values(
                parameters, {f"{key}.{name}": child for name, child in value.items()}, label, reading
            )
        else:
            _apply(parameters.value, key, value, label, reading)


def _apply(block: dict[str, Node], key: str, value: Any, label: str, reading: Reading) -> None:
    path = tuple(key.split("."))
    for name in path[:-1]:
        inner = block.get(name)
        if inner is None or inner.kind != "map":
            inner = block[name] = Node("map", {}, label)
        block = inner.value
    block.pop(path[-1], None)
    if value is not None:
        block[path[-1]] = node_of(value, label, path, reading)


def node_of(value: Any, label: str, path: tuple[str, ...], reading: Reading) -> Node:
    """
    Return a value given in Python as a node; whole numbers among others become doubles.

    Parameters
    ----------
    value : Any
        Scalar, text, path, list, tuple or array.
    label : str
        What stands for the place.
    path : tuple of str
        Keys that lead to it.
    reading : Reading
        Takes the problems.

    """
    value = value.tolist() if hasattr(value, "tolist") else value
    if isinstance(value, (list, tuple)):
        return _array_of([node_of(item, label, path, reading) for item in value], label, path, reading)
    if isinstance(value, str) and is_unprintable(value):
        return _refused("a text of several lines or with control characters", label, path, reading)
    if type(value) in (bool, int, float, str):
        return Node(kind_of(value), value, label)
    if hasattr(value, "__fspath__"):
        return Node("string", str(value), label)
    return _refused(f"a value of type {type(value).__name__}, which no parameter has", label, path, reading)


def _array_of(items: list[Node], label: str, path: tuple[str, ...], reading: Reading) -> Node:
    if any(item.kind == "bad" for item in items):
        return Node("bad", None, label)
    if {item.kind for item in items} == {"integer", "double"}:
        items = [Node("double", _as_double(item.value), label) for item in items]
    fault = fault_of_items(items)
    if fault is not None:
        return _refused(fault[0], label, path, reading, fault[1])
    return Node(items[0].kind + "_array", tuple(item.value for item in items), label)


def _refused(what: str, label: str, path: tuple[str, ...], reading: Reading, remedy: str = "") -> Node:
    where = f"{label} {shortened('.'.join(path))}"
    reading.problems.append(Problem(what=what, where=where, remedy=remedy))
    return Node("bad", None, label)


def _as_double(number: float) -> float:
    try:
        return float(number)
    except OverflowError:
        return math.inf
