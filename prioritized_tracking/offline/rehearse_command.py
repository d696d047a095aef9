# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The verb `rehearse`: from a stack file to a folder of results and tables in the terminal.

"""

from __future__ import annotations

import shutil
from collections.abc import Mapping, Sequence
from fnmatch import fnmatch
from pathlib import Path
from typing import Any

import prioritized_tracking as pt
from prioritized_tracking import compiled
from prioritized_tracking.errors import InputError, Problem, nearest
from prioritized_tracking.files import whole_file
from prioritized_tracking.offline.overrides import parse_overrides
from prioritized_tracking.offline.progress import cycle_bar, fraction_bar
from prioritized_tracking.offline.rehearse import SETTLE_S, default_seconds, rehearse
from prioritized_tracking.offline.run import Run
from prioritized_tracking.offline.summary import summarise, to_json
from prioritized_tracking.offline.table import laws_table, tasks_table

SUMMARY = "summary.json"
STACK = "stack.yaml"
SIGNALS = "signals_{}.npz"

_CODES = {"pass": 0, "fail": 1, "interrupted": 130}


def run(
    stack: str,
    out: str,
    *,
    laws: Sequence[str],
    known_laws: Sequence[str],
    seconds: float | None,
    settle: float | None,
    overrides: Sequence[str],
) -> int:
    """
    Rehearse, write the results, print the tables; return the exit code.

    Parameters
    ----------
    stack, out : str
        Stack file and results folder.
    laws : sequence of str
        Empty: the law of the stack file.
    known_laws : sequence of str
        The names there are.
    seconds, settle : float or None
        s; None: the defaults of `default_seconds` and `settling_time`.
    overrides : sequence of str
        ``key=value``.

    Raises
    ------
    InputError
        Anything wrong with arguments, folder or stack, before the first cycle.

    """
    folder = Path(out)
    changes = _checked_arguments(folder, laws, known_laws, seconds, settle, overrides)
    controllers = _load(stack, list(dict.fromkeys(laws)), changes)
    first = next(iter(controllers.values()))
    seconds = default_seconds(first) if seconds is None else seconds
    settle = settling_time(seconds) if settle is None else settle
    if problems := _window_problems(seconds, settle, 1.0 / first.rate):
        raise InputError(problems)
    _prepare(folder, first.stack_file.text)
    notes = [*first.notes, f"control law {compiled.STATUS}"]
    for note in notes:
        print(f"note: {note}")
    runs, interrupted = _run_all(controllers, folder, seconds)
    if interrupted:
        notes.append(_interruption(controllers, runs))
    extra = {"stack": Path(stack).name, "overrides": changes, "notes": notes}
    summary = summarise(runs, settle=settle, extra=extra)
    if interrupted:
        summary["verdict"] = "interrupted"
    with whole_file(folder / SUMMARY) as file:
        file.write(to_json(summary).encode("utf-8", "backslashreplace"))
    _report(summary, folder)
    return _CODES[summary["verdict"]]


def _checked_arguments(
    folder: Path,
    laws: Sequence[str],
    known_laws: Sequence[str],
    seconds: float | None,
    settle: float | None,
    overrides: Sequence[str],
) -> dict[str, Any]:
    """
    Return the changes to the stack, after every check that needs no stack.

    """
    problems = [*_law_problems(laws, known_laws), *_window_problems(seconds, settle)]
    if fault := folder_problem(folder):
        problems.append(fault)
    changes = parse_overrides(overrides, problems)
    if problems:
        raise InputError(problems)
    return changes


def _load(stack: str, laws: Sequence[str], changes: dict[str, Any]) -> dict[str, Any]:
    """
    Return a controller for each law, all before the first run so that nothing is refused after it.

    """
    loaded: dict[str, Any] = {}
    with fraction_bar() as progress:
        for law in laws or (None,):
            controller = pt.load(stack, law=law, parameters=changes, progress=progress)
            loaded[law or str(controller.stack_file.tree["law"])] = controller
    return loaded


def settling_time(seconds: float) -> float:
    """
    Return the default of `--settle`, s: 2 s, or half of a run shorter than 4 s.

    """
    return min(SETTLE_S, 0.5 * seconds)


def folder_problem(
    folder: Path, last: str = SUMMARY, others: Sequence[str] = (STACK, SIGNALS.format("*"))
) -> Problem | None:
    """
    Return what speaks against a results folder; it is neither made nor changed.

    A folder that holds other files than ours is refused, so that a slip of the pen does not scatter files
    over someone's work. A run that was refused or killed leaves a part of its files.

    Parameters
    ----------
    folder : Path
    last : str
        The file that a run of this verb writes at its end.
    others : sequence of str
        Patterns of the files it has written before.

    """
    where, remedy = f"--out {folder}", "Name a new folder, an empty one, or that of an earlier run."
    try:
        if folder.exists() and not folder.is_dir():
            return Problem(what="the results folder is a file", where=where, remedy=remedy)
        if not folder.is_dir() or (folder / last).is_file():
            return None
        if not all(any(fnmatch(path.name, ours) for ours in others) for path in folder.iterdir()):
            return Problem(what="the results folder holds other files", where=where, remedy=remedy)
    except (OSError, ValueError) as error:
        return _unusable(where, error)
    return None


def _prepare(folder: Path, stack_text: str) -> None:
    """
    Make the folder, empty it of earlier results, and put the stack there; proves that it can be written.

    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for old in (*folder.glob(SIGNALS.format("*")), folder / SUMMARY):
            old.unlink(missing_ok=True)
        with whole_file(folder / STACK) as file:
            file.write(stack_text.encode())
    except OSError as error:
        raise InputError(_unusable(f"--out {folder}", error)) from error


def _unusable(where: str, error: Exception) -> Problem:
    reason = getattr(error, "strerror", None) or str(error)
    return Problem(
        what="the results folder cannot be written",
        where=where,
        got=reason,
        remedy="Name a folder you may write to.",
    )


def _run_all(controllers: Mapping[str, Any], folder: Path, seconds: float) -> tuple[list[Run], bool]:
    """
    Return the runs that were begun, and whether the user interrupted; signals are on disk as each run ends.

    """
    runs: list[Run] = []

    def finished(run: Run) -> None:
        runs.append(run)
        run.signals.save(folder / SIGNALS.format(run.law))

    try:
        rehearse(
            lambda law: controllers[str(law)],
            list(controllers),
            seconds=seconds,
            meter=cycle_bar,
            finished=finished,
        )
    except KeyboardInterrupt:  # between two runs, or while signals were being stored
        return runs, True
    return runs, any(run.ended == "interrupted" for run in runs)


def _interruption(controllers: Mapping[str, Any], runs: Sequence[Run]) -> str:
    begun = {run.law for run in runs}
    left = [law for law in controllers if law not in begun]
    return "interrupted by the user" + (f"; not run: {', '.join(left)}" if left else "")


def _report(summary: dict[str, Any], folder: Path) -> None:
    """
    Print tables, reasons and the verdict.

    """
    width = shutil.get_terminal_size((100, 24)).columns
    if "law" not in summary:
        print("INTERRUPTED before the first law was run")
        return
    laws = summary.get("laws") or {summary["law"]: summary}
    print(f"\nFigures from {summary['settle_s']:g} s on, {summary['rate_hz']:g} Hz\n")
    print(laws_table(laws, width=width))
    print(f"\nTasks of {summary['law']}, highest priority first\n")
    print(tasks_table(summary, width=width))
    print()
    for name, figures in laws.items():
        for reason in figures["reasons"]:
            print(f"{name}: {reason}")
    if summary["verdict"] == "interrupted":
        print(summary["notes"][-1])
    print(f"{summary['verdict'].upper()}  {summary['law']}; results in {folder}")


def _law_problems(laws: Sequence[str], known: Sequence[str]) -> list[Problem]:
    return [
        Problem(
            what=f"there is no law '{law}'",
            where="--law",
            expected=", ".join(known),
            remedy=nearest(law, known).strip(),
        )
        for law in laws
        if law not in known
    ]


def _window_problems(seconds: float | None, settle: float | None, period: float = 0.0) -> list[Problem]:
    """
    Return what is wrong with the time to measure: not a cycle of `period`, s, would be left.

    """
    if seconds is None or settle is None or (settle < seconds and settle <= max(seconds - period, 0.0)):
        return []
    return [
        Problem(
            what="nothing is left to measure after settling",
            where="--settle",
            expected=f"less than the {seconds:g} s of the run",
            got=f"{settle:g} s",
            remedy="Ask for a longer run with --seconds, or a shorter --settle.",
        )
    ]
