# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Compiled and interpreted functions are the same source and give the same numbers.

"""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import prioritized_tracking as pt
from prioritized_tracking import compiled
from tests import compiled_cases

ROOT = Path(__file__).parents[2]
SCRIPT = (
    "import prioritized_tracking as pt; from prioritized_tracking import compiled; print(compiled.STATUS)"
)

needs_numba = pytest.mark.skipif(not compiled.is_compiled(), reason="numba is not installed or turned off")


def run(arguments, **environment):
    """A Python process in the project's root; its output."""
    done = subprocess.run(
        [sys.executable, *arguments],
        cwd=ROOT,
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
        timeout=500,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.strip()


@needs_numba
def test_both_paths_give_the_same_numbers(tmp_path):
    """1e-9 of the size of each array, on random and on degenerate states; inf and NaN in the same places."""
    run(["-m", "tests.compiled_cases", str(tmp_path / "interpreted.npz")], NUMBA_DISABLE_JIT="1")
    with np.load(tmp_path / "interpreted.npz") as other:
        assert not other["compiled"]
        mine = compiled_cases.results()
        assert set(mine) == set(other.files) - {"compiled"}
        for name, array in mine.items():
            finite = array[np.isfinite(array)]
            np.testing.assert_allclose(
                array,
                other[name],
                rtol=1e-9,
                atol=1e-9 * max(1.0, np.abs(finite).max(initial=0.0)),
                err_msg=name,
            )


def test_what_has_no_solution_is_refused_and_leaves_zero_velocity():
    """The three bad states are refused; the spoilt rooms give no branch; the sound one gives some."""
    answers = compiled_cases.refused()["refused"]
    np.testing.assert_array_equal(answers[:3], 1.0)
    spoilt = answers[3:].reshape(5, 8)
    np.testing.assert_array_equal(spoilt[:4], 0.0)
    assert spoilt[4, 0] >= 1.0


def test_the_cases_contain_hand_overs_and_pruning():
    """Otherwise equality of both paths would say little."""
    counts = compiled_cases.hierarchies()["hierarchies"][:30, -2]
    pruned = compiled_cases.hierarchies()["hierarchies"][:30, -1]
    assert counts.max() == 16
    assert counts.min() == 1
    assert pruned.any()


def test_numba_can_be_turned_off():
    """The status says so, for whoever wonders why it is slow."""
    assert run(["-c", SCRIPT], NUMBA_DISABLE_JIT="1") == "interpreted: NUMBA_DISABLE_JIT is set"


def specializations():
    """How many versions of compiled functions there are in this process."""
    modules = [m for name, m in sys.modules.items() if name.startswith("prioritized_tracking.")]
    functions = {id(f): f for m in modules for f in vars(m).values() if hasattr(f, "signatures")}
    return sum(len(function.signatures) for function in functions.values())


@needs_numba
@pytest.mark.parametrize("law", ["prioritized", "cartesian_impedance", "inverse_jacobian"])
@pytest.mark.parametrize("stack", ["demo_stack", "planar_stack"])
def test_nothing_is_compiled_after_loading(stack, law):
    """Not in the first cycle, nor in any other state of the path."""
    controller = pt.load(compiled_cases.CONFIG / f"{stack}.yaml", law=law)
    before = specializations()
    assert before > 10
    q = controller.start_configuration()
    controller.activate(0.0, q, 0 * q)
    controller.start(0.0)
    for k in range(20):
        controller.step(0.001 * k, q + 1e-3, 0 * q)
        controller.evaluate(0.7 * k, q + 0.1 * k, 0 * q)
        controller.pose_errors(q)
    assert specializations() == before


@needs_numba
def test_without_a_place_to_keep_compiled_code_functions_are_interpreted(tmp_path):
    """A file where the folder should be: a message with the remedy, and everything works."""
    (tmp_path / "file").write_text("")
    text = run(["-c", SCRIPT], NUMBA_CACHE_DIR=str(tmp_path / "file"))
    assert text.startswith("interpreted: no folder for compiled code")
    assert "NUMBA_CACHE_DIR" in text


def test_without_numba_functions_are_interpreted(tmp_path):
    """An installation without the extra; here numba is hidden by a module that cannot be imported."""
    (tmp_path / "numba.py").write_text("raise ImportError('hidden')")
    text = run(["-c", SCRIPT], PYTHONPATH=str(tmp_path))
    assert text.startswith("interpreted: numba is not installed")
    assert "[fast]" in text


SMALL = (
    "from prioritized_tracking import compiled; from prioritized_tracking.core.smooth import smoothstep;"
    "compiled.warm_up(lambda: print(smoothstep(0.25)))"
)


@needs_numba
def test_two_processes_may_compile_at_once(tmp_path):
    """Both get the number, and so does a third one from what they left."""
    environment = {**os.environ, "NUMBA_CACHE_DIR": str(tmp_path)}
    both = [
        subprocess.Popen(
            [sys.executable, "-c", SMALL], cwd=ROOT, env=environment, stdout=subprocess.PIPE, text=True
        )
        for _ in range(2)
    ]
    numbers = [process.communicate(timeout=300)[0].strip() for process in both]
    numbers.append(run(["-c", SMALL], NUMBA_CACHE_DIR=str(tmp_path)))
    assert set(numbers) == {"0.103515625"}
    assert list(tmp_path.rglob("*.nbi"))


@needs_numba
@pytest.mark.parametrize("pattern", ["*.nbi", "*.nbc"])
@pytest.mark.parametrize("content", [b"", b"not what was compiled"])
def test_a_damaged_cache_is_compiled_again(tmp_path, pattern, content):
    """A file cut short by a full disk, or rubbish, must not keep the robot from starting."""
    assert run(["-c", SMALL], NUMBA_CACHE_DIR=str(tmp_path)) == "0.103515625"
    for path in tmp_path.rglob(pattern):
        path.write_bytes(content)
    assert run(["-c", SMALL], NUMBA_CACHE_DIR=str(tmp_path)).endswith("0.103515625")
