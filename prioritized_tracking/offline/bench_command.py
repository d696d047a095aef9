# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The verb `bench`: measure the control law, print tables, save figures and a plot.

"""

from __future__ import annotations

import shutil
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from prioritized_tracking import compiled
from prioritized_tracking.errors import InputError
from prioritized_tracking.files import whole_file
from prioritized_tracking.offline.bench import cases, elsewhere, growth, loops, report, steady, step
from prioritized_tracking.offline.bench.machine import machine
from prioritized_tracking.offline.bench.targets import judge
from prioritized_tracking.offline.overrides import parse_overrides
from prioritized_tracking.offline.progress import fraction_bar
from prioritized_tracking.offline.rehearse_command import folder_problem
from prioritized_tracking.offline.summary import json_ready, to_json

FIGURES, PLOT = "bench.json", "bench.png"


@dataclass(frozen=True)
class Effort:
    """
    How thoroughly to measure.

    Attributes
    ----------
    seconds : s, for each comparison.
    joints, tool_tasks, link_tasks : sizes at which growth is measured.
    look : states looked at in search of branches.
    cycles : in a row.
    rehearsal : simulated seconds of a rehearsal.
    turns : repetitions of what takes long.
    states : in a batch.

    """

    seconds: float
    joints: tuple[int, ...] = (6, 7, 14, 30)
    tool_tasks: tuple[int, ...] = (2, 5, 10, 20)
    link_tasks: tuple[int, ...] = (2, 5, 10, 20)
    look: int = 4000
    cycles: int = 10000
    rehearsal: float = 2.0
    turns: int = 5
    states: int = 40000


THOROUGH = Effort(seconds=3.0)
QUICK = Effort(0.02, (6, 7), (2, 4), (2, 4), look=300, cycles=200, rehearsal=0.02, turns=1, states=100)


def run(stack: str | None, out: str, *, seconds: float | None, quick: bool, overrides: Sequence[str]) -> int:
    """
    Measure, write `bench.json` and `bench.png`, print the tables; return the exit code.

    Parameters
    ----------
    stack : stack file; None: that of the seven-axis demo.
    out : results folder.
    seconds : s, for each comparison; None: 3 s.
    quick : only to see that everything runs; the figures mean little.
    overrides : ``key=value``, changes to the stack.

    Raises
    ------
    InputError
        Anything wrong with arguments, folder or stack.

    """
    folder, problems = Path(out), []
    if fault := folder_problem(folder, FIGURES, (PLOT,)):
        problems.append(fault)
    parameters = parse_overrides(overrides, problems)
    if problems:
        raise InputError(problems)
    effort = QUICK if quick else THOROUGH
    if seconds is not None:
        effort = Effort(**{**vars(effort), "seconds": seconds})
    path = cases.demo_file("demo_stack.yaml") if stack is None else Path(stack)
    source = cases.Source(str(path.absolute()), {**parameters, "law": "prioritized"})
    folder.mkdir(parents=True, exist_ok=True)
    figures = json_ready(measure(source, effort))
    figures["notes"] += _plot(figures, folder / PLOT)
    with whole_file(folder / FIGURES) as file:
        file.write(to_json(figures).encode("utf-8", "backslashreplace"))
    print(report.tables(figures, width=shutil.get_terminal_size((100, 24)).columns))
    for note in figures["notes"]:
        print(f"note: {note}")
    print(f"results in {folder}")
    return 0


def measure(source: cases.Source, effort: Effort) -> dict[str, Any]:
    """
    All figures of `bench.json`, but for what the plot has to say.

    """
    notes: list[str] = []
    with fraction_bar() as progress:
        before = machine()
        found: dict[str, Any] = {"machine": before, "mode": f"control law {compiled.STATUS}"}
        controller = step.under_way(source, progress)
        found["reference"] = _case("reference", cases.reference_source(), effort, progress, 0.05, notes)
        name = Path(source.path).stem
        found["stack"] = _case(name, source, effort, progress, 0.2, notes)
        progress(0.4, "growth")
        found["growth"] = _growth(effort, progress)
        progress(0.65, "cycles in a row")
        found["steady"] = steady.steady(controller, effort.cycles)
        progress(0.7, "without numba, and starting")
        found |= _in_processes(source, effort, notes)
        progress(0.85, "rehearsals")
        found["rehearsal"] = loops.rehearsals(_rehearsed(name, source), effort.rehearsal, effort.turns)
        progress(0.95, "batches")
        found["batches"] = loops.batches(controller, effort.states)
        progress(1.0, "done")
    return {**found, "seconds": effort.seconds, "targets": judge(found), "notes": notes}


def _case(
    name: str, source: cases.Source, effort: Effort, progress: Any, done: float, notes: list[str]
) -> dict[str, Any]:
    """
    One stack outside the bands and inside.

    """
    progress(done, f"one cycle, {name}")
    controller = step.under_way(source, progress)
    found = cases.states_by_branches(controller, effort.look)
    if 1 not in found:
        notes.append(f"{name}: no state outside the bands was met; the first one met stands for it")
    regular = cases.spread(next(iter(found.values())), 3)[1 if len(found) else 0]
    tool = controller.tools and controller.stack.posture
    impedance = step.under_way(source, progress, "cartesian_impedance") if tool else None
    times, said = step.comparisons(controller, impedance, regular, effort.seconds)
    notes += [f"{name}: {text}" for text in said]
    mine = times["step"].p50_us
    ratios = {f"step_over_{other}": mine / t.p50_us for other, t in times.items() if other != "step"}
    if "textbook" in times:
        del ratios["step_over_textbook"]
        ratios["textbook_over_step"] = times["textbook"].p50_us / mine
    stack = controller.stack
    return {
        "name": name,
        "joints": controller.arm.n,
        "tasks": len(stack.tasks) + (stack.posture is not None),
        "rows": cases.rows(controller),
        "parts_us": step.parts_us(controller, regular, effort.seconds),
        "compared_us": {other: t.figures() for other, t in times.items()},
        "ratios": ratios,
        "branches": step.branch_costs(controller, found, effort.seconds),
    }


def _growth(effort: Effort, progress: Any) -> dict[str, Any]:
    """
    Growth over joints; over rows on 7 joints, most of them repetitions; over rows on 30, all of them owned.

    """
    found = {"joints": growth.over_joints(effort.joints, effort.seconds)}
    progress(0.5, "growth")
    found["rows_tool"] = growth.over_rows(7, effort.tool_tasks, effort.seconds, spread=False)
    progress(0.55, "growth")
    found["rows_links"] = growth.over_rows(30, effort.link_tasks, effort.seconds, spread=True)
    return found


def _in_processes(source: cases.Source, effort: Effort, notes: list[str]) -> dict[str, Any]:
    """
    What is measured in processes of their own; one that fails is noted.

    """
    reference = cases.reference_source()
    found: dict[str, Any] = {"interpreted": None, "start": elsewhere.starting(max(3, 2 * effort.turns))}
    start = found["start"]
    start["help_beyond_python_s"] = start["help_s"] - start["python_s"]
    try:
        found["interpreted"] = elsewhere.interpreted(
            reference.path, dict(reference.parameters), effort.seconds
        )
        start |= elsewhere.configuring(source.path, dict(source.parameters))
    except InputError as error:
        notes.append(str(error))
    return found


def _rehearsed(name: str, source: cases.Source) -> dict[str, cases.Source]:
    """
    Stacks to rehearse: both demos, and the user's own.

    """
    demos = ("demo_stack", "planar_stack")
    found = {demo: cases.Source(str(cases.demo_file(f"{demo}.yaml")), {}) for demo in demos}
    return found if source.path in {demo.path for demo in found.values()} else {**found, name: source}


def _plot(figures: dict[str, Any], path: Path) -> list[str]:
    """
    Draw, or say why not.

    """
    try:
        from prioritized_tracking.offline.bench.plot import draw
    except ImportError as error:
        return [f"no plot: {error} (pip install 'prioritized_tracking[report]')"]
    draw(figures, path)
    return []
