# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Reading one task and one channel of a stack file.

"""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from prioritized_tracking.errors import InputError, Problem, nearest
from prioritized_tracking.parameters.stack_tasks import REFERENCE, TASK_KEYS, task_keys
from prioritized_tracking.parameters.stack_values import Reading, convert, given_keys, read_block, read_value
from prioritized_tracking.parameters.yaml_dialect import Node, shortened
from prioritized_tracking.schema import Block, Parameter

_NAME = re.compile(r"[A-Za-z][A-Za-z0-9]*(_[A-Za-z0-9]+)*")
_LONGEST_NAME = 60
_CHART = TASK_KEYS[0]


def check_name(path: tuple[str, ...], reading: Reading) -> None:
    """
    Report a task or channel whose name cannot be part of a ROS topic.

    """
    name = path[-1]
    if not _NAME.fullmatch(name) or len(name) > _LONGEST_NAME:
        expected = f"letters, digits and single underscores, first a letter, at most {_LONGEST_NAME}"
        reading.report(path, "not a ROS name", expected=expected, got=shortened(name))


def read_reference(name: str, node: Node, path: tuple[str, ...], reading: Reading) -> dict[str, Any]:
    """
    Return the keys of a channel; see `stack_values.read_block`.

    """
    del name  # in `path` too
    check_name(path, reading)
    if node.kind != "map":
        given_keys(node, path, reading)
        return {}
    return read_block(REFERENCE, node, path, reading, {})


class TaskReader:
    """
    Reads tasks, whose keys depend on their charts.

    Parameters
    ----------
    charts : mapping
        Chart classes by name.

    """

    def __init__(self, charts: Mapping[str, Any]) -> None:
        self.charts = charts

    def __call__(self, name: str, node: Node, path: tuple[str, ...], reading: Reading) -> dict[str, Any]:
        """
        Return the keys of a task, those of its chart among them; see `stack_values.read_block`.

        """
        del name  # in `path` too
        check_name(path, reading)
        given = given_keys(node, path, reading)
        if node.kind != "map":
            return {}
        chart = read_value(_CHART, given.get("chart"), (*path, "chart"), reading)
        cls = self.charts.get(chart) if isinstance(chart, str) else None
        if cls is None:
            if chart is not None:
                self._report_unknown(str(chart), path, reading)
            return self._read_common(given, path, reading)
        return self._read_known(str(chart), cls, given, path, reading)

    def _report_unknown(self, chart: str, path: tuple[str, ...], reading: Reading) -> None:
        expected = f"one of {', '.join(self.charts)}"
        remedy = nearest(chart, self.charts).strip()
        reading.report(
            (*path, "chart"), "unknown chart", expected=expected, got=shortened(chart), remedy=remedy
        )

    def _read_common(self, given: dict[str, Node], path: tuple[str, ...], reading: Reading) -> dict[str, Any]:
        # Without its chart no key is unknown or missing; what is there is still checked.
        common = {p.key: p for p in TASK_KEYS if p.key in given and p.key != "chart"}
        return {key: convert(p, given[key], (*path, key), reading) for key, p in common.items()}

    def _read_known(
        self, chart: str, cls: Any, given: dict[str, Node], path: tuple[str, ...], reading: Reading
    ) -> dict[str, Any]:
        block = task_block(chart, cls)
        known = block.keys()
        for key in [p.key for p in TASK_KEYS if p.key in given and p.key not in known]:
            what = f"has no meaning with chart {chart}"
            reading.report((*path, key), what, remedy="Remove the key.")
            del given[key]
        values = read_block(block, Node("map", given, reading.where(path)), path, reading, {})
        check_band(values.get("handover"), (*path, "handover"), reading)
        self._check_chart(cls, values, path, reading)
        return values

    def _check_chart(self, cls: Any, values: dict[str, Any], path: tuple[str, ...], reading: Reading) -> None:
        own = {p.key: values[p.key] for p in cls.parameters if values[p.key] is not None}
        if len(own) < sum(p.required or p.default is not None for p in cls.parameters):
            return  # a fault of its keys is reported already
        try:
            coordinates = tuple(cls(**own).coordinates)
        except InputError as error:
            reading.problems.extend(error.problems)
        except Exception as error:  # a chart of somebody else may raise anything
            _report_refusal(error, str(values["chart"]), own, path, reading)
        else:
            check_lengths(coordinates, values, path, reading)


def _report_refusal(
    error: Exception, chart: str, own: Mapping[str, Any], path: tuple[str, ...], reading: Reading
) -> None:
    """
    Report what a chart raised; "KEY: expected …, got …" is put at the key and taken apart.

    """
    key, _, text = str(error).partition(": ")
    if key not in own:
        what = shortened(str(error), 200) or type(error).__name__
        reading.report(path, f"chart {chart} refuses its parameters: {what}")
        return
    expected, _, got = text.removeprefix("expected ").partition(", got ")
    what = f"refused by chart {chart}"
    reading.report((*path, key), what, expected=shortened(expected, 200), got=shortened(got or str(own[key])))


def task_block(chart: str, cls: Any) -> Block:
    """
    Return the schema of a task with a given chart.

    Parameters
    ----------
    chart : str
        Name of the chart.
    cls : type
        Its class, with `kind` and `parameters`.

    """
    own: tuple[Parameter, ...] = tuple(cls.parameters)
    return Block(key="task", help=f"Task with chart {chart}.", parameters=(*task_keys(chart, cls.kind), *own))


def check_band(band: Any, path: tuple[str, ...], reading: Reading) -> None:
    """
    Report a hand-over band that does not rise.

    """
    if band is not None and not band[0] < band[1]:
        expected = "two apparent inertias, the first smaller than the second"
        reading.report(
            path, "the band does not rise", expected=expected, got=f"[{band[0]:.9g}, {band[1]:.9g}]"
        )


def check_lengths(
    coordinates: tuple[str, ...], values: dict[str, Any], path: tuple[str, ...], reading: Reading
) -> None:
    """
    Report arrays that have neither one value nor one per coordinate.

    """
    if not coordinates:
        return  # as many as the arm has joints; gains of a posture are scalars
    for key in ("stiffness", "damping", "force", "tolerance"):
        value = values.get(key)
        if isinstance(value, tuple) and len(value) != len(coordinates):
            names = ", ".join(coordinates)
            expected = f"one number, or {len(coordinates)}, one per coordinate ({names})"
            reading.report((*path, key), "wrong length", expected=expected, got=f"{len(value)} numbers")


def broken_charts(error: Exception) -> Problem:
    """
    Return the problem of a chart of another package that cannot be imported.

    """
    what = (
        f"a chart of another package cannot be loaded: {type(error).__name__}: {shortened(str(error), 160)}"
    )
    return Problem(what=what, remedy="Repair or uninstall the package that registers the chart.")
