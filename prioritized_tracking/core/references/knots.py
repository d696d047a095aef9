# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Faults in the knots of a path, found over whole arrays and named by row and column.

The same checks serve paths made in Python and files; only the words for the place differ (row of
the array, or line of the file).

"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from prioritized_tracking.errors import InputError, Problem

Array = NDArray[np.float64]

UNIT_TOLERANCE = 1e-3
"""Largest distance of a quaternion's norm from 1; more is no rounding but a wrong column."""

STEP_LIMIT = math.pi / 2
"""Largest rotation between knots, rad; beyond it the way between them is a guess."""

LARGEST = 1e12
"""Largest number taken; far beyond any time or place, far below overflow."""
CLOSEST = 1e-6
"""Smallest time between knots, s; below it steps and accelerations lose their digits."""

POSE_COLUMNS = ("x", "y", "z", "qx", "qy", "qz", "qw")
QUATERNION = "qx,qy,qz,qw"
SORTED = "Sort the rows by time and remove doubled ones."
LISTED = 10
"""How many faults of one input are listed."""
EXAMPLES = 3
"""How many of one kind."""


@dataclass(frozen=True, kw_only=True)
class Fault:
    """
    One fault in a table of knots.

    Attributes
    ----------
    row : int
        First row it shows in, 0 = the first knot; -1: the table as a whole.
    column : str
        Column name(s); empty: the whole row.
    what, expected, got, remedy : str
        As in `prioritized_tracking.errors.Problem`.

    """

    row: int
    column: str
    what: str
    expected: str = ""
    got: str = ""
    remedy: str = ""


def listed(faults: list[Fault]) -> list[Fault]:
    """
    Return what to show of many faults: the first rows of each kind, its count, `LISTED` in all.

    One mistake often repeats on every row; it must not hide the others.

    """
    kinds: dict[str, list[Fault]] = {}
    for fault in faults:
        kinds.setdefault(fault.what, []).append(fault)
    shown: list[Fault] = []
    for what, same in kinds.items():
        shown += same[:EXAMPLES]
        if len(same) > EXAMPLES:
            shown.append(Fault(row=-1, column="", what=f"{what}: {len(same) - EXAMPLES} more places"))
    if len(shown) > LISTED:
        left = len(faults) - sum(fault.row >= 0 for fault in shown[:LISTED])
        shown[LISTED:] = [Fault(row=-1, column="", what=f"and more: {left} problems not listed")]
    return shown


def raise_faults(faults: list[Fault], where: str) -> None:
    """
    Raise InputError with the faults of a path made in Python, if there are any.

    """
    if faults:
        raise InputError([_problem(fault, where) for fault in listed(faults)])


def _problem(fault: Fault, where: str) -> Problem:
    """
    Return a fault as a problem that names the knot by its index.

    """
    row = "" if fault.row < 0 else f"knot {fault.row}"
    place = " ".join(part for part in (where, row, fault.column) if part)
    return Problem(what=fault.what, where=place, expected=fault.expected, got=fault.got, remedy=fault.remedy)


def time_faults(times: Array) -> Iterator[Fault]:
    """
    Yield the faults of the times: fewer than two knots, times that do not increase.

    """
    if len(times) < 2:
        yield Fault(
            row=-1,
            column="",
            what="a path needs at least two knots",
            expected="two or more rows",
            got=f"{len(times)}",
            remedy="To stay at one place use the source 'hold'.",
        )
    steps = np.diff(times)
    for row in np.flatnonzero(steps < CLOSEST) + 1:
        increasing = steps[row - 1] > 0.0
        yield Fault(
            row=int(row),
            column="t",
            what="time hardly increases" if increasing else "time does not increase",
            expected=f"{CLOSEST:g} s or more" if increasing else f"more than {times[row - 1]:.9g} s",
            got=f"{steps[row - 1]:.3g} s" if increasing else f"{times[row]:.9g} s",
            remedy="Times are in seconds; keep one of the rows." if increasing else SORTED,
        )


def finite_faults(values: Array, columns: tuple[str, ...]) -> Iterator[Fault]:
    """
    Yield one fault per value that is NaN, infinite or beyond `LARGEST`.

    """
    for row, column in np.argwhere(~(np.abs(values) <= LARGEST)):
        yield number_fault(int(row), columns[column], float(values[row, column]))


def number_fault(row: int, column: str, value: float) -> Fault:
    """
    Return the fault of a number that cannot be used.

    """
    if math.isfinite(value):
        limit = f"at most {LARGEST:g}"
        return Fault(row=row, column=column, what="a number too large", expected=limit, got=f"{value:g}")
    return Fault(
        row=row,
        column=column,
        what="not a finite number",
        got=str(value),
        remedy="Fill the gap or remove the row.",
    )


def quaternion_faults(quaternions: Array) -> Iterator[Fault]:
    """
    Yield the faults of (N, 4) quaternions x y z w: not of unit length, steps above 90°.

    """
    norms = np.linalg.norm(quaternions, axis=1)
    bent = np.abs(norms - 1.0) > UNIT_TOLERANCE
    for row in np.flatnonzero(bent):
        yield Fault(
            row=int(row),
            column=QUATERNION,
            what="not a unit quaternion",
            expected=f"norm 1 within {UNIT_TOLERANCE:g}",
            got=f"norm {norms[row]:.6g}",
            remedy="Columns are a unit quaternion, scalar last: qx,qy,qz,qw.",
        )
    angles = step_angles(quaternions)
    for row in np.flatnonzero((angles > STEP_LIMIT + 1e-9) & ~bent[1:] & ~bent[:-1]) + 1:
        yield Fault(
            row=int(row),
            column=QUATERNION,
            what="rotation from the row before is too large to know the way between",
            expected="at most 90 deg",
            got=f"{math.degrees(angles[row - 1]):.1f} deg",
            remedy="Add knots in between.",
        )


def step_angles(quaternions: Array) -> Array:
    """
    Return the (N - 1,) rotation angles between neighbours in rad; the sign of a quaternion is free.

    """
    ahead, behind = quaternions[1:], quaternions[:-1]
    dots = np.einsum("ij,ij->i", ahead, behind)
    signs = np.where(dots < 0.0, -1.0, 1.0)[:, None]
    # 4 atan2 of half the sum and difference stays accurate where acos of a dot near 1 does not
    apart = np.linalg.norm(ahead - signs * behind, axis=1)
    together = np.linalg.norm(ahead + signs * behind, axis=1)
    angles: Array = 4.0 * np.arctan2(apart, together)
    return angles


def sign_continuous(quaternions: Array) -> Array:
    """
    Return unit quaternions for the same rotations with neighbours never more than 90° apart in S³.

    """
    unit = quaternions / np.linalg.norm(quaternions, axis=1, keepdims=True)
    flips = np.where(np.einsum("ij,ij->i", unit[1:], unit[:-1]) < 0.0, -1.0, 1.0)
    signs = np.concatenate(([1.0], np.cumprod(flips)))
    continuous: Array = signs[:, None] * unit
    return continuous


def scalar_first_faults(quaternions: Array) -> Iterator[Fault]:
    """
    Yield one fault where the column called qx behaves as the scalar part and qw does not.

    Programs that keep the scalar part positive turn all four signs round where it would change
    its own. If rows turn round and qx is the component that never becomes negative, the scalar
    part stands in the first column.

    """
    dots = np.einsum("ij,ij->i", quaternions[1:], quaternions[:-1])
    turned = np.flatnonzero(dots < -math.cos(STEP_LIMIT / 2.0)) + 1
    if len(turned) and np.nanmin(quaternions[:, 0]) >= 0.0 > np.nanmin(quaternions[:, 3]):
        yield Fault(
            row=int(turned[0]),
            column=QUATERNION,
            what="the quaternions seem to be written scalar first",
            expected="scalar last: qx,qy,qz,qw",
            got="all signs turn round here, and qx (not qw) is the part that stays positive",
            remedy="Name the columns qw,qx,qy,qz, or, if they are right, give neighbours the same sign.",
        )


def pose_faults(times: Array, positions: Array, quaternions: Array) -> list[Fault]:
    """
    Return every fault of a pose path's knots.

    """
    faults = list(finite_faults(times[:, None], ("t",)))
    faults += finite_faults(np.hstack((positions, quaternions)), POSE_COLUMNS)
    with np.errstate(over="ignore", invalid="ignore"):  # numbers too large are already named
        return [*faults, *time_faults(times), *quaternion_faults(quaternions)]


def joint_faults(times: Array, q: Array, names: tuple[str, ...]) -> list[Fault]:
    """
    Return every fault of a joint path's knots.

    """
    faults = [*finite_faults(times[:, None], ("t",)), *finite_faults(q, names)]
    with np.errstate(over="ignore", invalid="ignore"):
        return [*faults, *time_faults(times)]
