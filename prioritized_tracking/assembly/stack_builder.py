# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Tasks of a stack file on an arm, with every problem found on the way.

"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from prioritized_tracking.charts import registry
from prioritized_tracking.charts.base import Chart
from prioritized_tracking.charts.joints import JointChart
from prioritized_tracking.charts.joints import Posture as PostureChart
from prioritized_tracking.core.arm import Arm
from prioritized_tracking.core.bands import PlacedChart, Survey, default_band, survey
from prioritized_tracking.core.laws import LAWS
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.core.stack import PostureTask, Stack, Task
from prioritized_tracking.errors import Problem, nearest
from prioritized_tracking.parameters import StackFile


@dataclass
class StackBuilder:
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
        law, charts = LAWS[self.file.tree["law"]], self.charts.values()
        if law.needs_tool and not any(chart.kind == "pose" for chart in charts):
            what = f"law '{law.name}' needs a task on a tool frame"
            self.report(("law",), what, remedy="Add one, or take joint_impedance.")
        if law.needs_posture and not any(isinstance(chart, PostureChart) for chart in charts):
            what = f"law '{law.name}' needs a posture task"
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
