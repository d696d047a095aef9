# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Thousands of cycles in a row, as in a control loop: spread of their times, and whether anything grows.

"""

from __future__ import annotations

import contextlib
import gc
import os
import time
import tracemalloc
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.offline.bench.cases import Array, path_times, state_at
from prioritized_tracking.offline.bench.timing import times_of


def steady(controller: Controller, cycles: int) -> dict[str, Any]:
    """
    Run along the whole path with the garbage collector frozen and off, as in the loop.

    Parameters
    ----------
    controller : under way.
    cycles : how many.

    Returns
    -------
    dict
        `cycles`; `p50_us`, `p99_us`, `p99_over_p50` of a cycle; `objects`: how many more objects the garbage
        collector would have to scan at the end; `traced_bytes`: how much more memory Python holds after a
        tenth of the cycles, repeated; `resident_bytes`: how much more the system has given, or None.

    """
    states = [state_at(controller, float(t)) for t in path_times(controller, cycles)]
    times = np.zeros(cycles, dtype=np.int64)
    few = states[: max(1, cycles // 10)]
    with frozen():
        _run(controller, few, times)  # what a cycle leaves for the next is there from here on
        resident = _resident()
        objects = len(gc.get_objects())
        _run(controller, states, times)
        objects, more = len(gc.get_objects()) - objects, _resident()
        traced = _traced(controller, few)
    return {
        "cycles": cycles,
        **times_of(times).figures(),
        "objects": objects,
        "traced_bytes": traced,
        "resident_bytes": None if resident is None or more is None else more - resident,
    }


def _run(controller: Controller, states: list[tuple[float, Array, Array]], times: Any) -> None:
    clock, step = time.perf_counter_ns, controller.step
    for k, (t, q, v) in enumerate(states):
        begin = clock()
        step(t, q, v)
        times[k] = clock() - begin


@contextlib.contextmanager
def frozen() -> Iterator[None]:
    """
    Keep the garbage collector from running; everything that exists is out of its sight.

    """
    enabled = gc.isenabled()
    gc.collect()
    gc.freeze()
    gc.disable()
    try:
        yield
    finally:
        gc.unfreeze()
        if enabled:
            gc.enable()


def _traced(controller: Controller, states: list[tuple[float, Array, Array]]) -> int:
    """
    Growth of the memory Python has allocated, bytes, while the states are gone through a second time.

    """
    times = np.zeros(len(states), dtype=np.int64)
    tracemalloc.start()
    try:
        _run(controller, states, times)
        before = tracemalloc.get_traced_memory()[0]
        _run(controller, states, times)
        return tracemalloc.get_traced_memory()[0] - before
    finally:
        tracemalloc.stop()


def _resident() -> int | None:
    """
    Memory the system has given this process, bytes; None: it does not say.

    """
    try:
        pages = int(Path("/proc/self/statm").read_text(encoding="ascii").split()[1])
    except (OSError, ValueError, IndexError):
        return None
    return pages * os.sysconf("SC_PAGE_SIZE")
