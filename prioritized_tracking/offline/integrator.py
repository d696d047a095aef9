# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Integration over one control period with error control.

Smoothed Coulomb friction turns over within 0.04 rad/s, which an accelerating joint crosses in a fraction of a
period; away from it an arm is so smooth that one step is enough. A fixed step is either slow or wrong by
1e-5 rad.

"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Rates = Callable[[Array, Array], None]
"""Fills its second argument with the time derivative at its first."""

STAGES = 7

# Dormand & Prince 1980, table 2 (the pair 5(4) with the last stage at the end of the step).
_A = tuple(
    np.array(row)
    for row in (
        (1 / 5,),
        (3 / 40, 9 / 40),
        (44 / 45, -56 / 15, 32 / 9),
        (19372 / 6561, -25360 / 2187, 64448 / 6561, -212 / 729),
        (9017 / 3168, -355 / 33, 46732 / 5247, 49 / 176, -5103 / 18656),
        (35 / 384, 0.0, 500 / 1113, 125 / 192, -2187 / 6784, 11 / 84),
    )
)
_ERROR = np.array((71 / 57600, 0.0, -71 / 16695, 71 / 1920, -17253 / 339200, 22 / 525, -1 / 40))

_SAFETY, _SHRINK, _GROW = 0.9, 0.2, 5.0
_SMALLEST = 1e-7
"""Fraction of the period below which a step is no remedy any more: the arm has diverged."""


def integrate(
    rates: Rates, y: Array, period: float, *, step: float, tolerance: float, work: Array
) -> tuple[Array, float]:
    """
    Return the state one period later and the step to try next.

    Parameters
    ----------
    rates : callable
        Smooth within the period.
    y : (k,) array
        State at its start; not changed.
    period : float
        Length of the period, s.
    step : float
        First step to try, s.
    tolerance : float
        Largest estimated error of any component in one step, in its own unit.
    work : (7, k) array
        Scratch.

    Returns
    -------
    (k,) array
        Not a number in every component where no step is small enough: the state has diverged.
    float
        s.

    """
    left = period
    rates(y, work[0])
    while True:
        last = step >= left
        h = left if last else step
        new, error = _step(rates, y, h, work)
        scale = _SAFETY * (tolerance / error) ** 0.2 if error > 0.0 else _GROW
        step = h * min(max(scale, _SHRINK), _GROW)
        if error <= tolerance:
            y, left = new, left - h
            if last:
                return y, min(step, period) if h < period else period
            work[0] = work[-1]
        elif not h > _SMALLEST * period or not np.isfinite(error):
            return np.full_like(y, np.nan), period


def _step(rates: Rates, y: Array, h: float, work: Array) -> tuple[Array, float]:
    """
    Return the state after one step of h (s), and the largest estimated error; `work[0]` holds the rates at
    `y`.

    """
    new = y
    for stage, weights in enumerate(_A, start=1):
        new = y + h * (weights @ work[:stage])
        rates(new, work[stage])
    return new, h * float(np.abs(_ERROR @ work).max())
