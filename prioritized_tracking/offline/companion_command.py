# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The verb `companion`: from a stack file to the joint path that goes with its tool path.

"""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from prioritized_tracking.assembly import compute_companion
from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.files import write_joints_csv
from prioritized_tracking.offline.companion import Companion
from prioritized_tracking.offline.overrides import parse_overrides
from prioritized_tracking.offline.progress import fraction_bar
from prioritized_tracking.parameters import StackFile, read_stack, resolve


def run(stack: str, out: str, *, channel: str | None, overrides: Sequence[str]) -> int:
    """
    Compute the companion, write it, print its figures; return the exit code.

    Parameters
    ----------
    stack, out : str
        Stack file, and joints file to write.
    channel : str or None
        Pose channel; None: the one there is.
    overrides : sequence of str
        ``key=value``.

    Raises
    ------
    InputError
        Anything wrong with the arguments or the stack, and a path the arm cannot follow.

    """
    target = Path(out)
    problems = _target_problems(target)
    changes = parse_overrides(overrides, problems)
    if problems:
        raise InputError(problems)
    file = read_stack(stack, overrides=changes, new_companions=True)
    channel = channel or _followed(file)
    _keep_sources(file, target)
    with fraction_bar() as progress:
        found = compute_companion(stack, channel=channel, parameters=changes, progress=progress)
    write_joints_csv(target, found.times, found.joints, found.q)
    for line in (*(f"note: {message}" for message in found.messages), *figures(found)):
        print(line)
    print(f"\nwritten to {target}; in the stack file: {_usage(file, channel, target)}")
    return 0


def figures(found: Companion) -> list[str]:
    """
    Return residuals and margins, one line each, with the time where each was met.

    """

    def line(label: str, peak: Any, unit: str) -> str:
        joint = f", joint {peak.joint}" if peak.joint else ""
        return f"{label:<39} {peak.value:.3g}{unit} at {peak.at_s:.3f} s{joint}"

    lines = [
        line("largest distance from the path", found.position_residual, " m"),
        line("largest angle from the path", found.orientation_residual, " rad"),
        line("nearest joint limit", found.limit_margin, " rad"),
        line("highest joint speed, share of its limit", found.speed, ""),
        line("smallest singular value of the task", found.singular, ""),
    ]
    return [text.replace("inf rad at 0.000 s", "no limits") for text in lines]


def _followed(file: StackFile) -> str | None:
    """
    Return the pose channel that companions follow, or the only one; None: a choice is needed.

    """
    entries = file.tree["references"]
    poses = [name for name, entry in entries.items() if entry["kind"] == "pose" and entry["source"] == "file"]
    leaders = {entry["follows"] for entry in entries.values() if entry["source"] == "companion"}
    choice = [name for name in poses if name in leaders] or poses
    return choice[0] if len(choice) == 1 else None


def _target_problems(target: Path) -> list[Problem]:
    """
    Return what speaks against the file to write; nothing is written.

    """
    what = ""
    try:
        folder = target.parent
        if target.is_dir():
            what = "the file to write is a folder"
        elif target.exists() and not target.is_file():
            what = "the file to write is no regular file"
        elif not folder.is_dir():
            what = f"there is no folder {folder}"
        elif not os.access(target if target.exists() else folder, os.W_OK):
            what = "the file cannot be written"
    except (OSError, ValueError) as error:
        what = f"the file cannot be written: {error}"
    return (
        [Problem(what=what, where=f"--out {target}", expected="a CSV file in a folder you may write to")]
        if what
        else []
    )


def _keep_sources(file: StackFile, target: Path) -> None:
    """
    Refuse to overwrite the stack file or a path it reads.

    """
    entries = file.tree["references"].values()
    paths = [entry["file"] for entry in entries if entry["file"] and entry["source"] == "file"]
    sources = (file.path, *(resolve(file, path) for path in paths))
    if target.exists() and any(target.samefile(source) for source in sources if source.exists()):
        raise InputError(
            Problem(
                what="this would overwrite an input", where=f"--out {target}", remedy="Name another file."
            )
        )


def _usage(file: StackFile, channel: str | None, target: Path) -> str:
    """
    Return the stack file's line that uses the companion.

    """
    try:
        path = os.path.relpath(target, file.base_dir)
    except ValueError:  # another drive
        path = str(target.absolute())
    return f"{{kind: joints, source: companion, file: {path}, follows: {channel}}}"
