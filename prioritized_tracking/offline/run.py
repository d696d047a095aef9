# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What one law did in one rehearsal.

"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

from prioritized_tracking.core.sampling import MARGIN, rate_bound, velocity_rates
from prioritized_tracking.offline.signals import Signals


@dataclass(frozen=True, kw_only=True)
class Event:
    """
    Something that happened during a run: time (s), kind (one word) and text.

    """

    t: float
    kind: str
    text: str


@dataclass(frozen=True, kw_only=True)
class TaskFacts:
    """
    What a summary needs to know of a task.

    Attributes
    ----------
    unit : str
        Unit of its error.
    handover : tuple of float or None
        Band of apparent inertia, kg or kg·m².
    tolerance : float, array or None
        Largest error allowed of each coordinate; None: no criterion.

    """

    unit: str
    handover: tuple[float, float] | None
    tolerance: Any


@dataclass(kw_only=True)
class GainCheck:
    """
    How fast errors decay along a run, against what the rate and the delay carry (core.sampling).

    Attributes
    ----------
    rate : float
        Hz.
    delay_cycles : int
        Whole cycles from a joint state to its torque.
    error_rate : float
        Largest k_p of a task, 1/s.
    slowest, fastest : float
        Smallest and largest decay rate of a velocity error met, 1/s.

    """

    rate: float
    delay_cycles: int
    error_rate: float
    slowest: float = math.inf
    fastest: float = 0.0

    def note(self, D: Any) -> None:
        """
        Take the feedback of one state into account.

        Parameters
        ----------
        D : (n, n) array
            In whitened coordinates, 1/s.

        """
        slowest, fastest = velocity_rates(D)
        self.slowest, self.fastest = min(self.slowest, slowest), max(self.fastest, fastest)

    def figures(self) -> dict[str, float]:
        """
        Return the figures for the summary; the audit margin is half of the stability bound.

        """
        stable = self.rate * rate_bound(self.delay_cycles)
        used, allowed = self.fastest + self.error_rate, MARGIN * stable
        return {
            "velocity_error_decay_min_per_s": self.slowest,
            "velocity_error_decay_max_per_s": self.fastest,
            "position_error_decay_max_per_s": self.error_rate,
            "allowed_per_s": allowed,
            "stable_per_s": stable,
            "share_of_allowed": used / allowed,
        }


@dataclass(kw_only=True)
class Run:
    """
    One law in closed loop.

    Attributes
    ----------
    law : str
    arm : Arm
        The controller's model, for names and limits.
    rate : float
        Hz.
    seed : int
    planned_s : float
        Length asked for, s; the signals tell what was reached.
    signals : Signals
    tasks : dict of str to TaskFacts
    described : dict of str to set of str
        For each controlled frame the units of its tasks, "m" and "rad": what of its pose is controlled.
    events : list of Event
    ended : str
        "complete", "diverged" or "interrupted".
    computing_s : float
        Time it took to compute, s.
    gains : GainCheck or None
        None: the law has no feedback of this form.

    """

    law: str
    arm: Any
    rate: float
    seed: int
    planned_s: float
    signals: Signals
    tasks: dict[str, TaskFacts]
    described: dict[str, frozenset[str]]
    events: list[Event] = field(default_factory=list)
    ended: str = "complete"
    computing_s: float = 0.0
    gains: GainCheck | None = None
