# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Literals and refusals of the YAML dialect of ROS parameter files.

The table is what ``rcl_yaml_param_parser`` 9.2.8 (ROS 2 Jazzy) returned for each literal, read back
through rclpy 7.1.6; where rclpy is installed the last test asks it again.

"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import pytest

from prioritized_tracking.errors import Problem
from prioritized_tracking.parameters.yaml_dialect import (
    MAX_DEPTH,
    MAX_VALUES,
    compose,
    is_unprintable,
    shortened,
)

nan, inf = math.nan, math.inf

ACCEPTED: list[tuple[str, str, Any]] = [
    ("1", "integer", 1),
    ("+1", "integer", 1),
    ("-1", "integer", -1),
    ("-0", "integer", 0),
    ("0x10", "integer", 16),
    ("0X1F", "integer", 31),
    ("-0x10", "integer", -16),
    ("9223372036854775807", "integer", 2**63 - 1),
    ("-9223372036854775808", "integer", -(2**63)),
    ("9223372036854775808", "double", 9.223372036854775808e18),
    ("0x8000000000000000", "double", 9.223372036854775808e18),
    ("1.0", "double", 1.0),
    ("1.", "double", 1.0),
    (".5", "double", 0.5),
    ("-.5", "double", -0.5),
    ("+.5", "double", 0.5),
    ("+1.5", "double", 1.5),
    ("-0.0", "double", -0.0),
    ("1e-6", "double", 1e-6),
    ("5e3", "double", 5000.0),
    ("1E5", "double", 1e5),
    ("1e+3", "double", 1000.0),
    ("1.e3", "double", 1000.0),
    (".1e1", "double", 1.0),
    ("1.0e-6", "double", 1e-6),
    ("08", "double", 8.0),
    ("018.5", "double", 18.5),
    ("0x1.8", "double", 1.5),
    ("0x1.8p1", "double", 3.0),
    ("0x.8p1", "double", 1.0),
    ("-0x1p-2", "double", -0.25),
    ("2.2250738585072014e-308", "double", 2.2250738585072014e-308),
    (".nan", "double", nan),
    (".NaN", "double", nan),
    (".NAN", "double", nan),
    ("nan", "double", nan),
    ("NaN", "double", nan),
    ("-nan", "double", nan),
    ("nan(12)", "double", nan),
    (".inf", "double", inf),
    (".Inf", "double", inf),
    ("-.inf", "double", -inf),
    ("+.inf", "double", inf),
    ("inf", "double", inf),
    ("-inf", "double", -inf),
    ("iNf", "double", inf),
    ("Infinity", "double", inf),
    ("INFINITY", "double", inf),
    ("true", "bool", True),
    ("True", "bool", True),
    ("TRUE", "bool", True),
    ("yes", "bool", True),
    ("Yes", "bool", True),
    ("YES", "bool", True),
    ("on", "bool", True),
    ("On", "bool", True),
    ("y", "bool", True),
    ("Y", "bool", True),
    ("false", "bool", False),
    ("no", "bool", False),
    ("off", "bool", False),
    ("n", "bool", False),
    ("N", "bool", False),
    ("abc", "string", "abc"),
    ("tRUE", "string", "tRUE"),
    ("0o17", "string", "0o17"),
    ("0b11", "string", "0b11"),
    ("1_000", "string", "1_000"),
    ("1,5", "string", "1,5"),
    ("1 2", "string", "1 2"),
    ("1e400", "string", "1e400"),
    ("1e-400", "string", "1e-400"),
    ("1e-310", "string", "1e-310"),
    ("1.0e", "string", "1.0e"),
    ("1e", "string", "1e"),
    ("1d", "string", "1d"),
    ("0x", "string", "0x"),
    ("0x1p", "string", "0x1p"),
    ("0xg", "string", "0xg"),
    ("1.5f", "string", "1.5f"),
    ("1e5.0", "string", "1e5.0"),
    ("+-1", "string", "+-1"),
    ("+.nan", "string", "+.nan"),
    ("-.NAN", "string", "-.NAN"),
    (".INFINITY", "string", ".INFINITY"),
    ("12:30:00", "string", "12:30:00"),
    ("2001-01-01", "string", "2001-01-01"),
    ("a,b", "string", "a,b"),
    ("=", "string", "="),
    ("<<", "string", "<<"),
    ("1.0#c", "string", "1.0#c"),
    ("1.5 # comment", "double", 1.5),
    ('"1"', "string", "1"),
    ("'1.0'", "string", "1.0"),
    ('""', "string", ""),
    ("'yes'", "string", "yes"),
    ('"\\x41\\u00e9"', "string", "Aé"),
    ("|-\n      1.5", "double", 1.5),
    ("package://x/y.csv", "string", "package://x/y.csv"),
    ("[1, 2]", "integer_array", (1, 2)),
    ("[1.0, 2.0]", "double_array", (1.0, 2.0)),
    ("[1.0, 2.0,]", "double_array", (1.0, 2.0)),
    ("[1e3, 1.0]", "double_array", (1000.0, 1.0)),
    ("[1.0, .nan]", "double_array", (1.0, nan)),
    ("[.inf, 1.0]", "double_array", (inf, 1.0)),
    ("[true, false]", "bool_array", (True, False)),
    ("[yes, no]", "bool_array", (True, False)),
    ("[a, b]", "string_array", ("a", "b")),
    ('["1", a]', "string_array", ("1", "a")),
    ("['package://x', a]", "string_array", ("package://x", "a")),
    ("\n      - 1.0\n      - 2.0", "double_array", (1.0, 2.0)),
    ("\n    - 1.0\n    - 2.0", "double_array", (1.0, 2.0)),
]

ROS_REFUSES_TOO: list[tuple[str, str]] = [
    ("", "no value"),
    ("|", "no value"),
    ("-", "not valid YAML"),
    ("*x", "alias '*x'"),
    ("[]", "an empty list"),
    ("{}", "an empty block"),
    ("[0, 1.5]", "a list of mixed types (integer, double)"),
    ("[1.5, 0]", "a list of mixed types (double, integer)"),
    ("[1, true]", "a list of mixed types (integer, bool)"),
    ("[a, 1]", "a list of mixed types (string, integer)"),
    ("[x, y]", "a list of mixed types (string, bool)"),
    ("[yes, a]", "a list of mixed types (bool, string)"),
    ("[[1.0], [2.0]]", "a list in a list"),
    ("[a:1]", "':' and '?' need quotes inside [ ] and { }"),
    ("[package://x/y.csv, b]", "':' and '?' need quotes inside [ ] and { }"),
    ("{b: package://x/y.csv}", "':' and '?' need quotes inside [ ] and { }"),
    ("{b: x?y}", "'?'"),
    ("{b:1.0}", "a space is missing after ':'"),
    ("{b, c: 1.0}", "no value"),
    ("[1.0, , 2.0]", "not valid YAML"),
    ('"\\ud800"', "control characters"),
    ('"\\Uffffffff"', "cannot be read as YAML"),
    ("x\x07y", "cannot be read as YAML"),
]

WE_REFUSE: list[tuple[str, str]] = [
    ("~", "no value"),
    ("null", "no value"),
    ("Null", "no value"),
    ("[~, b]", "no value"),
    ("010", "octal"),
    ("-010", "octal"),
    ("00", "octal"),
    ("!!str 1", "tag '"),
    ("!!python/object/apply:os.system ['true']", "tag '"),
    ("!!float 1", "tag '"),
    ("!foo 1", "tag '!foo'"),
    ("!!binary aGVsbG8=", "tag '"),
    ("&x 1", "anchor '&x'"),
    ("&x [1.0]", "anchor '&x'"),
    ('"\\0b"', "control characters"),
    ("|\n      1\n      2", "several lines"),
    ("[{b: 1.0}]", "a block in a list"),
    ("\n      - b: 1.0", "a block in a list"),
]


def read(literal: str) -> tuple[Any, list[Problem]]:
    """
    Return the node of a literal, and the problems.

    """
    root, problems = compose(f"/**:\n  ros__parameters:\n    a: {literal}\n", "stack.yaml")
    return (root and root.value["/**"].value["ros__parameters"].value["a"]), problems


@pytest.mark.parametrize(("literal", "kind", "value"), ACCEPTED, ids=lambda x: None)
def test_literal_is_read_as_ros_reads_it(literal: str, kind: str, value: Any) -> None:
    node, problems = read(literal)
    assert problems == []
    # repr tells 1 from 1.0 and from True, -0.0 from 0.0, and nan is equal to itself.
    assert (node.kind, repr(node.value)) == (kind, repr(value))
    assert node.place == "stack.yaml:3"


@pytest.mark.parametrize(("literal", "what"), ROS_REFUSES_TOO + WE_REFUSE)
def test_literal_is_refused(literal: str, what: str) -> None:
    _, problems = read(literal)
    assert len(problems) == 1
    assert what in str(problems[0])
    assert problems[0].where.startswith("stack.yaml")
    assert problems[0].remedy or "cannot be read as YAML" in what


def test_every_problem_is_reported_with_its_own_line() -> None:
    keys = "    a: ~\n    b:\n      - 1.0\n      - 2\n    c: 010\n    c: 2\n    d: !x 1\n"
    text = "/**:\n  ros__parameters:\n" + keys
    _, problems = compose(text, "f.yaml")
    assert [problem.where for problem in problems] == [
        "f.yaml:3 a",
        "f.yaml:5 b",
        "f.yaml:7 c",
        "f.yaml:8 c",
        "f.yaml:9 d",
    ]


def test_key_given_twice_says_where_first() -> None:
    _, problems = compose("a: 1\nb: 2\na: 3\n", "f.yaml")
    assert [(p.what, p.where, p.got) for p in problems] == [
        ("key given twice", "f.yaml:3 a", "first at f.yaml:1")
    ]


def test_second_document_is_refused() -> None:
    _, problems = compose("a: 1\n---\na: 2\n", "f.yaml")
    assert [(p.what, p.where) for p in problems] == [("a second document begins here", "f.yaml:2")]


def test_broken_syntax_says_line_and_column() -> None:
    _, problems = compose("a: 1\n\tb: 2\n", "f.yaml")
    assert problems[0].where == "f.yaml:2, column 1"
    assert problems[0].remedy == "Indent with spaces, not with tabs."


@pytest.mark.parametrize("key", ["? [a, b]\n", "? {a: b}\n", "'': 1\n", '"a\\nb": 1\n', "? *x\n"])
def test_key_must_be_a_text_in_one_line(key: str) -> None:
    _, problems = compose(f"{key}", "f.yaml")
    assert "a key must be a text in one line" in [problem.what for problem in problems]


def test_empty_and_comment_only_documents_are_none() -> None:
    assert compose("", "f") == (None, [])
    assert compose("# nothing\n", "f") == (None, [])


def test_deep_nesting_stops_early() -> None:
    deep = "a: " + "{b: " * MAX_DEPTH + "1" + "}" * MAX_DEPTH
    assert "levels" in compose(deep, "f")[1][0].what
    endless = "a: " + "[" * 500_000
    assert "levels" in compose(endless, "f")[1][0].what
    shallow = "a: " + "{b: " * (MAX_DEPTH - 1) + "1" + "}" * (MAX_DEPTH - 1)
    assert compose(shallow, "f")[1] == []


def test_too_many_values_stop_early() -> None:
    assert "values" in compose("a: [" + "1, " * (MAX_VALUES + 10) + "1]", "f")[1][0].what


def test_aliases_cannot_multiply() -> None:
    lines = ["a0: &a0 [x, x, x, x, x, x, x, x, x]"]
    lines += [f"a{i}: &a{i} [{', '.join([f'*a{i - 1}'] * 9)}]" for i in range(1, 12)]
    root, problems = compose("\n".join(lines), "f")
    assert root is not None
    assert len(problems) == 12 + 9 * 11
    assert all(root.value[f"a{i}"].kind == "bad" for i in range(1, 12))


def test_texts_in_messages_are_short_and_printable() -> None:
    assert len(shortened("x" * 1000)) == 60
    assert not is_unprintable(shortened("a\x00\ud800\n"))


@pytest.mark.filterwarnings("ignore:module 'sre_:DeprecationWarning")  # lark, which rclpy loads
@pytest.mark.parametrize("literals", [ACCEPTED, ROS_REFUSES_TOO])
def test_table_against_the_parser_of_ros(literals: list[tuple[Any, ...]], tmp_path: Path) -> None:
    rclpy = pytest.importorskip("rclpy", reason="needs ROS")
    from rclpy.context import Context
    from rclpy.node import Node

    def ask(literal: str) -> Any:
        file = tmp_path / "stack.yaml"
        file.write_text(f"/**:\n  ros__parameters:\n    a: {literal}\n", encoding="utf-8")
        context = Context()
        rclpy.init(args=["x", "--ros-args", "--params-file", str(file)], context=context)
        node = Node("probe", context=context, automatically_declare_parameters_from_overrides=True)
        parameter = node.get_parameter("a")
        kind, value = parameter.type_.name.lower(), parameter.value
        node.destroy_node()
        rclpy.shutdown(context=context)
        return kind, tuple(value) if kind.endswith("_array") else value

    for literal, *expected in literals:
        if len(expected) == 2:
            assert repr(ask(literal)) == repr(tuple(expected)), literal
        else:
            with pytest.raises(Exception):  # noqa: B017 - rclpy has no one type for it
                ask(literal)
