# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
From a stack file to a controller: the border at which everything that needs the arm is checked.

"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from prioritized_tracking import compiled
from prioritized_tracking.assembly.channels import build_channels, check_joint_path, pose_path, solve
from prioritized_tracking.assembly.stack_builder import StackBuilder
from prioritized_tracking.core.arm import Arm, build_arm
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.core.start import StartLimits
from prioritized_tracking.errors import InputError, Problem, nearest
from prioritized_tracking.files import read_text
from prioritized_tracking.parameters import StackFile, read_stack, resolve

if TYPE_CHECKING:
    from prioritized_tracking.offline.companion import Companion

Progress = Callable[[float, str], None]


def load(
    path: str | Path,
    *,
    law: str | None = None,
    parameters: Mapping[str, Any] | None = None,
    progress: Progress | None = None,
) -> Controller:
    """
    Build the controller a stack file describes: exactly what the node builds.

    Parameters
    ----------
    path : the stack file.
    law : overrides the file's ``law``.
    parameters : further overrides by dotted key, e.g. ``{"plant.seed": 3}``.
    progress : called with (fraction done, what is being done) where loading takes long.

    Raises
    ------
    InputError
        With every problem found, each with its place in the file and a remedy.

    """
    overrides = dict(parameters or {})
    if law is not None:
        overrides["law"] = law
    return build_controller(read_stack(path, overrides=overrides), progress=progress)


def build_controller(file: StackFile, *, progress: Progress | None = None) -> Controller:
    """
    Build arm, stack, references and controller from a checked stack file.

    """
    tree = file.tree
    builder = StackBuilder(file, _build_arm(file))
    channels = build_channels(file, builder.arm, builder.charts_of_channel, builder.problems, progress)
    stack = builder.stack()
    for name, channel in channels.items():
        if channel.kind == "joints" and channel.path is not None:
            pace = channels[channel.leader].pace
            builder.problems += check_joint_path(
                builder.arm, channel.path, pace, file.where("references", name)
            )
    builder.check_law()
    if builder.problems or stack is None:
        raise InputError(builder.problems)
    guard = tree["guard"]
    controller = Controller(
        builder.arm,
        stack,
        channels,
        law=tree["law"],
        rate=tree["rate"],
        gravity_by_driver=tree["robot"]["gravity_by_driver"],
        start_limits=StartLimits(
            position=guard["start_position"], angle=guard["start_angle"], joint=guard["start_joint"]
        ),
    )
    controller.stack_file = file
    heard = [
        f"reference {name}: {text}" for name, c in channels.items() if c.path for text in c.path.messages
    ]
    controller.notes = (*file.warnings, *builder.arm.warnings, *builder.notes, *heard)
    _warm_up(controller, progress)
    return controller


def _warm_up(controller: Controller, progress: Progress | None) -> None:
    """
    Run the law once, so that nothing is compiled in the first cycle.

    """
    if progress is not None and compiled.is_cold():
        progress(0.0, "compiling the control law, once")
    compiled.warm_up(controller.rehearse_one_cycle)


def compute_companion(
    path: str | Path,
    *,
    channel: str | None = None,
    parameters: Mapping[str, Any] | None = None,
    progress: Progress | None = None,
) -> Companion:
    """
    Compute the joint path that goes with a pose channel of a stack file.

    Parameters
    ----------
    path : the stack file; the companion files it names need not exist yet.
    channel : the pose channel; None: the only one from a file.
    parameters : overrides by dotted key.
    progress : called with (fraction done, what is being done).

    Raises
    ------
    InputError
        A faulty file, a channel that is not there, or a path the arm cannot follow: where, how far.

    """
    file = read_stack(path, overrides=dict(parameters or {}), new_companions=True)
    entries = file.tree["references"]
    poses = [name for name, e in entries.items() if e["kind"] == "pose" and e["source"] == "file"]
    if channel not in poses if channel is not None else len(poses) != 1:
        raise InputError(
            Problem(
                what="no such pose channel" if channel is not None else "no single pose channel to accompany",
                where=file.where("references"),
                expected=f"one of {', '.join(poses)}" if poses else "a channel with kind: pose, source: file",
                got=channel or f"{len(poses)} of them",
                remedy="Name one with --channel."
                if len(poses) > 1
                else nearest(channel or "", poses).strip(),
            )
        )
    name = channel or poses[0]
    builder = StackBuilder(file, _build_arm(file))
    target = pose_path(file, name, builder.problems)
    placed = builder.charts_of_channel(name)
    if not placed:
        builder.report(("references", name), "no task on a tool frame uses this channel")
    if builder.problems or target is None:
        raise InputError(builder.problems)
    return solve(builder.arm, target, placed, entries[name]["pace"], file.where("references", name), progress)


def _build_arm(file: StackFile) -> Arm:
    """
    The arm of the stack file's ``robot`` block.

    """
    robot = file.tree["robot"]
    if robot["urdf"] is None:
        raise InputError(
            Problem(
                what="no robot description",
                where=file.where("robot", "urdf"),
                expected="the path of a URDF file",
                got="nothing",
                remedy="Add robot.urdf; only the node can wait for the robot_description topic.",
            )
        )
    urdf = resolve(file, robot["urdf"])
    return build_arm(
        read_text(urdf, where=file.where("robot", "urdf")),
        joints=robot["joints"],
        locked=robot["locked"] or None,
        gravity=robot["gravity"],
        rotor_inertia=robot["rotor_inertia"],
        payload=robot["payload"],
        friction=robot["friction"],
        torque_limit=robot["torque_limit"],
        velocity_limit=robot["velocity_limit"],
        source=urdf.name,
        key=file.where("robot"),
    )
