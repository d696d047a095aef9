# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The two-link arm on which the passivity-based law was published.

Source: Slotine & Li, Applied Nonlinear Control, 1991, ch. 9 (parameters from memory): a horizontal
arm, q_d = (30°, 45°)(1 − cos 2πt), K_D = 100, Λ = 20, from rest. The largest errors were computed
once with a separate program; here they come from this package's arm and law, and from the closed
form of the arm.

"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from prioritized_tracking.charts import Joints
from prioritized_tracking.core.arm import build_arm, dynamics, forward_dynamics
from prioritized_tracking.core.channels import Channel
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.core.references import JointSample
from prioritized_tracking.core.stack import Stack, Task
from tests.arms import body, joint

M1, L1, ME, DELTA, I1, LC1, IE, LCE = 1.0, 1.0, 2.0, math.radians(30.0), 0.12, 0.5, 0.25, 0.6
A = np.array([
    I1 + M1 * LC1**2 + IE + ME * LCE**2 + ME * L1**2,
    IE + ME * LCE**2,
    ME * L1 * LCE * math.cos(DELTA),
    ME * L1 * LCE * math.sin(DELTA),
])  # fmt: skip
K_D, LAMBDA = 100.0, 20.0
DEGREE = math.radians(1.0)


def closed_form(a, q, v):
    """H and C of the arm with parameters a."""
    c2, s2 = math.cos(q[1]), math.sin(q[1])
    h = a[2] * s2 - a[3] * c2
    h12 = a[1] + a[2] * c2 + a[3] * s2
    H = np.array([[a[0] + 2 * a[2] * c2 + 2 * a[3] * s2, h12], [h12, a[1]]])
    C = np.array([[-h * v[1], -h * (v[0] + v[1])], [h * v[0], 0.0]])
    return H, C


def desired(t):
    """q_d and its first two derivatives, rad."""
    amplitude, w = np.radians([30.0, 45.0]), 2.0 * math.pi
    return (
        amplitude * (1.0 - math.cos(w * t)),
        amplitude * w * math.sin(w * t),
        amplitude * w**2 * math.cos(w * t),
    )


class Swing:
    """The reference as a path of the package."""

    duration, messages = math.inf, ()

    def sample(self, s, rate=1.0, acceleration=0.0):
        """At path time s, full pace."""
        return JointSample(*desired(s))


def book_arm():
    """The arm as a URDF: the second body's centre of mass stands at −δ to its link."""
    com = (LCE * math.cos(DELTA), -LCE * math.sin(DELTA), 0.0)
    parts = [
        body("base", 1.0, (0.0, 0.0, 0.0), (1.0, 1.0, 1.0)),
        body("first", M1, (LC1, 0.0, 0.0), (0.5 * I1, 0.5 * I1, I1)),
        body("second", ME, com, (0.5 * IE, 0.5 * IE, IE)),
        joint("q1", "base", "first"),
        joint("q2", "first", "second", xyz=(L1, 0.0, 0.0)),
    ]
    return build_arm(f'<robot name="book">{"".join(parts)}</robot>', gravity=(0.0, 0.0, 0.0))


def largest_error(torque, *, until=3.0, since=0.0, extra=0):
    """Largest |q − q_d| per joint, degrees, with q̈ from the closed form; extra states integrate 0."""

    def rate(t, state):
        q, v = state[:2], state[2:4]
        drive, more = torque(t, q, v, state[4:])
        H, C = closed_form(A, q, v)
        return np.concatenate([v, np.linalg.solve(H, drive - C @ v), more])

    times = np.linspace(0.0, until, 3001)
    start = np.zeros(4 + extra)
    states = solve_ivp(rate, (0.0, until), start, t_eval=times, method="LSODA", rtol=1e-9, atol=1e-11).y
    errors = np.abs(states[:2] - np.array([desired(t)[0] for t in times]).T)
    return errors[:, times >= since].max(axis=1) / DEGREE


def test_parameters_are_the_published_ones():
    """a = (3.34, .97, 1.0392, .6)."""
    np.testing.assert_allclose(A, [3.34, 0.97, 1.0392, 0.6], atol=5e-5)


def test_the_urdf_arm_is_the_closed_form():
    """H and C q̇ at random states; also the published H with its own C."""
    arm, rng = book_arm(), np.random.default_rng(0)
    data = arm.data()
    for _ in range(50):
        q, v, tau = rng.normal(size=(3, 2))
        H, C = closed_form(A, q, v)
        dynamics(arm, data, q, v)
        np.testing.assert_allclose(data.M, H, atol=1e-12)
        np.testing.assert_allclose(data.C @ v, C @ v, atol=1e-12)
        np.testing.assert_allclose(
            forward_dynamics(arm, arm.data(), q, v, tau), np.linalg.solve(H, tau - C @ v), atol=1e-11
        )


def test_proportional_derivative_control():
    """5.63° and 2.25° with K_P = 20 K_D."""

    def torque(t, q, v, _):
        q_d, v_d, _ = desired(t)
        return -K_D * LAMBDA * (q - q_d) - K_D * (v - v_d), np.zeros(0)

    np.testing.assert_allclose(largest_error(torque), [5.63, 2.25], atol=0.005)


def test_known_model():
    """
    0.0000° with the package's own law: a task on both joints with damping K_D and stiffness Λ K_D.

    Also: its torque is H q̈_r + C q̇_r − K_D s, which is the law of the book.

    """
    arm = book_arm()
    chart = Joints(names=["q1", "q2"])
    chart.bind(arm.joints, (False, False))
    both = Task(
        name="both", chart=chart, frame="", base="", reference="swing", stiffness=np.full(2, LAMBDA * K_D),
        damping=np.full(2, K_D), handover=(1e3, 1e4), force=np.zeros(2),
    )  # fmt: skip
    stack = Stack(tasks=(both,), posture=None, claim_speed=np.full(2, 100.0))
    channels = {"swing": Channel(path=Swing(), kind="joints", base="", leader="swing")}
    controller = Controller(arm, stack, channels)

    def torque(t, q, v, _):
        return controller.evaluate(t, q, v).torque, np.zeros(0)

    rng = np.random.default_rng(1)
    for t in rng.uniform(0.0, 1.0, 20):
        q, v = rng.normal(size=(2, 2))
        q_d, v_d, a_d = desired(t)
        H, C = closed_form(A, q, v)
        v_r, a_r = v_d - LAMBDA * (q - q_d), a_d - LAMBDA * (v - v_d)
        expected = H @ a_r + C @ v_r - K_D * (v - v_r)
        # q̈_r is a forward difference: off by 5e-7 s · d²q̇_r/dt² (900 rad/s³) · H (6)
        np.testing.assert_allclose(torque(t, q, v, None)[0], expected, atol=3e-3)
    assert np.all(largest_error(torque, until=1.0) < 5e-5)


@pytest.mark.parametrize(("until", "since", "expected"), [(3.0, 0.0, (3.25, 1.29)), (3.0, 2.0, (0.45, 0.22))])
def test_adaptive_law_from_zero(until, since, expected):
    """3.25° and 1.29° from zero parameters with Γ = diag(.03, .05, .1, .3), falling to .45° and .22°."""
    gamma = np.diag([0.03, 0.05, 0.1, 0.3])

    def torque(t, q, v, a_hat):
        q_d, v_d, a_d = desired(t)
        v_r, a_r = v_d - LAMBDA * (q - q_d), a_d - LAMBDA * (v - v_d)
        s = v - v_r
        Y = np.array([H @ a_r + C @ v_r for H, C in (closed_form(unit, q, v) for unit in np.eye(4))]).T
        return Y @ a_hat - K_D * s, -gamma @ Y.T @ s

    np.testing.assert_allclose(largest_error(torque, until=until, since=since, extra=4), expected, atol=0.005)
