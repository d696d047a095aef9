# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What the tasks want in one state: from evaluated charts to task Jacobians and reference velocities.

"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from prioritized_tracking.compiled import compiled
from prioritized_tracking.core.rotation import Array


class Layout(NamedTuple):
    """
    How the m rows of r chart tasks are stacked, highest first.

    first_row : (r + 1,) integers; task i has the rows first_row[i] … first_row[i + 1] − 1.
    task : (m,) index of the task a row belongs to.
    rated : indices of the tasks whose rate is not the identity.
    angular : (m,) whether a coordinate wraps at ±π.
    source : (m,) index of the reference velocity that drives a row.
    k_p : (m,) decay rate of the error, 1/s.
    continuous : (n,) joints that turn without end.
    posture_k_p : decay rate of the posture's error, 1/s.

    """

    first_row: NDArray[np.int64]
    task: NDArray[np.int64]
    rated: NDArray[np.int64]
    angular: NDArray[np.bool_]
    source: NDArray[np.int64]
    k_p: Array
    continuous: NDArray[np.bool_]
    posture_k_p: float


class Claims(NamedTuple):
    """
    What the tasks want in one state: what the hierarchy works on.

    L, L_inverse : (n, n) Cholesky factor of the inertia matrix M = L Lᵀ, and its inverse.
    J : (m, n) task Jacobians c · rows · J_frame.
    nu : (m,) task reference velocities ν_r, faded by c, m/s or rad/s.
    validity : (r,) c of each chart task.
    posture : (n,) reference velocity of the posture task, q̇_d − k_p x̃, rad/s.
    posture_feed_forward : (n,) its q̇_d alone, rad/s.

    """

    L: Array
    L_inverse: Array
    J: Array
    nu: Array
    validity: Array
    posture: Array
    posture_feed_forward: Array


class Room(NamedTuple):
    """
    Arrays of one evaluation; charts and arm fill the first group, `form_claims` the second.

    x, x_d : (m,) coordinates at the measured and at the reference pose, m or rad.
    x_dot_d : (m,) velocity of the reference coordinates, of charts that give it themselves.
    rows : (m, k) rows of every task, in the columns of its frame (6 each), or of the joints (n).
    rows_d : (m, max(6, n)) rows at the reference pose.
    rate, rate_d : (m, m_i) rate of each task, one block below the other.
    V : (s, 6) velocity of each pose reference, m/s and rad/s; the last one is at rest.
    motion : (k, n) Jacobians of the frames, and the identity.
    M : (n, n) inertia, kg·m².
    q, q_d : (n,) joint positions, and those of the posture's reference, rad.

    error : (m,) x̃, wrapped.
    posture_error : (n,) q − q_d, the short way round for joints without end.
    claims : see `Claims`; charts fill its validity, the posture's reference its feed-forward.
    velocity : (n,) the outcome q̇_r, rad/s.

    """

    x: Array
    x_d: Array
    x_dot_d: Array
    rows: Array
    rows_d: Array
    rate: Array
    rate_d: Array
    V: Array
    motion: Array
    M: Array
    q: Array
    q_d: Array
    error: Array
    posture_error: Array
    claims: Claims
    velocity: Array


class Sizes(NamedTuple):
    """
    What determines the size of a `Room`.

    n, m, r : joints, rows of all chart tasks, chart tasks.
    columns : of the rows: 6 for each frame, and n.
    sources : pose references, and one at rest.
    most_rows : of a task.

    """

    n: int
    m: int
    r: int
    columns: int
    sources: int
    most_rows: int


@compiled
def block(buffer: Array, start: int, rows: int, columns: int) -> Array:
    """
    View of a buffer from a place on, as a matrix.

    """
    view: Array = buffer[start : start + rows * columns].reshape(rows, columns)
    return view


@compiled
def room_of(buffer: Array, sizes: Sizes) -> Room:
    """
    Views of a buffer: a call of compiled code pays for each array it is given, and this is one.

    """
    n, m, columns = sizes.n, sizes.m, sizes.columns
    by_row = block(buffer, 0, 5, m)
    a = 5 * m
    by_joint = block(buffer, a, 6, n)
    a += 6 * n
    validity = buffer[a : a + sizes.r]
    a += sizes.r
    square = buffer[a : a + 3 * n * n].reshape(3, n, n)
    a += 3 * n * n
    wide = max(6, n)
    rows, a = block(buffer, a, m, columns), a + m * columns
    rows_d, a = block(buffer, a, m, wide), a + m * wide
    rate, a = block(buffer, a, m, sizes.most_rows), a + m * sizes.most_rows
    rate_d, a = block(buffer, a, m, sizes.most_rows), a + m * sizes.most_rows
    V, a = block(buffer, a, sizes.sources, 6), a + sizes.sources * 6
    motion, a = block(buffer, a, columns, n), a + columns * n
    J = block(buffer, a, m, n)
    claims = Claims(square[0], square[1], J, by_row[0], validity, by_joint[0], by_joint[1])
    return Room(
        by_row[1],
        by_row[2],
        by_row[3],
        rows,
        rows_d,
        rate,
        rate_d,
        V,
        motion,
        square[2],
        by_joint[2],
        by_joint[3],
        by_row[4],
        by_joint[4],
        claims,
        by_joint[5],
    )


def buffer_size(sizes: Sizes) -> int:
    """
    Numbers in a `Room`.

    """
    n, m = sizes.n, sizes.m
    by_row = 5 + sizes.columns + max(6, n) + 2 * sizes.most_rows + n
    return m * by_row + 6 * n + sizes.r + 3 * n * n + 6 * sizes.sources + sizes.columns * n


def allocate_claims(n: int, m: int, r: int) -> Claims:
    """
    Claims of m rows of r tasks.

    """
    return Claims(
        L=np.eye(n),
        L_inverse=np.eye(n),
        J=np.zeros((m, n)),
        nu=np.zeros(m),
        validity=np.zeros(r),
        posture=np.zeros(n),
        posture_feed_forward=np.zeros(n),
    )


@compiled
def form_claims(layout: Layout, room: Room, nominal: Room, twin: bool) -> None:
    """
    Fill the second group of ``room``: ν_r = c · rate · (ẋ_d − k_p x̃), J = c · rows · J_frame.

    Parameters
    ----------
    layout, room : the stack, and its evaluated charts.
    nominal : the evaluation a twin belongs to; only read if ``twin``.
    twin : whether this is the finite-difference twin, a moment after the nominal evaluation. It
        keeps the nominal turns: an angle's error must not jump by 2π between the two.

    """
    claims = room.claims
    step = room.x - room.x_d
    joints = room.q - room.q_d
    if twin:
        kept = nominal.error + wrapped(room.x - nominal.x) - wrapped(room.x_d - nominal.x_d)
        room.error[:] = np.where(layout.angular, kept, step)
        room.posture_error[:] = nominal.posture_error + (room.q - nominal.q) - (room.q_d - nominal.q_d)
    else:
        room.error[:] = np.where(layout.angular, wrapped(step), step)
        room.posture_error[:] = np.where(layout.continuous, wrapped(joints), joints)
    claims.posture[:] = claims.posture_feed_forward - layout.posture_k_p * room.posture_error
    speed = (room.rows_d[:, :6] * room.V[layout.source]).sum(axis=1)
    desired = room.x_dot_d + speed - layout.k_p * room.error
    for i in layout.rated:
        if claims.validity[i] > 0.0:  # ẋ_d exists only where the chart is valid
            first, last = layout.first_row[i], layout.first_row[i + 1]
            k = last - first
            slower = layout.k_p[first:last] * room.error[first:last]
            x_dot_d = solve(room.rate_d[first:last, :k].copy(), speed[first:last].copy())
            desired[first:last] = (room.rate[first:last, :k] * (x_dot_d - slower)).sum(axis=1)
    c = claims.validity[layout.task]
    claims.nu[:] = c * desired
    claims.J[:] = c.reshape(-1, 1) * (room.rows @ room.motion)


@compiled
def wrapped(angles: Array) -> Array:
    """
    Bring angles (rad) into [−π, π].

    """
    turns: Array = angles - 2.0 * np.pi * np.floor(angles / (2.0 * np.pi) + 0.5)
    return turns


@compiled
def solve(A: Array, b: Array) -> Array:
    """
    Solve A x = b by elimination with pivots; A and b are used up. A singular A gives zeros.

    """
    n = b.shape[0]
    for k in range(n):
        pivot = k
        for i in range(k + 1, n):
            if abs(A[i, k]) > abs(A[pivot, k]):
                pivot = i
        if not abs(A[pivot, k]) > 0.0:
            return np.zeros(n)
        if pivot != k:
            A[pivot], A[k] = A[k].copy(), A[pivot].copy()
            b[pivot], b[k] = b[k], b[pivot]
        for i in range(k + 1, n):
            factor = A[i, k] / A[k, k]
            A[i] -= factor * A[k]
            b[i] -= factor * b[k]
    for k in range(n - 1, -1, -1):
        for i in range(k + 1, n):
            b[k] -= A[k, i] * b[i]
        b[k] /= A[k, k]
    return b
