# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Pose, velocity and acceleration of a curve of positions and quaternions that are not of unit length.

With Q the quaternion of the curve, n = Q·Q and Q* its conjugate, the normalised curve has

    R = rotation(Q) / n,   ω = 2 vec(Q̇ Q*) / n,   ω̇ = (2 vec(Q̈ Q*) − 2 (Q·Q̇) ω) / n

in base axes: vec(Q̇ Q̇*) is zero, and the change of n appears in the scalar part of Q̇ Q* only. So
V and A are the exact derivatives of the normalised curve, and smooth through every sign and angle.

"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from prioritized_tracking.core.references.splines import Cubic
from prioritized_tracking.errors import InputError, Problem

Array: TypeAlias = NDArray[np.float64]


@dataclass(slots=True)
class PoseSample:
    """
    A pose reference at one instant, in base axes.

    Attributes
    ----------
    R : (3, 3) array
        Orientation of the frame.
    p : (3,) array
        Position of the frame origin, m.
    V : (6,) array
        Velocity of the frame origin (m/s), then angular velocity (rad/s).
    A : (6,) array
        Time derivative of V.

    """

    R: Array
    p: Array
    V: Array
    A: Array


def pose_at(spline: Cubic, u: float, du: float, ddu: float) -> PoseSample:
    """
    Return the sample at u on a spline of x, y, z, qx, qy, qz, qw.

    Plain floats: arrays of three cost several times more than their arithmetic.

    Parameters
    ----------
    spline : Cubic
        Seven components, the quaternion of any length but zero.
    u : float
        Place on the spline, s.
    du, ddu : float
        Derivatives of u with respect to the time of V and A (1, 1/s).

    """
    coefficients, h = spline.segment(u)
    cubic, square, linear, constant = coefficients.tolist()
    h3, twice = 3.0 * h, 2.0 * du * du
    value, first, second = [], [], []
    for c3, c2, c1, c0 in zip(cubic, square, linear, constant, strict=True):
        bend = h3 * c3
        slope = (bend + 2.0 * c2) * h + c1
        value.append(((h * c3 + c2) * h + c1) * h + c0)
        first.append(slope * du)
        second.append((bend + c2) * twice + slope * ddu)
    x, y, z, w = value[3:]
    omega, alpha = _angular((x, y, z, w), first[3:], second[3:])
    s = 2.0 / (x * x + y * y + z * z + w * w)
    sx, sy, sz = s * x, s * y, s * z
    xx, yy, zz = sx * x, sy * y, sz * z
    xy, xz, yz = sx * y, sx * z, sy * z
    wx, wy, wz = sx * w, sy * w, sz * w
    rotation = (
        (1.0 - yy - zz, xy - wz, xz + wy),
        (xy + wz, 1.0 - xx - zz, yz - wx),
        (xz - wy, yz + wx, 1.0 - xx - yy),
    )
    return PoseSample(
        np.array(rotation),
        np.array(value[:3]),
        np.array((*first[:3], *omega)),
        np.array((*second[:3], *alpha)),
    )


Vector: TypeAlias = tuple[float, float, float]


def _angular(
    q: tuple[float, float, float, float], dq: list[float], ddq: list[float]
) -> tuple[Vector, Vector]:
    """
    Return ω and ω̇ in base axes from a quaternion x y z w of any length and its derivatives.

    """
    x, y, z, w = q
    dx, dy, dz, dw = dq
    ex, ey, ez, ew = ddq
    s = 2.0 / (x * x + y * y + z * z + w * w)
    ox = s * (w * dx - dw * x + y * dz - z * dy)
    oy = s * (w * dy - dw * y + z * dx - x * dz)
    oz = s * (w * dz - dw * z + x * dy - y * dx)
    shrink = s * (x * dx + y * dy + z * dz + w * dw)
    alpha = (
        s * (w * ex - ew * x + y * ez - z * ey) - shrink * ox,
        s * (w * ey - ew * y + z * ex - x * ez) - shrink * oy,
        s * (w * ez - ew * z + x * ey - y * ex) - shrink * oz,
    )
    return (ox, oy, oz), alpha


def pose_magnitudes(spline: Cubic, u: Array, derivative: int) -> tuple[float, float]:
    """
    Return the largest linear and angular speed (1) or acceleration (2) at many places u, SI units.

    """
    values = [spline.many(u, order) for order in range(derivative + 1)]
    linear = np.linalg.norm(values[derivative][:, :3], axis=1)
    q, rest = values[0][:, 3:], [value[:, 3:] for value in values[1:]]
    n = np.einsum("ij,ij->i", q, q)[:, None]
    angular = 2.0 * _vector_part(rest[-1], q) / n
    if derivative == 2:
        omega = 2.0 * _vector_part(rest[0], q) / n
        angular -= 2.0 * np.einsum("ij,ij->i", q, rest[0])[:, None] / n * omega
    return float(np.max(linear)), float(np.max(np.linalg.norm(angular, axis=1)))


def _vector_part(a: Array, q: Array) -> Array:
    """
    Return the vector part of the products a q* of (N, 4) quaternions x y z w.

    """
    part: Array = q[:, 3:] * a[:, :3] - a[:, 3:] * q[:, :3] + np.cross(q[:, :3], a[:, :3])
    return part


def check_norms(spline: Cubic, where: str) -> None:
    """
    Refuse a path whose quaternion spline leaves the neighbourhood of the unit sphere between knots.

    Near zero it has no direction, far outside it turns away from its knots. Steps of at most 90°
    at even times keep it above cos 22.5° = 0.92; only very uneven times drive it out.

    """
    middle = 0.5 * (spline.breaks[1:] + spline.breaks[:-1])
    norms = np.linalg.norm(spline.many(middle)[:, 3:], axis=1)
    worst = int(np.argmax(np.abs(np.log(np.maximum(norms, 1e-9)))))
    if not 0.5 < norms[worst] < 2.0:
        raise InputError(
            Problem(
                what="the orientation swings out between two knots",
                where=where,
                expected="times in proportion to the way between knots",
                got=f"near {middle[worst]:.6g} s after the first row",
                remedy="Space the rows more evenly in time.",
            )
        )
