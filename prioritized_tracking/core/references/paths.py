# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What pose and joint paths have in common: the choice of their ends, their time, checks of their knots.

Which ends a path has follows from its knots:

- at rest: the clamped spline ends with less than `REST_LINEAR` and `REST_ANGULAR`. The spline then
  starts and ends with no velocity and no acceleration.
- moving: the spline keeps the velocity its knots ask for and the path's time is ramped instead.
  (A file of constant speed squeezed to rest within one row would ask for tens of m/s².)
- periodic: a closed path of several passes; ramped at the first start and the last end only.

A follower takes all of this from its leader.

"""

from __future__ import annotations

import math
import operator
from collections.abc import Callable
from typing import TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from prioritized_tracking.core.references import splines
from prioritized_tracking.core.references.path_time import RAMP_SLOPE_MAX, PathTime
from prioritized_tracking.core.references.splines import Cubic
from prioritized_tracking.errors import InputError, Problem

Array: TypeAlias = NDArray[np.float64]
Magnitudes: TypeAlias = Callable[[Cubic, Array, int], tuple[float, float]]

REST_LINEAR = 0.01
"""End acceleration of the clamped spline below which a path counts as at rest, m/s²."""
REST_ANGULAR = 0.05
"""The same for rotations and joints, rad/s²."""
CLOSED_LINEAR = 1e-6
"""Gap between the ends of a closed path, m: files carry six decimals."""
CLOSED_ANGULAR = 1e-5
"""The same for rotations and joints, rad: a quaternion of six decimals turns by up to 2e-6."""
RAMP_SHORTEST = 0.5
"""Shortest ramp, s: several periods of what an arm's joints and mounting oscillate with."""
RAMP_LINEAR = 0.5
"""Largest acceleration a ramp may add along the path, m/s²."""
RAMP_ANGULAR = 2.0
"""The same for rotations and joints, rad/s²."""


class TimedPath:
    """
    What pose and joint paths share: the map from path time to the place on the file's spline.

    Attributes
    ----------
    knots : (N,) array
        Times of the knots since the first one, s.
    closed : bool
        The last knot is the place of the first.
    periodic : bool
        Several passes that run into each other without a stop.
    messages : tuple of str
        What to say in the log about how the knots were taken.

    """

    knots: Array
    closed: bool
    periodic: bool
    messages: tuple[str, ...]
    _time: PathTime
    _spline: Cubic

    @property
    def file_duration(self) -> float:
        """
        Time from the first knot to the last, s.

        """
        return self._time.span

    @property
    def duration(self) -> float:
        """
        Path time to the final end over all passes, ramps included, s; infinite when endless.

        """
        return self._time.duration

    @property
    def ramped(self) -> bool:
        """
        Whether time is ramped at the first start and the last end.

        """
        return self._time.ramp_time > 0.0

    @property
    def ramp_time(self) -> float:
        """
        Path time of each ramp, s; 0 without.

        """
        return self._time.ramp_time

    @property
    def passes(self) -> int:
        """
        Number of passes; 0: endless.

        """
        return self._time.passes

    def path_time(self, file_time: float, lap: int = 0) -> float:
        """
        Return the path time (s) of a time since the first knot (s) in a pass (0 = first).

        """
        return self._time.inverse(file_time + lap * self._time.span)

    def lap(self, s: float) -> int:
        """
        Return the pass (0 = first) at path time s (s).

        """
        return self._time.split(self._time.at(s)[0])[0]

    def _lay(self, values: Array, passes: int, magnitudes: Magnitudes, signs: Array | None = None) -> None:
        """
        Choose the ends of a path without a leader; set its spline, its time and its messages.

        """
        knots, self.messages = self.knots, ()
        self.periodic = passes != 1
        if self.periodic:
            self._spline = splines.periodic(knots, values, signs)
        else:
            ends = magnitudes(splines.clamped(knots, values), knots[[0, -1]], 2)
            moving = ends[0] >= REST_LINEAR or ends[1] >= REST_ANGULAR
            self._spline = (splines.free if moving else splines.resting)(knots, values)
            if not moving:
                self._time = PathTime(float(knots[-1]))
                return
        fastest = magnitudes(self._spline, knots, 1)
        self._time = _ramped_time(float(knots[-1]), passes, fastest)
        if not self.periodic:
            self.messages = (
                f"the path does not rest at its ends (stopping within one row would take {ends[0]:.3g} m/s² "
                f"and {ends[1]:.3g} rad/s²): its time is ramped over {self.ramp_time:.3g} s at both ends; "
                f"its geometry is unchanged, {self.file_duration:.6g} s become {self.duration:.6g} s",
            )


def _ramped_time(span: float, passes: int, fastest: tuple[float, float]) -> PathTime:
    """
    Return the time map with ramps that keep to `RAMP_LINEAR` and `RAMP_ANGULAR` where they fit.

    """
    wanted = max(
        RAMP_SHORTEST, RAMP_SLOPE_MAX * fastest[0] / RAMP_LINEAR, RAMP_SLOPE_MAX * fastest[1] / RAMP_ANGULAR
    )
    return PathTime(span, passes, min(wanted, span * passes if passes else math.inf))


def number_of_passes(repeat: int, closed: bool, apart: str, where: str) -> int:
    """
    Return the number of passes; refuse negative ones, and several of an open path.

    """
    try:
        passes = -1 if isinstance(repeat, bool) else operator.index(repeat)
    except TypeError:
        passes = -1
    if passes < 0:
        raise InputError(
            Problem(
                what="repeat is not a number of passes",
                where=where,
                expected="an integer, 0 or more",
                got=repr(repeat),
            )
        )
    if passes != 1 and not closed:
        raise InputError(
            Problem(
                what=f"an open path cannot be repeated (repeat: {passes})",
                where=where,
                expected=f"last row equal to the first within {CLOSED_LINEAR:g} m, {CLOSED_ANGULAR:g} rad",
                got=f"ends apart by {apart}",
                remedy="Close the path or set repeat to 1.",
            )
        )
    return passes


def check_follower(knots: Array, leader: TimedPath, apart: str, where: str) -> None:
    """
    Refuse a follower that does not fit its leader.

    """
    if not isinstance(leader, TimedPath):
        raise InputError(Problem(what="the reference followed is held: there is no path", where=where))
    span, wanted = float(knots[-1]), leader.file_duration
    problems = []
    if abs(span - wanted) > 1e-6 * max(1.0, wanted):
        problems.append(
            Problem(
                what="the joint reference does not last as long as the path it follows",
                where=where,
                expected=f"{wanted:.9g} s from first to last row",
                got=f"{span:.9g} s",
                remedy="Compute the companion of the present path again.",
            )
        )
    if leader.periodic and apart:
        problems.append(
            Problem(
                what="the path followed is repeated, but the joints do not come back to their start",
                where=where,
                expected=f"ends equal within {CLOSED_ANGULAR:g} rad (continuous joints: up to whole turns)",
                got=f"ends apart by {apart}",
                remedy="Use a closed joint path, or set repeat of the path followed to 1.",
            )
        )
    if problems:
        raise InputError(problems)


def as_array(name: str, values: ArrayLike, columns: int, where: str, rows: int | None = None) -> Array:
    """
    Return values as a float array (rows, columns); columns 0: a vector; -1: any number of them.

    """
    wanted = f"({'N' if rows is None else rows},{'' if columns == 0 else f' {columns}'})".replace("-1", "n")
    try:
        array = np.asarray(values, dtype=float)
    except (TypeError, ValueError) as error:
        problem = Problem(what=f"{name} are not numbers", where=where, expected=wanted, got=str(error))
        raise InputError(problem) from None
    right = array.ndim == (1 if columns == 0 else 2) and (columns <= 0 or array.shape[1] == columns)
    if not right or (rows is not None and len(array) != rows):
        problem = Problem(
            what=f"{name} has the wrong shape", where=where, expected=wanted, got=str(array.shape)
        )
        raise InputError(problem)
    return array


def frozen(values: ArrayLike, shape: tuple[int, ...] | None = None) -> Array:
    """
    Return a read-only copy, checked for its shape.

    """
    array = np.array(values, dtype=float)
    if shape is not None and array.shape != shape:
        raise InputError(Problem(what="array of the wrong shape", expected=str(shape), got=str(array.shape)))
    array.flags.writeable = False
    return array
