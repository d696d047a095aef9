# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
From a stack file to a controller: the border at which everything that needs the arm is checked.

"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from prioritized_tracking import compiled
from prioritized_tracking.assembly_references import build_channels, check_joint_path, pose_path, solve
from prioritized_tracking.charts import registry
from prioritized_tracking.charts.base import Chart
from prioritized_tracking.charts.joints import JointChart
from prioritized_tracking.charts.joints import Posture as PostureChart
from prioritized_tracking.core.arm import Arm, build_arm
from prioritized_tracking.core.bands import PlacedChart, Survey, default_band, survey
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.core.stack import PostureTask, Stack, Task
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
    builder = _Builder(file, _build_arm(file))
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
    builder = _Builder(file, _build_arm(file))
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


@dataclass
class _Builder:
    """
    Tasks of one stack file, with every problem found on the way.

    """

    file: StackFile
    arm: Arm
    problems: list[Problem] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    charts: dict[str, Chart] = field(default_factory=dict)

    def __post_init__(self) -> None:
        tree, known = self.file.tree, registry()
        for name in tree["priority"]:
            entry = tree["tasks"][name]
            chart = self._chart(name, known[entry["chart"]], entry)
            if chart is not None:
                self.charts[name] = chart
                self._check_frames(name, chart, entry)
                for key in ("stiffness", "damping", "force", "tolerance"):
                    if entry.get(key) is not None:
                        self._vector(name, key)

    def report(self, keys: tuple[str, ...], what: str, **details: str) -> None:
        """
        Note a problem at a place of the stack file.

        """
        self.problems.append(Problem(what=what, where=self.file.where(*keys), **details))

    def _chart(self, name: str, kind: type[Chart], entry: Mapping[str, Any]) -> Chart | None:
        """
        The chart of a task, bound to the arm; None after a problem.

        """
        own = {p.key: entry[p.key] for p in kind.parameters if entry.get(p.key) is not None}
        try:
            chart = kind(**own)
        except ValueError as error:
            self.report(("tasks", name), f"chart '{entry['chart']}' cannot be made", got=str(error))
            return None
        if isinstance(chart, JointChart):
            unknown = [joint for joint in chart.coordinates if joint not in self.arm.joints]
            for joint in unknown:
                self.report(
                    ("tasks", name, "names"),
                    f"the arm has no controlled joint '{joint}'",
                    expected=", ".join(self.arm.joints),
                    remedy=nearest(joint, self.arm.joints).strip(),
                )
            if unknown:
                return None
            chart.bind(self.arm.joints, tuple(bool(c) for c in self.arm.continuous))
        return chart

    def _check_frames(self, name: str, chart: Chart, entry: Mapping[str, Any]) -> None:
        """
        Frame and base must be links, and the base the one the reference is given in.

        """
        if chart.kind != "pose":
            return
        for key in ("frame", "base"):
            link = entry[key]
            if link is not None and link not in self.arm.frames:
                self.report(
                    ("tasks", name, key),
                    f"the arm has no link '{link}'",
                    expected="a link of the URDF",
                    remedy=nearest(link, self.arm.frames).strip() or f"Links: {', '.join(self.arm.frames)}.",
                )
        reference = self.file.tree["references"].get(entry["reference"], {})
        base, theirs = entry["base"] or self.arm.root, reference.get("base") or self.arm.root
        if base != theirs:
            self.report(
                ("tasks", name, "base"),
                "task and reference live in different frames",
                expected=f"'{theirs}', the base of reference '{entry['reference']}'",
                got=f"'{base}'",
                remedy="Give both the same base.",
            )

    def charts_of_channel(self, channel: str) -> list[PlacedChart]:
        """
        (chart, frame, base) of each pose task that a channel drives.

        """
        names = [n for n, c in self.charts.items() if c.kind == "pose"]
        return [self._placed(n) for n in names if self.file.tree["tasks"][n]["reference"] == channel]

    def _placed(self, name: str) -> PlacedChart:
        """
        A chart with its frame and base; empty names for charts of the joint vector.

        """
        entry, chart = self.file.tree["tasks"][name], self.charts[name]
        if chart.kind != "pose":
            return chart, "", ""
        return chart, entry["frame"], entry["base"] or self.arm.root

    def check_law(self) -> None:
        """
        The laws for comparison need the tasks they take their gains from.

        """
        law = self.file.tree["law"]
        kinds = {type(chart) for chart in self.charts.values()}
        tool = any(chart.kind == "pose" for chart in self.charts.values())
        if law in ("cartesian_impedance", "inverse_jacobian", "damped_inverse") and not tool:
            what = f"law '{law}' needs a task on a tool frame"
            self.report(("law",), what, remedy="Add one, or take joint_impedance.")
        if law == "joint_impedance" and PostureChart not in kinds:
            what = "law 'joint_impedance' needs a posture task"
            self.report(("law",), what, remedy="End the priority list with one.")

    def stack(self) -> Stack | None:
        """
        The stack, with default bands filled in; None after a problem.

        """
        tree = self.file.tree
        if self.problems:
            return None
        chart_tasks = [n for n in tree["priority"] if not isinstance(self.charts[n], PostureChart)]
        seen = survey(self.arm, [self._placed(name) for name in chart_tasks])
        tasks = [self._task(name, seen, i) for i, name in enumerate(chart_tasks)]
        posture = None
        if len(chart_tasks) < len(tree["priority"]):
            posture = self._posture(tree["priority"][-1])
        elif seen.total_rank < self.arm.n:
            self.report(
                ("priority",),
                "the shares of this stack cannot sum to the number of joints",
                expected=f"tasks that own {self.arm.n} directions together",
                got=f"at most {seen.total_rank}",
                remedy="End the list with a posture task: it owns what the others leave.",
            )
        if self.problems:
            return None
        return Stack(
            tasks=tuple(tasks),
            posture=posture,
            claim_speed=tree["guard"]["claim_speed"] * self.arm.velocity_limit,
            feedback_floor=tree["feedback_floor"],
        )

    def _task(self, name: str, seen: Survey, i: int) -> Task:
        """
        One chart task.

        """
        entry, chart = self.file.tree["tasks"][name], self.charts[name]
        handover = entry["handover"]
        if seen.rank[i] == 0:
            self.report(
                ("tasks", name),
                "no joint of the arm moves this task",
                expected="coordinates the arm can move",
                remedy="Leave out coordinates the arm cannot move, or choose another frame.",
            )
        if handover is None:
            handover = default_band(seen.apparent[i])
            unit = "kg" if chart.unit == "m" else "kg·m²"
            low, high = handover
            self.notes.append(f"task {name}: handover [{low:.4g}, {high:.4g}] {unit}, computed")
        _, frame, base = self._placed(name)
        return Task(
            name=name,
            chart=chart,
            frame=frame,
            base=base,
            reference=entry["reference"],
            stiffness=self._vector(name, "stiffness"),
            damping=self._vector(name, "damping"),
            handover=(float(handover[0]), float(handover[1])),
            force=self._vector(name, "force"),
            tolerance=None if entry["tolerance"] is None else self._vector(name, "tolerance"),
        )

    def _posture(self, name: str) -> PostureTask:
        """
        The task that closes the stack.

        """
        entry = self.file.tree["tasks"][name]
        return PostureTask(
            name=name,
            reference=entry["reference"],
            stiffness=float(entry["stiffness"]),
            damping=float(entry["damping"]),
            tolerance=None if entry["tolerance"] is None else self._vector(name, "tolerance"),
        )

    def _vector(self, name: str, key: str) -> Array:
        """
        A gain given once, or once per coordinate.

        """
        value, coordinates = self.file.tree["tasks"][name][key], self.charts[name].coordinates
        m = len(coordinates)
        vector = np.asarray(value, dtype=np.float64)
        if vector.ndim and vector.shape != (m,):
            self.report(
                ("tasks", name, key),
                f"wrong number of values for '{key}'",
                expected=f"one number, or {m}: {', '.join(coordinates)}",
                got=f"{vector.size}",
            )
            return np.zeros(m)
        return np.broadcast_to(vector, (m,)).copy()
