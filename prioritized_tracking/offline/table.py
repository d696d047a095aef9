# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Plain-text tables of a rehearsal for the terminal.

"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from prioritized_tracking.offline.summary import worst_step

_GAP = "  "
_MISSING = "-"


def layout(rows: Sequence[Sequence[str]], *, width: int) -> str:
    """
    Return a table as text, at most `width` characters wide wherever its columns allow it.

    Parameters
    ----------
    rows : sequence of sequence of str
        The first row is the heading, the first column the labels (aligned left, repeated in each block).
    width : int
        Characters in a line. A table that is wider is broken into blocks of columns below each other.

    """
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    blocks: list[list[int]] = [[]]
    used = widths[0]
    for column in range(1, len(widths)):
        if blocks[-1] and used + len(_GAP) + widths[column] > width:
            blocks.append([])
            used = widths[0]
        blocks[-1].append(column)
        used += len(_GAP) + widths[column]
    return "\n\n".join(_block(rows, widths, block) for block in blocks)


def laws_table(summaries: Mapping[str, Mapping[str, Any]], *, width: int) -> str:
    """
    Return the laws side by side: one column for each, figures after settling.

    """
    columns = [_law_column(figures) for figures in summaries.values()]
    labels = ["", *columns[0]]
    rows = [list(summaries), *([column[label] for column in columns] for label in labels[1:])]
    return layout([[label, *row] for label, row in zip(labels, rows, strict=True)], width=width)


def tasks_table(figures: Mapping[str, Any], *, width: int) -> str:
    """
    Return the tasks of one law, in the order of priority.

    """
    rows = [["task", "unit", "error max", "error rms", "share", "apparent inertia", "hand-over"]]
    for name, task in figures["tasks"].items():
        band = task["handover"]
        rows.append(
            [
                name,
                str(task["unit"]),
                number(task["error_max"]),
                number(task["error_rms"]),
                f"{number(task['share_min'])} … {number(task['share_max'])}",
                _range(task["apparent_inertia_min"], task["apparent_inertia_max"]),
                _MISSING if band is None else f"{number(band[0])} … {number(band[1])}",
            ]
        )
    return layout(rows, width=width)


def number(value: float | None) -> str:
    """
    Return three digits, or a dash for what is absent, infinite or not a number.

    """
    return _MISSING if value is None or not math.isfinite(value) else f"{value:.3g}"


def _law_column(figures: Mapping[str, Any]) -> dict[str, str]:
    """
    Return the rows of one law by label.

    """
    column = {"verdict": figures["verdict"], "ran, s": number(figures["duration_s"])}
    for frame, tool in figures["tool"].items():
        column[f"{frame} position error max, m"] = number(tool["position_error_max_m"])
        column[f"{frame} position error rms, m"] = number(tool["position_error_rms_m"])
        column[f"{frame} orientation error max, rad"] = number(tool["orientation_error_max_rad"])
        column[f"{frame} orientation error rms, rad"] = number(tool["orientation_error_rms_rad"])
    torque, joints = figures["torque"].values(), figures["joints"].values()
    shares = figures["share_sum"]
    loads = [joint["peak_nm"] / joint["limit_nm"] for joint in torque if joint["peak_nm"] is not None]
    column["largest torque step, N·m per cycle"] = number(worst_step(figures)[1])
    column["highest torque, % of limit"] = number(100.0 * max(loads)) if loads else _MISSING
    for unit in dict.fromkeys(joint["unit"] for joint in joints):
        margins = [joint["margin_rad"] for joint in joints if joint["unit"] == unit]
        known = [margin for margin in margins if margin is not None]
        column[f"nearest joint limit, {unit}"] = number(min(known)) if known else _MISSING
    gains = figures["gains"]
    column["gains, % of what the rate allows"] = (
        number(100.0 * gains["share_of_allowed"]) if gains else _MISSING
    )
    column["sum of shares"] = _range(shares["min"], shares["max"])
    column["speed, times real time"] = number(figures["compute_ratio"])
    return column


def _range(low: float | None, high: float | None) -> str:
    return number(low) if number(low) == number(high) else f"{number(low)} … {number(high)}"


def _block(rows: Sequence[Sequence[str]], widths: Sequence[int], columns: Sequence[int]) -> str:
    lines = []
    for row in rows:
        cells = [row[0].ljust(widths[0]), *(row[i].rjust(widths[i]) for i in columns)]
        lines.append(_GAP.join(cells).rstrip())
    return "\n".join(lines)
