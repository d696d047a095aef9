# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The two-link planar arm against its closed forms and against published figures.

Axes along z, gravity along −y, angles counted from x. Tolerance of closed forms: 1e-13 relative (a dozen
products in double precision); of printed figures: half of their last digit.

"""

from __future__ import annotations

import numpy as np
import pytest

from prioritized_tracking.core.arm import dynamics, forward_dynamics, frame_motion, inertia, inverse_dynamics
from prioritized_tracking.core.laws import damped_inverse
from tests.arms import planar_arm, random_states

G = 9.81


def closed_form(l1, m1, lc1, I1, m2, lc2, I2, q, v):
    """
    Return M, C, g: Spong, Hutchinson & Vidyasagar, Robot Modeling and Control, planar elbow arm;
    Murray, Li & Sastry 1994, chapter 4.

    """
    c2, s2, c1, c12 = np.cos(q[1]), np.sin(q[1]), np.cos(q[0]), np.cos(q[0] + q[1])
    h = -m2 * l1 * lc2 * s2
    m12 = m2 * (lc2**2 + l1 * lc2 * c2) + I2
    m11 = m1 * lc1**2 + m2 * (l1**2 + lc2**2 + 2.0 * l1 * lc2 * c2) + I1 + I2
    M = np.array([[m11, m12], [m12, m2 * lc2**2 + I2]])
    C = np.array([[h * v[1], h * (v[0] + v[1])], [-h * v[0], 0.0]])
    g2 = m2 * lc2 * G * c12
    return M, C, np.array([(m1 * lc1 + m2 * l1) * G * c1 + g2, g2])


def tip(arm, q):
    """
    Return tip position and translational Jacobian in the plane, and the data.

    """
    data = arm.data()
    R, p, J = np.zeros((3, 3)), np.zeros(3), np.zeros((6, arm.n))
    inertia(arm, data, np.asarray(q, dtype=float))
    frame_motion(arm, data, arm.frame_id("tip"), arm.frame_id("base"), R, p, J)
    return p[:2], J[:2], data


def test_closed_form_of_m_c_g():
    """
    C element by element too: Christoffel symbols make it unique.

    """
    figures = {"l1": 0.7, "m1": 3.1, "lc1": 0.31, "I1": 0.21, "m2": 1.7, "lc2": 0.22, "I2": 0.08}
    arm = planar_arm((0.7, 0.5), masses=(3.1, 1.7), coms=(0.31, 0.22), inertias=(0.21, 0.08))
    data = arm.data()
    for q, v in random_states(arm, 50):
        dynamics(arm, data, q, v)
        M, C, g = closed_form(**figures, q=q, v=v)
        np.testing.assert_allclose(data.M, M, rtol=1e-13)
        np.testing.assert_allclose(data.C, C, rtol=1e-13, atol=1e-14)
        np.testing.assert_allclose(data.g, g, rtol=1e-13, atol=1e-13)


def test_figures_of_unit_rods():
    """
    Computed from the closed form by hand, 8 figures printed.

    """
    arm = planar_arm((1.0, 1.0))
    q, v, data = np.radians([30.0, 60.0]), np.array([1.0, -2.0]), arm.data()
    dynamics(arm, data, q, v)
    np.testing.assert_allclose(data.M, [[2.1666667, 0.5833333], [0.5833333, 0.3333333]], atol=5e-8)
    np.testing.assert_allclose(data.C @ v, [0.0, 0.4330127], atol=5e-8)
    np.testing.assert_allclose(data.g, [12.743564, 0.0], atol=5e-7)
    tau, a = np.array([16.493564, 1.266346]), np.array([2.0, -1.0])
    np.testing.assert_allclose(inverse_dynamics(arm, data, q, v, a), tau, atol=5e-7)
    np.testing.assert_allclose(forward_dynamics(arm, data, q, v, tau), a, atol=5e-6)  # 1/λmin(M) = 6


@pytest.mark.parametrize(
    ("lengths", "degrees", "expected"),
    [((1.0, 1.0), 30.0, 0.5), ((0.5, 0.3), 45.0, 0.1060660), ((1.0, 1.0), 90.0, 1.0)],
)
def test_manipulability(lengths, degrees, expected):
    """
    Yoshikawa 1985: w = √det(J Jᵀ) = l1 l2 |sin q2|.

    """
    _, J, _ = tip(planar_arm(lengths), [0.4, np.radians(degrees)])
    assert np.sqrt(np.linalg.det(J @ J.T)) == pytest.approx(expected, abs=5e-8)


def test_singular_values_at_the_right_angle():
    """
    Yoshikawa 1985, unit links at 90°: the golden ratio and its inverse.

    """
    _, J, _ = tip(planar_arm((1.0, 1.0)), [0.4, 0.5 * np.pi])
    np.testing.assert_allclose(np.linalg.svd(J, compute_uv=False), [1.618034, 0.618034], atol=5e-7)


@pytest.mark.parametrize(
    ("degrees", "expected", "half_digit"),
    [(90.0, 4.0 / 3.0, 1e-12), (60.0, 1.527778, 5e-7), (30.0, 3.083333, 5e-7), (5.0, 77.543556, 5e-7),
     (1.0, 1915.9148, 5e-5)],
)  # fmt: skip
def test_apparent_mass_of_the_tip(degrees, expected, half_digit):
    """
    Khatib 1995: 1/(uᵀ J M⁻¹ Jᵀ u), u along the second link, uniform rods of 1 kg and 1 m.

    """
    q = np.array([0.3, np.radians(degrees)])
    _, J, data = tip(planar_arm((1.0, 1.0)), q)
    u = np.array([np.cos(q.sum()), np.sin(q.sum())])
    assert 1.0 / (u @ J @ np.linalg.solve(data.M, J.T @ u)) == pytest.approx(expected, abs=half_digit)


@pytest.mark.parametrize("lengths", [(0.5, 0.3), (0.3, 0.5), (0.5, 0.3, 0.1), (0.2, 0.3, 0.25)])
def test_reach(lengths):
    """
    Planar reach: outer Σl, inner max(0, 2 max l − Σl); seen on a grid of joint angles (4° apart).

    """
    arm = planar_arm(lengths, limit=np.pi)
    grid = np.linspace(-np.pi, np.pi, 91)
    bends = np.array(np.meshgrid(*[grid] * (len(lengths) - 1))).reshape(len(lengths) - 1, -1).T
    far = [float(np.linalg.norm(tip(arm, np.concatenate(([0.2], bend)))[0])) for bend in bends]
    outer, inner = sum(lengths), max(0.0, 2.0 * max(lengths) - sum(lengths))
    assert max(far) == pytest.approx(outer, abs=1e-12)
    step = 0.5 * np.radians(4.0) * sum(lengths)  # half a grid step at full reach
    assert inner - 1e-12 <= min(far) <= inner + step


def test_inverse_kinematics_figure():
    """
    Closed form by the law of cosines: (0.4, 0.5) m with l = (0.5, 0.3) m, elbow as printed.

    """
    position, _, _ = tip(planar_arm((0.5, 0.3)), [0.4230221, 1.3352921])
    np.testing.assert_allclose(position, [0.4, 0.5], atol=0.8 * 1e-7)  # half a digit times the reach


@pytest.mark.parametrize(
    ("damping", "expected", "half_digit"),
    [(0.0, (-5.729, 11.459), 5e-4), (0.01, (-2.168623, 4.338227), 5e-7), (0.05, (-0.135878, 0.272799), 5e-7)],
)
def test_damped_least_squares_figures(damping, expected, half_digit):
    """
    Nakamura & Hanafusa 1986, Wampler 1986: Jᵀ (J Jᵀ + λ² I)⁻¹ ẋ near the stretched arm, with our J.

    """
    _, J, _ = tip(planar_arm((1.0, 1.0)), [0.0, np.radians(1.0)])
    np.testing.assert_allclose(damped_inverse(J, damping) @ [-0.1, 0.0], expected, atol=half_digit)


def test_damped_gain_is_bounded():
    """
    Same sources: σ/(σ² + λ²), whose maximum over σ is 1/(2λ), at σ = λ.

    """
    for sigma in np.geomspace(1e-4, 1.0, 41):
        J = np.diag([1.0, sigma])
        assert damped_inverse(J, 0.01)[1, 1] == pytest.approx(sigma / (sigma**2 + 1e-4), rel=1e-12)
    assert damped_inverse(np.diag([1.0, 0.01]), 0.01)[1, 1] == pytest.approx(50.0, rel=1e-12)
