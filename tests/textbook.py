# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The hierarchy as a textbook writes it: joint coordinates, pseudo-inverses and explicit projectors.

Slow and plain on purpose. It shares no code with the package: each task's dynamically consistent
inverse J# = M⁻¹ Jᵀ (J M⁻¹ Jᵀ)⁺ (Khatib 1987) is taken within the null space of the tasks above, and
the branches of a hand-over are followed one by one, depth first.

"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np


def smoothstep(z):
    """Quintic smoothstep from its definition."""
    z = np.clip(z, 0.0, 1.0)
    return 10 * z**3 - 15 * z**4 + 6 * z**5


def saturation(x):
    """The C² saturation σ from its definition."""
    y = np.minimum(x, 1.2)
    z = (y - 0.8) / 0.4
    return np.where(x <= 0.8, x, y - 0.4 * (z**6 - 3 * z**5 + 2.5 * z**4))


@dataclass
class TextbookTask:
    """J = c · rows · J_frame (m, n), ν_r (m,), gains and band of one task."""

    J: np.ndarray
    nu: np.ndarray
    c: float
    damping: np.ndarray
    band: tuple[float, float]
    force: np.ndarray | None = None


@dataclass
class Outcome:
    """Weighted sums over branches, in joint coordinates."""

    velocity: np.ndarray
    feedback: np.ndarray  # matrix in τ = −feedback · s
    push: np.ndarray
    shares: np.ndarray
    leaves: list = field(default_factory=list)  # of each branch: weight, shares, largest 1/λ owned


def blended(M, tasks, posture=None, posture_damping=0.0, claim_speed=None):
    """
    All branches, depth first. ``posture``: (reference velocity, feed-forward), or None.

    """
    n = M.shape[0]
    total = Outcome(np.zeros(n), np.zeros((n, n)), np.zeros(n), np.zeros(len(tasks) + 1))
    feed_forward = posture[1] if posture else np.zeros(n)

    def limit(g, g_0):
        difference = g - g_0
        rho = np.sum((np.abs(difference) / claim_speed) ** 8.0) ** 0.125
        return g_0 + difference * (saturation(rho) / rho if rho > 0 else 1.0)

    def visit(i, weight, N, velocity, feedback, push, shares, apparent):
        if i == len(tasks):
            if posture:
                left = n - sum(shares)
                if left:
                    g, g_0 = N @ (posture[0] - velocity), N @ feed_forward
                    velocity = velocity + limit(g, g_0)
                    feedback = feedback + posture_damping * M @ N
                shares = [*shares, left]
            else:
                shares = [*shares, 0]
            apparent = [*apparent, 1.0 if shares[-1] else np.inf]
            total.velocity += weight * velocity
            total.feedback += weight * feedback
            total.push += weight * push
            total.shares += weight * np.array(shares)
            total.leaves.append((weight, tuple(shares), tuple(apparent)))
            return
        task = tasks[i]
        JN = task.J @ N
        lam, U = np.linalg.eigh(JN @ np.linalg.inv(M) @ JN.T)
        lam, U = lam[::-1], U[:, ::-1]
        low, high = task.band
        a = smoothstep((np.log(high) + np.log(np.maximum(lam, 1e-300))) / (np.log(high) - np.log(low)))
        a = np.concatenate([[1.0], a, [0.0]])
        for j in range(len(lam) + 1):
            w = weight * (a[j] - a[j + 1])
            if w <= 0:
                continue
            own = U[:, :j]
            J_own = own.T @ JN
            inverse = np.linalg.inv(M) @ J_own.T @ np.linalg.pinv(J_own @ np.linalg.inv(M) @ J_own.T)
            h = smoothstep((np.log(1 / lam[:j]) - np.log(low / 4)) / np.log(4.0))
            claim = own.T @ (task.nu - task.J @ velocity)
            g = inverse @ (h * claim)
            g_0 = inverse @ (h * (J_own @ feed_forward))
            strong = inverse @ ((1 - h) * claim)
            step = strong + (limit(g, g_0) if j else 0.0)
            directions = inverse * np.sqrt(lam[:j])  # M-orthonormal columns
            weak = M @ directions @ np.diag(h) @ directions.T @ M * posture_damping
            P = own @ own.T @ JN / (task.c or 1.0)  # c = 0 owns nothing
            force = task.force if task.force is not None else np.zeros(len(lam))
            visit(
                i + 1,
                w,
                N - inverse @ J_own,
                velocity + step,
                feedback + P.T @ np.diag(task.damping) @ P + weak,
                push + JN.T @ own @ own.T @ force,
                [*shares, j],
                [*apparent, 1 / lam[j - 1] if j else np.inf],
            )

    visit(0, 1.0, np.eye(n), np.zeros(n), np.zeros((n, n)), np.zeros(n), [], [])
    return total


def textbook_velocity(M, tasks, posture_velocity):
    """
    q̇_r away from all bands: what one would write without branches.

    """
    M_inverse = np.linalg.inv(M)
    N = np.eye(M.shape[0])
    velocity = np.zeros(M.shape[0])
    for task in tasks:
        JN = task.J @ N
        inverse = M_inverse @ JN.T @ np.linalg.pinv(JN @ M_inverse @ JN.T, rcond=1e-8, hermitian=True)
        velocity = velocity + inverse @ (task.nu - task.J @ velocity)
        N = N - inverse @ JN
    return velocity + N @ (posture_velocity - velocity)
