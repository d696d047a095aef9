# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Files and folders a stack file names.

"""

from __future__ import annotations

import difflib
import os
import site
import stat
import sys
import sysconfig
from collections.abc import Iterator
from pathlib import Path

from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.parameters.yaml_dialect import shortened

NO_FILE = "no such file"
"""Fault of a file that is not there."""

_SCHEME = "package://"


def resolve_path(value: str, base_dir: Path, where: str = "") -> Path:
    """
    Return the path a value names; whether something is there is not looked at.

    Parameters
    ----------
    value : str
        Absolute path, path relative to `base_dir`, ``package://PACKAGE/…`` or ``file:///…``.
    base_dir : Path
        Folder that relative paths start from.
    where : str
        Place of the value, for the message.

    Raises
    ------
    InputError
        The package is not found, or the scheme is none of these: install the package, or write a
        relative path.

    """
    if value.startswith("file:///"):
        return Path(value[len("file://") :])
    if not value.startswith(_SCHEME):
        if "://" in value:
            expected = "a path, or package://PACKAGE/PATH"
            what = "an address that is not read"
            raise InputError(Problem(what=what, where=where, expected=expected, got=shortened(value)))
        return base_dir / value
    package, _, rest = value[len(_SCHEME) :].partition("/")
    folder = find_package(package, base_dir)
    if folder is None:
        remedy = "Install it, source its workspace, or write a path relative to the stack file."
        what = f"package '{shortened(package)}' is not found"
        raise InputError(Problem(what=what, where=where, got=shortened(value), remedy=remedy))
    return folder / rest


def find_package(name: str, base_dir: Path) -> Path | None:
    """
    Return the folder with the shared files of a ROS package, or None.

    Looked for, in this order: the source tree this module is in; the ``share`` folders of ROS
    (``AMENT_PREFIX_PATH``) and of Python; source trees beside or above `base_dir`.

    """
    if not name or name in (".", "..") or os.sep in name or "\0" in name:
        return None
    return next((folder for folder in _package_folders(name, base_dir) if _is_dir(folder)), None)


def _package_folders(name: str, base_dir: Path) -> Iterator[Path]:
    own = Path(__file__).resolve().parents[1]
    if name == own.name and _is_file(own.parent / "package.xml"):
        yield own.parent
    prefixes = [prefix for prefix in os.environ.get("AMENT_PREFIX_PATH", "").split(os.pathsep) if prefix]
    prefixes += [sys.prefix, sysconfig.get_path("data"), site.getuserbase()]
    yield from (Path(prefix) / "share" / name for prefix in prefixes)
    for parent in (base_dir, *base_dir.parents):
        yield from (p for p in (parent, parent / name) if p.name == name and _is_file(p / "package.xml"))


def fault_of_file(path: Path) -> tuple[str, str] | None:
    """
    Return what is wrong with a file that shall be read, and a remedy; None: it can be read.

    """
    try:
        mode = path.stat().st_mode
        if stat.S_ISDIR(mode):
            return "a folder, not a file", ""
        if not stat.S_ISREG(mode):
            return "not an ordinary file", ""
        with path.open("rb"):
            return None
    except FileNotFoundError:
        return NO_FILE, _nearest_file(path)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        return f"cannot be read ({reason})", "Check its name and its permissions."


def _nearest_file(path: Path) -> str:
    try:
        names = [entry.name for entry, _ in zip(path.parent.iterdir(), range(2000), strict=False)]
    except (OSError, ValueError):
        return f"There is no folder {shortened(str(path.parent), 120)}."
    close = difflib.get_close_matches(path.name[:200], names, n=1)
    return f"Did you mean '{shortened(close[0])}'?" if close else ""


def _is_dir(path: Path) -> bool:
    try:
        return path.is_dir()
    except (OSError, ValueError):
        return False


def _is_file(path: Path) -> bool:
    try:
        return path.is_file()
    except (OSError, ValueError):
        return False
