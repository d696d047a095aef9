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

    Parameters
    ----------
    m, k : number of coordinates; 6 for a pose, n for joints.
    vectors : (4, m) view to use for x, x_d, error and x_dot_d; None: fresh arrays.
    rows : (m, k) view to use; None: a fresh array.

    Attributes
    ----------
    x, x_d : (m,) coordinates at the measured and at the reference pose, m or rad.
    error : (m,) x̃, the wrapped difference.
    x_dot_d : (m,) velocity ẋ_d of the reference coordinates.
    rows, rows_d : (m, k) with rows · V = rate · ẋ.
    rate, rate_d : (m, m).
    validity : float in [0, 1], the product c of both validities.

    """

    __slots__ = ("error", "rate", "rate_d", "rows", "rows_d", "validity", "x", "x_d", "x_dot_d")

    def __init__(self, m: int, k: int, vectors: Array | None = None, rows: Array | None = None) -> None:
        self.x, self.x_d, self.error, self.x_dot_d = vectors if vectors is not None else np.zeros((4, m))
        self.rows, self.rows_d = np.zeros((m, k)) if rows is None else rows, np.zeros((m, k))
        self.rate, self.rate_d = np.eye(m), np.eye(m)
        self.validity = 0.0


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

    def track(self, R: Array, p: Array, R_d: Array, p_d: Array, V_d: Array, work: ChartWork) -> None:
        """
        Evaluate the chart at the measured and the reference pose and fill ``work``.

        ẋ_d = rate_d⁻¹ rows_d V_d is solved only where the reference's validity is positive; where
        the task has faded out, ẋ_d is left at zero and multiplied by a validity of zero.

        Parameters
        ----------
        R, p : measured pose in the base frame.
        R_d, p_d, V_d : reference pose and its velocity (6,), m/s and rad/s, in base axes.
        work : filled.

        """
        c = self.evaluate(R, p, work.x, work.rows, work.rate)
        c_d = self.evaluate(R_d, p_d, work.x_d, work.rows_d, work.rate_d)
        work.validity = c * c_d
        self.difference(work.x, work.x_d, work.error)
        if c_d > 0.0:
            work.x_dot_d[:] = self.rate_solve(work.rate_d, work.rows_d @ V_d)
        else:
            work.x_dot_d[:] = 0.0

    def rate_solve(self, rate: Array, y: Array) -> Array:
        """
        Solve rate · ẋ = y; charts with an identity rate need not.

        """
        return np.asarray(np.linalg.solve(rate, y), dtype=np.float64)


class UnitRateChart(Chart):
    """
    A chart whose rate is the identity: rows · V = ẋ.

    """

    def rate_solve(self, rate: Array, y: Array) -> Array:
        """
        Nothing to solve.

        """
        return y
