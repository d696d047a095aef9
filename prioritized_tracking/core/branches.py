# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Branches: the exact hierarchies that a hand-over blends, and what goes into and comes out of them.

A *branch* is a choice, for each task, of how many of its directions it owns. Its weight is the
product of the shares that led to it; weights sum to one. Away from singularities there is one.

"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from prioritized_tracking.compiled import compiled
from prioritized_tracking.core.rotation import Array

#: At most this many branches are carried from one task to the next.
MOST_BRANCHES = 16


class Gains(NamedTuple):
    """
    What the hierarchy knows of the stack: r chart tasks with m rows in all, highest first.

    first_row : (r + 1,) integers; task i has the rows first_row[i] … first_row[i + 1] − 1.
    damping : (m,) N·s/m or N·m·s/rad.
    force : (m,) steady push, N or N·m.
    band : (r, 2) hand-over bands [m_lo, m_hi], kg or kg·m².
    has_posture : whether a posture task closes the stack.
    posture_damping : its damping, also d_min, 1/s; 0 without a posture.
    claim_speed : (n,) joint speeds at which weak claims saturate, rad/s.

    """

    first_row: NDArray[np.int64]
    damping: Array
    force: Array
    band: Array
    has_posture: bool
    posture_damping: float
    claim_speed: Array


class Branches(NamedTuple):
    """
    Exact hierarchies in the making, one an index.

    weight : (B,) sums to 1.
    owned : (B, r + 1) directions each task owns; posture last.
    apparent : (B, r + 1) largest 1/λ a task owns, kg or kg·m²; inf: it owns nothing.
    N : (B, n, n) projector onto what is left over.
    u : (B, n) whitened reference velocity so far.
    feedback : (B, n, n) whitened feedback so far, 1/s.
    push : (B, n) whitened steady push so far.

    """

    weight: Array
    owned: Array
    apparent: Array
    N: Array
    u: Array
    feedback: Array
    push: Array


@compiled
def branch_size(n: int, r: int) -> int:
    """
    Numbers in one branch.

    """
    return 1 + 2 * (r + 1) + 2 * n + 2 * n * n


@compiled
def branches_of(buffer: Array, n: int, r: int) -> Branches:
    """
    Views of a buffer, one field behind the other; see `claims.room_of`.

    """
    b, a = buffer.shape[0] // branch_size(n, r), 0
    weight, a = buffer[a : a + b], a + b
    owned, a = buffer[a : a + b * (r + 1)].reshape(b, r + 1), a + b * (r + 1)
    apparent, a = buffer[a : a + b * (r + 1)].reshape(b, r + 1), a + b * (r + 1)
    N, a = buffer[a : a + b * n * n].reshape(b, n, n), a + b * n * n
    u, a = buffer[a : a + b * n].reshape(b, n), a + b * n
    feedback, a = buffer[a : a + b * n * n].reshape(b, n, n), a + b * n * n
    push = buffer[a : a + b * n].reshape(b, n)
    return Branches(weight, owned, apparent, N, u, feedback, push)


def branch_buffer(n: int, r: int, most_rows: int) -> Array:
    """
    Room for all children that ``MOST_BRANCHES`` branches can have at one task of at most so many rows.

    """
    return np.zeros(MOST_BRANCHES * (most_rows + 1) * branch_size(n, r))


def allocate_branches(n: int, r: int, most_rows: int) -> Branches:
    """
    Branches with a buffer of their own.

    """
    return branches_of(branch_buffer(n, r, most_rows), n, r)


@compiled
def root(branches: Branches, n: int) -> int:
    """
    The one branch before the first task: nothing owned, N_1 = I.

    Returns
    -------
    int
        1, the number of branches.

    """
    branches.weight[0] = 1.0
    branches.owned[0] = 0.0
    branches.apparent[0] = np.inf
    branches.N[0] = 0.0
    for k in range(n):
        branches.N[0, k, k] = 1.0
    branches.u[0] = 0.0
    branches.feedback[0] = 0.0
    branches.push[0] = 0.0
    return int(branches.weight[0])  # not a literal, which would compile every caller twice


@compiled
def copy_branch(branches: Branches, a: int, b: int, weight: float) -> None:
    """
    Copy branch a to place b, with a new weight.

    """
    branches.weight[b] = weight
    branches.owned[b] = branches.owned[a]
    branches.apparent[b] = branches.apparent[a]
    branches.N[b] = branches.N[a]
    branches.u[b] = branches.u[a]
    branches.feedback[b] = branches.feedback[a]
    branches.push[b] = branches.push[a]


@compiled
def prune(branches: Branches, count: int) -> int:
    """
    Keep at most ``MOST_BRANCHES``: subtract the next weight from all, drop what is not positive.

    This is continuous in the weights. If a tie leaves none, the first ones are kept as they are.

    Returns
    -------
    int
        How many are left; their weights sum to 1 again.

    """
    weights = branches.weight[:count].copy()
    threshold = 0.0  # the largest weight that at least MOST_BRANCHES others reach
    for b in range(count):
        if weights[b] > threshold and (weights >= weights[b]).sum() > MOST_BRANCHES:
            threshold = weights[b]
    tie = weights.max() <= threshold
    kept = 0
    for b in range(count):
        weight = branches.weight[b] if tie else branches.weight[b] - threshold
        if weight > 0.0 and kept < MOST_BRANCHES:
            copy_branch(branches, b, kept, weight)
            kept += 1
    branches.weight[:kept] /= branches.weight[:kept].sum()
    return kept


@compiled
def blend(
    branches: Branches, count: int, feedback_floor: float, report: Array, D: Array, push: Array
) -> None:
    """
    Weighted sums over branches: shares, feedback and push.

    Parameters
    ----------
    branches, count : as ``hierarchy`` left them; at least one.
    feedback_floor : added to D, 1/s.
    report : (2, r + 1) filled: share of each task, 0 … m; apparent inertia it feels, the largest
        1/λ over what it owns in the heaviest branch, inf if it owns nothing there.
    D : (n, n) filled: feedback in whitened coordinates, 1/s.
    push : (n,) filled: steady push in whitened coordinates.

    """
    report[0] = branches.weight[:count] @ branches.owned[:count]
    report[1] = branches.apparent[np.argmax(branches.weight[:count])]
    D[:] = branches.weight[0] * branches.feedback[0]
    for b in range(1, count):
        D += branches.weight[b] * branches.feedback[b]
    for k in range(D.shape[0]):
        D[k, k] += feedback_floor
    push[:] = branches.weight[:count] @ branches.push[:count]
