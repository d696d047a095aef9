# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Smooth switches shared by charts, hierarchy and law.

"""

from __future__ import annotations

import math

from prioritized_tracking.compiled import compiled


@compiled
def smoothstep(z: float) -> float:
    """
    Quintic smoothstep S: 0 for z <= 0, 1 for z >= 1, C² everywhere.

    S(z) = 6 z⁵ − 15 z⁴ + 10 z³, the unique quintic whose first and second derivatives vanish at
    both ends.

    """
    if z <= 0.0:
        return 0.0
    if z >= 1.0:
        return 1.0
    return z * z * z * (z * (6.0 * z - 15.0) + 10.0)


@compiled
def fade(z: float, zero: float, one: float) -> float:
    """
    Fade S((z − zero)/(one − zero)): 0 at ``zero``, 1 at ``one``, in either direction, C².

    """
    return smoothstep((z - zero) / (one - zero))


@compiled
def saturation(x: float) -> float:
    """
    C² saturation σ of a non-negative number: identity up to 0.8, flat at 1 from 1.2 on.

    Between them, with z = (x − 0.8)/0.4, σ = x − 0.4 (z⁶ − 3 z⁵ + 2.5 z⁴).

    """
    if x <= 0.8:
        return x
    y = min(x, 1.2)
    z = (y - 0.8) / 0.4
    z4 = z * z * z * z
    return y - 0.4 * z4 * (z * (z - 3.0) + 2.5)


@compiled
def wrap(angle: float) -> float:
    """
    Bring an angle (rad) into [−π, π].

    """
    return angle - 2.0 * math.pi * math.floor(angle / (2.0 * math.pi) + 0.5)
