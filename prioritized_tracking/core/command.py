# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What comes out of one control cycle.

"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from prioritized_tracking.compiled import compiled
from prioritized_tracking.core.rotation import Array

#: No joint is at so many radians, or that fast (rad/s); a message with such a number is damaged.
HUGE = 1e6


@dataclass(slots=True, eq=False)
class TaskReport:
    """
    One task in one cycle.

    Attributes
    ----------
    error : (m,) x̃, m or rad.
    share : directions owned, 0 … m; NaN for laws without shares.
    apparent_inertia : largest 1/λ over the owned directions of the heaviest branch, kg or kg·m²;
        inf if it owns none.
    validity : c, 0 … 1.

    """

    error: Array
    share: float
    apparent_inertia: float
    validity: float


@dataclass(slots=True, eq=False)
class Command:
    """
    Outcome of one cycle; nothing in it is changed by later cycles.

    Attributes
    ----------
    torque : (n,) to be sent, N·m (without gravity if the driver adds it).
    joint_velocity_reference : (n,) q̇_r, rad/s.
    branches : number of exact hierarchies blended.
    pruned : more of them were met than can be followed.
    limited : the torque limit cut the feedback, or more.
    events : what the guard did.

    """

    torque: Array
    joint_velocity_reference: Array
    branches: int
    pruned: bool
    limited: bool
    events: tuple[str, ...]
    _blocks: tuple[tuple[str, slice], ...] = field(repr=False)
    _error: Array = field(repr=False)
    _report: Array = field(repr=False)
    _validity: Array = field(repr=False)

    @property
    def tasks(self) -> dict[str, TaskReport]:
        """
        A report for each task, in order of priority; put together when asked for.

        """
        share, apparent = self._report.tolist()
        validity = [*self._validity.tolist(), 1.0]
        return {
            name: TaskReport(self._error[rows], share[i], apparent[i], validity[i])
            for i, (name, rows) in enumerate(self._blocks)
        }

    @property
    def share_sum(self) -> float:
        """
        Sum of the shares; n for a complete stack, NaN for laws without shares.

        """
        return float(self._report[0].sum())


@compiled
def usable(values: Array) -> bool:
    """
    Whether all joint positions or velocities are finite and below ``HUGE``.

    """
    return bool((np.abs(values) < HUGE).all())


@compiled
def limit_torque(feed_forward: Array, feedback: Array, limit: Array) -> tuple[Array, bool]:
    """
    Scale the feedback until the torque fits; only if the feed-forward alone does not, clip it.

    Parameters
    ----------
    feed_forward, feedback, limit : (n,) N·m; limits positive.

    Returns
    -------
    torque : (n,) N·m, within the limits.
    limited : whether anything was cut.

    """
    total = feed_forward + feedback
    if (np.abs(total) <= limit).all():
        return total, False
    scale = 1.0
    for k in range(limit.shape[0]):
        # feedback that pulls a feed-forward back inside has the whole range to do so
        room = limit[k] - feed_forward[k] if feedback[k] > 0.0 else limit[k] + feed_forward[k]
        if abs(feedback[k]) * scale > max(room, 0.0):
            scale = max(room, 0.0) / abs(feedback[k])
    return np.minimum(np.maximum(feed_forward + scale * feedback, -limit), limit), True
