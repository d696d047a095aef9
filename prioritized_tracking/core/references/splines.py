# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Cubic splines through the knots of a file: built with SciPy, evaluated one point at a time.

A control cycle asks for one point with two derivatives. SciPy's evaluators are made for long
arrays; for one point the few products themselves, in plain floats, cost a fraction.

"""

from __future__ import annotations

from bisect import bisect_right
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicHermiteSpline, CubicSpline, PPoly, make_interp_spline

Array = NDArray[np.float64]


class Cubic:
    """
    Piecewise cubic in m components over [0, span].

    Parameters
    ----------
    breaks : (k + 1,) array
        Strictly increasing, from 0, s.
    coefficients : (4, k, m) array
        Highest power first, in the time since the start of the segment.

    """

    __slots__ = ("_breaks", "_segments", "breaks", "coefficients")

    def __init__(self, breaks: Array, coefficients: Array) -> None:
        self.breaks = breaks
        self.coefficients = coefficients
        self._breaks: list[float] = breaks.tolist()
        self._segments = np.ascontiguousarray(coefficients.transpose(1, 0, 2))

    def segment(self, u: float) -> tuple[Array, float]:
        """
        Return the (4, m) coefficients of the segment that holds u, and the time since its start.

        """
        i = min(max(bisect_right(self._breaks, u) - 1, 0), len(self._segments) - 1)
        return self._segments[i], u - self._breaks[i]

    def many(self, u: Array, derivative: int = 0) -> Array:
        """
        Return the (len(u), m) values of a derivative at many points.

        """
        values: Array = PPoly(self.coefficients, self.breaks)(u, derivative)
        return values


def clamped(times: Array, values: Array) -> Cubic:
    """
    Return the cubic spline with zero velocity at both ends.

    """
    return _from_scipy(CubicSpline(times, values, bc_type="clamped"))


def free(times: Array, values: Array) -> Cubic:
    """
    Return the cubic spline whose end velocities follow from the knots.

    Not-a-knot: the first two segments are one cubic, and the last two. Two knots give a line,
    three a parabola.

    """
    return _from_scipy(CubicSpline(times, values, bc_type="not-a-knot"))


def periodic(times: Array, values: Array, signs: Array | None = None) -> Cubic:
    """
    Return the cubic spline that closes with two continuous derivatives.

    Parameters
    ----------
    times : (N,) array
        From 0, s.
    values : (N, m) array
        The last row is taken to be the first (times `signs`).
    signs : (m,) array of 1 and -1, optional
        Components with -1 come back with the opposite sign, derivatives included: a quaternion
        after an odd number of turns. All of them are periodic over two passes; the first of the
        two is returned.

    """
    if signs is None or np.all(signs > 0.0):
        closed = np.concatenate((values[:-1], values[:1]))
        return _from_scipy(CubicSpline(times, closed, bc_type="periodic"))
    once = values[:-1]
    twice = np.concatenate((once, signs * once, once[:1]))
    both = CubicSpline(np.concatenate((times[:-1], times[-1] + times)), twice, bc_type="periodic")
    count = len(times) - 1
    return Cubic(times, np.ascontiguousarray(both.c[:, :count]))


def resting(times: Array, values: Array) -> Cubic:
    """
    Return the cubic spline with zero velocity and zero acceleration at both ends.

    Two more conditions than a clamped spline need two more places where the third derivative may
    change: one in the middle of the first segment and one in the middle of the last (a path of two
    knots has them at its thirds).

    """
    if len(times) == 2:
        extra = times[0] + (times[1] - times[0]) * np.array([1.0, 2.0]) / 3.0
    else:
        extra = np.array([times[0] + times[1], times[-2] + times[-1]]) / 2.0
    inner = np.sort(np.concatenate((times[1:-1], extra)))
    knots = np.concatenate((np.repeat(times[0], 4), inner, np.repeat(times[-1], 4)))
    zero = np.zeros(values.shape[1])
    ends = [(1, zero), (2, zero)]
    spline: Any = make_interp_spline(times, values, k=3, t=knots, bc_type=(ends, ends))
    breaks = np.sort(np.concatenate((times, extra)))
    slopes = spline(breaks, 1)
    slopes[[0, -1]] = 0.0
    return _from_scipy(CubicHermiteSpline(breaks, spline(breaks), slopes))


def _from_scipy(spline: PPoly) -> Cubic:
    """
    Return a SciPy piecewise cubic as ours.

    """
    return Cubic(np.array(spline.x), np.array(spline.c))
