# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
How the time of a cycle grows with joints, and with rows.

"""

from __future__ import annotations

import tempfile
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.offline.bench.cases import rows, state_at
from prioritized_tracking.offline.bench.chains import bent, link_tasks, load_chain, tool_tasks
from prioritized_tracking.offline.bench.step import Functions
from prioritized_tracking.offline.bench.timing import compare, fit_line, fit_power


def over_joints(counts: Sequence[int], seconds: float) -> dict[str, Any]:
    """
    Position and two orientation charts over a posture, on chains of these numbers of joints.

    """
    with tempfile.TemporaryDirectory() as folder:
        chains = [load_chain(Path(folder), n, tool_tasks(n, 3)) for n in counts]
    found = _timed(chains, seconds)
    found["joints"] = list(counts)
    return found | _exponents(counts, found)


def over_rows(n: int, counts: Sequence[int], seconds: float, *, spread: bool) -> dict[str, Any]:
    """
    These numbers of tasks on a chain of n joints.

    Parameters
    ----------
    spread : True: 1 row each on different links, each owns something; False: 3 rows each, the tool's pose
        described over and over, most of them own nothing.

    """
    make = link_tasks if spread else tool_tasks
    with tempfile.TemporaryDirectory() as folder:
        chains = [load_chain(Path(folder), n, make(n, count)) for count in counts]
    found = _timed(chains, seconds)
    found |= {"joints": n, "tasks": list(counts), "rows": [rows(chain) - n for chain in chains]}
    found |= _exponents(found["rows"], found)
    for part in ("kernel", "step"):
        slope, start, deviation = fit_line(found["rows"], found[f"{part}_us"])
        found[f"{part}_line"] = {"us_per_row": slope, "us_at_0": start, "deviation": deviation}
    return found


def _exponents(at: Sequence[int], found: Mapping[str, Any]) -> dict[str, float]:
    """
    Exponents of kernel and cycle: over all sizes, and over the two largest, where fixed costs count least.

    """
    exponents = {}
    for part in ("kernel", "step"):
        exponents[f"{part}_exponent"] = fit_power(at, found[f"{part}_us"])
        exponents[f"{part}_last_exponent"] = fit_power(at[-2:], found[f"{part}_us"][-2:])
    return exponents


def _timed(chains: Sequence[Controller], seconds: float) -> dict[str, Any]:
    """
    Median time of the kernel (claims, hierarchy, law; twice) and of a whole cycle, µs, in turns.

    """
    functions: Functions = {}
    for i, chain in enumerate(chains):
        functions[f"step {i}"] = _step(chain)
        functions[f"kernel {i}"] = _kernel(chain)
    times = compare(functions, seconds)
    return {
        f"{part}_us": [times[f"{part} {i}"].p50_us for i in range(len(chains))] for part in ("kernel", "step")
    }


def _step(chain: Controller) -> Callable[[], object]:
    _, q, v = state_at(chain, 0.0)
    q = q - chain.start_configuration() + bent(chain.arm.n)
    return lambda: chain.step(0.5, q, v)


def _kernel(chain: Controller) -> Callable[[], object]:
    v = state_at(chain, 0.0)[2]
    return lambda: chain.law.torque(chain._here, chain._there, v, 1.0)
