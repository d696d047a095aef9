# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The figures of a rehearsal: what `summary.json` holds, and the verdict.

Criteria (each is a line in `reasons` when it fails; all but the task tolerances are judged over the whole
run):

1. the law ran to the end: no divergence, no torque that is not a number;
2. every task with a `tolerance` kept each coordinate of its error within it, after `settle`, wherever its
   chart is good (c = 1) and it owns a share;
3. no joint crossed a position limit;
4. no joint exceeded its speed limit;
5. no torque limit was active longer than 0.1 s without a break;
6. the shares add up to the number of joints, so that no motion was left without a task.

Each law has its own verdict; the verdict of the whole is the first law's, the others are there to compare
with.

"""

from __future__ import annotations

import json
import math
import platform
from collections.abc import Iterator, Mapping, Sequence
from importlib import metadata
from typing import Any

import numpy as np
from numpy.typing import NDArray

from prioritized_tracking.offline.run import Run, TaskFacts

Array = NDArray[np.float64]

SATURATION_S = 0.1
"""s, a torque limit active for longer fails the run: the guard's own rule for a protective stop."""

SHARE_SLACK = 1e-6
"""Share sums are exact to rounding (1e-9); this is a thousand times that and still far from losing a
direction."""

WHOLE = "_all"
"""Ending of the keys measured over the whole run, from the first cycle on."""


def summarise(
    runs: Sequence[Run], *, settle: float, extra: Mapping[str, Any] | None = None
) -> dict[str, Any]:
    """
    Return the content of `summary.json`.

    Parameters
    ----------
    runs : sequence of Run
        The first decides the verdict. May be empty after an early interruption.
    settle : float
        Errors and torque count from this time on, s.
    extra : mapping or None
        More keys for the top level.

    Returns
    -------
    dict
        Ready for JSON: numbers that are infinite or absent are None.

    """
    laws = {run.law: summarise_run(run, settle=settle) for run in runs}
    top: dict[str, Any] = {"verdict": "interrupted"} | (dict(laws[runs[0].law]) if runs else {})
    if any(run.ended == "interrupted" for run in runs):
        top["verdict"] = "interrupted"
    if len(laws) > 1:
        top["laws"] = laws
    plain: dict[str, Any] = json_ready(top | {"versions": versions()} | dict(extra or {}))
    return plain


def summarise_run(run: Run, *, settle: float) -> dict[str, Any]:
    """
    Return the figures of one law.

    """
    signals = run.signals
    window = signals["t"] >= settle - 0.5 / run.rate
    tasks = {name: _task_figures(run, name, facts, window) for name, facts in run.tasks.items()}
    reasons = list(_reasons(run, tasks))
    reached = signals.count / run.rate
    return {
        "verdict": _verdict(run, reasons),
        "reasons": reasons,
        "law": run.law,
        "ended": run.ended,
        "duration_s": reached,
        "planned_s": run.planned_s,
        "settle_s": settle,
        "rate_hz": run.rate,
        "seed": run.seed,
        "compute_ratio": reached / run.computing_s if run.computing_s > 0.0 else None,
        "tool": {frame: _tool_figures(run, frame, window) for frame in signals.frames},
        "tasks": tasks,
        "share_sum": {"min": _least(signals["share_sum"]), "max": _largest(signals["share_sum"])},
        "branches": {"mean": _mean(signals["branches"]), "max": _largest(signals["branches"])},
        "torque": {name: _torque_figures(run, i, window) for i, name in enumerate(signals.joints)},
        "saturated_longest_s": _longest(signals["limited"] > 0.0) / run.rate,
        "joints": {name: _joint_figures(run, i) for i, name in enumerate(signals.joints)},
        "events": [{"t": event.t, "kind": event.kind, "text": event.text} for event in run.events],
    }


def to_json(summary: Mapping[str, Any]) -> str:
    """
    Return the text of `summary.json`.

    """
    return json.dumps(summary, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def json_ready(value: Any) -> Any:
    """
    Return nested data made of what JSON knows; numbers that are infinite or not a number become None.

    """
    if isinstance(value, Mapping):
        return {str(key): json_ready(item) for key, item in value.items()}
    if isinstance(value, np.ndarray | list | tuple):
        return [json_ready(item) for item in value]
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def versions() -> dict[str, str | None]:
    """
    Return the versions that decide the numbers; None: not installed as a package.

    """
    found: dict[str, str | None] = {"python": platform.python_version()}
    for name in ("prioritized_tracking", "numpy", "scipy", "pin"):
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            found[name] = None
    return found


def worst_step(figures: Mapping[str, Any]) -> tuple[str, float]:
    """
    Return the joint with the largest torque step after settling, and the step, N·m per cycle; nan: unknown.

    """
    steps = {name: joint["largest_step_nm"] for name, joint in figures["torque"].items()}
    known = {name: step for name, step in steps.items() if step is not None}
    name = max(known, key=lambda joint: known[joint], default="")
    return name, known.get(name, math.nan)


def _verdict(run: Run, reasons: Sequence[str]) -> str:
    if run.ended == "interrupted":
        return "interrupted"
    return "fail" if reasons else "pass"


def _reasons(run: Run, tasks: Mapping[str, Mapping[str, Any]]) -> Iterator[str]:
    """
    Yield one sentence for each criterion that failed.

    """
    if run.ended == "diverged":
        yield f"the run ended early: {run.events[-1].text}" if run.events else "the run ended early"
    for name, figures in tasks.items():
        if figures["tolerance_exceeded"]:
            yield f"task {name}: error {figures['error_max']:.3g} {figures['unit']} is beyond its tolerance"
    yield from _joint_reasons(run)
    saturated = _longest(run.signals["limited"] > 0.0) / run.rate
    if saturated > SATURATION_S:
        yield f"torque limits were active for {saturated:.3g} s without a break (at most {SATURATION_S} s)"
    shares = run.signals["share_sum"]
    lost = _largest(np.abs(shares - len(run.signals.joints)))
    if lost is not None and lost > SHARE_SLACK:
        yield f"shares add up to {_least(shares):.6g} of {len(run.signals.joints)}: some motion has no task"


def _joint_reasons(run: Run) -> Iterator[str]:
    for i, name in enumerate(run.signals.joints):
        figures = _joint_figures(run, i)
        margin, speed = figures["margin_rad"], figures["speed_peak"]
        if margin is not None and margin < 0.0:
            yield f"joint {name} crossed a position limit by {-margin:.3g} rad"
        limit = float(run.arm.velocity_limit[i])
        if speed is not None and speed > limit:
            yield f"joint {name} reached {speed:.3g} rad/s, its limit is {limit:.3g} rad/s"


def _tool_figures(run: Run, frame: str, window: NDArray[np.bool_]) -> dict[str, float | None]:
    """
    Return the true errors of a tool; None for a part of the pose that no task is about.

    """
    figures: dict[str, float | None] = {}
    for ending, chosen in (("", window), (WHOLE, slice(None))):
        for kind, unit in (("position", "m"), ("orientation", "rad")):
            error = run.signals[f"{frame}.{kind}_error"][chosen]
            if unit not in run.described[frame]:
                error = error[:0]
            figures[f"{kind}_error_max_{unit}{ending}"] = _largest(error)
            figures[f"{kind}_error_rms_{unit}{ending}"] = _rms(error)
    return figures


def _task_figures(run: Run, name: str, facts: TaskFacts, window: NDArray[np.bool_]) -> dict[str, Any]:
    """
    Return the figures of a task; its error at a time is that of its worst coordinate.

    """
    signals = run.signals
    error, share = np.abs(signals[f"{name}.error"]), signals[f"{name}.share"]
    counted = (signals[f"{name}.validity"] >= 1.0) & (share > 0.0)
    exceeded = False
    if facts.tolerance is not None:
        exceeded = bool((error[counted & window] > np.asarray(facts.tolerance, dtype=float)).any())
    worst = error.max(axis=1, initial=0.0)
    return {
        "error_max": _largest(worst[counted & window]),
        "error_rms": _rms(worst[counted & window]),
        f"error_max{WHOLE}": _largest(worst[counted]),
        f"error_rms{WHOLE}": _rms(worst[counted]),
        "unit": facts.unit,
        "tolerance": facts.tolerance,
        "tolerance_exceeded": exceeded,
        "share_min": _least(share),
        "share_max": _largest(share),
        "apparent_inertia_max": _largest(signals[f"{name}.apparent_inertia"]),
        "handover": facts.handover,
    }


def _torque_figures(run: Run, joint: int, window: NDArray[np.bool_]) -> dict[str, float | None]:
    torque = run.signals["torque"][:, joint]
    settled = torque[window]
    return {
        "peak_nm": _largest(np.abs(settled)),
        "limit_nm": float(run.arm.torque_limit[joint]),
        "largest_step_nm": _largest(np.abs(np.diff(settled))),
        f"peak_nm{WHOLE}": _largest(np.abs(torque)),
        f"largest_step_nm{WHOLE}": _largest(np.abs(np.diff(torque))),
    }


def _joint_figures(run: Run, joint: int) -> dict[str, float | None]:
    q, v = run.signals["q"][:, joint], run.signals["v"][:, joint]
    margin = np.minimum(q - run.arm.lower[joint], run.arm.upper[joint] - q)
    return {"margin_rad": _least(margin), "speed_peak": _largest(np.abs(v))}


def _longest(active: NDArray[np.bool_]) -> int:
    """
    Return the length of the longest unbroken stretch of True.

    """
    edges = np.flatnonzero(np.diff(np.concatenate(([False], active, [False]))))
    return int((edges[1::2] - edges[::2]).max(initial=0))


def _known(values: Array) -> Array:
    known: Array = values[~np.isnan(values)]
    return known


def _largest(values: Array) -> float | None:
    known = _known(values)
    return float(known.max()) if known.size else None


def _least(values: Array) -> float | None:
    known = _known(values)
    return float(known.min()) if known.size else None


def _mean(values: Array) -> float | None:
    known = _known(values)
    return float(known.mean()) if known.size else None


def _rms(values: Array) -> float | None:
    known = _known(values)
    return float(np.sqrt(np.mean(np.square(known)))) if known.size else None
