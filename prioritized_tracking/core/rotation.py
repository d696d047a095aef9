# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Rotation matrices and rotation vectors.

"""

from __future__ import annotations

import math
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from prioritized_tracking.compiled import compiled

Array: TypeAlias = NDArray[np.float64]

#: Below this angle (rad) sin(θ)/θ is 1 to machine precision: θ²/6 < 2e-16.
_SMALL = 3e-8
#: From this angle (rad) on the axis comes from the symmetric part of R: sin(θ) loses digits there.
_NEAR_PI = 3.0


@compiled
def rotation_log(R: Array, out: Array) -> float:
    """
    Rotation vector of a rotation matrix, shortest way round.

    The axis comes from the skew part of R, near π from the symmetric part
    R + Rᵀ = 2 cos θ I + 2 (1 − cos θ) a aᵀ with the sign of the skew part.

    Parameters
    ----------
    R : (3, 3) rotation matrix.
    out : (3,) filled with θ a (rad).

    Returns
    -------
    float
        The angle θ in [0, π], rad.

    """
    x = R[2, 1] - R[1, 2]
    y = R[0, 2] - R[2, 0]
    z = R[1, 0] - R[0, 1]
    twice_sine = math.sqrt(x * x + y * y + z * z)
    angle = math.atan2(twice_sine, R[0, 0] + R[1, 1] + R[2, 2] - 1.0)
    if angle < _NEAR_PI:
        factor = 0.5 if angle < _SMALL else angle / twice_sine
        out[0] = factor * x
        out[1] = factor * y
        out[2] = factor * z
        return angle
    cosine = math.cos(angle)
    k = 0
    for i in range(1, 3):
        if R[i, i] > R[k, k]:
            k = i
    length = 0.0
    for i in range(3):
        out[i] = 0.5 * (R[i, k] + R[k, i]) - (cosine if i == k else 0.0)
        length += out[i] * out[i]
    sign = 1.0 if out[0] * x + out[1] * y + out[2] * z >= 0.0 else -1.0
    factor = sign * angle / math.sqrt(length)
    for i in range(3):
        out[i] *= factor
    return angle


@compiled
def advance_pose(
    R: Array, p: Array, V: Array, A: Array, h: float, R_h: Array, p_h: Array, V_h: Array
) -> None:
    """
    Move a pose along its velocity for a time so short that |ω h|³ is nothing.

    Parameters
    ----------
    R, p, V, A : pose, velocity (v, ω) and its derivative, base axes, m and rad per s and s².
    h : time, s.
    R_h, p_h, V_h : filled.

    """
    p_h[:] = p + h * V[:3] + (0.5 * h * h) * A[:3]
    V_h[:] = V + h * A
    x, y, z = h * V[3:] + (0.5 * h * h) * A[3:]
    K = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    turned = K @ R
    R_h[:] = R + turned + 0.5 * (K @ turned)  # the exponential to second order: off by |ω h|³/6


@compiled
def advance_joints(q: Array, v: Array, a: Array, h: float, q_h: Array, v_h: Array) -> None:
    """
    Move joint positions (rad) along their velocity for a short time h (s); fill q_h and v_h.

    """
    q_h[:] = q + h * v + (0.5 * h * h) * a
    v_h[:] = v + h * a
