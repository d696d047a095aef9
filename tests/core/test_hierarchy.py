# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The hierarchy against its textbook form, and every property it promises.

"""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from prioritized_tracking.core import branches as br
from prioritized_tracking.core.claims import Claims
from prioritized_tracking.core.hierarchy import hierarchy, largest_eigenvalue, principal, small_inverse
from prioritized_tracking.offline.textbook import TextbookTask, blended

PROMISED = 1e-9


def random_inertia(rng, n):
    """An inertia matrix with eigenvalues between 0.05 and 5 kg·m²."""
    Q, _ = np.linalg.qr(rng.normal(size=(n, n)))
    M = Q @ np.diag(np.exp(rng.uniform(np.log(0.05), np.log(5.0), n))) @ Q.T
    return 0.5 * (M + M.T)


def solve(M, tasks, posture=None, posture_damping=0.0, claim_speed=None):
    """Run the kernel on textbook tasks; returns (q̇_r, feedback matrix, push, report, count, branches)."""
    n = M.shape[0]
    sizes = [len(task.nu) for task in tasks]
    L = np.linalg.cholesky(M)
    gains = br.Gains(
        first_row=np.cumsum([0, *sizes]),
        damping=np.concatenate([task.damping for task in tasks]),
        force=np.concatenate([np.zeros(len(t.nu)) if t.force is None else t.force for t in tasks]),
        band=np.array([task.band for task in tasks], dtype=float),
        has_posture=posture is not None,
        posture_damping=posture_damping,
        claim_speed=np.full(n, np.inf) if claim_speed is None else claim_speed,
    )
    claims = Claims(
        L=L,
        L_inverse=np.linalg.inv(L),
        J=np.vstack([task.J for task in tasks]),
        nu=np.concatenate([task.nu for task in tasks]),
        validity=np.array([task.c for task in tasks]),
        posture=np.zeros(n) if posture is None else posture[0],
        posture_feed_forward=np.zeros(n) if posture is None else posture[1],
    )
    branches = br.allocate_branches(n, len(tasks), max(sizes))
    count, _ = hierarchy(gains, claims, branches, True)
    report, D, push = np.zeros((2, len(tasks) + 1)), np.zeros((n, n)), np.zeros(n)
    br.blend(branches, count, 0.0, report, D, push)
    velocity = (branches.weight[:count] @ branches.u[:count]) @ claims.L_inverse
    return velocity, L @ D @ L.T, L @ push, report, count, branches


def random_stack(rng, n, sizes, *, spread=3.0):
    """Random tasks whose directions scatter around their bands."""
    tasks = []
    for m in sizes:
        J = rng.normal(size=(m, n)) * np.exp(rng.uniform(-spread, 0.0, (m, 1)))
        tasks.append(
            TextbookTask(
                J=J, nu=rng.normal(size=m), c=rng.uniform(0.2, 1.0), damping=rng.uniform(1.0, 100.0, m),
                band=(2.0, 200.0), force=rng.normal(size=m),
            )
        )  # fmt: skip
    return tasks


@pytest.mark.parametrize("sizes", [(1,), (2, 2), (1, 1, 2, 3, 3), (3, 3, 3), (6, 2)])
@pytest.mark.parametrize("seed", range(6))
def test_equals_the_textbook_form_inside_and_outside_bands(sizes, seed):
    """Source: independent naive version, offline/textbook.py; no more than 16 branches are met."""
    rng = np.random.default_rng(seed)
    n = 7
    M = random_inertia(rng, n)
    tasks = random_stack(rng, n, sizes)
    for i, task in enumerate(tasks):  # one task in its band at most: few branches
        if i != seed % len(tasks):
            task.band = (1e3, 1e5)
    posture = (rng.normal(size=n), 0.1 * rng.normal(size=n))
    claim_speed = rng.uniform(0.3, 2.0, n)
    velocity, feedback, push, report, count, _ = solve(M, tasks, posture, 40.0, claim_speed)
    expected = blended(M, tasks, posture, 40.0, claim_speed)
    assert count == len(expected.leaves)
    scale = np.abs(expected.velocity).max()
    np.testing.assert_allclose(velocity, expected.velocity, atol=PROMISED * scale)
    np.testing.assert_allclose(feedback, expected.feedback, atol=PROMISED * np.abs(expected.feedback).max())
    np.testing.assert_allclose(push, expected.push, atol=PROMISED * np.abs(expected.push).max())
    np.testing.assert_allclose(report[0], expected.shares, atol=PROMISED)
    heaviest = max(expected.leaves)
    np.testing.assert_allclose(report[1], heaviest[2], rtol=1e-6)  # 1/λ up to 1e5 of an M⁻¹ up to 20


def exact_inverse(G):
    """Gauss-Jordan in rational numbers: no pivot of a positive definite matrix is zero."""
    k = len(G)
    rows = [
        [Fraction(x) for x in row] + [Fraction(int(i == j)) for j in range(k)]
        for i, row in enumerate(G.tolist())
    ]
    for i in range(k):
        rows[i] = [x / rows[i][i] for x in rows[i]]
        for r in set(range(k)) - {i}:
            rows[r] = [x - rows[r][i] * y for x, y in zip(rows[r], rows[i], strict=True)]
    return np.array([[float(x) for x in row[k:]] for row in rows])


@pytest.mark.parametrize("k", [1, 2, 3])
@pytest.mark.parametrize("scale", [1e-6, 1.0, 1e6])
def test_the_short_way_is_taken_only_where_it_is_accurate(k, scale):
    """
    Whatever the units: some 1e-16/1e-7 of the inverse at most, else the eigenvalues are asked.

    """
    rng, taken = np.random.default_rng(k), 0
    for _ in range(300):
        Q, _ = np.linalg.qr(rng.normal(size=(k, k)))
        A = Q * np.sqrt(scale * 10.0 ** rng.uniform(-9.0, 0.0, k))
        inverse = np.zeros((k, k))
        norm = small_inverse(A @ A.T, inverse)
        if norm < np.inf:
            taken += 1
            exact = exact_inverse(A @ A.T)
            np.testing.assert_allclose(inverse, exact, atol=1e-8 * np.abs(exact).max(), rtol=0.0)
            assert norm >= np.linalg.norm(exact, 2) * (1.0 - 1e-8)
    assert taken > 30


def test_some_of_the_random_stacks_have_several_branches():
    """Otherwise the test above would not see a hand-over."""
    counts = []
    for seed in range(6):
        rng = np.random.default_rng(seed)
        M = random_inertia(rng, 7)
        counts.append(solve(M, random_stack(rng, 7, (2, 2)), (np.zeros(7), np.zeros(7)), 40.0)[4])
    assert max(counts) > 3


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(2, 9), st.lists(st.integers(1, 4), min_size=1, max_size=5))
def test_shares_sum_to_n_and_feedback_is_positive_definite(seed, n, sizes):
    """Whatever the state: Σ shares = n, D symmetric, and > 0 since the stack is complete."""
    rng = np.random.default_rng(seed)
    M = random_inertia(rng, n)
    tasks = random_stack(rng, n, sizes, spread=8.0)
    _, feedback, _, report, count, branches = solve(M, tasks, (np.zeros(n), np.zeros(n)), 40.0, np.ones(n))
    assert abs(report[0].sum() - n) < PROMISED
    assert abs(branches.weight[:count].sum() - 1.0) < PROMISED
    for b in range(count):  # shares are counted; the projectors must agree with the count
        chart_rank = branches.owned[b, :-1].sum()
        assert abs(np.trace(branches.N[b]) - (n - chart_rank)) < 1e-7
    np.testing.assert_allclose(feedback, feedback.T, atol=1e-9 * np.abs(feedback).max())
    assert np.linalg.eigvalsh(feedback).min() > 0.0


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_agreement_is_reproduced_exactly(seed):
    """If all charts and the posture ask for one motion, q̇_r is that motion, inside bands too."""
    rng = np.random.default_rng(seed)
    n = 7
    M = random_inertia(rng, n)
    motion = rng.normal(size=n)
    tasks = random_stack(rng, n, (2, 1, 3, 3), spread=6.0)
    for task in tasks:
        task.nu = task.J @ motion
    speed = np.full(n, 0.05)  # far below the motion: the claim limit must not touch agreeing references
    velocity, *_ = solve(M, tasks, (motion, motion), 40.0, speed)
    np.testing.assert_allclose(velocity, motion, atol=1e-8)


@pytest.mark.parametrize("seed", range(5))
def test_lower_tasks_do_not_touch_higher_ones_where_all_is_regular(seed):
    """Every owned 1/λ is below m_lo/4: J_i q̇_r of a higher task ignores what lower tasks ask."""
    rng = np.random.default_rng(seed)
    n = 7
    M = random_inertia(rng, n)
    tasks = random_stack(rng, n, (2, 2, 2), spread=0.1)
    for task in tasks:
        task.band = (1e4, 1e5)
    posture = (rng.normal(size=n), np.zeros(n))
    first, *_ = solve(M, tasks, posture, 40.0, np.full(n, 1e3))
    tasks[2].nu = tasks[2].nu + 100.0
    second, *_ = solve(M, tasks, (posture[0] + 50.0, posture[1]), 40.0, np.full(n, 1e3))
    assert np.abs(second - first).max() > 1.0
    for task in tasks[:2]:
        np.testing.assert_allclose(task.J @ second, task.J @ first, atol=1e-9)
        np.testing.assert_allclose(task.J @ first, task.nu, atol=1e-9)


def test_dynamic_consistency_of_the_owned_directions():
    """Khatib 1987: J M⁻¹ Nᵀ = 0 for the projector N in joint coordinates; N² = N (Penrose 1955)."""
    rng = np.random.default_rng(3)
    n = 6
    M = random_inertia(rng, n)
    tasks = random_stack(rng, n, (2, 2), spread=0.1)
    for task in tasks:
        task.band = (1e4, 1e5)
    *_, branches = solve(M, tasks, (np.zeros(n), np.zeros(n)), 40.0)
    L = np.linalg.cholesky(M)
    N = np.linalg.inv(L).T @ branches.N[0] @ L.T
    np.testing.assert_allclose(N @ N, N, atol=1e-10)
    for task in tasks:
        np.testing.assert_allclose(task.J @ N, 0.0, atol=1e-10)
        np.testing.assert_allclose(task.J @ np.linalg.inv(M) @ N.T, 0.0, atol=1e-10)


def one_parameter_family(kind):
    """Stacks along a line of states: a direction fades out, or two eigenvalues cross inside a band."""
    rng = np.random.default_rng(11)
    n = 4
    M = random_inertia(rng, n)
    W = np.linalg.cholesky(M).T  # rows given in whitened coordinates become rows · Lᵀ in joints
    Q, _ = np.linalg.qr(rng.normal(size=(n, n)))
    nu, posture = rng.normal(size=2), rng.normal(size=n)

    def at(z):
        if kind == "fade":
            scales = np.array([1.0, 10.0 ** (-z)])
        elif kind == "crossing":
            scales = np.array([0.10 * (1.0 + 0.3 * z), 0.10 * (1.0 - 0.3 * z)])
        else:  # avoided crossing: a coupling keeps the eigenvalues apart by a little
            G = 0.01 * np.array([[1 + 0.3 * z, 1e-4], [1e-4, 1 - 0.3 * z]])
            lam, U = np.linalg.eigh(G)
            J = (U * np.sqrt(lam)) @ U.T @ Q[:2]
            return [TextbookTask(J @ W, nu, 1.0, np.array([50.0, 80.0]), (20.0, 2000.0))]
        J = scales[:, None] * Q[:2]
        return [TextbookTask(J @ W, nu, 1.0, np.array([50.0, 80.0]), (20.0, 2000.0))]

    return M, at, posture


@pytest.mark.parametrize(
    ("kind", "low", "high"), [("fade", 0.0, 3.0), ("crossing", -1.0, 1.0), ("near", -1.0, 1.0)]
)
@pytest.mark.parametrize("speed", [np.inf, 0.2])
def test_continuous_through_bands_and_crossings(kind, low, high, speed):
    """
    Steps shrink in proportion to the step of the state: no jump hides anywhere on the line.

    Halving the step of a Lipschitz function halves its largest change, a jump would keep it.

    """
    M, at, posture = one_parameter_family(kind)
    changes, counts = [], set()
    for steps in (2000, 4000):
        values = []
        for z in np.linspace(low, high, steps + 1):
            velocity, feedback, _, report, count, _ = solve(
                M, at(z), (posture, np.zeros(4)), 40.0, np.full(4, speed)
            )
            counts.add(count)
            values.append(np.concatenate([velocity, feedback.ravel(), report[0]]))
        changes.append(np.abs(np.diff(values, axis=0)).max(axis=0))
    assert max(counts) > 1, "the line must lead through a hand-over"
    moving = changes[0] > 1e-9
    assert np.all(changes[1][moving] < 0.6 * changes[0][moving])


def test_twice_continuously_differentiable_where_a_direction_fades():
    """Second differences converge: their changes shrink with the step (distinct eigenvalues)."""
    M, at, posture = one_parameter_family("fade")

    def value(z):
        return solve(M, at(z), (posture, np.zeros(4)), 40.0, np.full(4, np.inf))[0]

    jumps = []
    for steps in (400, 800):
        z, dz = np.linspace(0.3, 2.7, steps + 1, retstep=True)
        v = np.array([value(x) for x in z])
        second = np.diff(v, 2, axis=0) / dz**2
        jumps.append(np.abs(np.diff(second, axis=0)).max())
    assert jumps[1] < 0.65 * jumps[0]


def test_claim_limit_is_smooth_under_repeated_eigenvalues():
    """
    The directions of a repeated eigenvalue are arbitrary; turning the task's rows changes nothing.

    """
    rng = np.random.default_rng(5)
    n = 5
    M = random_inertia(rng, n)
    W = np.linalg.cholesky(M).T
    Q, _ = np.linalg.qr(rng.normal(size=(n, n)))
    nu, posture = rng.normal(size=3), (rng.normal(size=n), np.zeros(n))
    reference = None
    for seed in range(8):
        T, _ = np.linalg.qr(np.random.default_rng(seed).normal(size=(3, 3)))
        task = TextbookTask(T @ (0.15 * Q[:3] @ W), T @ nu, 1.0, np.full(3, 60.0), (20.0, 200.0))
        velocity, feedback, *_ = solve(M, [task], posture, 40.0, np.full(n, 0.1))
        if reference is None:
            reference = (velocity, feedback)
        np.testing.assert_allclose(velocity, reference[0], atol=1e-10)
        np.testing.assert_allclose(feedback, reference[1], atol=1e-8)


def test_claim_limit_bounds_the_weak_claim():
    """At the edge of its band, against a posture at rest, a task moves no joint faster than allowed."""
    n = 3
    J = np.array([[1e-3, 0.0, 0.0]])
    task = TextbookTask(J, np.array([1.0]), 1.0, np.array([10.0]), (1e4, 1e8))
    free = solve(np.eye(n), [task], (np.zeros(n), np.zeros(n)), 40.0)[0]
    held = solve(np.eye(n), [task], (np.zeros(n), np.zeros(n)), 40.0, np.full(n, 0.6))[0]
    assert abs(free[0]) > 100.0
    assert np.abs(held).max() <= 0.6 + 1e-12


def test_no_more_than_sixteen_branches_and_the_step_to_it_is_continuous():
    """Where the seventeenth branch appears its weight is zero, so dropping it changes nothing there."""
    rng = np.random.default_rng(2)
    n = 12
    M = random_inertia(rng, n)
    W = np.linalg.cholesky(M).T
    Q, _ = np.linalg.qr(rng.normal(size=(n, n)))

    def value(z):
        tasks = []
        for i, scale in enumerate((0.1, 0.12, 0.09, 0.11, 10.0 ** (-1.0 - 0.5 * z))):
            tasks.append(
                TextbookTask(scale * Q[i : i + 1] @ W, np.array([0.5 + i]), 1.0, np.ones(1), (10.0, 1000.0))
            )
        return solve(M, tasks, (np.zeros(n), np.zeros(n)), 40.0)

    line = np.linspace(-1.2, 2.0, 801)
    results = [value(z) for z in line]
    counts = [r[4] for r in results]
    assert max(counts) == br.MOST_BRANCHES
    assert 16 in counts
    assert any(r[3][0][4] in (0.0, 1.0) for r in results)  # the line starts or ends outside the fifth band
    for r in results:
        assert abs(r[3][0].sum() - n) < PROMISED
    v = np.array([r[0] for r in results])
    fine = np.array([value(z)[0] for z in np.linspace(-1.2, 2.0, 1601)])
    assert np.abs(np.diff(fine, axis=0)).max() < 0.6 * np.abs(np.diff(v, axis=0)).max()


def test_a_tie_of_all_weights_keeps_the_first_sixteen():
    """Nothing is positive after subtracting the seventeenth: the rule for ties."""
    branches = br.allocate_branches(2, 1, 3)
    branches.weight[:17] = 1.0 / 17
    branches.u[:17, 0] = np.arange(17)
    assert br.prune(branches, 17) == 16
    np.testing.assert_allclose(branches.weight[:16], 1.0 / 16)
    np.testing.assert_array_equal(branches.u[:16, 0], np.arange(16))


def test_gains_read_as_an_impedance_at_rest():
    """At rest, top task, c = 1: the torque is −Jᵀ(damping · ẋ̃ + stiffness · x̃), Hogan's impedance (1985)."""
    rng = np.random.default_rng(8)
    n = 6
    M = random_inertia(rng, n)
    J = rng.normal(size=(3, n))
    damping, stiffness, error, velocity = 120.0, 960.0, rng.normal(size=3) * 0.01, rng.normal(size=n)
    task = TextbookTask(J, -stiffness / damping * error, 1.0, np.full(3, damping), (1e4, 1e5))
    q_r, feedback, *_ = solve(M, [task], (np.zeros(n), np.zeros(n)), 0.0, np.full(n, 1e9))
    torque = -feedback @ (velocity - q_r)
    expected = -J.T @ (damping * (J @ velocity) + stiffness * error)
    np.testing.assert_allclose(torque, expected, rtol=1e-9)


@pytest.mark.parametrize("k", [1, 2, 3])
def test_largest_eigenvalue_in_closed_form_is_lapacks(k):
    """
    Also for repeated and tiny eigenvalues. Where two meet, the angle's arc cosine loses half of the digits.

    """
    rng = np.random.default_rng(k)
    spectra = [rng.uniform(0.1, 2.0, k) for _ in range(200)]
    spectra += [np.ones(k), np.full(k, 1e-12), np.r_[1.0, np.zeros(k - 1)], np.r_[np.ones(k - 1), 1e-14]]
    spectra += [np.r_[1.0 + 1e-9, np.ones(k - 1)], np.full(k, 1e80), np.zeros(k)]
    for spectrum in spectra:
        Q, _ = np.linalg.qr(rng.normal(size=(k, k)))
        G = Q @ np.diag(spectrum) @ Q.T
        G = 0.5 * (G + G.T)
        expected = np.linalg.eigvalsh(G)[-1]
        assert abs(largest_eigenvalue(G) - expected) <= 3e-8 * abs(expected) + 1e-300


@pytest.mark.parametrize("k", range(1, 7))
def test_principal_directions_diagonalise_from_high_to_low(k):
    """Residual of G U = U diag(λ), with repeated and tiny eigenvalues; the order numba and NumPy agree on."""
    rng = np.random.default_rng(k)
    for spectrum in (rng.uniform(0, 1, k), np.ones(k), np.r_[np.ones(k - 1), 1e-15], np.zeros(k)):
        Q, _ = np.linalg.qr(rng.normal(size=(k, k)))
        G = Q @ np.diag(spectrum) @ Q.T
        G = 0.5 * (G + G.T)
        lam, U = principal(G)
        np.testing.assert_allclose(G @ U, U * lam, atol=1e-14 * k)
        np.testing.assert_allclose(U.T @ U, np.eye(k), atol=1e-14 * k)
        np.testing.assert_array_equal(lam, np.sort(lam)[::-1])
        np.testing.assert_allclose(lam, np.linalg.eigvalsh(G)[::-1], atol=1e-14 * k)
