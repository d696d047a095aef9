# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What every chart has: its interface and the way from two poses to a task velocity.

A chart is one set of coordinates of a motion. It may fail somewhere, as long as it says so: its
validity fades to zero before it does. The mathematics of each chart is a plain function over
arrays; the class around it only holds parameters.

"""

from __future__ import annotations

from typing import Any, ClassVar

import numpy as np

from prioritized_tracking.core.rotation import Array
from prioritized_tracking.core.smooth import wrap
from prioritized_tracking.schema import Parameter


class ChartWork:
    """
    Arrays in which one task is evaluated, allocated once.

    Attributes
    ----------
    x, x_d : (m,) coordinates at the measured and at the reference pose, m or rad.
    x_dot_d : (m,) velocity of the reference coordinates, where the chart gives it itself.
    rows, rows_d : (m, k) with rows · V = rate · ẋ; k is 6 (pose) or n (joints).
    rate, rate_d : (m, m).

    """

    __slots__ = ("rate", "rate_d", "rows", "rows_d", "x", "x_d", "x_dot_d")

    def __init__(
        self, x: Array, x_d: Array, x_dot_d: Array, rows: Array, rows_d: Array, rate: Array, rate_d: Array
    ) -> None:
        self.x, self.x_d, self.x_dot_d = x, x_d, x_dot_d
        self.rows, self.rows_d, self.rate, self.rate_d = rows, rows_d, rate, rate_d

    @classmethod
    def allocate(cls, m: int, k: int) -> ChartWork:
        """
        Fresh arrays for m coordinates.

        """
        rows, rows_d = np.zeros((2, m, k))
        x, x_d, x_dot_d = np.zeros((3, m))
        return cls(x, x_d, x_dot_d, rows, rows_d, np.eye(m), np.eye(m))


class Chart:
    """
    One set of coordinates of a pose (``kind = "pose"``) or of the joint vector (``"joints"``).

    A chart of one's own derives from this class, sets the attributes below and writes
    ``evaluate``; it is registered under the entry-point group ``prioritized_tracking.charts``.

    Attributes
    ----------
    kind : "pose" or "joints".
    parameters : the chart's own keys in the stack file; they arrive as keyword arguments.
    coordinates : names of the m coordinates.
    unit : "m" if all rows are translations, "rad" if all are rotations.
    angular : for each coordinate, whether it is an angle that wraps at ±π.
    relative : True if the coordinates are relative to the reference pose.

    """

    kind: ClassVar[str] = "pose"
    parameters: ClassVar[tuple[Parameter, ...]] = ()
    relative: ClassVar[bool] = False

    coordinates: tuple[str, ...]
    unit: str
    angular: tuple[bool, ...]

    def __init__(self, **parameters: Any) -> None:
        raise NotImplementedError(f"{type(self).__name__} does not say how it is made from {parameters}")

    def evaluate(self, R: Array, p: Array, x: Array, rows: Array, rate: Array) -> float:
        """
        Coordinates, rows and rate at one pose.

        Parameters
        ----------
        R, p : (3, 3) and (3,) pose of the controlled frame in the base frame, m.
        x : (m,) filled with the coordinates.
        rows : (m, 6) filled with bounded rows such that rows · (v, ω) = rate · ẋ; (v, ω) is the
            velocity of the frame's origin and its angular velocity, in base axes. Arrives zeroed
            or as this chart left it last time.
        rate : (m, m) filled where it differs from the identity. Arrives as identity or as this
            chart left it last time.

        Returns
        -------
        float
            Validity: 1 where the chart is good, 0 before it fails, C² between.

        """
        raise NotImplementedError(f"{type(self).__name__}.evaluate")

    def difference(self, x: Array, x_d: Array, out: Array) -> None:
        """
        Fill ``out`` with x − x_d, wrapped to [−π, π] where a coordinate is an angle.

        """
        np.subtract(x, x_d, out=out)
        for i, angular in enumerate(self.angular):
            if angular:
                out[i] = wrap(out[i])

    def track(self, R: Array, p: Array, R_d: Array, p_d: Array, V_d: Array, work: ChartWork) -> float:
        """
        Evaluate the chart at the measured and at the reference pose.

        Parameters
        ----------
        R, p : measured pose in the base frame.
        R_d, p_d, V_d : reference pose and its velocity (6,), m/s and rad/s, in base axes.
        work : filled; ``x_dot_d`` only by charts with relative coordinates, which also leave
            ``x_d`` and ``rows_d`` at zero.

        Returns
        -------
        float
            c, the product of both validities.

        """
        c = self.evaluate(R, p, work.x, work.rows, work.rate)
        return c * self.evaluate(R_d, p_d, work.x_d, work.rows_d, work.rate_d)


class UnitRateChart(Chart):
    """
    A chart whose rate is the identity: rows · V = ẋ.

    """
