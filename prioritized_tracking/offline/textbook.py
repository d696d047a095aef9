# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The hierarchy as a textbook writes it: joint coordinates, pseudo-inverses and explicit projectors.

Plain on purpose: what the kernel is checked against, and what its speed is measured against. It
shares no code with the kernel. Each task's dynamically consistent inverse
J# = M⁻¹ Jᵀ (J M⁻¹ Jᵀ)⁺ (Khatib 1987) is taken within the null space of the tasks above, and the
branches of a hand-over are followed one by one, depth first.

"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]


def smoothstep(z: Any) -> Any:
    """
    Quintic smoothstep from its definition.

    """
    z = np.clip(z, 0.0, 1.0)
    return 10 * z**3 - 15 * z**4 + 6 * z**5


def saturation(x: Any) -> Any:
    """
    The C² saturation σ from its definition.

    """
    y = np.minimum(x, 1.2)
    z = (y - 0.8) / 0.4
    return np.where(x <= 0.8, x, y - 0.4 * (z**6 - 3 * z**5 + 2.5 * z**4))


@dataclass
class TextbookTask:
    """
    J = c · rows · J_frame (m, n), ν_r (m,), gains and band of one task.

    """

    J: Array
    nu: Array
    c: float
    damping: Array
    band: tuple[float, float]
    force: Array | None = None


@dataclass
class Outcome:
    """
    Weighted sums over branches, in joint coordinates.

    Attributes
    ----------
    velocity : (n,) q̇_r, rad/s.
    feedback : (n, n) matrix in τ = −feedback · s.
    push : (n,) N·m.
    shares : (r + 1,) posture last.
    leaves : weight, owned directions and largest owned 1/λ (of each task) of each branch.

    """

    velocity: Array
    feedback: Array
    push: Array
    shares: Array
    leaves: list[tuple[float, tuple[int, ...], tuple[float, ...]]] = field(default_factory=list)


@dataclass
class _Branch:
    weight: float
    N: Array
    velocity: Array
    feedback: Array
    push: Array
    shares: tuple[int, ...]
    apparent: tuple[float, ...]


@dataclass
class _Walk:
    """
    All branches, depth first.

    """

    M: Array
    M_inverse: Array
    tasks: Sequence[TextbookTask]
    posture: tuple[Array, Array] | None
    posture_damping: float
    claim_speed: Array
    with_feedback: bool
    total: Outcome

    def limit(self, g: Array, g_0: Array) -> Array:
        difference = g - g_0
        rho = np.sum((np.abs(difference) / self.claim_speed) ** 8.0) ** 0.125
        limited: Array = g_0 + difference * (saturation(rho) / rho if rho > 0 else 1.0)
        return limited

    def visit(self, i: int, branch: _Branch) -> None:
        if i == len(self.tasks):
            self.close(branch)
            return
        task = self.tasks[i]
        JN = task.J @ branch.N
        lam, U = np.linalg.eigh(JN @ self.M_inverse @ JN.T)
        lam, U = lam[::-1], U[:, ::-1]
        low, high = task.band
        a = smoothstep((np.log(high) + np.log(np.maximum(lam, 1e-300))) / (np.log(high) - np.log(low)))
        a = np.concatenate([[1.0], a, [0.0]])
        for j in range(len(lam) + 1):
            weight = branch.weight * (a[j] - a[j + 1])
            if weight > 0:
                self.visit(i + 1, self.own(task, branch, weight, JN, lam[:j], U[:, :j]))

    def own(
        self, task: TextbookTask, branch: _Branch, weight: float, JN: Array, lam: Array, own: Array
    ) -> _Branch:
        j = len(lam)
        J_own = own.T @ JN
        inverse = self.M_inverse @ J_own.T @ np.linalg.pinv(J_own @ self.M_inverse @ J_own.T)
        h = smoothstep((np.log(1 / lam) - np.log(task.band[0] / 4)) / np.log(4.0))
        claim = own.T @ (task.nu - task.J @ branch.velocity)
        feed_forward = self.posture[1] if self.posture else np.zeros(len(self.M))
        step = inverse @ ((1 - h) * claim)
        if j:
            step = step + self.limit(inverse @ (h * claim), inverse @ (h * (J_own @ feed_forward)))
        feedback, push = branch.feedback, branch.push
        if self.with_feedback:
            directions = inverse * np.sqrt(lam)  # M-orthonormal columns
            weak = self.M @ directions @ np.diag(h) @ directions.T @ self.M * self.posture_damping
            P = own @ own.T @ JN / (task.c or 1.0)  # c = 0 owns nothing
            force = task.force if task.force is not None else np.zeros(len(own))
            feedback = feedback + P.T @ np.diag(task.damping) @ P + weak
            push = push + JN.T @ own @ own.T @ force
        return _Branch(
            weight,
            branch.N - inverse @ J_own,
            branch.velocity + step,
            feedback,
            push,
            (*branch.shares, j),
            (*branch.apparent, float(1 / lam[j - 1]) if j else np.inf),
        )

    def close(self, branch: _Branch) -> None:
        total, left = self.total, 0
        velocity, feedback = branch.velocity, branch.feedback
        if self.posture:
            left = len(self.M) - sum(branch.shares)
            if left:
                g, g_0 = branch.N @ (self.posture[0] - velocity), branch.N @ self.posture[1]
                velocity = velocity + self.limit(g, g_0)
                if self.with_feedback:
                    feedback = feedback + self.posture_damping * self.M @ branch.N
        shares = (*branch.shares, left)
        total.velocity += branch.weight * velocity
        total.feedback += branch.weight * feedback
        total.push += branch.weight * branch.push
        total.shares += branch.weight * np.array(shares)
        total.leaves.append((branch.weight, shares, (*branch.apparent, 1.0 if left else np.inf)))


def blended(
    M: Array,
    tasks: Sequence[TextbookTask],
    posture: tuple[Array, Array] | None = None,
    posture_damping: float = 0.0,
    claim_speed: Array | None = None,
    *,
    with_feedback: bool = True,
) -> Outcome:
    """
    All branches, depth first, and their weighted sums.

    Parameters
    ----------
    M : (n, n) inertia, kg·m².
    tasks : highest first.
    posture : (reference velocity, feed-forward), (n,) each, rad/s; None: no posture task.
    posture_damping : 1/s.
    claim_speed : (n,) rad/s; None: no limit.
    with_feedback : False leaves out feedback and push, which a finite-difference twin does not need.

    """
    n = M.shape[0]
    total = Outcome(np.zeros(n), np.zeros((n, n)), np.zeros(n), np.zeros(len(tasks) + 1))
    limit = np.full(n, np.inf) if claim_speed is None else claim_speed
    M_inverse: Array = np.asarray(np.linalg.inv(M), dtype=np.float64)
    walk = _Walk(M, M_inverse, tasks, posture, posture_damping, limit, with_feedback, total)
    walk.visit(0, _Branch(1.0, np.eye(n), np.zeros(n), np.zeros((n, n)), np.zeros(n), (), ()))
    return total


def textbook_velocity(M: Array, tasks: Sequence[TextbookTask], posture_velocity: Array) -> Array:
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
    result: Array = velocity + N @ (posture_velocity - velocity)
    return result
