# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Discrete time: how much gain a control rate carries.

Control with zero-order-held torque, period dt and d whole cycles of delay: a single direction that
decays with the rate r (1/s) is stable for r dt < 2 sin(π/(2 (2 d + 1))). With the delay as part of
the loop v_{k+1} = v_k − r dt v_{k−d} this is the classical bound for a delayed difference equation
(Levin & May 1976).

"""

from __future__ import annotations

import math

import numpy as np

from prioritized_tracking.core.rotation import Array
from prioritized_tracking.core.stack import Stack

#: Share of the stability bound that gains may use along a path.
MARGIN = 0.5


def rate_bound(delay_cycles: int) -> float:
    """
    Largest stable r · dt for a delay of whole cycles: 2, 1, 0.618, 0.445 for 0, 1, 2, 3.

    """
    return 2.0 * math.sin(math.pi / (2.0 * (2 * delay_cycles + 1)))


def error_rate(stack: Stack) -> float:
    """
    Largest k_p of a stack, 1/s.

    """
    k_p = [float(task.k_p.max()) for task in stack.tasks]
    if stack.posture:
        k_p.append(stack.posture.k_p)
    return max(k_p, default=0.0)


def velocity_rates(D: Array) -> tuple[float, float]:
    """
    Slowest and fastest decay rate of a velocity error under feedback D (n, n), 1/s.

    """
    rates = np.linalg.eigvalsh(D)
    return float(rates[0]), float(rates[-1])


def decay_rates(stack: Stack, D: Array) -> tuple[float, float]:
    """
    The two parts of r = λ_max(D) + max k_p, 1/s.

    Parameters
    ----------
    stack : for its k_p.
    D : (n, n) feedback in whitened coordinates, 1/s.

    """
    return velocity_rates(D)[1], error_rate(stack)
