# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
# ruff: noqa: E501 - tables
"""
Whatever stands in a stack file, it is read or refused; nothing else ever comes out.

"""

from __future__ import annotations

import random
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from prioritized_tracking.errors import InputError
from prioritized_tracking.parameters import StackFile, read_stack
from tests.stack_example import STACK, write

LINES = STACK.splitlines()
LITERALS = [
    "", "~", "1", "-1", "0", "1.0", "-0.5", "1e9", ".nan", "inf", "true", "y", "''", "x", "'1'", "010", "1e400",
    "9" * 400, "0x" + "f" * 400, "[]", "{}", "[1]", "[1.0, 2]", "[a, b]", "[[1]]", "{a: 1}", "{a: {b: {c: 1}}}",
    "*x", "&x 1", "!!float 1", "!x 1", "|\n  a", '"\\0"', '"\\ud83d"', "posture", "weld", "elbow", "wrist",
    "package://x/y", "\U0001f600", "- 1", "? a", "a: b: c", "'", '"', "[", "{", "%", "@", "`", "\t", "#",
]  # fmt: skip


def read(folder: Path, content: bytes) -> StackFile | InputError:
    """
    Return what a file is read as, or the error that refuses it.

    """
    path = write(folder)
    path.write_bytes(content)
    try:
        return read_stack(path)
    except InputError as error:
        return error


def assert_sound(result: StackFile | InputError) -> None:
    """
    Check that a stack is complete, and that a refusal can be read.

    """
    if isinstance(result, InputError):
        assert all(problem.what for problem in result.problems)
        assert len(str(result).encode()) < 4000 * len(result.problems)
    else:
        assert isinstance(result.tree["rate"], float)
        assert result.tree["tasks"].keys() == set(result.tree["priority"])


def mutated_line(line: str, rng: random.Random) -> str:
    """
    Return a line with another value, key, indentation or character.

    """
    key, colon, _ = line.partition(":")
    choice = rng.randrange(8)
    if choice < 3:
        return f"{key}{colon} {rng.choice(LITERALS)}"
    if choice == 3:
        return " " * rng.randrange(9) + line.strip()
    if choice == 4:
        position = rng.randrange(len(line) + 1)
        return line[:position] + rng.choice("\t :{}[]&*!|>'\"%@`,#?-\\~\x00\x85\ufeff.09az") + line[position:]
    if choice == 5:
        start = rng.randrange(len(line) + 1)
        return line[:start] + line[start + rng.randrange(1, 5) :]
    if choice == 6:
        words = line.split()
        rng.shuffle(words)
        return line[: len(line) - len(line.lstrip())] + " ".join(words)
    return line.replace(rng.choice(["weld", "posture", "a1", "0", ",", "tool"]), rng.choice(LITERALS), 1)


@pytest.mark.parametrize("seed", range(400))
def test_mutated_structure(tmp_path: Path, seed: int) -> None:
    rng = random.Random(seed)
    lines = list(LINES)
    for _ in range(rng.choice([1, 1, 2, 5])):
        i, j = rng.randrange(len(lines)), rng.randrange(len(lines))
        action = rng.randrange(6)
        if action < 3:
            lines[i] = mutated_line(lines[i], rng)
        elif action == 3:
            del lines[i]
        elif action == 4:
            lines.insert(j, lines[i])
        else:
            lines[i], lines[j] = lines[j], lines[i]
    assert_sound(read(tmp_path, "\n".join(lines).encode("utf-8", "surrogatepass")))


@pytest.mark.parametrize("seed", range(150))
def test_mutated_bytes(tmp_path: Path, seed: int) -> None:
    rng = random.Random(seed)
    data = bytearray(STACK.encode())
    for _ in range(rng.choice([1, 3, 30])):
        data[rng.randrange(len(data))] = rng.randrange(256) if rng.random() < 0.5 else rng.randrange(32, 127)
    assert_sound(read(tmp_path, bytes(data[: rng.choice([len(data), rng.randrange(len(data))])])))


SCALARS = st.one_of(
    st.booleans(),
    st.integers(),
    st.floats(),
    st.text(max_size=8),
    st.sampled_from(["weld", "posture", "wrist"]),
)
KEYS = st.sampled_from(
    [
        "law",
        "tasks",
        "tasks.wrist",
        "tasks.wrist.chart",
        "robot",
        "robot.payload.mass",
        "robot.locked",
        "references.weld",
        "references.elbow.follows",
        "priority",
        "plant.start",
        "guard",
        "rate",
        "plant",
        "base_dir",
        "robot.urdf",
        "a.b.c",
        ".",
    ]
)


@settings(
    max_examples=300,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(
    overrides=st.dictionaries(
        KEYS,
        st.recursive(
            st.none() | SCALARS | st.lists(SCALARS, max_size=3),
            lambda inner: st.dictionaries(
                st.text(max_size=6) | st.sampled_from(["chart", "mass", "kind"]), inner
            ),
            max_leaves=4,
        ),
        max_size=4,
    )
)
def test_any_overrides(tmp_path: Path, overrides: dict[str, object]) -> None:
    path = write(tmp_path)
    try:
        result: StackFile | InputError = read_stack(path, overrides=overrides)
    except InputError as error:
        result = error
    assert_sound(result)


@settings(
    max_examples=300,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(text=st.text(alphabet="ab01.-:,{}[]&*!|>'\"\\#?~\n \t\u00e9", max_size=60))
def test_any_text_as_parameters(tmp_path: Path, text: str) -> None:
    block = "".join(f"    {line}\n" for line in text.split("\n"))
    assert_sound(read(tmp_path, f"/**:\n  ros__parameters:\n{block}".encode()))
    assert_sound(read(tmp_path, text.encode()))


def test_mutations_are_not_all_refused(tmp_path: Path) -> None:
    # Otherwise the tests above would look at one branch only.
    read_or_not = [
        read(tmp_path, "\n".join([*LINES[:i], *LINES[i + 1 :]]).encode()) for i in range(len(LINES))
    ]
    kinds = {type(result) for result in read_or_not}
    assert kinds == {StackFile, InputError}


def test_a_megabyte_of_anything_is_quick(tmp_path: Path) -> None:
    # 1 s each on a slow core; the tests' own limit for a hang would be minutes.
    for piece in (
        "[",
        "{a: ",
        "a",
        "- ",
        "? ",
        "&a ",
        "a: 1\n",
        "'",
        '"a',
        "#",
        "\n",
        "!a ",
        "%a\n",
        "a.",
        "1",
    ):
        result = read(tmp_path, (piece * (1 << 20))[: (1 << 20) - 1].encode())
        assert isinstance(result, InputError)
        assert_sound(result)
