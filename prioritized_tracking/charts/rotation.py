# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Orientation: rotation vector relative to the reference, and the twelve sequences of Euler angles.

"""

from __future__ import annotations

import math
from typing import Any, TypeAlias

from prioritized_tracking.charts.base import Chart, ChartWork, UnitRateChart
from prioritized_tracking.compiled import compiled
from prioritized_tracking.core.rotation import Array, rotation_log
from prioritized_tracking.core.smooth import fade
from prioritized_tracking.schema import Parameter

#: The twelve intrinsic sequences: the first six proper (first axis = last), then Tait-Bryan.
SEQUENCES = ("xyx", "xzx", "yxy", "yzy", "zxz", "zyz", "xyz", "xzy", "yxz", "yzx", "zxy", "zyx")

#: The rotation vector fades out over this error (rad), before its axis flips at π.
_FADE_ONE, _FADE_ZERO = 2.6, 3.0


class RotationVector(UnitRateChart):
    """
    Rotation error x̃ = log(R R_dᵀ) in base axes, rad; coordinates relative to the reference.

    The rows are the identity on ω. The rate of the coordinates is the left Jacobian of the
    exponential, ω = J_l(x̃) x̃˙ for a reference at rest; since J_l(x̃) x̃ = x̃ the law needs only
    ν_r = c (R R_dᵀ ω_d − k_p x̃), so the feed-forward is turned by the error and the rate is I.

    """

    relative = True
    unit = "rad"
    coordinates = ("rx", "ry", "rz")
    angular = (False, False, False)  # the logarithm is already the short way round

    def __init__(self) -> None:
        pass

    def track(self, R: Array, p: Array, R_d: Array, p_d: Array, V_d: Array, work: ChartWork) -> float:
        """
        See :meth:`Chart.track`.

        """
        return rotation_vector(R, R_d, V_d[3:], work.x, work.x_dot_d, work.rows)


def euler_indices(sequence: str) -> tuple[int, int, int, int, float]:
    """
    Axes i, j, k of a sequence, the axis l that completes (i, j), and the parity of (i, j, l).

    """
    i, j, k = ("xyz".index(a) for a in sequence)
    third = 3 - i - j
    parity = 1.0 if (j - i) % 3 == 1 else -1.0
    return i, j, k, third, parity


EulerAxes: TypeAlias = tuple[int, int, int, int, float]


@compiled
def rotation_vector(R: Array, R_d: Array, omega_d: Array, x: Array, x_dot_d: Array, rows: Array) -> float:
    """
    x̃ = log(R R_dᵀ), rows on ω, and the reference's angular velocity turned by the error.

    """
    E = R @ R_d.T
    angle = rotation_log(E, x)
    for i in range(3):
        x_dot_d[i] = E[i, 0] * omega_d[0] + E[i, 1] * omega_d[1] + E[i, 2] * omega_d[2]
        rows[i, 3 + i] = 1.0
    return fade(angle, _FADE_ZERO, _FADE_ONE)


@compiled
def euler(R: Array, axes: EulerAxes, span: tuple[float, float], x: Array, rows: Array, rate: Array) -> float:
    """
    Intrinsic Euler angles R = R_i(φ) R_j(β) R_k(γ), with ω = E (φ̇, β̇, γ̇) in base axes.

    E holds the three rotation axes: e_i, R_i(φ) e_j and R e_k. Rows are Eᵀ on ω, the rate is EᵀE;
    its off-diagonal element is e_iᵀ R e_k, cos β or ± sin β, and the smallest singular value of E is
    √(1 − |e_iᵀ R e_k|) (Diebel 2006 tabulates E for all twelve).

    """
    i, j, k, third, parity = axes
    coupling = R[i, k]
    if i == k:
        x[0] = math.atan2(R[j, i], -parity * R[third, i])
        x[1] = math.atan2(math.hypot(R[j, i], R[third, i]), coupling)
        x[2] = math.atan2(R[i, j], parity * R[i, third])
    else:
        x[0] = math.atan2(-parity * R[j, k], R[k, k])
        x[1] = math.atan2(parity * coupling, math.hypot(R[j, k], R[k, k]))
        x[2] = math.atan2(-parity * R[i, j], R[i, i])
    rows[0, 3 + i] = 1.0
    rows[1, 3 + j] = math.cos(x[0])
    rows[1, 3 + third] = parity * math.sin(x[0])
    rows[2, 3] = R[0, k]
    rows[2, 4] = R[1, k]
    rows[2, 5] = R[2, k]
    rate[0, 2] = rate[2, 0] = coupling
    return fade(math.sqrt(max(0.0, 1.0 - abs(coupling))), span[0], span[1])


class Euler(Chart):
    """
    Three intrinsic Euler angles, rad, in one of the twelve sequences.

    Proper sequences fail where the middle angle is 0 or π, Tait-Bryan sequences where it is ±π/2.

    """

    parameters = (
        Parameter(
            key="sequence",
            type="string",
            default="zyz",
            choices=SEQUENCES,
            help="Order of the intrinsic rotations. Pair sequences that do not fail together: zyz, xyz.",
        ),
        Parameter(
            key="validity",
            type="double_array",
            default=(0.2, 0.5),
            length=2,
            low=0.0,
            high=1.0,
            help="Smallest singular value of the axes at which the chart is off, and fully on.",
        ),
    )
    unit = "rad"
    angular = (True, False, True)

    def __init__(self, *, sequence: str = "zyz", validity: Any = (0.2, 0.5)) -> None:
        if sequence not in SEQUENCES:
            raise ValueError(f"sequence: expected one of {', '.join(SEQUENCES)}, got {sequence!r}")
        off, on = (float(value) for value in validity)
        if not 0.0 < off < on <= 1.0:
            raise ValueError(f"validity: expected [off, on] with 0 < off < on <= 1, got [{off:g}, {on:g}]")
        self.coordinates = tuple(f"{axis}{n}" for n, axis in enumerate(sequence, 1))
        self._axes = euler_indices(sequence)
        self._span = (off, on)

    def evaluate(self, R: Array, p: Array, x: Array, rows: Array, rate: Array) -> float:
        """
        See :meth:`Chart.evaluate`.

        """
        return euler(R, self._axes, self._span, x, rows, rate)
