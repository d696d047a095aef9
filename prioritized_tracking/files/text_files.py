# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Files of the user: text read with every refusal named, anything written whole or not at all.

"""

from __future__ import annotations

import contextlib
import errno
import os
import stat
from collections.abc import Iterator
from pathlib import Path
from typing import IO

from prioritized_tracking.errors import InputError, Problem, nearest

SIZE_LIMIT = 200_000_000
"""Largest file read, bytes: about two million rows of a pose, half an hour at 1 kHz."""


def read_text(path: str | os.PathLike[str], limit: int = SIZE_LIMIT, where: str = "") -> str:
    """
    Return the text of a regular UTF-8 file.

    Parameters
    ----------
    path : path
        The file.
    limit : int
        Largest size, bytes.
    where : str
        Place in the user's input that names the file, e.g. ``stack.yaml:9 references.weld.file``.

    Raises
    ------
    InputError
        When it is missing, no regular file, unreadable, larger than `limit`, or no UTF-8 text.

    """
    data = _read_bytes(Path(path), limit, where)
    place = place_of(path, where)
    if data[:2] in (b"\xff\xfe", b"\xfe\xff") or _every_second_zero(data[:64]):
        raise InputError(_not_text("the file is UTF-16 or UTF-32 text", place))
    if data[:4] == b"PK\x03\x04":
        raise InputError(_not_text("the file is a packed one (a spreadsheet?), not text", place))
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        what = f"not UTF-8 text: byte 0x{data[error.start]:02x}"
        raise InputError(_not_text(what, place_of(path, where, line))) from None
    if "\0" in text:
        line = text.count("\n", 0, text.index("\0")) + 1
        raise InputError(_not_text("the file is binary, not text", place_of(path, where, line)))
    return text


def _every_second_zero(data: bytes) -> bool:
    """
    Return whether text of Latin letters would stand so in UTF-16.

    """
    return len(data) > 2 and (not any(data[1::2]) or not any(data[::2]))


def _read_bytes(path: Path, limit: int, where: str) -> bytes:
    """
    Return the content of a regular file no larger than the limit.

    """
    place = place_of(path, where)
    data, refusal = b"", Problem(what="")
    try:
        status = path.stat()
        if stat.S_ISDIR(status.st_mode):
            refusal = Problem(what="a folder stands where a file is expected", where=place)
        elif not stat.S_ISREG(status.st_mode):  # a device or a pipe may never end
            refusal = Problem(what="not a regular file", where=place)
        elif status.st_size > limit:
            size = f"{limit / 1e6:g} MB"
            refusal = Problem(what="the file is too large", where=place, expected=f"at most {size}")
        else:
            data = path.read_bytes()
    except FileNotFoundError:
        hint = nearest(path.name, _siblings(path)).strip()
        raise InputError(Problem(what="the file does not exist", where=place, remedy=hint)) from None
    except (OSError, ValueError) as error:
        raise InputError(unusable("the file cannot be read", place, error)) from None
    if refusal.what:
        raise InputError(refusal)
    return data


def _siblings(path: Path) -> list[str]:
    """
    Return the names beside a file, none where they cannot be read.

    """
    try:
        return [entry.name for entry in path.parent.iterdir()]
    except OSError:
        return []


def unusable(what: str, place: str, error: Exception) -> Problem:
    """
    Return the problem of a file the operating system refuses.

    """
    reason = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
    return Problem(what=what, where=place, got=reason)


def _not_text(what: str, place: str) -> Problem:
    """
    Return the problem of a file that is no UTF-8 text.

    """
    return Problem(what=what, where=place, expected="UTF-8 text", remedy="Export or save it as UTF-8 text.")


def place_of(path: str | os.PathLike[str], where: str, line: int = 0, column: str = "") -> str:
    """
    Return a place as "file.csv:12 qx (stack.yaml:9 references.weld.file)".

    """
    text = f"{os.fspath(path)}:{line}" if line else f"{os.fspath(path)}"
    text += f" {column}" if column else ""
    return f"{text} ({where})" if where else text


def write_text(path: str | os.PathLike[str], text: str) -> None:
    """
    Write a text file, whole or not at all, see `whole_file`.

    Parameters
    ----------
    path : path
        The file; replaced when it exists.
    text : str
        Its content.

    Raises
    ------
    InputError
        When it cannot be written.

    """
    try:
        with whole_file(Path(path)) as file:
            file.write(text.encode("utf-8"))
    except (OSError, ValueError) as error:
        raise InputError(unusable("the file cannot be written", str(path), error)) from None


@contextlib.contextmanager
def whole_file(path: Path) -> Iterator[IO[bytes]]:
    """
    Open a file for writing so that an interruption leaves the old one or the new one, never half of it.

    The draft beside it is this process's own: another one may be writing the same file. What is there but
    no regular file is left alone: moved over a device, the file would take its place for good.

    """
    if path.exists() and not path.is_file():
        raise OSError(errno.EINVAL, "not a regular file", str(path))
    draft = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with draft.open("wb") as file:
            yield file
        os.replace(draft, path)
    finally:
        draft.unlink(missing_ok=True)
