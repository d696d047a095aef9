# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What has to be measured in processes of their own: without compiling, and starting.

`python -m prioritized_tracking.offline.bench.elsewhere TASK` with the source of a stack and the length of the
measurement as JSON on standard input; figures as JSON on standard output.

"""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np

from prioritized_tracking.errors import InputError, Problem


def interpreted(path: str, parameters: dict[str, Any], seconds: float) -> dict[str, Any]:
    """
    A cycle without numba, and the textbook form beside it, in a process with `NUMBA_DISABLE_JIT=1`.

    """
    return _child("interpreted", path, parameters, seconds, {"NUMBA_DISABLE_JIT": "1"})


def configuring(path: str, parameters: dict[str, Any]) -> dict[str, Any]:
    """
    Time to import the package's libraries and to build a controller, s, in a fresh process.

    """
    return _child("configuring", path, parameters, 0.0, {})


def starting(repetitions: int) -> dict[str, Any]:
    """
    Time of bare Python, of `--help` and of an argument error, s: medians, measured in turns.

    """
    program = [sys.executable, "-m", "prioritized_tracking"]
    commands = {
        "python_s": [sys.executable, "-c", "pass"],
        "help_s": [*program, "--help"],
        "argument_error_s": [*program, "rehearse"],
    }
    spent: dict[str, list[float]] = {name: [] for name in commands}
    for _ in range(repetitions):
        for name, command in commands.items():
            begin = time.perf_counter()
            subprocess.run(command, env=_environment({}), capture_output=True, check=False)
            spent[name].append(time.perf_counter() - begin)
    return {name: float(np.median(times)) for name, times in spent.items()}


def _environment(changes: dict[str, str]) -> dict[str, str]:
    """
    This process's environment, in which children find the very package that is running.

    """
    home = str(Path(__file__).resolve().parents[3])
    paths = [home, *filter(None, [os.environ.get("PYTHONPATH")])]
    return {**os.environ, "PYTHONPATH": os.pathsep.join(paths), **changes}


def _child(
    task: str, path: str, parameters: dict[str, Any], seconds: float, changes: dict[str, str]
) -> dict[str, Any]:
    result = subprocess.run(
        [sys.executable, "-m", __name__, task],
        input=json.dumps({"path": path, "parameters": parameters, "seconds": seconds}),
        env=_environment(changes),
        capture_output=True,
        text=True,
        check=False,
    )
    if result.returncode:
        last = result.stderr.strip().splitlines()[-1:] or ["no message"]
        raise InputError(Problem(what=f"the measurement '{task}' failed in its process", got=last[0]))
    figures: dict[str, Any] = json.loads(result.stdout)
    return figures


def _measure_interpreted(source: Any, seconds: float) -> dict[str, Any]:
    from prioritized_tracking import compiled
    from prioritized_tracking.offline.bench.cases import set_out, state_at
    from prioritized_tracking.offline.bench.timing import compare
    from prioritized_tracking.offline.textbook_step import TextbookController

    controller = set_out(source.load())
    book = TextbookController(controller)
    t, q, v = state_at(controller, 3.0)
    functions = {"step": lambda: controller.step(t, q, v), "textbook": lambda: book.evaluate(t, q, v)}
    times = compare(functions, seconds)
    ratio = times["textbook"].p50_us / times["step"].p50_us
    figures = {name: each.figures() for name, each in times.items()}
    return {**figures, "textbook_over_step": ratio, "compiled": compiled.is_compiled()}


def _measure_configuring(source: Any, begin: float) -> dict[str, Any]:
    import prioritized_tracking.assembly  # noqa: F401  what is timed is the import

    imported = time.perf_counter()
    source.load()
    return {"import_s": imported - begin, "load_s": time.perf_counter() - imported}


def _main() -> None:
    begin = time.perf_counter()
    from prioritized_tracking.offline.bench.cases import Source

    given = json.loads(sys.stdin.read())
    source = Source(given["path"], given["parameters"])
    if sys.argv[1] == "interpreted":
        figures = _measure_interpreted(source, given["seconds"])
    else:
        figures = _measure_configuring(source, begin)
    print(json.dumps(figures))


if __name__ == "__main__":
    _main()
