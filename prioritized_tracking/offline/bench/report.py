# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The figures as tables for the terminal.

"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any, TypeAlias

from prioritized_tracking.offline.bench.machine import describe
from prioritized_tracking.offline.table import layout

Figures: TypeAlias = Mapping[str, Any]

_WORDS = {True: "met", False: "not met", None: "not measured"}


def tables(figures: Figures, *, width: int) -> str:
    """
    All tables, with their headings.

    """
    parts = [describe(figures["machine"]), figures["mode"]]
    cases = {name: figures[name] for name in ("reference", "stack") if figures.get(name)}
    for heading, rows in (
        ("Parts of one cycle, outside the bands, µs (medians)", _parts(cases)),
        ("One cycle against others, in turns", _ratios(cases)),
        ("Branches inside a band", _branches(cases)),
        ("Growth, µs", _growth(figures["growth"])),
        ("Elsewhere", list(_others(figures))),
        ("Targets", _targets(figures["targets"])),
    ):
        parts.append(f"{heading}\n\n{layout(rows, width=width)}")
    return "\n\n".join(parts)


def short(value: float | None) -> str:
    """
    Three digits without an exponent, or a dash.

    """
    if value is None:
        return "-"
    return f"{value:.0f}" if abs(value) >= 100.0 else f"{value:.3g}"


def _parts(cases: Figures) -> list[list[str]]:
    names = list(next(iter(cases.values()))["parts_us"])
    rows = [["", *names]]
    return rows + [[case["name"], *(short(case["parts_us"][n]) for n in names)] for case in cases.values()]


def _ratios(cases: Figures) -> list[list[str]]:
    rows = [["", *(case["name"] for case in cases.values())]]
    rows.append(
        ["joints, tasks, rows", *(f"{c['joints']}, {c['tasks']}, {c['rows']}" for c in cases.values())]
    )
    for key in ("step", "textbook", "pinocchio_terms", "cartesian_impedance"):
        of = [c["compared_us"].get(key, {}).get("p50_us") for c in cases.values()]
        rows.append([f"{key}, µs", *map(short, of)])
    for key in ("textbook_over_step", "step_over_pinocchio_terms", "step_over_cartesian_impedance"):
        rows.append([key.replace("_", " "), *(short(c["ratios"].get(key)) for c in cases.values())])
    return rows


def _branches(cases: Figures) -> list[list[str]]:
    counts = sorted({int(count) for case in cases.values() for count in case["branches"]})
    rows = [["branches", *map(str, counts)]]
    for case in cases.values():
        of = [case["branches"].get(str(count), {}) for count in counts]
        rows.append([f"{case['name']}, µs", *(short(each.get("p50_us")) for each in of)])
        rows.append(["  over one branch", *(short(each.get("over_one")) for each in of)])
    return rows


def _growth(growth: Figures) -> list[list[str]]:
    rows = [["over", "at", "kernel", "exponent", "last", "per row", "cycle", "exponent", "last", "per row"]]
    for name, of in (
        ("joints", "joints"),
        ("rows on 7 joints", "rows_tool"),
        ("rows on 30 joints", "rows_links"),
    ):
        part = growth[of]
        row = [name, _list(part["joints"] if of == "joints" else part["rows"])]
        for what in ("kernel", "step"):
            slope = part.get(f"{what}_line", {}).get("us_per_row")
            exponents = (part[f"{what}_exponent"], part[f"{what}_last_exponent"])
            row += [_list(part[f"{what}_us"]), *map(short, exponents), short(slope)]
        rows.append(row)
    return rows


def _others(figures: Figures) -> Iterator[list[str]]:
    yield ["", "value"]
    steady, start = figures["steady"], figures["start"]
    yield [f"{steady['cycles']} cycles: p50, µs", short(steady["p50_us"])]
    yield ["  p99, µs", short(steady["p99_us"])]
    yield ["  p99 / p50", short(steady["p99_over_p50"])]
    yield ["  objects left for the garbage collector", short(steady["objects"])]
    yield ["  growth of Python's memory, bytes", short(steady["traced_bytes"])]
    yield ["  growth of the process, bytes", short(steady["resident_bytes"])]
    if inside := figures["interpreted"]:
        yield ["cycle without numba, µs", short(inside["step"]["p50_us"])]
        yield ["  textbook form / that", short(inside["textbook_over_step"])]
    for name, run in figures["rehearsal"].items():
        yield [f"rehearsal of {name} at {run['rate_hz']:g} Hz / real time", short(run["times_real_time"])]
    if batch := figures["batches"]:
        for kind in ("torque", "shares"):
            alone, all_cores = batch[f"{kind}_one_process_per_s"], batch[f"{kind}_all_cores_per_s"]
            yield [f"states per s with {kind}, one process", short(alone)]
            yield ["  all cores", short(all_cores)]
    yield ["bare Python, s", short(start["python_s"])]
    yield ["--help, s", short(start["help_s"])]
    yield ["argument error, s", short(start["argument_error_s"])]
    yield ["importing, s", short(start.get("import_s"))]
    yield ["configuring with a warm cache, s", short(start.get("load_s"))]


def _targets(targets: Sequence[Figures]) -> list[list[str]]:
    rows = [["target", "wanted", "measured", ""]]
    return rows + [[t["what"], t["wanted"], short(t["measured"]), _WORDS[t["met"]]] for t in targets]


def _list(values: Sequence[float]) -> str:
    return " ".join(short(value) for value in values)
