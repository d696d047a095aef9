# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The hierarchy: a convex blend of exact prioritised solutions.

Everything happens in whitened coordinates u = Lᵀ q̇ with M = L Lᵀ, so that kinetic energy is ½‖u‖²
and the inertia-weighted pseudo-inverse (Khatib 1987) is the plain one. Continuous activation in null
spaces is known from Dietrich, Albu-Schäffer & Hirzinger (2012); the blend of whole exact solutions
with weights that sum to one is this package's own.

The functions use a subset of NumPy over plain arrays, so that they can be compiled.

"""

from __future__ import annotations

import math

import numpy as np

from prioritized_tracking.compiled import compiled
from prioritized_tracking.core.branches import (
    MOST_BRANCHES,
    Branches,
    Gains,
    copy_branch,
    prune,
    root,
)
from prioritized_tracking.core.claims import Claims
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.core.smooth import saturation, smoothstep

_LN4 = math.log(4.0)


@compiled
def hierarchy(gains: Gains, claims: Claims, branches: Branches, with_feedback: bool) -> tuple[int, bool]:
    """
    Follow the priority list from the first task to the posture.

    Parameters
    ----------
    gains, claims : the stack, and what it wants in this state.
    branches : room, see ``allocate_branches``; filled.
    with_feedback : False skips feedback and push, which the finite-difference twin does not need.

    Returns
    -------
    count : how many branches are in use.
    pruned : whether more than ``MOST_BRANCHES`` were met on the way.

    """
    J_hat = claims.J @ claims.L_inverse.T
    feed_forward = claims.posture_feed_forward @ claims.L
    count = root(branches, claims.L.shape[0])
    pruned = False
    for i in range(claims.validity.shape[0]):
        rows = J_hat[gains.first_row[i] : gains.first_row[i + 1]]
        for b in range(count):
            count = visit(i, b, count, gains, claims, rows, feed_forward, branches, with_feedback)
        if count > MOST_BRANCHES:
            count = prune(branches, count)
            pruned = True
    if gains.has_posture:
        for b in range(count):
            close(b, gains, claims, feed_forward, branches)
    return count, pruned


@compiled
def visit(
    i: int,
    b: int,
    count: int,
    gains: Gains,
    claims: Claims,
    J_hat: Array,
    feed_forward: Array,
    branches: Branches,
    with_feedback: bool,
) -> int:
    """
    Let task i own its directions in branch b.

    A = Ĵ_i N is what higher tasks have left of the task. Most of the time it owns nothing of that,
    or all; else the branch splits. Ĵ_i arrives as ``J_hat``.

    Returns
    -------
    int
        Number of branches now: b itself, changed in place, and its siblings at the end.

    """
    low, high = gains.band[i, 0], gains.band[i, 1]
    A = J_hat @ branches.N[b]
    gram = A @ A.T
    trace = 0.0
    for k in range(gram.shape[0]):
        trace += gram[k, k]
    if trace * high <= 1.0:  # every λ <= trace: nothing is owned here
        return count
    residual = claims.nu[gains.first_row[i] : gains.first_row[i + 1]] - J_hat @ branches.u[b]
    inverse = np.empty_like(gram)
    if small_inverse(gram, inverse) <= 0.25 * low:  # every 1/λ <= norm: all is owned, h = 0
        own_all(i, b, gains, claims, A, inverse, residual, branches, with_feedback)
        return count
    return split(i, b, count, gains, claims, A, gram, residual, feed_forward, branches, with_feedback)


@compiled
def small_inverse(G: Array, out: Array) -> float:
    """
    Inverse of a symmetric matrix of up to three rows by its cofactors, and its Frobenius norm.

    Returns
    -------
    float
        ‖G⁻¹‖_F, an upper bound of every 1/λ; inf if G is too large or too near singular to tell.

    """
    k = G.shape[0]
    if k == 1:
        out[0, 0] = 1.0 / G[0, 0]
        return float(out[0, 0])
    if k > 3:
        return np.inf
    a, b, d, f = G[0, 0], G[0, 1], G[1, 1], G[k - 1, k - 1]
    if k == 2:
        determinant = a * d - b * b
        out[0, 0], out[0, 1], out[1, 0], out[1, 1] = d, -b, -b, a
    else:
        c, e = G[0, 2], G[1, 2]
        p, q, r = d * f - e * e, c * e - b * f, b * e - c * d
        determinant = a * p + b * q + c * r
        out[0, 0], out[0, 1], out[0, 2] = p, q, r
        out[1, 0], out[1, 1], out[1, 2] = q, a * f - c * c, b * c - a * e
        out[2, 0], out[2, 1], out[2, 2] = r, b * c - a * e, a * d - b * b
    size = a + d + (f if k == 3 else 0.0)
    if not determinant > 1e-7 * size**k:  # cofactors cancel: the error is some 1e-16 size**k/determinant
        return np.inf
    out /= determinant
    return math.sqrt((out * out).sum())


@compiled
def largest_eigenvalue(G: Array) -> float:
    """
    Largest eigenvalue of a symmetric matrix of up to three rows, in closed form.

    With q the mean eigenvalue and p² the mean square of the deviations over 2, the eigenvalues are
    q + 2 p cos((φ + 2 π k)/3), cos φ = det((G − q I)/p)/2 (Smith 1961). Exact to about 1e-8 where
    two of them meet.

    """
    k = G.shape[0]
    if k == 1:
        return float(G[0, 0])
    a, b, d = G[0, 0], G[0, 1], G[1, 1]
    if k == 2:
        return float(0.5 * (a + d) + math.sqrt(0.25 * (a - d) * (a - d) + b * b))
    c, e, f = G[0, 2], G[1, 2], G[2, 2]
    q = (a + d + f) / 3.0
    a, d, f = a - q, d - q, f - q
    p = math.sqrt((a * a + d * d + f * f + 2.0 * (b * b + c * c + e * e)) / 6.0)
    if p <= 1e-150:
        return float(q)
    half = 0.5 * (a * (d * f - e * e) - b * (b * f - c * e) + c * (b * e - c * d)) / p / p / p
    return float(q + 2.0 * p * math.cos(math.acos(min(1.0, max(-1.0, half))) / 3.0))


@compiled
def own_all(
    i: int,
    b: int,
    gains: Gains,
    claims: Claims,
    A: Array,
    inverse: Array,
    residual: Array,
    branches: Branches,
    with_feedback: bool,
) -> None:
    """
    Task i owns all of its directions in branch b, and none of them is weak.

    Σ_k y_k b_k = Aᵀ (A Aᵀ)⁻¹ (ν_r − Ĵ u), Σ_k b_k b_kᵀ = Aᵀ (A Aᵀ)⁻¹ A, and the feedback is
    Aᵀ K A/c²: what ``own`` computes direction by direction.

    """
    first, last = gains.first_row[i], gains.first_row[i + 1]
    pseudo = inverse @ A
    branches.owned[b, i] = last - first
    branches.u[b] += residual @ pseudo
    branches.N[b] -= A.T @ pseudo
    if with_feedback:
        branches.apparent[b, i] = largest_eigenvalue(inverse)
        K = gains.damping[first:last] / claims.validity[i] ** 2
        branches.feedback[b] += (A.T * K) @ A
        branches.push[b] += gains.force[first:last] @ A


@compiled
def split(
    i: int,
    b: int,
    count: int,
    gains: Gains,
    claims: Claims,
    A: Array,
    gram: Array,
    residual: Array,
    feed_forward: Array,
    branches: Branches,
    with_feedback: bool,
) -> int:
    """
    Let task i own its first directions in branch b: one branch for each number of them with weight.

    With A Aᵀ = U diag(λ) Uᵀ, 1/λ is the apparent inertia of a direction and
    a = S((ln m_hi + ln λ)/(ln m_hi − ln m_lo)) its share; "own the first j" has the weight
    a_j − a_{j+1} (a_0 = 1, a_{k+1} = 0).

    Returns
    -------
    int
        Number of branches now; the last sibling takes the place of b.

    """
    low, high = gains.band[i, 0], gains.band[i, 1]
    lam, U = principal(gram)
    if not math.isfinite(lam[0]):
        branches.u[b] = np.nan  # the end of it: no velocity will come out
        return count
    residual, UA = residual @ U, U.T @ A
    share = np.zeros(lam.shape[0] + 1)
    share[0] = 1.0
    last = 0  # how many directions have a share at all
    while last < lam.shape[0] and lam[last] * high > 1.0:
        last += 1
        share[last] = smoothstep(math.log(high * lam[last - 1]) / math.log(high / low))
    parent = branches.weight[b]
    for j in range(last):
        if share[j] > share[j + 1]:
            copy_branch(branches, b, count, parent * (share[j] - share[j + 1]))
            own(i, j, count, gains, claims, lam, U, UA, residual, feed_forward, branches, with_feedback)
            count += 1
    branches.weight[b] = parent * share[last]
    own(i, last, b, gains, claims, lam, U, UA, residual, feed_forward, branches, with_feedback)
    return count


@compiled
def principal(gram: Array) -> tuple[Array, Array]:
    """
    Eigenvalues of a small symmetric matrix from high to low, and its eigenvectors as columns.

    Eigenvalues are NaN where the problem has no solution. The attempt is made here, and not further
    up, because it costs compiled code some microseconds: this is called inside bands only.

    """
    k = gram.shape[0]
    if k == 1:
        return gram[0].copy(), np.ones((1, 1))
    lam, U = np.full(k, np.nan), np.eye(k)
    try:
        values, vectors = np.linalg.eigh(gram)
        lam[:] = values[::-1]
        U[:] = vectors[:, ::-1]
    except Exception:  # numbers that are not finite; compiled code can tell no classes apart
        lam[:] = np.nan
    return lam, U


@compiled
def own(
    i: int,
    j: int,
    b: int,
    gains: Gains,
    claims: Claims,
    lam: Array,
    U: Array,
    UA: Array,
    residual: Array,
    feed_forward: Array,
    branches: Branches,
    with_feedback: bool,
) -> None:
    """
    Task i owns its first j directions in branch b.

    The orthonormal directions are b_k = (Uᵀ A)_k/√λ_k and the claims
    y_k = (Uᵀ(ν_r − Ĵ u))_k/√λ_k. With c divided out, feedback over the owned directions is
    Σ b_k (√λ_k/c) (Uᵀ K U)_kl (√λ_l/c) b_lᵀ = (Uᵀ A)ᵀ (Uᵀ K U) (Uᵀ A)/c², and each of them also
    gets h_k d_min b_k b_kᵀ.

    """
    if j == 0:
        return
    first, last = gains.first_row[i], gains.first_row[i + 1]
    root_lam = np.sqrt(lam[:j])
    B = UA[:j] / root_lam.reshape(j, 1)
    y = residual[:j] / root_lam
    branches.owned[b, i] = j
    branches.apparent[b, i] = 1.0 / lam[j - 1]
    if lam[j - 1] * gains.band[i, 0] >= 4.0:  # all 1/λ below m_lo/4: h = 0
        h = np.zeros(j)
        branches.u[b] += y @ B
    else:
        h = weakness(lam[:j], gains.band[i, 0])
        known = h * (B @ feed_forward)
        g_0 = known @ B
        g = (h * y) @ B
        branches.u[b] += ((1.0 - h) * y) @ B + g_0 + limited(g - g_0, claims.L_inverse, gains.claim_speed)
    branches.N[b] -= B.T @ B
    if with_feedback:
        owned = np.ascontiguousarray(U[:, :j])
        K = (owned.T * gains.damping[first:last]) @ owned / claims.validity[i] ** 2
        branches.feedback[b] += UA[:j].T @ (K @ UA[:j]) + (B.T * (h * gains.posture_damping)) @ B
        branches.push[b] += (gains.force[first:last] @ owned) @ UA[:j]


@compiled
def weakness(lam: Array, low: float) -> Array:
    """
    h_k = S((ln(1/λ_k) − ln(m_lo/4))/ln 4): 0 in the normal range, 1 from the band's lower edge on.

    """
    h = np.zeros(lam.shape[0])
    for k in range(lam.shape[0]):
        h[k] = smoothstep((-math.log(lam[k]) - math.log(low)) / _LN4 + 1.0)
    return h


@compiled
def limited(g: Array, L_inverse: Array, claim_speed: Array) -> Array:
    """
    Saturate a whitened velocity by the joint speeds it asks for.

    g σ(ρ)/ρ with ρ = ‖(L⁻ᵀ g)_j/(claim_speed)_j‖₈ over the joints.

    """
    speed = np.abs(g @ L_inverse) / claim_speed
    largest = speed.max()
    if largest * speed.shape[0] ** 0.125 <= 0.8:  # ρ cannot exceed this
        return g
    rho = largest * np.sum((speed / largest) ** 8) ** 0.125
    smaller: Array = g * (saturation(rho) / rho)
    return smaller


@compiled
def close(b: int, gains: Gains, claims: Claims, feed_forward: Array, branches: Branches) -> None:
    """
    The posture task owns what is left in branch b: rows Lᵀ, Ĵ = I, feedback damping · N.

    """
    r = gains.band.shape[0]
    left = claims.L.shape[0] - branches.owned[b].sum()
    if left <= 0.0:
        return
    N = branches.N[b]
    g_0 = N @ feed_forward
    g = N @ (claims.posture @ claims.L)
    branches.owned[b, r] = left
    branches.apparent[b, r] = 1.0
    branches.u[b] += g_0 + limited(g - g_0, claims.L_inverse, gains.claim_speed)
    branches.feedback[b] += gains.posture_damping * N
