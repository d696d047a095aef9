# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Signals of one run: recorded every cycle into one preallocated table, read back by name, stored as a NumPy
file.

Names and shapes in a stored file, N cycles of n joints, a task of m coordinates:

=============================  ========  ==================================================================
``joints``                     (n,)      joint names in command order
``t``                          (N,)      time, s
``q``, ``v``                   (N, n)    true joint positions (rad) and velocities (rad/s)
``q_measured``, ``v_measured`` (N, n)    what the controller was given
``torque``                     (N, n)    command, N·m
``torque_applied``             (N, n)    torque the motors held in the cycle before, N·m
``joint_velocity_reference``   (N, n)    rad/s; not a number where the law has none
``share_sum``, ``branches``    (N,)      sum of the shares, number of branches; not a number likewise
``limited``                    (N,)      1 where a torque limit was active
``FRAME.position_error``       (N,)      distance of the true tool from its reference, m
``FRAME.orientation_error``    (N,)      angle between the true tool and its reference, rad
``TASK.error``                 (N, m)    task error as the controller sees it, unit of the chart
``TASK.share``                 (N,)      directions the task owns, 0 … m
``TASK.apparent_inertia``      (N,)      kg or kg·m², infinite where it owns none
``TASK.validity``              (N,)      1 where the chart is good, 0 where it fails
=============================  ========  ==================================================================

"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.files import whole_file

Array = NDArray[np.float64]

MOST_BYTES = 4 * 1024**3
"""Largest table of one run; a longer run is refused before it starts rather than after hours."""

_SCALARS = ("t", "share_sum", "branches", "limited")
_JOINTS = ("q", "v", "q_measured", "v_measured", "torque", "torque_applied", "joint_velocity_reference")


class Signals:
    """
    Table of the signals of one run.

    Parameters
    ----------
    joints : tuple of str
        Names, command order.
    frames : tuple of str
        Controlled frames with a pose reference.
    tasks : mapping of str to int
        Number of coordinates of each task.
    capacity : int
        Cycles to make room for.

    Attributes
    ----------
    count : int
        Cycles recorded so far.

    Raises
    ------
    InputError
        The table would exceed `MOST_BYTES`.

    """

    def __init__(
        self, joints: tuple[str, ...], frames: tuple[str, ...], tasks: Mapping[str, int], capacity: int
    ) -> None:
        self.joints = joints
        self.frames = frames
        self.tasks = dict(tasks)
        self.count = 0
        self._columns = _columns(len(joints), frames, self.tasks)
        width = max(
            column.stop if isinstance(column, slice) else column + 1 for column in self._columns.values()
        )
        _check_size(8 * width * capacity)
        self._table = np.empty((capacity, width))
        self._plan = _plan(self._columns, frames, self.tasks)

    def record(
        self,
        t: float,
        state: Any,
        measured: tuple[Array, Array],
        command: Any,
        errors: Mapping[str, tuple[float, float]],
    ) -> None:
        """
        Record one cycle.

        Parameters
        ----------
        t : float
            Time, s.
        state : PlantState
            True state at `t`.
        measured : ((n,), (n,))
            Positions and velocities the controller was given.
        command : Command
            What it answered.
        errors : mapping of frame to (m, rad)
            True errors of the tools at `t`.

        """
        row = self._table[self.count]
        plan = self._plan
        row.fill(np.nan)
        row[plan["t"]] = t
        row[plan["q"]], row[plan["v"]] = state.q, state.v
        row[plan["q_measured"]], row[plan["v_measured"]] = measured
        row[plan["torque"]], row[plan["torque_applied"]] = command.torque, state.applied
        if command.joint_velocity_reference is not None:
            row[plan["joint_velocity_reference"]] = command.joint_velocity_reference
        row[plan["share_sum"]] = _number(command.share_sum)
        row[plan["branches"]] = _number(command.branches)
        row[plan["limited"]] = command.limited
        self._record_errors(row, command.tasks, errors)
        self.count += 1

    def _record_errors(
        self, row: Array, tasks: Mapping[str, Any], errors: Mapping[str, tuple[float, float]]
    ) -> None:
        for frame, columns in self._plan["frames"].items():
            row[columns] = errors[frame]
        for name, (error, rest) in self._plan["tasks"].items():
            report = tasks.get(name)
            if report is not None:
                row[error] = report.error
                row[rest] = (report.share, report.apparent_inertia, report.validity)

    def __getitem__(self, name: str) -> Array:
        """
        Return the recorded part of a signal, see the table of this module.

        """
        signal: Array = self._table[: self.count, self._columns[name]]
        return signal

    def __contains__(self, name: str) -> bool:
        return name in self._columns

    @property
    def names(self) -> tuple[str, ...]:
        """
        Names of all signals.

        """
        return tuple(self._columns)

    def save(self, path: Path) -> None:
        """
        Write the recorded part as a NumPy archive; a file is there whole or not at all.

        """
        arrays: dict[str, Any] = {"joints": np.array(self.joints)} | {name: self[name] for name in self.names}
        with whole_file(path) as file:
            np.savez(file, **arrays)


def _columns(n: int, frames: tuple[str, ...], tasks: Mapping[str, int]) -> dict[str, int | slice]:
    """
    Return the column or columns of each signal.

    """
    widths = dict.fromkeys(_SCALARS, 0) | dict.fromkeys(_JOINTS, n)
    for frame in frames:
        widths |= {f"{frame}.position_error": 0, f"{frame}.orientation_error": 0}
    for name, size in tasks.items():
        widths[f"{name}.error"] = size
        widths |= {f"{name}.{key}": 0 for key in ("share", "apparent_inertia", "validity")}
    columns: dict[str, int | slice] = {}
    place = 0
    for signal, width in widths.items():
        matrix = width or signal in _JOINTS or signal.endswith(".error")
        columns[signal] = slice(place, place + width) if matrix else place
        place += width if matrix else 1
    return columns


def _plan(columns: Mapping[str, Any], frames: tuple[str, ...], tasks: Mapping[str, int]) -> dict[str, Any]:
    """
    Return the columns grouped as they are written, so that a cycle writes neighbours at once.

    """
    plan: dict[str, Any] = {name: columns[name] for name in (*_SCALARS, *_JOINTS)}
    starts = {frame: columns[f"{frame}.position_error"] for frame in frames}
    plan["frames"] = {frame: slice(start, start + 2) for frame, start in starts.items()}
    plan["tasks"] = {}
    for name in tasks:
        share = columns[f"{name}.share"]
        plan["tasks"][name] = (columns[f"{name}.error"], slice(share, share + 3))
    return plan


def _number(value: float | None) -> float:
    return np.nan if value is None else value


def _check_size(size: int) -> None:
    if size > MOST_BYTES:
        raise InputError(
            Problem(
                what="the run is too long to be recorded every cycle",
                where="--seconds",
                expected=f"at most {MOST_BYTES / 1024**3:.0f} GiB of signals for each law",
                got=f"{size / 1024**3:.1f} GiB",
                remedy="Ask for fewer seconds.",
            )
        )
