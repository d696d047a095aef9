# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Cartesian position: chosen axes of the frame's origin.

"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

from prioritized_tracking.charts.base import Chart, UnitRateChart
from prioritized_tracking.compiled import compiled
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.schema import Parameter

AXES = ("x", "y", "z", "xy", "xz", "yz", "xyz")


@compiled
def position(p: Array, axes: NDArray[np.int64], x: Array, rows: Array) -> float:
    """
    Selected coordinates of p; never fails.

    """
    for i in range(axes.shape[0]):
        x[i] = p[axes[i]]
        rows[i, axes[i]] = 1.0
    return 1.0


class Position(UnitRateChart):
    """
    Position of the frame's origin along chosen base axes, m.

    """

    parameters = (
        Parameter(
            key="axes",
            type="string",
            default="xyz",
            choices=AXES,
            help="Base axes along which the position counts.",
        ),
    )
    unit = "m"

    def __init__(self, *, axes: str = "xyz") -> None:
        if axes not in AXES:
            raise ValueError(f"axes: expected one of {', '.join(AXES)}, got {axes!r}")
        self.coordinates = tuple(axes)
        self.angular = (False,) * len(axes)
        self._axes = np.array(["xyz".index(a) for a in axes])

    def evaluate(self, R: Array, p: Array, x: Array, rows: Array, rate: Array) -> float:
        """
        See :meth:`Chart.evaluate`.

        """
        return position(p, self._axes, x, rows)


def described_axes(charts: Iterable[Chart]) -> str:
    """
    Base axes of a frame's position that charts are about: chosen ones, or all if a surface is among them.

    """
    translations = [chart for chart in charts if chart.unit == "m"]
    if all(isinstance(chart, Position) for chart in translations):
        return "".join(axis for axis in "xyz" if any(axis in chart.coordinates for chart in translations))
    return "xyz"
