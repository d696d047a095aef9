# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What one law did in one rehearsal.

"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

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
