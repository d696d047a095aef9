# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Default hand-over bands from the arm's own inertia, and whether a stack can move every joint.

Both look at the tasks' rows, without validity, over joint positions spread evenly inside the limits.

"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.stats import qmc

from prioritized_tracking.charts.base import Chart, ChartWork
from prioritized_tracking.charts.joints import JointChart
from prioritized_tracking.core.arm import Arm, frame_motion, inertia
from prioritized_tracking.core.rotation import Array

#: Sample size: a power of two, as Sobol sequences want.
SAMPLES = 256
#: Where a joint has no limits, positions are drawn from ± this, rad.
UNLIMITED = 2.0 * np.pi
#: An eigenvalue counts as regular above this fraction of the largest at the same place.
REGULAR = 1e-6
#: A task has as many nominal dimensions as eigenvalues whose median exceeds this.
NOMINAL = 1e-9
#: What is left of a task below its higher tasks counts as nothing under this fraction of the task alone.
NOTHING = 1e-9
#: The band in multiples of the median apparent inertia.
BAND = (10.0, 100.0)

PlacedChart = tuple[Chart, str, str]
"""A chart with its frame and base; empty names for charts of the joint vector."""


def spread_configurations(arm: Arm, count: int = SAMPLES) -> Array:
    """
    Joint positions (count, n), rad: the first points of an unscrambled Sobol sequence inside the limits.

    The axes of the sequence go with the joints as the model numbers them, root to tip: in whatever order
    commands come, a band is the same.

    """
    lower = np.where(np.isfinite(arm.lower), arm.lower, -UNLIMITED)
    upper = np.where(np.isfinite(arm.upper), arm.upper, UNLIMITED)
    order = slice(None) if arm.built.order is None else arm.built.order
    points = np.empty((count, arm.n))
    points[:, order] = qmc.Sobol(d=arm.n, scramble=False).random(count)
    positions: Array = lower + points * (upper - lower)
    return positions


def whitened_rows(arm: Arm, charts: Sequence[PlacedChart]) -> list[Array]:
    """
    For each chart its whitened task Jacobians (samples, m, n), without validity.

    """
    data = arm.data()
    R, p, J, V = np.eye(3), np.zeros(3), np.zeros((6, arm.n)), np.zeros(6)
    found: list[list[Array]] = [[] for _ in charts]
    for q in spread_configurations(arm):
        inertia(arm, data, q)
        whiten = np.linalg.inv(np.linalg.cholesky(data.M)).T
        for (chart, frame, base), jacobians in zip(charts, found, strict=True):
            if isinstance(chart, JointChart):
                rows = np.eye(arm.n)[list(chart.indices)]
            else:
                frame_motion(arm, data, arm.frame_id(frame), arm.frame_id(base), R, p, J)
                work = ChartWork.allocate(len(chart.coordinates), 6)
                chart.track(R, p, R, p, V, work)
                rows = work.rows @ J
            jacobians.append(rows @ whiten)
    return [np.array(jacobians) for jacobians in found]


@dataclass(frozen=True)
class Survey:
    """
    What a look over the joint space says of a list of charts in order of priority.

    Attributes
    ----------
    rank : nominal number of directions of each chart taken alone.
    apparent : median apparent inertia of each chart at its place, kg or kg·m²; inf: it moves nothing.
    total_rank : directions all charts own together at the best sample; n for a complete list.

    """

    rank: tuple[int, ...]
    apparent: tuple[float, ...]
    total_rank: int


def survey(arm: Arm, charts: Sequence[PlacedChart]) -> Survey:
    """
    Look at the charts' apparent inertia, each at its place, all higher ones owned where regular.

    Per sample the largest 1/λ among the directions of nominal rank counts; where higher charts take
    rank away, that of the chart alone.

    """
    ranks, medians = [], []
    N = np.broadcast_to(np.eye(arm.n), (SAMPLES, arm.n, arm.n)).copy()
    for J_hat in whitened_rows(arm, charts):
        alone = np.asarray(np.linalg.eigvalsh(J_hat @ J_hat.transpose(0, 2, 1))[:, ::-1], dtype=np.float64)
        rank = int(np.sum(np.median(alone, axis=0) > NOMINAL))
        A = J_hat @ N
        eigen = np.linalg.eigh(A @ A.transpose(0, 2, 1))
        lam: Array = np.asarray(eigen.eigenvalues[:, ::-1], dtype=np.float64)
        U: Array = np.asarray(eigen.eigenvectors[:, :, ::-1], dtype=np.float64)
        regular = (lam > REGULAR * lam[:, :1]) & (lam[:, :1] > NOTHING * alone[:, :1])
        ranks.append(rank)
        medians.append(_median_inertia(lam, alone, regular, rank))
        B = U.transpose(0, 2, 1) @ A / np.sqrt(np.where(regular, lam, 1.0))[:, :, None]
        B *= regular[:, :, None]
        N -= B.transpose(0, 2, 1) @ B
    left = np.trace(N, axis1=1, axis2=2)
    return Survey(tuple(ranks), tuple(medians), arm.n - int(np.rint(left.min())))


def _median_inertia(lam: Array, alone: Array, regular: Any, rank: int) -> float:
    """
    Median over the samples of the largest 1/λ among the first ``rank`` directions.

    """
    if rank == 0:
        return math.inf
    smallest = np.where(regular[:, rank - 1], lam[:, rank - 1], alone[:, rank - 1])
    return float(np.median(1.0 / np.maximum(smallest, np.finfo(float).tiny)))


def default_band(apparent: float) -> tuple[float, float]:
    """
    Hand-over band [m_lo, m_hi] for a median apparent inertia.

    """
    return BAND[0] * apparent, BAND[1] * apparent
