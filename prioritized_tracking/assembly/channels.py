# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
References of a stack file: files read, companions computed or fetched from the user's cache.

"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from prioritized_tracking.charts.position import described_axes
from prioritized_tracking.core.arm import Arm
from prioritized_tracking.core.bands import PlacedChart
from prioritized_tracking.core.channels import Channel
from prioritized_tracking.core.references import JointPath, PosePath
from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.files import read_joints_csv, read_pose_csv, write_joints_csv
from prioritized_tracking.parameters import StackFile, resolve
from prioritized_tracking.user_cache import user_cache

if TYPE_CHECKING:
    from prioritized_tracking.offline.companion import Companion

Progress = Callable[[float, str], None]
ChartsOfChannel = Callable[[str], list[PlacedChart]]

#: Places between two knots at which a joint path's speed and limits are looked at.
_BETWEEN = 4


def build_channels(
    file: StackFile,
    arm: Arm,
    charts_of_channel: ChartsOfChannel,
    problems: list[Problem],
    progress: Progress | None = None,
) -> dict[str, Channel]:
    """
    Every channel of a stack file; what cannot be built is left out and reported.

    Parameters
    ----------
    charts_of_channel : gives (chart, frame, base) of each pose task a channel drives.
    problems : takes what is wrong.

    """
    entries = file.tree["references"]
    built: dict[str, Channel] = {}
    for name in sorted(entries, key=lambda name: _depth(name, entries)):  # leaders first
        entry = entries[name]
        leader = entry["follows"] or name
        try:
            path = _path(file, name, arm, charts_of_channel, built, problems, progress)
        except InputError as error:
            problems.extend(error.problems)
            continue
        built[name] = Channel(
            path=path,
            kind=entry["kind"],
            base=entry["base"] or arm.root,
            leader=built[leader].leader if leader in built else name,
            pace=entry["pace"],
            at_activation=entry["start"] == "activation",
        )
    return {name: built[name] for name in entries if name in built}


def _depth(name: str, entries: Mapping[str, Any]) -> int:
    """
    How many leaders a channel has above it.

    """
    depth = 0
    while entries[name]["follows"] is not None and depth < len(entries):
        name, depth = entries[name]["follows"], depth + 1
    return depth


def _path(
    file: StackFile,
    name: str,
    arm: Arm,
    charts_of_channel: ChartsOfChannel,
    built: Mapping[str, Channel],
    problems: list[Problem],
    progress: Progress | None,
) -> PosePath | JointPath | None:
    """
    The path of one channel; None for what holds at activation.

    """
    entry, where = file.tree["references"][name], file.where("references", name)
    if entry["source"] in ("hold", "topic"):
        return None
    if entry["kind"] == "pose":
        return pose_path(file, name, problems)
    leader = None
    if entry["follows"] is not None:
        if entry["follows"] not in built:
            return None  # its own problem has been reported
        leader = built[entry["follows"]].path
    if entry["file"] is not None:
        times, q = read_joints_csv(resolve(file, entry["file"]), arm.joints, where)
    else:
        frames = charts_of_channel(entry["follows"])
        if not frames or leader is None:
            return None
        times, q = companion_of(arm, leader, frames, built[entry["follows"]].pace, where, progress)
    return JointPath(
        times,
        q,
        repeat=entry["repeat"],
        continuous=arm.continuous,
        leader=leader,
        names=arm.joints,
        where=where,
    )


def pose_path(file: StackFile, name: str, problems: list[Problem]) -> PosePath | None:
    """
    The path of a pose channel from its file; None after a problem.

    """
    entry, where = file.tree["references"][name], file.where("references", name)
    try:
        source = resolve(file, entry["file"])
        return PosePath(*read_pose_csv(source, where), repeat=entry["repeat"], where=where)
    except InputError as error:
        problems.extend(error.problems)
        return None


def described_components(frames: list[PlacedChart]) -> tuple[bool | str, bool]:
    """
    Which components of a pose the charts of the first frame describe: position (or its axes), rotation.

    """
    charts = [chart for chart, *place in frames if place == [*frames[0][1:]]]
    axes: bool | str = described_axes(charts)
    axes = True if axes == "xyz" else axes or False
    return axes, any(chart.unit == "rad" for chart in charts)


def companion_of(
    arm: Arm,
    path: PosePath,
    frames: list[PlacedChart],
    pace: float,
    where: str,
    progress: Progress | None = None,
) -> tuple[Any, Any]:
    """
    The companion of a pose path, from the user's cache or computed and put there.

    Returns
    -------
    times : (N,) s
    q : (N, n) rad

    """
    settings = (*frames[0][1:], *described_components(frames), pace)
    cached = _cache_file(arm, path, settings)
    if cached is not None and cached.is_file():
        try:
            return read_joints_csv(cached, arm.joints)
        except InputError:
            pass  # damaged: compute it again
    found = solve(arm, path, frames, pace, where, progress)
    if cached is not None:
        _store(cached, found.times, arm.joints, found.q)
    return found.times, found.q


def solve(
    arm: Arm,
    path: PosePath,
    frames: list[PlacedChart],
    pace: float,
    where: str,
    progress: Progress | None = None,
) -> Companion:
    """
    Compute the companion of the frame a channel drives, for the components its charts describe.

    """
    from prioritized_tracking.offline.companion import solve_companion

    _, frame, base = frames[0]
    position, rotation = described_components(frames)
    return solve_companion(
        arm,
        arm.frame_id(frame),
        arm.frame_id(base),
        path,
        position=position,
        rotation=rotation,
        pace=pace,
        where=where,
        progress=progress,
    )


def _cache_file(arm: Arm, path: PosePath, settings: tuple[Any, ...]) -> Path | None:
    """
    Where the companion of these inputs is kept: a name made of a hash of all that it depends on.

    """
    folder = user_cache()
    if folder is None:
        return None
    digest = hashlib.sha256(f"companion 1 {arm.joints} {settings} {path.passes} {path.ramp_time}".encode())
    digest.update(arm.model.saveToString().encode())
    for array in (arm.lower, arm.upper, arm.velocity_limit, path.knots, path.positions, path.quaternions):
        digest.update(np.ascontiguousarray(array).tobytes())
    return folder / f"companion-{digest.hexdigest()[:32]}.csv"


def _store(path: Path, times: Any, joints: tuple[str, ...], q: Any) -> None:
    """
    Keep a companion; a cache that cannot be written is no reason to stop.

    """
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        write_joints_csv(path, times, joints, q)
    except (OSError, InputError):
        pass


def check_joint_path(arm: Arm, path: JointPath, pace: float, where: str) -> list[Problem]:
    """
    Problems of a joint path with the arm's limits, between its knots too.

    """
    steps = np.arange(0, _BETWEEN) / _BETWEEN
    knots = np.asarray(path.knots)
    times = np.append((knots[:-1, None] + np.diff(knots)[:, None] * steps).ravel(), knots[-1])
    samples = [path.sample_file(t) for t in times]
    q = np.array([sample.q for sample in samples])
    speed = pace * np.abs([sample.v for sample in samples])
    problems = []
    beyond = np.maximum(arm.lower - q, q - arm.upper)
    for j in np.flatnonzero(beyond.max(axis=0) > 0.0):
        k = int(np.argmax(beyond[:, j]))
        problems.append(
            Problem(
                what=f"the path leaves the limits of joint {arm.joints[j]}",
                where=where,
                expected=f"{arm.lower[j]:.4g} to {arm.upper[j]:.4g} rad",
                got=f"{q[k, j]:.4g} rad at {times[k]:.4g} s",
                remedy="Choose another path, or another configuration of the arm.",
            )
        )
    for j in np.flatnonzero(speed.max(axis=0) > arm.velocity_limit):
        k = int(np.argmax(speed[:, j]))
        fits = pace * arm.velocity_limit[j] / speed[k, j]
        problems.append(
            Problem(
                what=f"the path is faster than joint {arm.joints[j]}",
                where=where,
                expected=f"at most {arm.velocity_limit[j]:.4g} rad/s",
                got=f"{speed[k, j]:.4g} rad/s at {times[k]:.4g} s",
                remedy=f"Slow the path down: pace {np.floor(fits * 1000) / 1000:g} or less.",
            )
        )
    return problems
