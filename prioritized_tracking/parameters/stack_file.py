# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The stack file: read, checked, with all defaults filled in.

The same reading serves the command line, the Python interface and the node.

"""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.files.text_files import read_text
from prioritized_tracking.parameters.stack_checks import check_files, check_stack
from prioritized_tracking.parameters.stack_entries import (
    TaskReader,
    broken_charts,
    read_reference,
    task_block,
)
from prioritized_tracking.parameters.stack_paths import fault_of_file, resolve_path
from prioritized_tracking.parameters.stack_schema import ROS_KEYS, STACK
from prioritized_tracking.parameters.stack_sections import apply_values, select_parameters
from prioritized_tracking.parameters.stack_tasks import REFERENCE
from prioritized_tracking.parameters.stack_values import Reading, read_block
from prioritized_tracking.parameters.yaml_dialect import Node, compose, shortened
from prioritized_tracking.schema import Block, Parameter

MAX_BYTES = 1 << 20
"""Largest stack file read; a large one has 20 kB."""

_SIM_TIME = Parameter(key="use_sim_time", type="bool", default=False, help="Time comes from a simulator.")


@dataclass(frozen=True, eq=False)
class StackFile:
    """
    A stack file that passed every check that needs no arm.

    Attributes
    ----------
    path : Path
        The file, absolute; for values that came from elsewhere, `base_dir`.
    base_dir : Path
        Folder that relative paths start from, absolute.
    text : str
        The file's text; "" for values that came from elsewhere.
    tree : dict
        Nested as in the file, with every key of the schema: numbers are float, whole numbers int,
        arrays tuples; None where an optional key or block without default is left out. Do not
        change it.
    warnings : tuple of str
        What is allowed but probably not meant.

    """

    path: Path
    base_dir: Path
    text: str
    tree: dict[str, Any]
    warnings: tuple[str, ...]
    _reading: Reading

    def where(self, *keys: str) -> str:
        """
        Return ``stack.yaml:12 tasks.seam.damping`` for a key, given as parts or dotted.

        The line of a key that was left out is that of the block it belongs in.

        """
        return self._reading.where(self._path(keys))

    def given(self, *keys: str) -> bool:
        """
        Return whether the user wrote a key, given as parts or dotted.

        """
        return self._reading.given(self._path(keys))

    def _path(self, keys: tuple[str, ...]) -> tuple[str, ...]:
        # Names of locked joints may contain dots.
        return keys if self._reading.given(keys) else tuple(part for key in keys for part in key.split("."))


def read_stack(
    path: str | Path,
    *,
    overrides: Mapping[str, Any] | None = None,
    charts: Mapping[str, Any] | None = None,
    new_companions: bool = False,
) -> StackFile:
    """
    Read and check a stack file.

    Parameters
    ----------
    path : str or Path
        The file.
    overrides : mapping, optional
        Values by dotted key that take the place of those of the file; None: as if left out.
    charts : mapping, optional
        Chart classes by name; left out: the registered ones.
    new_companions : bool
        Files of companions may be missing: they are about to be computed.

    Returns
    -------
    StackFile

    Raises
    ------
    InputError
        With every problem of the file.

    """
    path = Path(path)
    text = read_text(path, MAX_BYTES)
    reading = Reading(shortened(path.name, 120))
    root, problems = compose(text, reading.name)
    reading.problems.extend(problems)
    if root is None and problems:
        raise InputError(problems)
    parameters = select_parameters(root, reading)
    apply_values(parameters, overrides or {}, "override", reading)
    path = path.absolute()
    return _check(parameters, reading, path, path.parent, text, charts, new_companions=new_companions)


def stack_of_values(
    values: Mapping[str, Any], base_dir: str | Path, *, charts: Mapping[str, Any] | None = None
) -> StackFile:
    """
    Check values that do not come from a file, such as the parameters of a node.

    Parameters
    ----------
    values : mapping
        Values by dotted key.
    base_dir : str or Path
        Folder that relative paths start from.
    charts : mapping, optional
        Chart classes by name; left out: the registered ones.

    Raises
    ------
    InputError
        With every problem.

    """
    reading = Reading("parameters")
    parameters = Node("map", {}, reading.name)
    apply_values(parameters, values, "parameter", reading)
    folder = Path(base_dir).absolute()
    return _check(parameters, reading, folder, folder, "", charts, new_companions=False)


def resolve(stack_file: StackFile, value: str) -> Path:
    """
    Return the absolute path a value of a stack file names.

    Parameters
    ----------
    stack_file : StackFile
        Relative paths start from its `base_dir`.
    value : str
        Path, ``package://PACKAGE/…`` or ``file:///…``.

    Raises
    ------
    InputError
        The package is not found: install it, or write a relative path.

    """
    return resolve_path(value, stack_file.base_dir)


def _check(
    parameters: Node,
    reading: Reading,
    path: Path,
    folder: Path,
    text: str,
    charts: Mapping[str, Any] | None,
    *,
    new_companions: bool,
) -> StackFile:
    charts = checked_charts(charts)
    ros = {key: parameters.value.pop(key) for key in ROS_KEYS if key in parameters.value}
    reading.homes = dict(_homes(STACK))
    sim_time = Node("map", {k: node for k, node in ros.items() if k == "use_sim_time"}, reading.name)
    tree = read_block(
        STACK, parameters, (), reading, {"tasks": TaskReader(charts), "references": read_reference}
    )
    tree |= read_block(Block(key="", help="", parameters=(_SIM_TIME,)), sim_time, (), reading, {})
    _fill_from_rate(tree, reading)
    check_stack(tree, charts, reading)
    base_dir = _base_dir(tree, folder, reading)
    check_files(tree, charts, base_dir, reading, new_companions=new_companions)
    if reading.problems:
        raise InputError(_by_place(reading.problems))
    return StackFile(path, base_dir, text, tree, tuple(_warnings(tree)), reading)


def checked_charts(charts: Mapping[str, Any] | None) -> Mapping[str, Any]:
    """
    Return the chart classes by name, the registered ones when None is given.

    Raises
    ------
    InputError
        A chart of another package cannot be loaded, or is no chart.

    """
    if charts is None:
        from prioritized_tracking.charts import registry  # late: it loads the charts of other packages

        try:
            charts = registry()
        except Exception as error:
            raise InputError(broken_charts(error)) from error
    for name, cls in charts.items():
        own = getattr(cls, "parameters", None)
        fits = isinstance(own, tuple) and all(isinstance(p, Parameter) for p in own)
        if not fits or getattr(cls, "kind", None) not in ("pose", "joints") or not callable(cls):
            what = f"chart '{name}' of another package is no chart: it lacks kind or parameters"
            raise InputError(Problem(what=what, remedy="Repair or uninstall the package that registers it."))
    return charts


def _homes(block: Block, path: str = "") -> Iterator[tuple[str, str]]:
    for inner in block.blocks:
        here = f"{path}{inner.key}"
        if isinstance(inner, Block):
            yield from ((parameter.key, here) for parameter in inner.parameters if inner.key != "plant")
            yield from _homes(inner, here + ".")


def _fill_from_rate(tree: dict[str, Any], reading: Reading) -> None:
    # Defaults meant for the usual rates; at slow ones, as much as the rate allows.
    rate, guard = tree["rate"], tree["guard"]
    if rate is not None and not reading.given(("telemetry_rate",)):
        tree["telemetry_rate"] = min(tree["telemetry_rate"], rate)
    if rate is not None and not reading.given(("guard", "state_timeout")):
        guard["state_timeout"] = max(guard["state_timeout"], 2.0 / rate)


def _base_dir(tree: Mapping[str, Any], folder: Path, reading: Reading) -> Path:
    if tree["base_dir"] is None:
        return folder
    base_dir: Path = folder / tree["base_dir"]
    fault = fault_of_file(base_dir)
    if fault is None or fault[0] != "a folder, not a file":
        reading.report(("base_dir",), "no such folder", got=shortened(str(base_dir), 160))
    return base_dir


def _by_place(problems: list[Problem]) -> list[Problem]:
    # Stable: problems without a line stay behind those with one, in the order they were found.
    def line(problem: Problem) -> int:
        digits = problem.where.partition(":")[2].partition(" ")[0].rstrip(",")
        return int(digits) if digits.isdecimal() else 1 << 30

    return sorted(problems, key=line)


def _warnings(tree: Mapping[str, Any]) -> Iterator[str]:
    robot = tree["robot"]
    if robot["velocity"] == "measured" and robot["velocity_cutoff"] is not None:
        yield "robot.velocity_cutoff has no effect while robot.velocity is measured"


def find_parameter(
    stack_file: StackFile, key: str, charts: Mapping[str, Any] | None = None
) -> Parameter | None:
    """
    Return the schema of one key of a stack, or None if there is no such key.

    Parameters
    ----------
    stack_file : StackFile
        Says which tasks and channels there are.
    key : str
        Dotted key, e.g. ``tasks.seam.damping``.
    charts : mapping, optional
        Chart classes by name; left out: the registered ones.

    """
    found = dict(all_parameters(stack_file, charts))
    return found.get(key)


def all_parameters(
    stack_file: StackFile, charts: Mapping[str, Any] | None = None
) -> Iterator[tuple[str, Parameter]]:
    """
    Yield (dotted key, schema) of every key a stack may have, its tasks and channels included.

    Entries of ``robot.locked`` are those of the file. See `find_parameter` for the parameters.

    """
    charts = checked_charts(charts)
    tree = stack_file.tree
    yield from _of_block(STACK, "", tree)
    for name, task in tree["tasks"].items():
        block = task_block(task["chart"], charts[task["chart"]])
        yield from _of_block(block, f"tasks.{name}.", {})
    for name in tree["references"]:
        yield from _of_block(REFERENCE, f"references.{name}.", {})


def _of_block(block: Block, prefix: str, tree: Mapping[str, Any]) -> Iterator[tuple[str, Parameter]]:
    yield from ((prefix + parameter.key, parameter) for parameter in block.parameters)
    for inner in block.blocks:
        values = tree.get(inner.key) or {}
        if isinstance(inner, Block):
            yield from _of_block(inner, f"{prefix}{inner.key}.", values)
        elif isinstance(inner.entry, Parameter):
            entry = inner.entry
            yield from (
                (f"{prefix}{inner.key}.{name}", dataclasses.replace(entry, key=name)) for name in values
            )
