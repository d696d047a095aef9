# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The whole-path problem of the companion: all knots of a joint path at once.

Unknown are the joint positions q(t_0) … q(t_N). Minimised is the integral over path time of

    ½ |pose error|² + ½ ε |third derivative of q|² + barriers at the joint limits
    + ½ pull |q − preferred|²

by Levenberg-Marquardt on the banded normal equations. Because the knots are tied together by their
third derivative, a singular knot is carried through by its neighbours: the arm folds through the
singularity with its momentum, where a march from knot to knot stalls. ε falls from stage to
stage; at last the pose error alone is minimised, with the third derivative only as the metric of
the correction, so that corrections stay smooth and do not chase the unreachable.

"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.linalg import LinAlgError
from scipy.spatial.transform import Rotation

from prioritized_tracking.core.rotation import Array
from prioritized_tracking.offline.companion.chain import Chain
from prioritized_tracking.offline.companion.smoothness import IndexArray, Smoothness


@dataclass(frozen=True, kw_only=True)
class Target:
    """
    The poses of a path at its unknown knots and the pose rows that count.

    Attributes
    ----------
    R : (N, 3, 3), p : (N, 3) m, base axes.
    rows : indices into (x, y, z, rotation x, y, z) of the components the arm is to follow.

    """

    R: Array
    p: Array
    rows: IndexArray


def pose_error(chain: Chain, target: Target, q: Array) -> tuple[Array, Array]:
    """
    Pose error (p − p_d, log(R R_dᵀ)) and Jacobian of the rows that count.

    Returns
    -------
    e : (N, m) m and rad.
    J : (N, m, n). Of the logarithm it is the Jacobian along the error itself, which makes
        Jᵀ e the exact gradient of ½ |e|².

    """
    R, p, J = chain.motion(q)
    turn = Rotation.from_matrix(R @ target.R.transpose(0, 2, 1)).as_rotvec()
    e = np.concatenate((p - target.p, turn), axis=1)
    return e[:, target.rows], J[:, target.rows]


@dataclass(frozen=True, kw_only=True)
class Weights:
    """
    Weights of one stage of the whole-path problem.

    Attributes
    ----------
    smooth : ε, s⁶ (times the pose's m² or rad²).
    barrier : weight of the squared intrusion into the zone before a limit, as a fraction of the zone.
    pull : weight towards the preferred configuration, 1/rad².

    """

    smooth: float
    barrier: float
    pull: float


class PathProblem:
    """
    Cost of a joint path along a pose path, and its minimisation.

    Parameters
    ----------
    chain, target, smoothness
    length : (count,) s, path time that belongs to each knot.
    lower, upper : (n,) rad, −inf/inf where there is none.
    zone : (n,) rad, where the barrier begins before a limit.
    preferred : (count, n) rad.
    drawn : (count, 1) factor on the pull towards it.

    """

    def __init__(
        self,
        chain: Chain,
        target: Target,
        smoothness: Smoothness,
        *,
        length: Array,
        lower: Array,
        upper: Array,
        zone: Array,
        preferred: Array,
        drawn: Array,
    ) -> None:
        self.chain, self.target, self.smoothness = chain, target, smoothness
        self.length = length
        self._low, self._high, self._zone = lower + zone, upper - zone, zone
        self._preferred, self._drawn = preferred, drawn

    def error(self, q: Array) -> tuple[Array, Array]:
        """
        Pose error (count, m) and Jacobian (count, m, n) at every knot.

        """
        return pose_error(self.chain, self.target, q)

    def intrusion(self, q: Array) -> Array:
        """
        Signed depth in the zone before a limit, 1 at the limit itself, 0 outside; (count, n).

        """
        depth: Array = (np.maximum(q - self._high, 0.0) + np.minimum(q - self._low, 0.0)) / self._zone
        return depth

    def secondary(self, q: Array, weights: Weights) -> float:
        """
        Cost of everything but the pose error.

        """
        knots = weights.barrier * np.square(self.intrusion(q)).sum(axis=1)
        knots += weights.pull * (self._drawn * np.square(q - self._preferred)).sum(axis=1)
        return 0.5 * (float(self.length @ knots) + weights.smooth * self.smoothness.cost(q))

    def _value(self, q: Array, e: Array, weights: Weights) -> float:
        """
        The whole cost, e the pose error at q.

        """
        return 0.5 * float(self.length @ np.square(e).sum(axis=1)) + self.secondary(q, weights)

    def _quadratic(self, q: Array, e: Array, J: Array, weights: Weights) -> tuple[Array, Array]:
        """
        Diagonal blocks and gradient of the quadratic model.

        """
        blocks = J.transpose(0, 2, 1) @ J
        depth = self.intrusion(q)
        pull = weights.pull * self._drawn
        diagonal = weights.barrier * (depth != 0.0) / self._zone**2 + pull
        index = np.arange(q.shape[1])
        blocks[:, index, index] += diagonal
        gradient = np.einsum("kij,ki->kj", J, e) + weights.barrier * depth / self._zone
        gradient += pull * (q - self._preferred)
        blocks *= self.length[:, None, None]
        gradient *= self.length[:, None]
        return blocks, gradient + weights.smooth * self.smoothness.gradient(q)

    def minimise(
        self,
        q: Array,
        weights: Weights,
        *,
        iterations: int,
        damping: float = 1e-6,
        metric: float = 0.0,
        enough: tuple[float, float] = (0.0, 0.0),
    ) -> Array:
        """
        Levenberg-Marquardt from q (count, n) on.

        Parameters
        ----------
        weights : Weights
        iterations : int
            Linear systems to solve at most.
        damping : float
            First damping, added to every diagonal element times its path time.
        metric : float
            Third derivative of the *correction* that is added to the damping, per unit of damping.
        enough : (m, rad)
            Stop when no pose component is off by more.

        """
        e, J = self.error(q)
        value = self._value(q, e, weights)
        index = np.arange(q.shape[1])
        aim = np.where(self.target.rows < 3, *enough)
        for _ in range(iterations):
            if np.all(np.abs(e) <= aim):
                break
            blocks, gradient = self._quadratic(q, e, J, weights)
            blocks[:, index, index] += damping * self.length[:, None]
            try:
                step = self.smoothness.solve(blocks, weights.smooth + damping * metric, -gradient)
            except LinAlgError:
                damping *= 10.0
                continue
            new = q + step
            e_new, J_new = self.error(new)
            value_new = self._value(new, e_new, weights)
            if value_new < value:
                small = value - value_new < 1e-5 * value
                q, e, J, value = new, e_new, J_new, value_new
                damping = max(0.2 * damping, 1e-14)
                if small and not aim.any():
                    break
            else:
                damping *= 8.0
                if damping > 1e6:
                    break
        return q


PoseError = Callable[[Array], tuple[Array, Array]]


def nearest_correction(error: PoseError, q: Array, *, cut: float = 0.05, iterations: int = 3) -> Array:
    """
    Correct each knot by itself, by the smallest joint motion (Newton with a truncated inverse).

    Parameters
    ----------
    error : q (N, n) -> e (N, m), J (N, m, n)
    cut : float
        Directions in which the pose moves less than this (m or rad per rad) are left alone: there
        the correction would be large and would follow every rounding error of the path.
    iterations : int

    """
    for _ in range(iterations):
        e, J = error(q)
        U, s, Vt = np.linalg.svd(J, full_matrices=False)
        inverse = np.where(s > cut, 1.0 / np.maximum(s, cut), 0.0)
        q = q - np.einsum("kij,ki->kj", Vt, inverse * np.einsum("kij,ki->kj", U, e))
    return q
