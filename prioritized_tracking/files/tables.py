# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Reference files: CSV with a header, every fault named by line and column.

- pose file: ``t,x,y,z,qx,qy,qz,qw`` (s, m, unit quaternion);
- joints file: ``t`` and one column per joint (s, rad).

Columns are matched by name, in any order.

"""

from __future__ import annotations

import csv
import io
import math
import os
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

from prioritized_tracking.core.references.knots import (
    POSE_COLUMNS,
    STEP_LIMIT,
    Fault,
    quaternion_faults,
    scalar_first_faults,
    time_faults,
)
from prioritized_tracking.files.csv_table import read_table
from prioritized_tracking.files.text_files import read_text, write_text

__all__ = [
    "read_joints_csv",
    "read_pose_csv",
    "read_text",
    "write_joints_csv",
    "write_pose_csv",
    "write_text",
]

Array = NDArray[np.float64]

FARTHEST = 50.0
"""Largest coordinate taken for metres, m; beyond it millimetres are suspected."""
MOST_TURNED = 4.0 * math.pi
"""Largest joint position taken for radians, rad; beyond it degrees are suspected."""


def read_pose_csv(path: str | os.PathLike[str], where: str = "") -> tuple[Array, Array, Array]:
    """
    Return times (N,), positions (N, 3) and quaternions x y z w (N, 4) of a pose file.

    Parameters
    ----------
    path : path
        CSV with the columns ``t,x,y,z,qx,qy,qz,qw`` in any order (s, m, unit quaternion).
    where : str
        Place in the user's input that names the file.

    Raises
    ------
    InputError
        With every fault of the file, each with line and column.

    """
    table = read_table(path, where, ("t", *POSE_COLUMNS))
    times, positions, quaternions = table.values[:, 0], table.values[:, 1:4], table.values[:, 4:]
    table.faults += time_faults(times)
    table.faults += _far_faults(positions)
    table.faults += quaternion_faults(quaternions)
    table.faults += scalar_first_faults(quaternions)
    table.refuse()
    return times, positions, quaternions


def read_joints_csv(
    path: str | os.PathLike[str], joints: Sequence[str], where: str = ""
) -> tuple[Array, Array]:
    """
    Return times (N,) and joint positions (N, n) of a joints file, in the order of `joints`.

    Parameters
    ----------
    path : path
        CSV with the column ``t`` (s) and one column per joint (rad), in any order.
    joints : sequence of str
        The controlled joints; the file must have these and no others.
    where : str
        Place in the user's input that names the file.

    Raises
    ------
    InputError
        With every fault of the file, each with line and column.

    """
    table = read_table(path, where, ("t", *joints))
    times, q = table.values[:, 0], table.values[:, 1:]
    table.faults += time_faults(times)
    for index, name in enumerate(joints):
        table.faults += _turned_faults(q[:, index], name)
    table.refuse()
    return times, q


def _far_faults(positions: Array) -> Iterator[Fault]:
    """
    Yield one fault per coordinate that is too large for metres.

    """
    for name, values in zip("xyz", positions.T, strict=True):
        rows = np.flatnonzero(np.abs(values) > FARTHEST)
        if len(rows):
            yield Fault(
                row=int(rows[0]),
                column=name,
                what="a position out of any arm's reach",
                expected=f"metres, at most {FARTHEST:g} m",
                got=f"{values[rows[0]]:g}",
                remedy="Millimetres? Divide the positions by 1000.",
            )


def _turned_faults(values: Array, name: str) -> Iterator[Fault]:
    """
    Yield the faults of one joint's positions: degrees suspected, steps above 90°.

    """
    rows = np.flatnonzero(np.abs(values) > MOST_TURNED)
    if len(rows):
        yield Fault(
            row=int(rows[0]),
            column=name,
            what="a joint position too large for radians",
            expected="radians, at most two turns",
            got=f"{values[rows[0]]:g}",
            remedy="Degrees? Multiply the joint columns by pi/180.",
        )
        return
    steps = np.diff(values)
    for row in np.flatnonzero(np.abs(steps) > STEP_LIMIT + 1e-9):
        wrapped = abs(abs(steps[row]) - 2.0 * math.pi) < 1.0
        remedy = "Let the angle run on past 180 deg, without wrapping." if wrapped else "Add rows in between."
        yield Fault(
            row=int(row) + 1,
            column=name,
            what="a joint step from the row before that is too large to know the way between",
            expected="at most 90 deg (1.571 rad)",
            got=f"{steps[row]:.4g} rad",
            remedy=remedy,
        )


def write_pose_csv(
    path: str | os.PathLike[str], times: ArrayLike, positions: ArrayLike, quaternions_xyzw: ArrayLike
) -> None:
    """
    Write a pose file; reading it gives the same numbers.

    Parameters
    ----------
    path : path
        The file; replaced when it exists, in one step.
    times, positions, quaternions_xyzw : (N,), (N, 3), (N, 4) array
        s, m, unit quaternions scalar last.

    Raises
    ------
    InputError
        When it cannot be written.

    """
    rows = np.column_stack((np.asarray(times), np.asarray(positions), np.asarray(quaternions_xyzw)))
    _write_csv(path, ("t", *POSE_COLUMNS), rows)


def write_joints_csv(
    path: str | os.PathLike[str], times: ArrayLike, joints: Sequence[str], q: ArrayLike
) -> None:
    """
    Write a joints file; reading it gives the same numbers.

    Parameters
    ----------
    path : path
        The file; replaced when it exists, in one step.
    times : (N,) array
        s.
    joints : sequence of str
        Names of the columns.
    q : (N, n) array
        Joint positions, rad.

    Raises
    ------
    InputError
        When it cannot be written.

    """
    _write_csv(path, ("t", *joints), np.column_stack((np.asarray(times), np.asarray(q))))


def _write_csv(path: str | os.PathLike[str], columns: tuple[str, ...], rows: Array) -> None:
    """
    Write a table with as many digits as bring the same numbers back.

    """
    text = io.StringIO(newline="")
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows(rows.tolist())
    write_text(path, text.getvalue())
