# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
First guesses for the whole-path problem: many arms marching along the path side by side.

Each arm starts from a solution of one pose, keeps its momentum and corrects. Momentum
carries it through most singularities; where it does not, it limps on with an error and
the whole-path problem repairs it, or another arm has done better.

"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from prioritized_tracking.core.rotation import Array
from prioritized_tracking.offline.companion.chain import Chain
from prioritized_tracking.offline.companion.smoothness import IndexArray
from prioritized_tracking.offline.companion.solver import PoseError, Target, pose_error

#: Part of the way to the preferred configuration that a redundant arm is pushed per knot.
_PULL = 0.01


@dataclass(frozen=True, kw_only=True)
class Box:
    """
    Joint limits and the configuration redundancy is drawn to; (n,) rad, infinite where unlimited.

    """

    lower: Array
    upper: Array
    preferred: Array

    def clip(self, q: Array) -> Array:
        """
        Bring joint positions inside the limits.

        """
        clipped: Array = np.clip(q, self.lower, self.upper)
        return clipped

    def sample(self, count: int, rng: np.random.Generator) -> Array:
        """
        Random joint positions (count, n); joints without limits within π of the preferred.

        """
        low = np.maximum(self.lower, self.preferred - 2.0 * np.pi)
        high = np.minimum(self.upper, self.preferred + 2.0 * np.pi)
        unlimited = ~np.isfinite(self.lower) | ~np.isfinite(self.upper)
        low = np.where(unlimited, np.maximum(low, self.preferred - np.pi), low)
        high = np.where(unlimited, np.minimum(high, self.preferred + np.pi), high)
        return rng.uniform(low, high, (count, len(low)))


def approach(
    error: PoseError, q: Array, box: Box, *, iterations: int, damping: float = 1e-3
) -> tuple[Array, Array]:
    """
    Bring many joint positions to their poses, each by its own Levenberg-Marquardt within the limits.

    Parameters
    ----------
    error : q (B, n) -> e (B, m), J (B, m, n)
    q : (B, n) rad
    iterations : int
    damping : float
        First damping.

    Returns
    -------
    q : (B, n)
    distance : (B,) norm of the pose error that remains.

    """
    index = np.arange(q.shape[1])
    e, J = error(q)
    mu = np.full(len(q), damping)
    value = np.square(e).sum(axis=1)
    for _ in range(iterations):
        H = J.transpose(0, 2, 1) @ J
        H[:, index, index] += mu[:, None]
        gradient = np.einsum("kij,ki->kj", J, e)
        new = box.clip(q - np.linalg.solve(H, gradient[:, :, None])[:, :, 0])
        e_new, J_new = error(new)
        value_new = np.square(e_new).sum(axis=1)
        better = value_new < value
        q = np.where(better[:, None], new, q)
        e = np.where(better[:, None], e_new, e)
        J = np.where(better[:, None, None], J_new, J)
        mu = np.clip(np.where(better, 0.1 * mu, 10.0 * mu), 1e-12, 1e6)
        value = np.minimum(value, value_new)
        if value.max() < 1e-16:
            break
    return q, np.sqrt(value)


def at_knots(chain: Chain, target: Target, k: IndexArray) -> PoseError:
    """
    Pose error of joint positions (B, n), each against its own knot k (B,), or all against one (1,).

    """
    chosen = Target(R=target.R[k], p=target.p[k], rows=target.rows)
    return lambda q: pose_error(chain, chosen, q)


def first_poses(chain: Chain, target: Target, k: int, seeds: Array, box: Box) -> Array:
    """
    Solve one pose from many seeds; solutions as near to the preferred configuration as full turns allow.

    Returns
    -------
    (S, n) array
        Distinct solutions, the most exact first; when the pose is out of reach, the nearest ones.

    """
    q, distance = approach(at_knots(chain, target, np.array([k])), seeds, box, iterations=60)
    turn = 2.0 * np.pi * np.round((box.preferred - q) / (2.0 * np.pi))
    turned = q + turn
    q = np.where((turned >= box.lower) & (turned <= box.upper), turned, q)
    exact = distance < max(1e-4, 1.5 * float(distance.min()))
    return distinct(q[exact][np.argsort(distance[exact], kind="stable")], 0.05)


def distinct(q: Array, apart: float) -> Array:
    """
    Drop every entry that is nearer than `apart` (rad, in all joints and knots) to an earlier one.

    """
    kept: list[Array] = []
    for candidate in q:
        if all(np.abs(candidate - other).max() > apart for other in kept):
            kept.append(candidate)
    return np.array(kept)


def _momentum(J: Array, motion: Array, preferred: Array) -> Array:
    """
    Go on as before; where the pose leaves freedom, slow down and turn to the preferred configuration.

    Parameters
    ----------
    J : (B, m, n)
    motion, preferred : (B, n) the last step, and the way to the preferred configuration, rad.

    """
    square = J.transpose(0, 2, 1) @ J
    n = square.shape[1]
    # only what moves the pose by less than 1e-4 per rad is free: a singularity is to be passed with momentum
    free = 1e-8 * np.linalg.inv(square + 1e-8 * np.eye(n))
    turn: Array = 0.98 * motion + np.einsum("kij,kj->ki", free, _PULL * preferred - 0.2 * motion)
    return turn


def march(
    chain: Chain, target: Target, k_0: IndexArray, q_0: Array, box: Box, tick: Callable[[float], None]
) -> tuple[Array, Array]:
    """
    March arms, each from its own knot to both ends of the path.

    Parameters
    ----------
    k_0 : (B,) first knot of each arm.
    q_0 : (B, n) solutions of the pose there.
    tick : called with the fraction done.

    Returns
    -------
    q : (B, N, n) rad
    worst : (B,) largest pose error along the way.

    """
    N = len(target.p)
    q = np.empty((len(q_0), N, q_0.shape[1]))
    q[np.arange(len(q_0)), k_0] = q_0
    worst = np.zeros(len(q_0))
    # a hint to one side, so that no arm stays balanced on a singularity
    hint = 1e-4 * np.random.default_rng(0).standard_normal(q_0.shape)
    for direction in (1, -1):
        motion = np.zeros_like(q_0)
        for offset in range(1, N):
            k = k_0 + direction * offset
            on = np.flatnonzero((k >= 0) & (k < N))
            if len(on) == 0:
                break
            last = q[on, k[on] - direction]
            error = at_knots(chain, target, k[on])
            guess = box.clip(last + _momentum(error(last)[1], motion[on], box.preferred - last) + hint[on])
            new, distance = approach(error, guess, box, iterations=8, damping=1e-5)
            q[on, k[on]] = new
            motion[on] = np.clip(new - last, -0.3, 0.3)
            worst[on] = np.maximum(worst[on], distance)
            tick(0.5 * (offset / N + (direction < 0)))
    return q, worst
