# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
YAML as ROS 2 reads parameter files: typed literals, one type per list, nothing clever.

ROS hands the text to a C parser of its own (``rcl_yaml_param_parser``), which types literals with
``strtol`` and ``strtod`` and so differs from YAML libraries: ``1e-6`` is a number, ``010`` is eight,
``~`` is a text, ``[0, 1.5]`` is refused. What this module accepts, ROS reads to the same value; it
refuses some of what ROS accepts, where that would be a trap (nulls, octals, tags, anchors, keys
given twice, several documents).

"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import yaml

from prioritized_tracking.errors import Problem
from prioritized_tracking.parameters.yaml_literals import NULLS, OCTAL, kind_of, resolve_literal

MAX_DEPTH = 12
"""Nesting of blocks; a stack file needs 6."""

MAX_VALUES = 20_000
"""Values in one file; a large stack has 300."""

# Control characters, and halves of surrogate pairs, which cannot be printed or be part of a path.
_UNPRINTABLE = re.compile("[\x00-\x1f\x7f-\x9f\u2028\u2029\ud800-\udfff]")


@dataclass(frozen=True)
class Node:
    """
    One value of a parameter file, with its ROS type and its place.

    Attributes
    ----------
    kind : str
        "bool", "integer", "double" or "string"; these with "_array"; "map"; or "bad": refused, and
        reported already.
    value : Any
        Python value; a tuple for an array, dict of `Node` for a map, None for "bad".
    place : str
        ``stack.yaml:12``, the line of the value's key; for values not from a file, what they are.

    """

    kind: str
    value: Any
    place: str


class _Stop(Exception):
    """
    The rest of the text cannot be understood.

    """


@dataclass
class _Composer:
    """
    Turns the parser's events into nodes and collects problems.

    """

    name: str
    events: Iterator[Any]
    problems: list[Problem] = field(default_factory=list)
    values: int = 0

    def report(self, mark: Any, what: str, *, key: str = "", remedy: str = "", got: str = "") -> None:
        where = f"{self.place(mark)} {key}".strip()
        self.problems.append(Problem(what=what, where=where, got=got, remedy=remedy))

    def place(self, mark: Any) -> str:
        return f"{self.name}:{mark.line + 1}"

    def document(self) -> Node | None:
        """
        Return the root of the only document; None: there is none.

        """
        next(self.events)
        event = next(self.events)
        if isinstance(event, yaml.StreamEndEvent):
            return None
        root = self.node(next(self.events), (), event.start_mark, flow=False)
        next(self.events)
        event = next(self.events)
        if not isinstance(event, yaml.StreamEndEvent):
            self.report(
                event.start_mark,
                "a second document begins here",
                remedy="Keep one document, without a '---' line.",
            )
        return root

    def node(self, event: Any, path: tuple[str, ...], mark: Any, *, flow: bool) -> Node:
        """
        Return the node that begins with `event`; `mark` is where its key stands.

        """
        self.values += 1
        key, place = shown_key(path), self.place(mark)
        self.refuse_endless(event, path)
        if isinstance(event, yaml.AliasEvent):
            self.report(
                event.start_mark, f"alias '*{event.anchor}': not read by ROS", key=key, remedy=_WRITE_OUT
            )
            return Node("bad", None, place)
        self.refuse_anchor_and_tag(event, key)
        if isinstance(event, yaml.ScalarEvent):
            return self.scalar(event, key, place, flow=flow)
        if isinstance(event, yaml.SequenceStartEvent):
            return self.sequence(event, path, place, mark)
        return self.mapping(event, path, place)

    def refuse_endless(self, event: Any, path: tuple[str, ...]) -> None:
        if self.values > MAX_VALUES or len(path) > MAX_DEPTH:
            limit = f"{MAX_VALUES} values" if self.values > MAX_VALUES else f"{MAX_DEPTH} levels"
            what = f"more than {limit}: this is no stack file"
            self.report(event.start_mark, what, key=shown_key(path[:3]))
            raise _Stop

    def refuse_anchor_and_tag(self, event: Any, key: str) -> None:
        if event.anchor is not None:
            self.report(
                event.start_mark,
                f"anchor '&{event.anchor[:40]}': ROS reads no aliases",
                key=key,
                remedy=_WRITE_OUT,
            )
        if event.tag is not None:
            self.report(
                event.start_mark,
                f"tag '{event.tag[:40]}': ROS ignores tags",
                key=key,
                remedy="Leave the tag away; write 1.0 for a number, '1' in quotes for a text.",
            )

    def scalar(self, event: Any, key: str, place: str, *, flow: bool) -> Node:
        text, quoted = event.value, event.style in ("'", '"')
        fault = _fault_of_scalar(text, quoted=quoted, flow=flow)
        if fault:
            self.report(event.start_mark, fault[0], key=key, got=shortened(text), remedy=fault[1])
            return Node("bad", None, place)
        value = resolve_literal(text, quoted=quoted)
        return Node(kind_of(value), value, place)

    def sequence(self, event: Any, path: tuple[str, ...], place: str, mark: Any) -> Node:
        key, flow = shown_key(path), bool(event.flow_style)
        start, items = event.start_mark, []
        while not isinstance(event := next(self.events), yaml.SequenceEndEvent):
            items.append(self.node(event, (*path, ""), event.start_mark if not flow else mark, flow=flow))
        if any(item.kind == "bad" for item in items):
            return Node("bad", None, place)
        fault = fault_of_items(items)
        if fault:
            self.report(start, fault[0], key=key, remedy=fault[1])
            return Node("bad", None, place)
        return Node(items[0].kind + "_array", tuple(item.value for item in items), place)

    def mapping(self, event: Any, path: tuple[str, ...], place: str) -> Node:
        entries: dict[str, Node] = {}
        start, flow, seen = event.start_mark, bool(event.flow_style), False
        while not isinstance(event := next(self.events), yaml.MappingEndEvent):
            mark, seen = event.start_mark, True
            key = self.key(event, path, flow=flow)
            known = len(self.problems)
            value = self.node(next(self.events), (*path, key), mark, flow=flow)
            if not key:
                del self.problems[known:]  # the key's own problem is the one to repair
            elif key in entries:
                shown, first = shown_key((*path, key)), f"first at {entries[key].place}"
                self.report(mark, "key given twice", key=shown, got=first, remedy="Keep one of the two.")
            else:
                entries[key] = value
        if not seen:
            remedy = "Leave the key out to get its default."
            self.report(
                start, "an empty block, at which ROS loses its place", key=shown_key(path), remedy=remedy
            )
            return Node("bad", None, place)
        return Node("map", entries, place)

    def key(self, event: Any, path: tuple[str, ...], *, flow: bool) -> str:
        """
        Return the text of a key; "" when it is none, which is reported.

        """
        if not isinstance(event, yaml.ScalarEvent) or not event.value or is_unprintable(event.value):
            self.report(event.start_mark, "a key must be a text in one line", key=shown_key(path))
            if not isinstance(event, (yaml.ScalarEvent, yaml.AliasEvent)):
                self.node(event, (*path, ""), event.start_mark, flow=bool(event.flow_style))
            return ""
        shown = shown_key((*path, event.value))
        if flow and ":" in event.value and event.style not in ("'", '"'):
            self.report(
                event.start_mark, "a space is missing after ':'", key=shown, remedy="Write 'key: value'."
            )
            return ""
        self.refuse_anchor_and_tag(event, shown)
        return str(event.value)


_WRITE_OUT = "Write the values out where they are needed."


def _fault_of_scalar(text: str, *, quoted: bool, flow: bool) -> tuple[str, str] | None:
    if _UNPRINTABLE.search(text):
        return "a text of several lines or with control characters", "Write it in one line."
    if quoted:
        return None
    if text in NULLS:
        return "no value", "Leave the key out to get its default; write '' for an empty text."
    if flow and (":" in text or "?" in text):
        # libyaml as shipped with ROS refuses it, PyYAML does not.
        return (
            "':' and '?' need quotes inside [ ] and { }",
            f"Write '{shortened(text)}' in quotes, or 'key: value'.",
        )
    if OCTAL.fullmatch(text):
        return "ROS reads a whole number with a leading zero as octal", "Leave the leading zero away."
    return None


def fault_of_items(items: list[Node]) -> tuple[str, str] | None:
    """
    Return fault and remedy of a list ROS cannot type; None: it can.

    Parameters
    ----------
    items : list of Node

    """
    if not items:
        return "an empty list, which ROS cannot type", "Leave the key out to get its default."
    kinds = list(dict.fromkeys(item.kind for item in items))
    if any(kind == "map" or kind.endswith("_array") for kind in kinds):
        return "a list in a list, or a block in a list, which ROS cannot hold", "Write a flat list."
    if len(kinds) == 1:
        return None
    fault = f"a list of mixed types ({', '.join(kinds)}), which ROS refuses"
    if set(kinds) == {"integer", "double"}:
        return fault, "Write every number with a point, e.g. 0.0 for 0."
    return fault, "Put texts that look like numbers or like yes, no, y, n, on, off in quotes."


def is_unprintable(text: str) -> bool:
    """
    Return whether a text has line breaks, control characters or halves of surrogate pairs.

    """
    return _UNPRINTABLE.search(text) is not None


def shortened(text: str, limit: int = 60) -> str:
    """
    Return `text` in printable form, cut to `limit` characters.

    """
    printable = _UNPRINTABLE.sub("\N{REPLACEMENT CHARACTER}", text)
    return printable if len(printable) <= limit else printable[: limit - 1] + "…"


def shown_key(path: tuple[str, ...]) -> str:
    """
    Return a key path as messages show it: dotted, without node name and ``ros__parameters``.

    """
    keys = path[path.index("ros__parameters") + 1 :] if "ros__parameters" in path else path
    return shortened(".".join(shortened(key) for key in keys if key), 160)


def compose(text: str, name: str) -> tuple[Node | None, list[Problem]]:
    """
    Read the text of a parameter file.

    Parameters
    ----------
    text : str
        The file's text.
    name : str
        The file's name, for messages.

    Returns
    -------
    Node or None
        Root of the document, a map when the file is one of parameters; None: no document, or its
        syntax is broken.
    list of Problem
        Every problem of the dialect; after an error of syntax the rest is unknown.

    """
    loader = yaml.SafeLoader
    composer = _Composer(name, iter(()))
    try:
        composer.events = iter(yaml.parse(text, Loader=loader))
        return composer.document(), composer.problems
    except _Stop:
        return None, composer.problems
    except yaml.MarkedYAMLError as error:
        composer.problems.append(_syntax_problem(error, name))
    except (yaml.YAMLError, ValueError, OverflowError) as error:
        what = f"cannot be read as YAML: {shortened(' '.join(str(error).split()), 120)}"
        composer.problems.append(Problem(what=what, where=name))
    return None, composer.problems


def _syntax_problem(error: yaml.MarkedYAMLError, name: str) -> Problem:
    mark = error.problem_mark or error.context_mark
    where = f"{name}:{mark.line + 1}, column {mark.column + 1}" if mark else name
    fault = shortened(error.problem or error.context or "broken syntax", 120)
    remedy = "Check indentation, colons and brackets on this line and the one above."
    if "\\t" in fault or "tab" in fault:
        remedy = "Indent with spaces, not with tabs."
    return Problem(what=f"not valid YAML: {fault}", where=where, remedy=remedy)
