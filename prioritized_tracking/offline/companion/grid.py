# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Knots of a companion: where they lie, what joins them, where more are needed.

"""

from __future__ import annotations

import numpy as np

from prioritized_tracking.core.references import PosePath, splines
from prioritized_tracking.core.references.splines import Cubic
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.offline.companion.chain import Chain
from prioritized_tracking.offline.companion.smoothness import Ends, IndexArray, Smoothness
from prioritized_tracking.offline.companion.solver import PathProblem, Target

#: A change of the joint path faster than this (s) is rough: unit of time of the third derivative.
_UNIT_S = 1.0
#: How much stronger the start draws than the preferred configuration along one unit of time.
_START = 1e5


def grid(path: PosePath, step: float) -> Array:
    """
    Knots about `step` apart, on knots of the path wherever it has them.

    The third derivative of the path jumps at its own knots; a companion that has a knot there too
    follows more closely.

    """
    chosen = [0.0]
    end = path.file_duration
    for knot in path.knots[1:]:
        if knot - chosen[-1] >= 0.75 * step and (end - knot >= 0.5 * step or knot == end):
            chosen.append(float(knot))
    chosen[-1] = end if end - chosen[-1] < 0.5 * step and len(chosen) > 1 else chosen[-1]
    if chosen[-1] < end:
        chosen.append(end)
    pieces = [
        np.linspace(a, b, max(1, int(np.ceil((b - a) / step - 1e-9))) + 1)[1:]
        for a, b in zip(chosen[:-1], chosen[1:], strict=True)
    ]
    times = np.concatenate(([0.0], *pieces))
    if len(times) < 8:
        times = np.linspace(0.0, end, 8)
    return times


def split(times: Array, bad: Array) -> Array:
    """
    Halve the segments that are marked bad (len(times) − 1 booleans).

    """
    return np.sort(np.concatenate((times, 0.5 * (times[:-1] + times[1:])[bad])))


def targets(path: PosePath, times: Array, rows: IndexArray) -> tuple[Target, Array]:
    """
    Poses of the path at many file times, and its velocity (N, 6) there.

    """
    samples = [path.sample_file(float(u)) for u in times]
    target = Target(R=np.array([x.R for x in samples]), p=np.array([x.p for x in samples]), rows=rows)
    return target, np.array([x.V for x in samples])


def interpolate(times: Array, q: Array, ends: Ends) -> Cubic:
    """
    The spline a controller lays through the knots of a companion, (N, n) rad over file time.

    """
    if ends.winding is None:
        return (splines.resting if ends.rest else splines.free)(times, q)
    slope = ends.winding / times[-1]
    cubic = splines.periodic(times, q - times[:, None] * slope)
    coefficients = cubic.coefficients.copy()
    coefficients[2] += slope
    coefficients[3] += cubic.breaks[:-1, None] * slope
    return Cubic(cubic.breaks, coefficients)


def problem_on(
    chain: Chain,
    target: Target,
    times: Array,
    ends: Ends,
    lower: Array,
    upper: Array,
    preferred: Array,
    start: Array | None,
) -> PathProblem:
    """
    The whole-path problem on a grid.

    Parameters
    ----------
    target : poses at all `times`; of a closed path the last is dropped here.
    lower, upper, preferred : (n,) rad
    start : (n,) rad or None, where the path should start.

    """
    unit = min(_UNIT_S, times[-1] / 5.0)
    scaled = times / unit
    smoothness = Smoothness(scaled, chain.n, ends)
    count = smoothness.count
    length = np.zeros(len(times))
    length[:-1] += 0.5 * np.diff(scaled)
    length[1:] += 0.5 * np.diff(scaled)
    if ends.winding is not None:
        length[0] += length[-1]
    drawn = np.ones((count, 1))
    wanted = np.tile(preferred, (count, 1))
    if start is not None:
        drawn[0], wanted[0] = _START / length[0], start
    return PathProblem(
        chain,
        Target(R=target.R[:count], p=target.p[:count], rows=target.rows),
        smoothness,
        length=length[:count],
        lower=lower,
        upper=upper,
        zone=np.clip(0.1 * (upper - lower), 1e-3, 0.15),
        preferred=wanted,
        drawn=drawn,
    )


def unknowns(q: Array, ends: Ends) -> Array:
    """
    Rows of a joint path that are unknowns: all, or all but the last of a closed one.

    """
    return q if ends.winding is None else q[:-1]


def knots(x: Array, ends: Ends) -> Array:
    """
    The joint path of the unknowns: closed paths get their last knot back.

    """
    return x if ends.winding is None else np.vstack((x, x[:1] + ends.winding))
