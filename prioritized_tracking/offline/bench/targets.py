# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Figures to reach, beside those measured.

"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any, TypeAlias

Figures: TypeAlias = Mapping[str, Any]

#: Exponents are those between the two largest sizes: over all sizes fixed costs make them too small.
#: What is wanted: words, where to find it in the figures, at least or at most, the number.
TARGETS: tuple[tuple[str, tuple[str, ...], str, float], ...] = (
    ("textbook form / cycle", ("reference", "ratios", "textbook_over_step"), ">=", 20.0),
    ("cycle / bare Pinocchio terms", ("reference", "ratios", "step_over_pinocchio_terms"), "<=", 20.0),
    ("cycle / Cartesian impedance", ("reference", "ratios", "step_over_cartesian_impedance"), "<=", 2.5),
    ("cycle with two branches / with one", ("reference", "branches", "2", "over_one"), "<=", 1.6),
    ("textbook form / cycle, interpreted", ("interpreted", "textbook_over_step"), ">=", 4.0),
    ("rehearsal / real time, seven axes", ("rehearsal", "demo_stack", "times_real_time"), ">=", 5.0),
    ("rehearsal / real time, planar", ("rehearsal", "planar_stack", "times_real_time"), ">=", 10.0),
    ("states per second, all cores", ("batches", "torque_all_cores_per_s"), ">=", 20000.0),
    ("exponent over joints, kernel", ("growth", "joints", "kernel_last_exponent"), "<=", 3.0),
    ("exponent over joints, cycle", ("growth", "joints", "step_last_exponent"), "<=", 3.0),
    ("exponent over rows, 7 joints, kernel", ("growth", "rows_tool", "kernel_last_exponent"), "<=", 1.1),
    ("exponent over rows, 30 joints, kernel", ("growth", "rows_links", "kernel_last_exponent"), "<=", 1.1),
    ("objects left by all cycles", ("steady", "objects"), "<=", 10.0),
    ("--help beyond bare Python, s", ("start", "help_beyond_python_s"), "<=", 0.3),
    ("configuring with a warm cache, s", ("start", "load_s"), "<=", 2.0),
)

_REACHED: dict[str, Callable[[float, float], bool]] = {
    ">=": lambda value, wanted: value >= wanted,
    "<=": lambda value, wanted: value <= wanted,
}


def judge(figures: Figures) -> list[dict[str, Any]]:
    """
    Each target with what was measured.

    Returns
    -------
    list of dict
        `what`, `wanted` (such as ">= 20"), `measured` (None: could not be measured), `met` (None then).

    """
    found = []
    for what, keys, relation, wanted in TARGETS:
        value = _at(figures, keys)
        met = None if value is None else _REACHED[relation](value, wanted)
        found.append({"what": what, "wanted": f"{relation} {wanted:g}", "measured": value, "met": met})
    return found


def _at(figures: Any, keys: Sequence[str]) -> float | None:
    for key in keys:
        if not isinstance(figures, Mapping) or key not in figures:
            return None
        figures = figures[key]
    return None if figures is None else float(figures)
