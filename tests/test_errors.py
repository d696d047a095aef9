# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Errors of input as a user reads them.

"""

from __future__ import annotations

import pytest

from prioritized_tracking.errors import InputError, Problem, nearest


def test_message_of_one() -> None:
    problem = Problem(what="wrong", where="a:1", expected="x", got="y", remedy="Do.")
    assert str(InputError(problem)) == "a:1: wrong\n    expected: x\n    got:      y\n    remedy:   Do."


def test_message_of_several() -> None:
    error = InputError([Problem(what="one"), Problem(what="two"), Problem(what="one")])
    assert len(error.problems) == 2
    assert str(error).splitlines() == ["2 problems:", "1. one", "2. two"]


def test_message_of_very_many_ends() -> None:
    lines = str(InputError(Problem(what=str(i)) for i in range(250))).splitlines()
    assert (lines[0], lines[100], lines[-1]) == ("250 problems:", "100. 99", "… and 150 more")


def test_needs_a_problem() -> None:
    with pytest.raises(TypeError):
        InputError([])


def test_nearest() -> None:
    assert nearest("Dampng", ["damping", "stiffness"]) == " Did you mean 'damping'?"
    assert nearest("zzz", ["damping"]) == ""
    assert nearest("x", []) == ""
