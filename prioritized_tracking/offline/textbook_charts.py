# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Charts as a textbook writes them: plain NumPy formulas, from the keys of a stack file.

Independent of the package's own charts, which are compiled; see `offline.textbook_step`.

"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np

from prioritized_tracking.offline.textbook import Array, smoothstep


@dataclass
class Coordinates:
    """
    A pose chart at one pose: x (m,), rows (m, 6), rate (m, m), validity.

    """

    x: Array
    rows: Array
    rate: Array
    validity: float


Formula: TypeAlias = Callable[[Array, Array], Coordinates]
"""Takes R (3, 3) and p (3,), m; gives the coordinates."""


def position(entry: Mapping[str, Any]) -> Formula:
    """
    Chosen coordinates of p.

    """
    chosen = ["xyz".index(axis) for axis in entry["axes"]]
    rows = np.hstack([np.eye(3), np.zeros((3, 3))])[chosen]
    rate = np.eye(len(chosen))
    return lambda R, p: Coordinates(p[chosen], rows, rate, 1.0)


def plane(entry: Mapping[str, Any]) -> Formula:
    """
    Distance along the normal.

    """
    point, normal = np.array(entry["point"], dtype=float), _unit(entry["normal"])
    rows = np.concatenate([normal, np.zeros(3)])[None]
    return lambda R, p: Coordinates(np.array([normal @ (p - point)]), rows, np.eye(1), 1.0)


def cylinder(entry: Mapping[str, Any]) -> Formula:
    """
    Distance to the axis, less the radius.

    """
    point, axis, radius = np.array(entry["point"], dtype=float), _unit(entry["axis"]), entry["radius"]
    across = np.eye(3) - np.outer(axis, axis)

    def formula(_R: Array, p: Array) -> Coordinates:
        away = across @ (p - point)
        distance = np.linalg.norm(away)
        rows = np.concatenate([away / distance, np.zeros(3)])[None]
        validity = _fade(distance, 0.2 * radius, 0.5 * radius)
        return Coordinates(np.array([distance - radius]), rows, np.eye(1), validity)

    return formula


def cylindrical(entry: Mapping[str, Any]) -> Formula:
    """
    Radius, azimuth from base x (or y, if the axis is within 25° of x) and height.

    """
    point, axis = np.array(entry["point"], dtype=float), _unit(entry["axis"])
    start = np.array([1.0, 0.0, 0.0]) if abs(axis[0]) < 0.9 else np.array([0.0, 1.0, 0.0])
    zero = _unit(start - (start @ axis) * axis)
    quarter = np.cross(axis, zero)
    off, on = entry["near_axis"]

    def formula(_R: Array, p: Array) -> Coordinates:
        a, b, height = (p - point) @ np.stack([zero, quarter, axis], axis=1)
        r = np.hypot(a, b)
        e_r = (a * zero + b * quarter) / r
        rows = np.hstack([np.stack([e_r, np.cross(axis, e_r), axis]), np.zeros((3, 3))])
        x = np.array([r, np.arctan2(b, a), height])
        return Coordinates(x, rows, np.diag([1.0, r, 1.0]), _fade(r, off, on))

    return formula


def euler(entry: Mapping[str, Any]) -> Formula:
    """
    Three intrinsic angles; rows Eᵀ on ω and rate EᵀE, E the three axes of rotation.

    """
    i, j, k = ("xyz".index(axis) for axis in entry["sequence"])
    third = 3 - i - j
    sign = 1.0 if (j - i) % 3 == 1 else -1.0
    off, on = entry["validity"]
    unit = np.eye(3)

    def formula(R: Array, _p: Array) -> Coordinates:
        if i == k:
            first, last = np.arctan2(R[j, i], -sign * R[third, i]), np.arctan2(R[i, j], sign * R[i, third])
            middle = np.arctan2(np.hypot(R[j, i], R[third, i]), R[i, i])
        else:
            first, last = np.arctan2(-sign * R[j, k], R[k, k]), np.arctan2(-sign * R[i, j], R[i, i])
            middle = np.arctan2(sign * R[i, k], np.hypot(R[j, k], R[k, k]))
        turned = np.cos(first) * unit[j] + sign * np.sin(first) * unit[third]
        E = np.stack([unit[i], turned, R[:, k]], axis=1)
        smallest = np.sqrt(max(0.0, 1.0 - abs(E[:, 0] @ E[:, 2])))
        rows = np.hstack([np.zeros((3, 3)), E.T])
        return Coordinates(np.array([first, middle, last]), rows, E.T @ E, _fade(smallest, off, on))

    return formula


def rotation_vector(R: Array, R_d: Array) -> tuple[Array, float]:
    """
    log(R R_dᵀ) from the skew part (errors below 3 rad), and the validity.

    """
    E = R @ R_d.T
    skew = np.array([E[2, 1] - E[1, 2], E[0, 2] - E[2, 0], E[1, 0] - E[0, 1]])
    twice = np.linalg.norm(skew)
    angle = np.arctan2(twice, np.trace(E) - 1.0)
    return skew * (angle / twice if twice > 0.0 else 0.5), _fade(angle, 3.0, 2.6)


FORMULAS: dict[str, Callable[[Mapping[str, Any]], Formula]] = {
    "position": position,
    "plane": plane,
    "cylinder": cylinder,
    "cylindrical": cylindrical,
    "euler": euler,
}
"""Charts of a pose that there is a formula for; others are evaluated by their own class."""


def of_class(chart: Any) -> Formula:
    """
    A chart that has no formula here: its own ``evaluate``.

    """
    m = len(chart.coordinates)

    def formula(R: Array, p: Array) -> Coordinates:
        x, rows, rate = np.zeros(m), np.zeros((m, 6)), np.eye(m)
        return Coordinates(x, rows, rate, chart.evaluate(R, p, x, rows, rate))

    return formula


def _unit(value: Any) -> Array:
    vector = np.array(value, dtype=float)
    unit: Array = vector / np.linalg.norm(vector)
    return unit


def _fade(z: Any, zero: float, one: float) -> float:
    return float(smoothstep((z - zero) / (one - zero)))
