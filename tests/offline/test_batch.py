# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Many states at once give what one after another gives, in any number of processes.

"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import prioritized_tracking as pt
from prioritized_tracking.errors import InputError
from prioritized_tracking.offline import batch
from prioritized_tracking.offline.batch import evaluate_in_processes, evaluate_states

CONFIG = Path(__file__).parents[2] / "config"


@pytest.fixture(scope="module")
def control():
    """The demo's controller."""
    return pt.load(CONFIG / "demo_stack.yaml")


def states(control, count, seed=0):
    """States near the path; near hand-overs too."""
    rng = np.random.default_rng(seed)
    t = np.linspace(0.0, control.duration, count)
    joints = control.channels["elbow"].path
    q = np.array([joints.sample(s).q for s in t]) + 0.02 * rng.normal(size=(count, 7))
    return t, q, 0.1 * rng.normal(size=(count, 7))


def test_rows_are_what_evaluate_says(control):
    """Torque, shares, errors and validity of each state, and D by its effect on the torque."""
    t, q, v = states(control, 25)
    found = evaluate_states(control, t, q, v)
    assert np.all(found["solved"] == 1.0)
    for k in range(len(t)):
        command = control.evaluate(t[k], q[k], v[k])
        np.testing.assert_array_equal(found["torque"][k], command.torque)
        np.testing.assert_array_equal(found["velocity"][k], command.joint_velocity_reference)
        np.testing.assert_array_equal(found["share"][k], [r.share for r in command.tasks.values()])
        np.testing.assert_array_equal(
            found["error"][k], np.concatenate([r.error for r in list(command.tasks.values())[:-1]])
        )
        np.testing.assert_array_equal(found["D"][k], control.law.D)


def test_without_torque_the_rest_is_the_same(control):
    """Only the twin and the arm's velocity terms are left out."""
    t, q, _ = states(control, 40)
    whole, part = evaluate_states(control, t, q), evaluate_states(control, t, q, torque=False)
    assert set(whole) - set(part) == {"torque"}
    for key, array in part.items():
        np.testing.assert_allclose(array, whole[key], rtol=1e-12, atol=1e-12, err_msg=key)


def test_processes_change_nothing(control, monkeypatch):
    """The same numbers in the same order, with progress up to 1."""
    monkeypatch.setattr(batch, "_CHUNK", 30)
    t, q, v = states(control, 100)
    seen = []
    alone = evaluate_states(control, t, q, v)
    spread = evaluate_in_processes(control, t, q, v, processes=2, progress=seen.append)
    for key, array in alone.items():
        np.testing.assert_array_equal(spread[key], array, err_msg=key)
    assert seen == [0.25, 0.5, 0.75, 1.0]


def test_a_state_without_solution_is_marked_and_the_others_are_not_lost(control):
    """NaN in one row."""
    t, q, v = states(control, 5)
    q[2, 3] = np.nan
    for torque in (True, False):
        found = evaluate_states(control, t, q, v, torque=torque)
        np.testing.assert_array_equal(found["solved"], [1, 1, 0, 1, 1])
        assert np.all(np.isnan(found["velocity"][2]))
        assert np.all(np.isfinite(found["velocity"][[0, 1, 3, 4]]))


def test_shapes_that_do_not_belong_together_are_refused(control):
    """With the shapes expected and got."""
    t, q, _ = states(control, 5)
    with pytest.raises(InputError, match=r"\(S, 7\)"):
        evaluate_states(control, t, q[:4])
    with pytest.raises(InputError, match=r"\(S, 7\)"):
        evaluate_states(control, t, q[:, :6])


def test_laws_without_shares_need_torque():
    """The message says what is missing."""
    control = pt.load(CONFIG / "planar_stack.yaml", law="joint_impedance")
    with pytest.raises(InputError, match="has no shares"):
        evaluate_states(control, [0.0], np.zeros((1, 2)), torque=False)
