# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Joint velocity from joint positions, for drives that do not measure it.

"""

from __future__ import annotations

import math

from prioritized_tracking.core.rotation import Array


def filtered_velocity(v: Array, q_before: Array, q: Array, *, period: float, cutoff: float) -> Array:
    """
    Return the velocity estimate after one more position.

    Backward difference through a first-order low-pass, discretised exactly for a difference that is held over
    the period: v ← v + (1 − exp(−2π·cutoff·period)) ((q − q_before)/period − v).

    Parameters
    ----------
    v : (n,) estimate so far, rad/s; zero for an arm at rest.
    q_before, q : (n,) rad, one period apart.
    period : s.
    cutoff : Hz.

    Returns
    -------
    (n,) rad/s.

    """
    gain = -math.expm1(-2.0 * math.pi * cutoff * period)
    estimate: Array = v + gain * ((q - q_before) / period - v)
    return estimate
