# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Whole loops: rehearsals against real time, and states per second in batches.

"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.offline.batch import evaluate_in_processes, evaluate_states
from prioritized_tracking.offline.bench.cases import Source, path_times, state_at
from prioritized_tracking.offline.bench.timing import TURN
from prioritized_tracking.offline.rehearse import run_law


def rehearsals(sources: Mapping[str, Source], seconds: float, turns: int) -> dict[str, Any]:
    """
    Simulated seconds per second of closed loop at the stack's rate.

    Parameters
    ----------
    sources : stacks by name.
    seconds : simulated in each run.
    turns : runs of each, in turns; the median counts.

    """
    controllers: dict[str, Any] = {name: source.load() for name, source in sources.items()}
    ratios: dict[str, list[float]] = {name: [] for name in sources}
    for _ in range(turns):
        for name, controller in controllers.items():
            run = run_law(controller, seconds=seconds)
            ratios[name].append(run.signals.count / run.rate / run.computing_s)
    return {
        name: {"times_real_time": float(np.median(values)), "rate_hz": controllers[name].rate}
        for name, values in ratios.items()
    }


def batches(controller: Controller, states: int) -> dict[str, Any]:
    """
    States per second in one process and on all cores, with torque and without.

    Parameters
    ----------
    controller : evaluated along its path.
    states : how many; of them, a tenth in one process.

    """
    import time

    chosen = [state_at(controller, float(t)) for t in path_times(controller, states)]
    times, q, v = (np.array(column) for column in zip(*chosen, strict=True))
    few = slice(None, None, TURN)
    found: dict[str, Any] = {"states": states}
    for torque, kind in ((True, "torque"), (False, "shares")):
        begin = time.perf_counter()
        evaluate_states(controller, times[few], q[few], v[few], torque=torque)
        alone = time.perf_counter()
        evaluate_in_processes(controller, times, q, v, torque=torque)
        end = time.perf_counter()
        found[f"{kind}_one_process_per_s"] = len(times[few]) / (alone - begin)
        found[f"{kind}_all_cores_per_s"] = states / (end - alone)
    return found
