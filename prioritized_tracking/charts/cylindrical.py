# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Cylindrical coordinates: radius, azimuth and height about an axis.

"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from prioritized_tracking.charts.base import Chart
from prioritized_tracking.charts.surface import POINT, direction, finite_point, radial, unit_vector
from prioritized_tracking.compiled import compiled
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.core.smooth import fade
from prioritized_tracking.schema import Parameter

NEAR_AXIS = Parameter(
    key="near_axis",
    type="double_array",
    unit="m",
    default=(0.02, 0.05),
    length=2,
    low=0.0,
    help="Distance to the axis at which the chart is off, and fully on.",
)


def near_axis_span(value: Any) -> tuple[float, float]:
    """
    The two distances of ``near_axis``, checked.

    """
    off, on = (float(number) for number in value)
    if not 0.0 < off < on < math.inf:
        raise ValueError(f"near_axis: expected [off, on] with 0 < off < on, got [{off:g}, {on:g}]")
    return off, on


def azimuth_axes(axis: Array) -> tuple[Array, Array]:
    """
    Where azimuth is zero, and where it is 90°: base x (y if the axis is along x) made normal to the axis.

    """
    start = np.array([1.0, 0.0, 0.0]) if abs(axis[0]) < 0.9 else np.array([0.0, 1.0, 0.0])
    zero = unit_vector("axis", start - (start @ axis) * axis)
    return zero, np.cross(axis, zero)


@compiled
def cylindrical(
    p: Array, through: Array, frame: Array, span: tuple[float, float], x: Array, rows: Array, rate: Array
) -> float:
    """
    Radius, azimuth, height; rows (e_r, e_θ, e_z), rate diag(1, r, 1).

    ``frame`` holds the directions of azimuth 0, azimuth 90° and the axis as its rows.

    """
    r = radial(p, through, frame[2], rows[0])
    cosine = sine = height = 0.0
    for i in range(3):
        cosine += rows[0, i] * frame[0, i]
        sine += rows[0, i] * frame[1, i]
        height += (p[i] - through[i]) * frame[2, i]
    for i in range(3):
        rows[1, i] = cosine * frame[1, i] - sine * frame[0, i]
        rows[2, i] = frame[2, i]
    x[0] = r
    x[1] = math.atan2(sine, cosine)
    x[2] = height
    rate[1, 1] = r
    return fade(r, span[0], span[1])


class Cylindrical(Chart):
    """
    Radius (m), azimuth (rad) and height (m) of the frame's origin about an axis; fails on it.

    Azimuth counts from base x made normal to the axis (from base y if the axis is within about 25°
    of x), right-handed about the axis. All rows are translations: the azimuth's row is the speed
    along the circle.

    """

    parameters = (
        POINT,
        direction("axis", "Direction of the axis"),
        NEAR_AXIS,
    )
    unit = "m"
    coordinates = ("r", "theta", "z")
    angular = (False, True, False)

    def __init__(
        self, *, point: Any = (0.0, 0.0, 0.0), axis: Any = (0.0, 0.0, 1.0), near_axis: Any = (0.02, 0.05)
    ) -> None:
        self._point = finite_point("point", point)
        along = unit_vector("axis", axis)
        self._frame = np.array([*azimuth_axes(along), along])
        self._span = near_axis_span(near_axis)

    def evaluate(self, R: Array, p: Array, x: Array, rows: Array, rate: Array) -> float:
        """
        See :meth:`Chart.evaluate`.

        """
        return cylindrical(p, self._point, self._frame, self._span, x, rows, rate)
