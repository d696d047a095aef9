# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Tables of numbers in CSV files with a header: matched by column name, faults named by line and column.

"""

from __future__ import annotations

import csv
import io
import math
import os
from array import array
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from prioritized_tracking.core.references.knots import LARGEST, POSE_COLUMNS, Fault, listed, number_fault
from prioritized_tracking.errors import InputError, Problem, nearest
from prioritized_tracking.files.text_files import place_of, read_text

Array = NDArray[np.float64]

SEPARATORS = ((";", "semicolons"), ("\t", "tabs"), ("|", "bars"), (" ", "spaces"))
TIME_NAMES = ("time", "times", "time_s", "t_s", "t[s]", "t [s]", "time [s]", "stamp")


@dataclass
class Table:
    """
    The rows of a file: values by wanted column, NaN where a cell was bad, and the faults so far.

    """

    path: str
    where: str
    columns: tuple[str, ...]
    lines: list[int] = field(default_factory=list)
    values: Array = field(default_factory=lambda: np.zeros((0, 0)))
    faults: list[Fault] = field(default_factory=list)

    def refuse(self) -> None:
        """
        Raise InputError with all faults, if there are any.

        """
        if self.faults:
            raise InputError([self.problem(fault) for fault in listed(self.faults)])

    def problem(self, fault: Fault) -> Problem:
        """
        Return a fault as a problem that names line and column.

        """
        line = self.lines[fault.row] if 0 <= fault.row < len(self.lines) else 0
        place = place_of(self.path, self.where, line, fault.column)
        return Problem(
            what=fault.what, where=place, expected=fault.expected, got=fault.got, remedy=fault.remedy
        )


def read_table(path: str | os.PathLike[str], where: str, columns: tuple[str, ...]) -> Table:
    """
    Return the rows of a CSV file with the wanted columns in the wanted order.

    """
    table = Table(os.fspath(path), where, columns)
    rows = _rows(read_text(path, where=where), table)
    header = [name.strip() for name in next(rows, [])]
    if not header:
        table.faults.append(Fault(row=-1, column="", what="the file is empty", expected=_header(columns)))
        table.refuse()
    header[0] = header[0].lstrip("# ")  # some programs write the header as a comment
    table.faults += _header_faults(header, columns)
    table.refuse()
    table.lines.clear()
    table.values = _numbers(rows, header, table)[:, [header.index(name) for name in columns]]
    return table


def _rows(text: str, table: Table) -> Iterator[list[str]]:
    """
    Yield the cells of all lines that are not blank; note their line numbers in the table.

    """
    reader = csv.reader(io.StringIO(text, newline=None), strict=True, skipinitialspace=True)
    try:
        for row in reader:
            if any(cell and not cell.isspace() for cell in row):
                table.lines.append(reader.line_num)
                yield row
    except csv.Error as error:
        place = place_of(table.path, table.where, reader.line_num)
        raise InputError(Problem(what="not readable as CSV", where=place, got=str(error))) from None


def _header(columns: Iterable[str]) -> str:
    """
    Return the header wanted, shortened.

    """
    text = ",".join(columns)
    return f"a header {text if len(text) <= 200 else text[:200] + '...'}"


def _header_faults(header: list[str], columns: tuple[str, ...]) -> list[Fault]:
    """
    Return the faults of the header: separators, no header at all, unknown, missing, doubled columns.

    """
    separator = next((name for mark, name in SEPARATORS if len(header) == 1 and mark in header[0]), "")
    shown = ",".join(header)[:80]
    if separator:
        remedy = f"The columns are separated by {separator}: write commas, and points in numbers."
        return [_header_fault("the columns are not separated by commas", columns, shown, remedy)]
    if all(_number(name) is not None for name in header):
        return [_header_fault("the first line is numbers, no header", columns, shown, "Add the header line.")]
    missing = [name for name in columns if name not in header]
    if len(columns) > 2 and not set(columns[1:]) & set(header):
        return [_header_fault("the file has none of the columns expected", columns, shown, "Another file?")]
    unknown = [name for name in dict.fromkeys(header) if name not in columns]
    doubled = [name for name in columns if header.count(name) > 1]
    hint = _orientation_hint(header) if "qw" in columns and missing else ""
    faults = [
        Fault(row=0, column=name, what="this column stands more than once", remedy="Keep one of them.")
        for name in doubled
    ]
    for name in missing:
        remedy = hint if name in POSE_COLUMNS[3:] else ""
        faults.append(Fault(row=0, column=name, what=f"column '{name}' is missing", got=shown, remedy=remedy))
    for name in unknown:
        what = f"unknown column '{name}'" if name else "a column without a name"
        close = nearest(name, missing or columns).strip()
        close = "Did you mean 't'?" if name.casefold() in TIME_NAMES else close
        faults.append(Fault(row=0, column=name, what=what, expected=_header(columns), remedy=close))
    return faults


def _header_fault(what: str, columns: tuple[str, ...], got: str, remedy: str) -> Fault:
    """
    Return a fault of the header as a whole.

    """
    return Fault(row=0, column="", what=what, expected=_header(columns), got=got, remedy=remedy)


def _orientation_hint(header: list[str]) -> str:
    """
    Return how orientation is to be written, for a header that writes it otherwise.

    """
    names = {name.casefold() for name in header}
    if {"q0", "q1", "q2", "q3"} <= names:
        return "q0..q3 mostly stand for w,x,y,z: then name them qw,qx,qy,qz."
    if names & {"roll", "rx", "yaw", "rz", "a", "phi"}:
        return "Convert the angles to a unit quaternion."
    return "Orientation is a unit quaternion, scalar part qw."


def _number(cell: str) -> float | None:
    """
    Return the number in a cell, None when there is none.

    """
    try:
        return None if "_" in cell else float(cell)
    except ValueError:
        return None


def _numbers(rows: Iterable[list[str]], header: list[str], table: Table) -> Array:
    """
    Return the (N, columns) numbers of the rows; bad cells become NaN and are noted.

    """
    width = len(header)
    values = array("d")  # a list of a long file's cells would take ten times the memory
    for index, row in enumerate(rows):
        try:
            numbers = [float(cell) for cell in row]
            good = len(numbers) == width and _usable(numbers) and "_" not in "".join(row)
        except ValueError:
            good = False
        values.extend(numbers if good else _bad_row(index, row, header, table))
    return np.frombuffer(values, dtype=float).reshape(-1, width).copy()


def _usable(numbers: list[float]) -> bool:
    """
    Return whether all numbers are finite and of a size to calculate with.

    """
    return math.isfinite(sum(numbers)) and max(numbers) <= LARGEST and min(numbers) >= -LARGEST


def _bad_row(index: int, row: list[str], header: list[str], table: Table) -> list[float]:
    """
    Note the faults of a row; return its numbers with NaN where there is none.

    """
    if len(row) != len(header):
        commas = len(row) in (2 * len(header), 2 * len(header) - 1)
        table.faults.append(
            Fault(
                row=index,
                column="",
                what="a row with another number of cells than the header",
                expected=f"{len(header)}",
                got=f"{len(row)}",
                remedy="Write decimal points, not decimal commas." if commas else "",
            )
        )
        return [math.nan] * len(header)
    numbers = []
    for name, cell in zip(header, row, strict=True):
        number = _number(cell)
        if number is None or not _usable([number]):
            bad = _bad_cell(index, name, cell) if number is None else number_fault(index, name, number)
            table.faults.append(bad)
            number = math.nan
        numbers.append(number)
    return numbers


def _bad_cell(index: int, name: str, cell: str) -> Fault:
    """
    Return the fault of a cell that holds no number.

    """
    if not cell.strip():
        return Fault(row=index, column=name, what="an empty cell", remedy="Fill the gap or remove the row.")
    comma = _number(cell.replace(",", ".", 1)) is not None
    remedy = "Write a decimal point, not a decimal comma." if comma else ""
    return Fault(row=index, column=name, what="not a number", got=repr(cell[:40]), remedy=remedy)
