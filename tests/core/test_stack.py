# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What tasks want in one state, written out from the charts.

"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from prioritized_tracking.charts import Cylinder, Cylindrical, Euler, Position, RotationVector
from prioritized_tracking.core import arm as arms
from prioritized_tracking.core.references import JointHold
from tests.arms import data_arm
from tests.stacks import REST, circle, controller, task

#: Frames the coordinates live in: the ground, and a link that moves with the arm.
BASES = ("panda_link0", "panda_link2")


def every_chart(base):
    """A controller with one task of each kind of chart, gains different in every coordinate."""
    arm = data_arm("panda", rotor_inertia=[0.1] * 7)
    gains = {"stiffness": np.array([800.0, 500.0, 90.0]), "damping": np.array([100.0, 50.0, 30.0])}
    charts = {
        "distance": Cylinder(radius=0.3),
        "round": Cylindrical(),
        "height": Position(axes="xz"),
        "zyz": Euler(sequence="zyz"),
        "xyz": Euler(sequence="xyz"),
        "turn": RotationVector(),
    }
    tasks = [task(name, chart, "panda_link8", base) for name, chart in charts.items()]
    for item in tasks:
        for key, values in gains.items():
            getattr(item, key)[:] = values[: item.m]
    tool = circle((0.35, 0.0, 0.5), 0.1)
    return controller(arm, tasks, tool=tool, joints=JointHold(REST), base=base)


def pose(control, base, q):
    """Pose of the tool in a base, from the two frames' poses in the root link."""
    places = []
    for name in ("panda_link8", base):
        R, p, J = np.eye(3), np.zeros(3), np.zeros((6, 7))
        data = control.arm.data()
        arms.inertia(control.arm, data, q)
        arms.frame_motion(
            control.arm, data, control.arm.frame_id(name), control.arm.frame_id("panda_link0"), R, p, J
        )
        places.append((R, p))
    (R, p), (R_b, p_b) = places
    return R_b.T @ R, R_b.T @ (p - p_b)


def velocity(control, base, q, v, h=1e-6):
    """(v, ω) of the tool relative to a base, in its axes: central differences of the pose."""
    (R1, p1), (R0, p0) = (pose(control, base, q + s * h * v) for s in (1.0, -1.0))
    W = (R1 - R0) / (2 * h) @ pose(control, base, q)[0].T
    return np.concatenate([(p1 - p0) / (2 * h), [W[2, 1], W[0, 2], W[1, 0]]])


def evaluated(chart, R, p):
    """(x, rows, rate, validity) of a chart at a pose, fresh arrays."""
    m = len(chart.coordinates)
    x, rows, rate = np.zeros(m), np.zeros((m, 6)), np.eye(m)
    return x, rows, rate, chart.evaluate(R, p, x, rows, rate)


@pytest.mark.parametrize("base", BASES)
@pytest.mark.parametrize("seed", range(4))
def test_what_each_task_wants_is_the_formula(base, seed):
    """
    J q̇ = c · rows · V and ν_r = c · rate · (ẋ_d − k_p x̃), V of the tool from finite differences.

    c is the product of both validities; ẋ_d = rate_d⁻¹ rows_d V_d at the reference. For the rotation
    vector ν_r = c (R R_dᵀ ω_d − k_p log(R R_dᵀ)).

    """
    control, rng = every_chart(base), np.random.default_rng(seed)
    q, v = REST + rng.uniform(-0.4, 0.4, 7), rng.normal(size=7)
    control.evaluate(1.3, q, v)
    claims, stack = control._here.room.claims, control.stack
    (R, p), V = pose(control, base, q), velocity(control, base, q, v)
    target = control.channels["tool"].path.sample(1.3)
    for i, item in enumerate(stack.tasks[:-1]):
        x, rows, rate, c = evaluated(item.chart, R, p)
        x_d, rows_d, rate_d, c_d = evaluated(item.chart, target.R, target.p)
        error = np.zeros(item.m)
        item.chart.difference(x, x_d, error)
        wanted = np.linalg.solve(rate_d, rows_d @ target.V) - item.stiffness / item.damping * error
        mine = slice(stack.first_row[i], stack.first_row[i + 1])
        assert claims.validity[i] == pytest.approx(c * c_d)
        np.testing.assert_allclose(claims.nu[mine], c * c_d * (rate @ wanted), atol=1e-9)
        # central differences: 1e-16/1e-6 from rounding, (1e-6)² from curvature
        np.testing.assert_allclose(claims.J[mine] @ v, c * c_d * rows @ V, atol=1e-8)
    item, mine = stack.tasks[-1], slice(stack.first_row[-2], stack.first_row[-1])
    turn = Rotation.from_matrix(R @ target.R.T).as_rotvec()
    c = claims.validity[-1]
    wanted = R @ target.R.T @ target.V[3:] - item.stiffness / item.damping * turn
    np.testing.assert_allclose(claims.nu[mine], c * wanted, atol=1e-9)
    np.testing.assert_allclose(claims.J[mine] @ v, c * V[3:], atol=1e-8)


def test_the_states_of_the_test_above_see_fades_and_full_validity():
    """Otherwise c would not be tested."""
    seen = []
    for base in BASES:
        for seed in range(4):
            control, rng = every_chart(base), np.random.default_rng(seed)
            control.evaluate(1.3, REST + rng.uniform(-0.4, 0.4, 7), np.zeros(7))
            seen += control._here.room.claims.validity.tolist()
    assert any(0.0 < c < 1.0 for c in seen)
    assert any(c == 1.0 for c in seen)
