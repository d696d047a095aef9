# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Identities that published definitions impose, on the inertia and Jacobians of real arms.

The inverse looked at is the one the hierarchy itself produces for a single task that owns everything: its
answer to unit task velocities. Tolerance: it works on A Aᵀ, which squares the condition number, here at
most 1e2: 1e4 × 1e-16 × some tens of terms; 1e-10 of the largest entry is asked for.

"""

from __future__ import annotations

import numpy as np
import pytest

from prioritized_tracking.core.arm import dynamics, frame_motion, inertia
from prioritized_tracking.core.branches import Gains, allocate_branches
from prioritized_tracking.core.claims import Claims
from prioritized_tracking.core.hierarchy import hierarchy
from tests.arms import data_arm, random_states

TOOLS = {"panda": "panda_link8", "xarm7": "link_eef", "ur10": "tool0"}
CASES = [(name, rows) for name in TOOLS for rows in ("translation", "rotation", "pose")]
ROWS = {"translation": slice(0, 3), "rotation": slice(3, 6), "pose": slice(0, 6)}
CLOSE = 1e-10


def regular_states(name, rows):
    """
    Yield M, J at random states where the task has full rank, its condition number below 1e2.

    """
    arm = data_arm(name)
    arm = arm.with_changes(rotor_inertia=np.full(arm.n, 0.1))  # as drives of this size have
    data, base = arm.data(), arm.frame_id(arm.root)
    R, p, J = np.zeros((3, 3)), np.zeros(3), np.zeros((6, arm.n))
    found = 0
    for q, _ in random_states(arm, 80):
        inertia(arm, data, q)
        frame_motion(arm, data, arm.frame_id(TOOLS[name]), base, R, p, J)
        L = np.linalg.cholesky(data.M)
        task = J[ROWS[rows]]
        if np.linalg.cond(np.linalg.solve(L, task.T)) < 1e2:
            found += 1
            yield data.M.copy(), task.copy()
    assert found >= 10


def own_inverse(M, J):
    """
    Return the weighted inverse (n, m) and the null-space projector (n, n) the hierarchy works with.

    """
    m, n = J.shape
    L = np.linalg.cholesky(M)
    gains = Gains(
        first_row=np.array([0, m]),
        damping=np.ones(m),
        force=np.zeros(m),
        band=np.array([[1e12, 1e13]]),  # kg: everything is owned
        has_posture=False,
        posture_damping=0.0,
        claim_speed=np.full(n, np.inf),
    )
    inverse = np.zeros((n, m))
    for k in range(m):
        claims = Claims(
            L=L,
            L_inverse=np.linalg.inv(L),
            J=J,
            nu=np.eye(m)[k],
            validity=np.ones(1),
            posture=np.zeros(n),
            posture_feed_forward=np.zeros(n),
        )
        branches = allocate_branches(n, 1, m)
        count, _ = hierarchy(gains, claims, branches, False)
        assert count == 1
        inverse[:, k] = np.linalg.solve(L.T, branches.u[0])
    return inverse, np.linalg.solve(L.T, branches.N[0] @ L.T)


def close(a, b, scale):
    """
    Compare, relative to a scale of the terms that went in.

    """
    np.testing.assert_allclose(a, b, atol=CLOSE * scale, rtol=0.0)


@pytest.mark.parametrize(("name", "rows"), CASES)
def test_weighted_penrose_conditions(name, rows):
    """
    Penrose 1955; weighted form: Ben-Israel & Greville, Generalized Inverses.

    """
    for M, J in regular_states(name, rows):
        P, _ = own_inverse(M, J)
        size = np.abs(J).max() * np.abs(P).max()
        close(J @ P @ J, J, size * np.abs(J).max())
        close(P @ J @ P, P, size * np.abs(P).max())
        close(J @ P, (J @ P).T, size)
        close(M @ P @ J, (M @ P @ J).T, size * np.abs(M).max())


@pytest.mark.parametrize(("name", "rows"), CASES)
def test_equals_the_whitened_and_the_dynamically_consistent_inverse(name, rows):
    """
    L⁻ᵀ pinv(J L⁻ᵀ) by NumPy's SVD; M⁻¹ Jᵀ (J M⁻¹ Jᵀ)⁻¹ of Khatib 1987.

    """
    for M, J in regular_states(name, rows):
        P, _ = own_inverse(M, J)
        L = np.linalg.cholesky(M)
        whitened = np.linalg.solve(L.T, np.linalg.pinv(np.linalg.solve(L, J.T).T))
        weighted = np.linalg.solve(M, J.T)
        scale = np.abs(P).max() * 1e2  # the normal form squares the condition number
        close(P, whitened, scale)
        close(P, weighted @ np.linalg.inv(J @ weighted), scale)


@pytest.mark.parametrize(("name", "rows"), CASES)
def test_null_space_is_idempotent_and_dynamically_consistent(name, rows):
    """
    N² = N, J N = 0, J M⁻¹ Nᵀ = 0: torques from the null space do not accelerate the task (Khatib 1987, 1995).

    """
    for M, J in regular_states(name, rows):
        P, N = own_inverse(M, J)
        size = max(1.0, np.abs(N).max())
        close(N @ N, N, size**2)
        close(N, np.eye(len(M)) - P @ J, size)
        close(J @ N, 0.0 * J, size * np.abs(J).max())
        close(J @ np.linalg.solve(M, N.T), 0.0 * J, size * np.abs(J).max() * np.abs(np.linalg.inv(M)).max())


@pytest.mark.parametrize("name", ["panda", "xarm7"])
def test_minimum_kinetic_energy(name):
    """
    Of all joint velocities with the same ẋ, P ẋ has the least kinetic energy, ½ ẋᵀ Λ ẋ (Khatib 1987).

    """
    rng = np.random.default_rng(3)
    for M, J in regular_states(name, "translation"):
        P, N = own_inverse(M, J)
        velocity = rng.normal(size=3)
        least = P @ velocity
        energy = velocity @ np.linalg.solve(J @ np.linalg.solve(M, J.T), velocity)
        assert least @ M @ least == pytest.approx(energy, rel=1e-9)
        other = least + N @ rng.normal(size=len(M))
        assert other @ M @ other > energy


@pytest.mark.parametrize("name", ["panda", "ur10", "kinova", "so100"])
def test_christoffel(name):
    """
    Ṁ = C + Cᵀ, hence Ṁ − 2C skew. Ṁ by central differences, step 1e-5 s: error h² M⃛/6 plus rounding/h, 1e-9.

    """
    arm = data_arm(name)
    data, h = arm.data(), 1e-5
    for q, v in random_states(arm, 25):
        dynamics(arm, data, q, v)
        C, scale = data.C.copy(), np.abs(data.M).max()
        inertia(arm, data, q + h * v)
        later = data.M.copy()
        inertia(arm, data, q - h * v)
        rate = (later - data.M) / (2.0 * h)
        np.testing.assert_allclose(rate, C + C.T, atol=1e-8 * scale)
        skew = rate - 2.0 * C
        np.testing.assert_allclose(skew, -skew.T, atol=2e-8 * scale)
        assert np.abs(C).max() > 1e-3 * scale  # it is not all zero


@pytest.mark.parametrize("name", ["panda", "ur10"])
def test_energy_balance(name):
    """
    Gravity is the gradient of the potential energy −Σ m gᵀ r, centres of mass from the URDF's own figures.

    """
    arm = data_arm(name, gravity=(3.0, -2.0, -9.0))
    data, links = arm.data(), arm.recipe.description.links
    base, R, p, J = arm.frame_id(arm.root), np.zeros((3, 3)), np.zeros(3), np.zeros((6, arm.n))
    for q, v in random_states(arm, 10):
        dynamics(arm, data, q, v)
        g = np.zeros(arm.n)
        for link in links.values():
            frame_motion(arm, data, arm.frame_id(link.name), base, R, p, J)
            centre = J[:3] - np.cross(R @ link.com, J[3:], axis=0)  # velocity of the centre: v + ω × r
            g -= link.mass * (arm.gravity @ centre)
        np.testing.assert_allclose(data.g, g, atol=1e-12 * max(1.0, np.abs(g).max()))
