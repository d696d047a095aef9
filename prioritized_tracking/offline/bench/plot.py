# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The figures as one picture.

"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
from matplotlib.figure import Figure

from prioritized_tracking.offline.bench.machine import describe

Figures: TypeAlias = Mapping[str, Any]

_INK = ("#33658a", "#86bbd8", "#2f4858", "#f6ae2d", "#f26419", "#758e4f", "#a9a9a9", "#c5283d")


def draw(figures: Figures, path: Path) -> None:
    """
    Parts, comparisons, growth over joints and over rows, as a PNG file.

    """
    figure = Figure(figsize=(11.0, 8.0), layout="constrained")
    parts, others, joints, rows = figure.subplots(2, 2).ravel()
    cases = [figures[name] for name in ("reference", "stack") if figures.get(name)]
    _parts(parts, cases)
    _others(others, figures["reference"])
    growth = figures["growth"]
    _growth(joints, {"": (growth["joints"]["joints"], growth["joints"])}, "joints")
    curves = {"7 joints, ": growth["rows_tool"], "30 joints, ": growth["rows_links"]}
    _growth(rows, {name: (part["rows"], part) for name, part in curves.items()}, "rows above the posture")
    figure.suptitle(f"{describe(figures['machine'])}\n{figures['mode']}", fontsize=8)
    figure.savefig(path, dpi=120, metadata={"Software": None})


def _parts(axes: Any, cases: list[Figures]) -> None:
    names = [name for name in cases[0]["parts_us"] if name != "step"]
    left = np.zeros(len(cases))
    for name, ink in zip(names, _INK, strict=False):
        width = np.array([case["parts_us"][name] for case in cases])
        axes.barh([case["name"] for case in cases], width, left=left, label=name, color=ink)
        left += width
    spent = cases[0]["parts_us"]
    most = max(names, key=lambda name: spent[name])
    axes.set(xlabel="µs", title=f"most of a cycle: {most}, {spent[most]:.0f} of {left[0]:.0f} µs")
    axes.margins(y=0.4)
    axes.legend(ncols=4, fontsize=7, loc="upper center")


def _others(axes: Any, case: Figures) -> None:
    times = {name: value["p50_us"] for name, value in case["compared_us"].items()}
    times |= {f"{count} branches": each["p50_us"] for count, each in case["branches"].items() if count != "1"}
    names = sorted(times, key=lambda name: times[name])
    bars = axes.barh([name.replace("_", " ") for name in names], [times[n] for n in names], color=_INK[0])
    axes.bar_label(bars, fmt="%.0f", padding=2, fontsize=7)
    faster = times["textbook"] / times["step"]
    axes.set(xscale="log", xlabel="µs", title=f"{faster:.0f} times faster than the textbook form")
    axes.margins(x=0.15)


def _growth(axes: Any, curves: Mapping[str, tuple[list[float], Figures]], over: str) -> None:
    ink = iter(_INK)
    sizes = sorted({size for at, _ in curves.values() for size in at})
    for name, (at, part) in curves.items():
        for what, word in (("step", "cycle"), ("kernel", "kernel")):
            label = f"{name}{word}: exponent {part[f'{what}_exponent']:.2f}"
            axes.loglog(at, part[f"{what}_us"], "o-", color=next(ink), label=label)
    steepest = max(part["step_exponent"] for _, part in curves.values())
    title = f"twice the {over}: {2.0**steepest:.1f} times the cycle"
    axes.set(xlabel=over, ylabel="µs", title=title)
    axes.set_xticks(sizes, [str(size) for size in sizes], minor=False)
    axes.xaxis.minorticks_off()
    axes.yaxis.set_major_formatter("{x:g}")
    axes.yaxis.set_minor_formatter("{x:g}")
    axes.grid(True, which="both", alpha=0.3)
    axes.legend(fontsize=7)
