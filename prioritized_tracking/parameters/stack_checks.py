# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Checks across keys of a stack file, as far as they need no arm.

Each check reads the tree of values, in which None stands for what is left out or already refused.

"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from prioritized_tracking.errors import InputError, nearest
from prioritized_tracking.parameters.stack_paths import fault_of_file, resolve_path
from prioritized_tracking.parameters.stack_tasks import POSTURE
from prioritized_tracking.parameters.stack_values import Reading, shown_scalar
from prioritized_tracking.parameters.yaml_dialect import shortened

Tree = Mapping[str, Any]

_PATH_KEYS = ("repeat", "pace", "start")
_TOPIC = re.compile(r"~?/?[A-Za-z_][A-Za-z0-9_]*(/[A-Za-z_][A-Za-z0-9_]*)*")
_PER_JOINT = (
    ("robot", "rotor_inertia"),
    ("robot", "torque_limit"),
    ("robot", "velocity_limit"),
    ("robot", "friction", "viscous"),
    ("robot", "friction", "coulomb"),
    ("plant", "start"),
    ("plant", "friction", "viscous"),
    ("plant", "friction", "coulomb"),
)


def check_stack(tree: Tree, charts: Mapping[str, Any], reading: Reading) -> None:
    """
    Report everything that does not fit together.

    Parameters
    ----------
    tree : mapping
        All values.
    charts : mapping
        Chart classes by name.
    reading : Reading
        Takes the problems; knows which keys were given.

    """
    for check in (
        check_priority,
        check_posture,
        check_unused,
        check_tools,
        check_cycles,
        check_robot,
        check_loop,
    ):
        check(tree, reading)
    for name, task in (tree["tasks"] or {}).items():
        check_task(name, task, tree["references"] or {}, charts, reading)
    for name, channel in (tree["references"] or {}).items():
        check_channel(name, channel, tree["references"], reading)


def check_priority(tree: Tree, reading: Reading) -> None:
    """
    Report undefined and unused tasks.

    """
    names, tasks = tree["priority"] or (), tree["tasks"] or {}
    for name in names if tasks else ():
        if name not in tasks:
            remedy = "Define it under tasks, or take it out."
            _report_undefined(("priority",), "task", name, tasks, remedy, reading)
    for name in tasks if names else ():
        if name not in names:
            remedy = "Put it into priority, or remove it."
            reading.report(("tasks", name), "task is not used: it is not in priority", remedy=remedy)


def _report_undefined(
    path: tuple[str, ...], noun: str, name: str, known: Tree, remedy: str, reading: Reading
) -> None:
    expected = f"one of {', '.join(known)}"
    remedy = nearest(name, known).strip() or remedy
    reading.report(path, f"undefined {noun}", expected=expected, got=shown_scalar(name), remedy=remedy)


def check_posture(tree: Tree, reading: Reading) -> None:
    """
    Report a posture that is not last.

    """
    names: tuple[str, ...] = tree["priority"] or ()
    tasks: Tree = tree["tasks"] or {}
    for name in names[:-1]:
        if tasks.get(name, {}).get("chart") == POSTURE:
            what, got = f"posture '{name}' is not last", f"followed by {names[-1]}"
            reading.report(("priority",), what, got=got, remedy=_POSTURE_REMEDY)


_POSTURE_REMEDY = (
    "A posture takes every direction that is left: nothing can come after it, not even a second one."
)


def check_unused(tree: Tree, reading: Reading) -> None:
    """
    Report channels nothing uses.

    """
    channels, tasks = tree["references"] or {}, tree["tasks"] or {}
    used = {task.get("reference") for task in tasks.values()}
    used |= {channel.get("follows") for channel in channels.values()}
    for name in channels if tasks else ():
        if name not in used:
            what = "channel is not used: no task has it as reference and no channel follows it"
            reading.report(("references", name), what, remedy="Use it, or remove it.")


def check_tools(tree: Tree, reading: Reading) -> None:
    """
    Report a frame with two channels, and a channel with two frames: one pose drives all charts of one frame.

    """
    channels: Tree = tree["references"] or {}
    channel_of: dict[str, str] = {}
    frame_of: dict[str, str] = {}
    for name, task in (tree["tasks"] or {}).items():
        frame, channel = task.get("frame"), task.get("reference")
        if frame is None or channels.get(channel, {}).get("kind") != "pose":
            continue
        if (first := channel_of.setdefault(frame, channel)) != channel:
            what, got = f"frame '{frame}' has two channels", f"'{first}' and '{channel}'"
            remedy = "Let one pose reference drive all charts of the frame."
            reading.report(("tasks", name, "reference"), what, got=got, remedy=remedy)
        elif (first := frame_of.setdefault(channel, frame)) != frame:
            what, got = f"channel '{channel}' moves two frames", f"'{first}' and '{frame}'"
            remedy = "Give each frame a channel of its own."
            reading.report(("tasks", name, "frame"), what, got=got, remedy=remedy)


def check_task(name: str, task: Tree, channels: Tree, charts: Mapping[str, Any], reading: Reading) -> None:
    """
    Report a task whose channel is undefined, of the wrong kind or in another base.

    """
    if task.get("reference") is None or not channels:
        return
    path, channel = ("tasks", name), channels.get(task["reference"])
    if channel is None:
        _report_undefined((*path, "reference"), "channel", task["reference"], channels, _DEFINE, reading)
    elif task.get("chart") in charts:
        _check_kind(path, task, channel, charts[task["chart"]].kind, reading)
        _check_base(path, task, channel, reading)


_DEFINE = "Define it under references."


def _check_kind(path: tuple[str, ...], task: Tree, channel: Tree, kind: str, reading: Reading) -> None:
    if channel.get("kind") not in (None, kind):
        what = f"chart {task['chart']} needs a channel of kind {kind}"
        got = f"channel '{task['reference']}' of kind {channel['kind']}"
        reading.report((*path, "reference"), what, got=got, remedy=f"Name a channel of kind {kind}.")


def _check_base(path: tuple[str, ...], task: Tree, channel: Tree, reading: Reading) -> None:
    # One of them left out: the root link, whose name only the arm tells.
    bases = task.get("base"), channel.get("base")
    if None not in bases and bases[0] != bases[1]:
        got = f"'{bases[0]}', and '{bases[1]}' in channel '{task['reference']}'"
        remedy = "Give both the same base, or leave both out for the root link."
        reading.report((*path, "base"), "task and reference have different bases", got=got, remedy=remedy)


def check_channel(name: str, channel: Tree, channels: Tree, reading: Reading) -> None:
    """
    Report keys of a channel that do not fit its kind or source.

    """
    path = ("references", name)
    if channel.get("kind") == "pose":
        _check_pose_channel(path, channel, reading)
    else:
        _check_leader(path, channel, channels, reading)
    for key, what, remedy in _unfit(channel):
        if reading.given((*path, key)):
            reading.report((*path, key), what, remedy=remedy)
    if channel.get("source") == "file" and not reading.given((*path, "file")):
        reading.report((*path, "file"), "missing", expected="the path of a CSV file, as source is file")


def _check_pose_channel(path: tuple[str, ...], channel: Tree, reading: Reading) -> None:
    if channel.get("source") == "companion":
        what = "a companion is a joint path, this channel is of kind pose"
        reading.report((*path, "source"), what, remedy="Write kind: joints, and follows: the pose channel.")


def _unfit(channel: Tree) -> Iterator[tuple[str, str, str]]:
    """
    Yield (key, what, remedy) of keys that must not be given.

    """
    kind, source, follows = channel.get("kind"), channel.get("source"), channel.get("follows")
    if kind == "joints":
        yield "base", "a joints channel has no base", _REMOVE
    if kind == "pose":
        yield "follows", "a pose channel follows nobody", "Only a joints channel may follow; remove the key."
    if source in ("hold", "topic"):
        yield from ((key, f"has no meaning with source: {source}", _REMOVE) for key in ("file", *_PATH_KEYS))
    elif follows is not None and kind != "pose":
        what = f"has no meaning where a channel follows another: it is that of '{follows}'"
        yield from ((key, what, _REMOVE) for key in _PATH_KEYS)


_REMOVE = "Remove the key."


def _check_leader(path: tuple[str, ...], channel: Tree, channels: Tree, reading: Reading) -> None:
    at, name, source = (*path, "follows"), channel.get("follows"), channel.get("source")
    if name is None:
        if source == "companion" and not reading.given(at):
            reading.report(at, "missing", expected="the pose channel this is the companion of")
        return
    leader = channels.get(name)
    if leader is None:
        _report_undefined(at, "channel", name, channels, _DEFINE, reading)
    elif source == "companion" and leader.get("kind") == "joints":
        what = f"a companion goes with a pose channel, '{name}' is of kind joints"
        reading.report(at, what, remedy="Name a pose channel.")
    elif leader.get("source") == "hold" and path[-1] != name:
        remedy = "Write source: hold here too, without follows."
        reading.report(at, f"'{name}' is held at one place, there is nothing to follow", remedy=remedy)


def check_cycles(tree: Tree, reading: Reading) -> None:
    """
    Report channels that follow each other in a circle, once for each circle.

    """
    channels: Tree = tree["references"] or {}
    leaders = {name: c.get("follows") for name, c in channels.items() if c.get("kind") != "pose"}
    done = set[str]()
    for name in leaders:
        chain = _chain(name, leaders)
        last = leaders[chain[-1]]
        if last in chain and last not in done:
            got = " → ".join([*chain[chain.index(last) :], last])
            remedy = "One of them must not follow."
            at = ("references", last, "follows")
            reading.report(at, "channels follow each other", got=got, remedy=remedy)
        done.update(chain)


def _chain(name: str, leaders: Mapping[str, Any]) -> list[str]:
    """
    Return a channel, its leader, the leader of that, as far as no name comes twice.

    """
    chain = [name]
    while (leader := leaders[chain[-1]]) in leaders and leader not in chain:
        chain.append(leader)
    return chain


def check_robot(tree: Tree, reading: Reading) -> None:
    """
    Report what does not fit together in the descriptions of the arm and of its simulation.

    """
    robot = tree["robot"]
    if robot["joints"] is not None:
        _check_joints(tree, robot["joints"], reading)
    for path in (("robot", "payload", "inertia"), ("plant", "payload", "inertia")):
        _check_inertia(path, _at(tree, path), reading)
    topic = robot["enable_topic"]
    if topic and (not _TOPIC.fullmatch(topic) or "__" in topic):
        reading.report(("robot", "enable_topic"), "not a ROS topic name", got=shown_scalar(topic))
    if robot["velocity"] == "from_position" and not reading.given(("robot", "velocity_cutoff")):
        expected = "a cut-off in Hz, as robot.velocity is from_position"
        reading.report(("robot", "velocity_cutoff"), "missing", expected=expected)


def _check_joints(tree: Tree, joints: tuple[str, ...], reading: Reading) -> None:
    for joint in tree["robot"]["locked"] or ():
        if joint in joints:
            what = "both locked and controlled (robot.joints)"
            reading.report(("robot", "locked", joint), what, remedy="Keep it in one of the two.")
    for path in _PER_JOINT:
        value = _at(tree, path)
        if value is not None and len(value) != len(joints):
            expected = f"{len(joints)} numbers, one per joint of robot.joints"
            reading.report(path, "wrong length", expected=expected, got=f"{len(value)} numbers")


def _check_inertia(path: tuple[str, ...], inertia: tuple[float, ...] | None, reading: Reading) -> None:
    # Holds for every mass distribution; a thin plate reaches equality, rounding may pass it.
    if inertia is not None and 2.0 * max(inertia) > sum(inertia) * (1.0 + 1e-9):
        expected = "no moment larger than the sum of the other two"
        reading.report(path, "no body has this inertia", expected=expected, got=str(list(inertia)))


def _at(tree: Any, path: tuple[str, ...]) -> Any:
    for key in path:
        tree = tree.get(key) if tree is not None else None
    return tree


def check_loop(tree: Tree, reading: Reading) -> None:
    """
    Report rates and times that do not fit the control rate.

    """
    if tree["rate"] is not None:
        for path, what, expected in _unfit_rates(tree, tree["rate"]):
            reading.report(path, what, expected=expected, got=f"{_at(tree, path):.9g}")
    if tree["cycle"] == "clock" and tree["use_sim_time"]:
        remedy = "Write cycle: state, one cycle per joint state of the simulator."
        reading.report(("use_sim_time",), "the fixed-rate loop runs by the steady clock", remedy=remedy)


def _unfit_rates(tree: Tree, rate: float) -> Iterator[tuple[tuple[str, ...], str, str]]:
    """
    Yield (path, what, expected) of each value too fast or too short for the control rate.

    """
    if (tree["telemetry_rate"] or 0.0) > rate:
        yield ("telemetry_rate",), "faster than the control rate", f"at most {rate:.9g} Hz"
    if (tree["robot"]["velocity_cutoff"] or 0.0) >= rate / 2.0:
        expected = f"less than half the control rate, {rate / 2.0:.9g} Hz"
        yield ("robot", "velocity_cutoff"), "out of range", expected
    if (tree["guard"]["state_timeout"] or math.inf) * rate < 1.0:
        yield ("guard", "state_timeout"), "out of range", f"at least one control period, {1.0 / rate:.9g} s"


def check_files(
    tree: Tree, charts: Mapping[str, Any], base_dir: Path, reading: Reading, *, new_companions: bool
) -> None:
    """
    Report files that cannot be read.

    Parameters
    ----------
    tree, charts, reading
        As for `check_stack`.
    base_dir : Path
        Folder that relative paths start from.
    new_companions : bool
        Stored companions may be missing: they are about to be computed.

    """
    for path in _file_keys(tree, charts, new_companions=new_companions):
        value = _at(tree, path)
        if value is None:
            continue
        try:
            file = resolve_path(value, base_dir, reading.where(path))
        except InputError as error:
            reading.problems.extend(error.problems)
            continue
        fault = fault_of_file(file)
        if fault:
            reading.report(path, fault[0], got=shortened(str(file), 160), remedy=fault[1])


def _file_keys(tree: Tree, charts: Mapping[str, Any], *, new_companions: bool) -> Iterator[tuple[str, ...]]:
    yield "robot", "urdf"
    for name, channel in (tree["references"] or {}).items():
        source = channel.get("source")
        if source == "file" or (source == "companion" and not new_companions):
            yield "references", name, "file"
    for name, task in (tree["tasks"] or {}).items():
        cls = charts.get(task.get("chart"))
        if cls is not None and any(p.key == "file" for p in cls.parameters):
            yield "tasks", name, "file"
