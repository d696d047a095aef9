# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Signed distance to a surface: plane and cylinder.

"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from prioritized_tracking.charts.base import UnitRateChart
from prioritized_tracking.compiled import compiled
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.core.smooth import fade
from prioritized_tracking.schema import Parameter

#: Curved surfaces fade out where the distance to their centre or axis falls from the first to the
#: second of these fractions of the radius.
FADE_ONE, FADE_ZERO = 0.5, 0.2


def unit_vector(key: str, value: Any) -> Array:
    """
    Normalise a direction given by the user.

    """
    vector = np.asarray(value, dtype=np.float64)
    length = float(np.linalg.norm(vector)) if vector.shape == (3,) else 0.0
    if not (math.isfinite(length) and length > 1e-9):
        raise ValueError(f"{key}: expected three numbers that are not all zero, got {value!r}")
    return vector / length


def finite_point(key: str, value: Any) -> Array:
    """
    A finite point given by the user.

    """
    vector = np.asarray(value, dtype=np.float64)
    if vector.shape != (3,) or not np.all(np.isfinite(vector)):
        raise ValueError(f"{key}: expected three finite numbers, got {value!r}")
    return vector


POINT = Parameter(
    key="point",
    type="double_array",
    unit="m",
    default=(0.0, 0.0, 0.0),
    length=3,
    help="A point of it, in base.",
)


def direction(key: str, meaning: str) -> Parameter:
    """
    A direction of the stack file, along base z if left out.

    """
    text = f"{meaning}, in base; need not be normalised."
    return Parameter(key=key, type="double_array", default=(0.0, 0.0, 1.0), length=3, help=text)


@compiled
def plane(p: Array, through: Array, normal: Array, x: Array, rows: Array) -> float:
    """
    Signed distance to a plane, positive on the side of the normal; never fails.

    """
    distance = 0.0
    for i in range(3):
        distance += normal[i] * (p[i] - through[i])
        rows[0, i] = normal[i]
    x[0] = distance
    return 1.0


@compiled
def radial(p: Array, through: Array, axis: Array, out: Array) -> float:
    """
    Unit vector away from an axis and the distance to it; on the axis any vector across it.

    """
    height = 0.0
    for i in range(3):
        out[i] = p[i] - through[i]
        height += axis[i] * out[i]
    square = 0.0
    for i in range(3):
        out[i] -= height * axis[i]
        square += out[i] * out[i]
    distance = math.sqrt(square)
    if distance > 1e-12:
        for i in range(3):
            out[i] /= distance
        return distance
    smallest = 0
    for i in range(1, 3):
        if abs(axis[i]) < abs(axis[smallest]):
            smallest = i
    scale = 1.0 / math.sqrt(1.0 - axis[smallest] * axis[smallest])
    for i in range(3):
        out[i] = scale * ((1.0 if i == smallest else 0.0) - axis[smallest] * axis[i])
    return distance


@compiled
def cylinder(p: Array, through: Array, axis: Array, radius: float, x: Array, rows: Array) -> float:
    """
    Signed distance to a cylinder, positive outside; fails on its axis.

    """
    distance = radial(p, through, axis, rows[0])
    x[0] = distance - radius
    return fade(distance, FADE_ZERO * radius, FADE_ONE * radius)


class Plane(UnitRateChart):
    """
    Signed distance of the frame's origin to a plane, m.

    """

    parameters = (
        POINT,
        direction("normal", "Direction in which the distance counts positive"),
    )
    unit = "m"
    coordinates = ("distance",)
    angular = (False,)

    def __init__(self, *, point: Any = (0.0, 0.0, 0.0), normal: Any = (0.0, 0.0, 1.0)) -> None:
        self._point, self._normal = finite_point("point", point), unit_vector("normal", normal)

    def evaluate(self, R: Array, p: Array, x: Array, rows: Array, rate: Array) -> float:
        """
        See :meth:`Chart.evaluate`.

        """
        return plane(p, self._point, self._normal, x, rows)


class Cylinder(UnitRateChart):
    """
    Signed distance of the frame's origin to a cylinder, m; fades out near its axis.

    """

    parameters = (
        POINT,
        direction("axis", "Direction of its axis"),
        Parameter(
            key="radius", type="double", unit="m", required=True, low=1e-4, help="Radius of the cylinder."
        ),
    )
    unit = "m"
    coordinates = ("distance",)
    angular = (False,)

    def __init__(self, *, radius: float, point: Any = (0.0, 0.0, 0.0), axis: Any = (0.0, 0.0, 1.0)) -> None:
        if not (math.isfinite(radius) and radius > 0.0):
            raise ValueError(f"radius: expected a positive number of metres, got {radius!r}")
        self._point, self._axis = finite_point("point", point), unit_vector("axis", axis)
        self._radius = float(radius)

    def evaluate(self, R: Array, p: Array, x: Array, rows: Array, rate: Array) -> float:
        """
        See :meth:`Chart.evaluate`.

        """
        return cylinder(p, self._point, self._axis, self._radius, x, rows)
