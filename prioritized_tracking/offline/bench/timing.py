# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Measuring times on a machine that does other things too.

What is to be compared is run in turns, a few calls each, so that a slow spell of the machine meets all
alike; medians and ratios of medians are quoted.

"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

#: Calls of one thing before the next has its turn: enough for warm caches, short against slow spells.
TURN = 20


@dataclass(frozen=True)
class Times:
    """
    Times of one call.

    Attributes
    ----------
    p50_us, p99_us : median and 99th percentile, µs.
    calls : how many were measured.

    """

    p50_us: float
    p99_us: float
    calls: int

    def figures(self) -> dict[str, Any]:
        """
        As a dictionary, with the ratio of the two percentiles.

        """
        return {**asdict(self), "p99_over_p50": self.p99_us / self.p50_us}


def times_of(nanoseconds: Any) -> Times:
    """
    Percentiles of measured times (N,), ns.

    """
    p50, p99 = np.percentile(nanoseconds, [50.0, 99.0])
    return Times(float(p50) / 1e3, float(p99) / 1e3, len(nanoseconds))


def compare(functions: Mapping[str, Callable[[], object]], seconds: float) -> dict[str, Times]:
    """
    Time several functions in turns.

    Parameters
    ----------
    functions : by name; called without arguments, in this order, over and over.
    seconds : how long in all, s; each has at least two turns.

    """
    clock = time.perf_counter_ns
    spent: dict[str, list[int]] = {name: [] for name in functions}
    for function in functions.values():
        function()
    end, turns = clock() + int(1e9 * seconds), 0
    while turns < 2 or clock() < end:
        for name, function in functions.items():
            note = spent[name].append
            for _ in range(TURN):
                begin = clock()
                function()
                note(clock() - begin)
        turns += 1
    return {name: times_of(values) for name, values in spent.items()}


def fit_power(x: Sequence[float], y: Sequence[float]) -> float:
    """
    Exponent e of y ~ xᵉ, by least squares of ln y over ln x.

    """
    slope, _ = np.polyfit(np.log(x), np.log(y), 1)
    return float(slope)


def fit_line(x: Sequence[float], y: Sequence[float]) -> tuple[float, float, float]:
    """
    Slope, intercept and largest deviation (a fraction of the largest y) of a straight line, least squares.

    """
    slope, start = np.polyfit(x, y, 1)
    deviation = np.abs(np.polyval([slope, start], x) - y).max() / np.max(y)
    return float(slope), float(start), float(deviation)
