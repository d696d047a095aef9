# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The task stack, and what its tasks want in one state.

A `Stack` never changes; an `Evaluation` is the room in which it is evaluated at one state and one
moment of the references. Each cycle evaluates twice: at the measured state, and at its
finite-difference twin a moment later.

"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from prioritized_tracking.charts.base import Chart, ChartWork, UnitRateChart
from prioritized_tracking.charts.joints import JointChart, joint_error
from prioritized_tracking.core.arm import Arm, frame_motion
from prioritized_tracking.core.branches import Claims, Gains
from prioritized_tracking.core.channels import Samples
from prioritized_tracking.core.references import JointSample, PoseSample
from prioritized_tracking.core.rotation import Array


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

    @cached_property
    def wraps(self) -> bool:
        """
        Whether the difference of coordinates may jump (angles), so that the twin must keep its turn.

        """
        own = type(self.chart).difference is not Chart.difference
        return not self.chart.relative and (own or any(self.chart.angular))


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

    All tasks share stacked arrays: Jacobian J = c · rows · motion, where ``motion`` stacks the
    frames' Jacobians and, for tasks on joints, the identity.

    Attributes
    ----------
    data : what `core.arm` computed for the state.
    poses : for each of ``stack.motions`` the pose (R, p) of the frame in its base and its Jacobian.
    charts : one `ChartWork` for each task.
    claims : input of the hierarchy.
    posture_error : (n,) q − q_d, rad, the short way round for joints without end.
    q, q_d, v_d : (n,) measured joint positions, rad; those of the posture's reference, rad, rad/s.

    """

    def __init__(self, arm: Arm, stack: Stack) -> None:
        n, m, r, frames = arm.n, stack.first_row[-1], len(stack.tasks), len(stack.motions)
        self.arm, self.stack, self.data = arm, stack, arm.data()
        self.q, self.q_d, self.v_d, self.posture_error = np.zeros((4, n))
        self._motion = np.vstack([np.zeros((6 * frames, n)), np.eye(n)])
        self._rows = np.zeros((m, 6 * frames + n))
        self._vectors = np.zeros((4, m))
        self._validity = np.zeros((m, 1))
        self._k_p = np.concatenate([np.zeros(0), *(task.k_p for task in stack.tasks)])
        self._frames = [(arm.frame_id(frame), arm.frame_id(base)) for frame, base in stack.motions]
        self.poses = [(np.eye(3), np.zeros(3), self._motion[6 * f : 6 * f + 6]) for f in range(frames)]
        self._slices = [slice(a, b) for a, b in zip(stack.first_row, stack.first_row[1:], strict=False)]
        self._pose_of = [
            stack.motions.index((task.frame, task.base)) if task.chart.kind == "pose" else frames
            for task in stack.tasks
        ]
        self.charts = [self._work(i, 6 if f < frames else n, 6 * f) for i, f in enumerate(self._pose_of)]
        self.claims = Claims(
            L=np.eye(n),
            L_inverse=np.eye(n),
            J=np.zeros((m, n)),
            nu=np.zeros(m),
            validity=np.zeros(r),
            posture=np.zeros(n),
            posture_feed_forward=np.zeros(n),
        )

    def _work(self, i: int, k: int, column: int) -> ChartWork:
        """
        Views of task i into the stacked arrays.

        """
        rows = self._slices[i]
        return ChartWork(
            self.stack.tasks[i].m, k, self._vectors[:, rows], self._rows[rows, column : column + k]
        )

    def update(self, q: Array, samples: Samples, nominal: Evaluation | None = None) -> None:
        """
        Evaluate all tasks, after the arm terms have been computed into ``data``.

        ν_r = c · rate · (ẋ_d − k_p x̃) and J = c · rows · J_frame.

        Parameters
        ----------
        q : (n,) joint positions, rad.
        samples : one sample of each channel.
        nominal : given for the finite-difference twin, which keeps the nominal evaluation's turns:
            differences of angles must not jump by 2π between the two.

        """
        self.q[:] = q
        for (frame, base), (R, p, J) in zip(self._frames, self.poses, strict=True):
            frame_motion(self.arm, self.data, frame, base, R, p, J)
        for i, work in enumerate(self.charts):
            self._track(i, work, samples)
            if nominal is not None and self.stack.tasks[i].wraps:
                keep_turns(self.stack.tasks[i].chart, work, nominal.charts[i])
            self._validity[self._slices[i]] = work.validity
            self.claims.validity[i] = work.validity
        _, _, error, x_dot_d = self._vectors
        desired = x_dot_d - self._k_p * error
        for i, work in enumerate(self.charts):
            if not isinstance(self.stack.tasks[i].chart, UnitRateChart):
                desired[self._slices[i]] = work.rate @ desired[self._slices[i]]
        np.multiply(self._validity[:, 0], desired, out=self.claims.nu)
        np.dot(self._validity * self._rows, self._motion, out=self.claims.J)
        if self.stack.posture:
            self._posture(self.stack.posture, samples[self.stack.posture.reference], nominal)
        self.claims.L[:] = np.linalg.cholesky(self.data.M)
        self.claims.L_inverse[:] = np.linalg.inv(self.claims.L)

    def _track(self, i: int, work: ChartWork, samples: Samples) -> None:
        """
        Evaluate the chart of task i at the state and at its reference.

        """
        task = self.stack.tasks[i]
        if isinstance(task.chart, JointChart):
            target: JointSample = samples[task.reference]
            task.chart.track_joints(self.q, target.q, target.v, work)
        else:
            R, p, _ = self.poses[self._pose_of[i]]
            pose: PoseSample = samples[task.reference]
            task.chart.track(R, p, pose.R, pose.p, pose.V, work)

    def _posture(self, posture: PostureTask, target: JointSample, nominal: Evaluation | None) -> None:
        """
        The posture's reference velocity q̇_d − k_p x̃.

        """
        self.q_d[:], self.v_d[:] = target.q, target.v
        if nominal is None:
            self.posture_error[:] = joint_error(self.q, self.q_d, self.arm.continuous)
        else:
            self.posture_error[:] = nominal.posture_error + (self.q - nominal.q) - (self.q_d - nominal.q_d)
        self.claims.posture_feed_forward[:] = target.v
        self.claims.posture[:] = target.v - posture.k_p * self.posture_error


def keep_turns(chart: Chart, twin: ChartWork, nominal: ChartWork) -> None:
    """
    Error of the twin from the nominal error and the small steps of x and x_d, which cannot wrap.

    """
    step = np.zeros_like(twin.error)
    chart.difference(twin.x, nominal.x, step)
    twin.error[:] = nominal.error + step
    chart.difference(twin.x_d, nominal.x_d, step)
    twin.error -= step
