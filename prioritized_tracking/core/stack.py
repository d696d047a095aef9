# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The task stack, and what its tasks want in one state.

A `Stack` never changes; an `Evaluation` is the room in which it is evaluated at one state and one
moment of the references. Each cycle evaluates twice: at the measured state, and at its
finite-difference twin a moment later.

"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property, partial

import numpy as np

from prioritized_tracking.charts.base import Chart, ChartWork, UnitRateChart
from prioritized_tracking.charts.joints import JointChart
from prioritized_tracking.core.arm import Arm, frame_motion
from prioritized_tracking.core.branches import Gains
from prioritized_tracking.core.channels import Samples
from prioritized_tracking.core.claims import Layout, Sizes, buffer_size, room_of
from prioritized_tracking.core.kernel import Terms
from prioritized_tracking.core.references import JointSample, PoseSample
from prioritized_tracking.core.rotation import Array, advance_joints, advance_pose


@dataclass(frozen=True, kw_only=True, eq=False)
class Task:
    """
    A chart attached to a frame, with gains.

    Attributes
    ----------
    name : its name in the priority list.
    chart : the coordinates.
    frame, base : controlled frame, and the frame the coordinates live in; empty for joint charts.
    reference : channel that drives it.
    stiffness, damping : (m,) N/m and N·s/m, or N·m/rad and N·m·s/rad.
    handover : apparent inertia of full share, and of none, kg or kg·m².
    force : (m,) steady push, N or N·m.
    tolerance : (m,) largest error before a protective stop, m or rad; None: any.

    """

    name: str
    chart: Chart
    frame: str
    base: str
    reference: str
    stiffness: Array
    damping: Array
    handover: tuple[float, float]
    force: Array
    tolerance: Array | None = None

    @cached_property
    def m(self) -> int:
        """
        Number of coordinates.

        """
        return len(self.chart.coordinates)

    @property
    def unit(self) -> str:
        """
        Unit of the rows: "m" or "rad".

        """
        return self.chart.unit

    @cached_property
    def k_p(self) -> Array:
        """
        Decay rate of the error per coordinate, stiffness/damping, 1/s.

        """
        return decay_rate(self.stiffness, self.damping)


@dataclass(frozen=True, kw_only=True)
class PostureTask:
    """
    The task that closes a stack: all joints, in the inertia metric.

    Attributes
    ----------
    name, reference : its name, and its channel.
    stiffness, damping : 1/s² and 1/s.
    tolerance : (n,) rad; None: any.

    """

    name: str
    reference: str
    stiffness: float
    damping: float
    tolerance: Array | None = None
    unit: str = "rad"

    @cached_property
    def k_p(self) -> float:
        """
        Decay rate of the error, 1/s.

        """
        return float(decay_rate(np.array(self.stiffness), np.array(self.damping)))


def decay_rate(stiffness: Array, damping: Array) -> Array:
    """
    k_p = stiffness/damping; a task without damping has no stiffness either, and 0/0 is 0.

    """
    return np.divide(stiffness, damping, out=np.zeros_like(stiffness), where=damping > 0.0)


@dataclass(frozen=True, kw_only=True, eq=False)
class Stack:
    """
    Tasks in order of priority, first = highest.

    Attributes
    ----------
    tasks : chart tasks.
    posture : the task that takes what is left; None: none.
    feedback_floor : added to D, 1/s.
    claim_speed : (n,) joint speed at which weak claims saturate, rad/s.

    """

    tasks: tuple[Task, ...]
    posture: PostureTask | None
    claim_speed: Array
    feedback_floor: float = 0.0

    @cached_property
    def motions(self) -> tuple[tuple[str, str], ...]:
        """
        The different (frame, base) pairs of the pose tasks, in order of appearance.

        """
        return tuple(dict.fromkeys((t.frame, t.base) for t in self.tasks if t.chart.kind == "pose"))

    @cached_property
    def pose_references(self) -> tuple[str, ...]:
        """
        The different channels of the pose tasks, in order of appearance.

        """
        return tuple(dict.fromkeys(task.reference for task in self.tasks if task.chart.kind == "pose"))

    @cached_property
    def joint_references(self) -> tuple[str, ...]:
        """
        The different channels of the joint tasks and the posture.

        """
        names = [task.reference for task in self.tasks if task.chart.kind == "joints"]
        return tuple(dict.fromkeys([*names, *([self.posture.reference] if self.posture else [])]))

    def layout(self, arm: Arm) -> Layout:
        """
        How the tasks' rows are stacked. Rows of joint tasks are driven by a reference at rest.

        """
        sources = [
            self.pose_references.index(task.reference)
            if task.chart.kind == "pose"
            else len(self.pose_references)
            for task in self.tasks
            for _ in range(task.m)
        ]
        return Layout(
            first_row=np.array(self.first_row, dtype=np.int64),
            task=np.array([i for i, t in enumerate(self.tasks) for _ in range(t.m)], dtype=np.int64),
            rated=np.array(
                [i for i, t in enumerate(self.tasks) if not isinstance(t.chart, UnitRateChart)],
                dtype=np.int64,
            ),
            angular=np.array([a for task in self.tasks for a in task.chart.angular], dtype=np.bool_),
            source=np.array(sources, dtype=np.int64),
            k_p=np.concatenate([np.zeros(0), *(task.k_p for task in self.tasks)]),
            continuous=np.array(arm.continuous, dtype=np.bool_),
            posture_k_p=self.posture.k_p if self.posture else 0.0,
        )

    @cached_property
    def first_row(self) -> tuple[int, ...]:
        """
        Where each task's rows begin in the stacked Jacobian, and where the last ends.

        """
        return tuple(int(row) for row in np.cumsum([0, *(task.m for task in self.tasks)]))

    @cached_property
    def gains(self) -> Gains:
        """
        The stack as the arrays the hierarchy works on.

        """
        return Gains(
            first_row=np.array(self.first_row, dtype=np.int64),
            damping=np.concatenate([np.zeros(0), *(task.damping for task in self.tasks)]),
            force=np.concatenate([np.zeros(0), *(task.force for task in self.tasks)]),
            band=np.array([task.handover for task in self.tasks], dtype=np.float64).reshape(-1, 2),
            has_posture=self.posture is not None,
            posture_damping=self.posture.damping if self.posture else 0.0,
            claim_speed=self.claim_speed,
        )


class Evaluation:
    """
    A stack evaluated at one state; arrays allocated once.

    Attributes
    ----------
    data : what `core.arm` computed for the state.
    buffer, room : everything the charts and the hierarchy work on, as one array and as views of it.
    poses : for each of ``stack.motions`` the pose (R, p) of the frame in its base and its Jacobian.
    targets : the references the charts are evaluated with, by channel.
    terms : inertia, Coriolis, gravity and friction terms, for the law.

    """

    def __init__(self, arm: Arm, stack: Stack) -> None:
        n, frames, names = arm.n, len(stack.motions), stack.pose_references
        most_rows = max((task.m for task in stack.tasks), default=1)
        self.arm, self.stack, self.data = arm, stack, arm.data()
        m, r = stack.first_row[-1], len(stack.tasks)
        self.sizes = Sizes(n, m, r, 6 * frames + n, len(names) + 1, most_rows)
        self.buffer = np.zeros(buffer_size(self.sizes))
        self.room = room = room_of(self.buffer, self.sizes)
        room.motion[6 * frames :] = np.eye(n)
        self.data.M = room.M
        self.terms = Terms(self.data.M, self.data.C, self.data.g, arm.viscous.copy(), arm.coulomb.copy())
        self.poses = [(np.eye(3), np.zeros(3), room.motion[6 * f : 6 * f + 6]) for f in range(frames)]
        self._frames = [(arm.frame_id(frame), arm.frame_id(base)) for frame, base in stack.motions]
        self._poses = {
            name: PoseSample(np.eye(3), np.zeros(3), room.V[i], np.zeros(6)) for i, name in enumerate(names)
        }
        self._joints = {name: JointSample(*np.zeros((3, n))) for name in stack.joint_references}
        if stack.posture:
            self._joints[stack.posture.reference] = JointSample(
                room.q_d, room.claims.posture_feed_forward, np.zeros(n)
            )
        self.targets: dict[str, PoseSample | JointSample] = {**self._poses, **self._joints}
        self._tracks = [self._track_of(i) for i in range(len(stack.tasks))]

    def _track_of(self, i: int) -> Callable[[], float]:
        """
        What evaluates the chart of task i and returns its validity; it works on views into ``room``.

        """
        task, stack, room = self.stack.tasks[i], self.stack, self.room
        rows = slice(stack.first_row[i], stack.first_row[i + 1])
        pose = task.chart.kind == "pose"
        frame = stack.motions.index((task.frame, task.base)) if pose else len(stack.motions)
        k = 6 if pose else self.arm.n
        work = ChartWork(
            room.x[rows],
            room.x_d[rows],
            room.x_dot_d[rows],
            room.rows[rows, 6 * frame : 6 * frame + k],
            room.rows_d[rows, :k],
            room.rate[rows, : task.m],
            room.rate_d[rows, : task.m],
        )
        work.rate[:] = work.rate_d[:] = np.eye(task.m)
        if isinstance(task.chart, JointChart):
            joints = self._joints[task.reference]
            return partial(task.chart.track_joints, room.q, joints.q, joints.v, work)
        (R, p, _), target = self.poses[frame], self._poses[task.reference]
        return partial(task.chart.track, R, p, target.R, target.p, target.V, work)

    def update(self, q: Array, samples: Samples) -> None:
        """
        Evaluate all charts at a state, after its arm terms have been computed into ``data``.

        Parameters
        ----------
        q : (n,) joint positions, rad.
        samples : one sample of each channel.

        """
        for name, pose in self._poses.items():
            sample = samples[name]
            pose.R[:], pose.p[:], pose.V[:], pose.A[:] = sample.R, sample.p, sample.V, sample.A
        for name, joints in self._joints.items():
            sample = samples[name]
            joints.q[:], joints.v[:], joints.a[:] = sample.q, sample.v, sample.a
        self._track(q)

    def follow(self, nominal: Evaluation, q: Array, h: float) -> None:
        """
        Evaluate all charts at the twin of another evaluation, with its references moved on by h (s).

        """
        for pose, was in zip(self._poses.values(), nominal._poses.values(), strict=True):
            advance_pose(was.R, was.p, was.V, was.A, h, pose.R, pose.p, pose.V)
        for joints, before in zip(self._joints.values(), nominal._joints.values(), strict=True):
            advance_joints(before.q, before.v, before.a, h, joints.q, joints.v)
        self._track(q)

    def _track(self, q: Array) -> None:
        """
        Poses and charts at joint positions q.

        """
        room = self.room
        room.q[:] = q
        for (frame, base), (R, p, J) in zip(self._frames, self.poses, strict=True):
            frame_motion(self.arm, self.data, frame, base, R, p, J)
        for i, track in enumerate(self._tracks):
            room.claims.validity[i] = track()
