# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What a companion keeps of its path: errors, margins and speeds, between the knots too.

"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from prioritized_tracking.core.arm.motion import inverse_dynamics
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.offline.companion.grid import interpolate, targets
from prioritized_tracking.offline.companion.search import Solution, Task
from prioritized_tracking.offline.companion.solver import pose_error

#: Points looked at per segment, the knot at its start included.
POINTS = 4


@dataclass(frozen=True, kw_only=True)
class Peak:
    """
    A largest or smallest value and where it was found.

    Attributes
    ----------
    value : float
    at_s : file time, s.
    joint : name of the joint, if it belongs to one.
    unit : of a value in the unit of its joint, rad or m; empty for other values.

    """

    value: float
    at_s: float
    joint: str = ""
    unit: str = ""


@dataclass(frozen=True, kw_only=True)
class Companion:
    """
    A joint path that moves a tool along a pose path.

    Attributes
    ----------
    joints : names of the n joints, command order.
    times : (N,) file time since the first knot of the pose path, s.
    q : (N, n) rad.
    position_residual_m, orientation_residual_rad : largest distance from the path, between knots too.
    position_residual, orientation_residual : the same with the time; zero where they do not count.
    linear_residual, angular_residual : largest difference of the tool's velocity from the path's, m/s
        and rad/s.
    limit_margin_rad : smallest distance to a joint limit, m where the joint slides; infinite without limits.
    limit_margin : the same with time, joint and unit.
    speed_ratio : largest joint speed as a fraction of its limit, at the pace asked for.
    speed : the same with time and joint.
    torque : largest torque the motion takes as a fraction of its limit, at that pace.
    singular : smallest singular value of the Jacobian rows that count (m and rad per rad), those that
        vanish everywhere left out: how near the path comes to a singularity of the arm.
    messages : what should be said in the log.

    """

    joints: tuple[str, ...]
    times: Array
    q: Array
    position_residual: Peak
    orientation_residual: Peak
    linear_residual: Peak
    angular_residual: Peak
    limit_margin: Peak
    speed: Peak
    torque: Peak
    singular: Peak
    messages: tuple[str, ...] = ()

    @property
    def position_residual_m(self) -> float:
        """
        Largest distance of the tool from its path, m.

        """
        return self.position_residual.value

    @property
    def orientation_residual_rad(self) -> float:
        """
        Largest angle between the tool and its path, rad.

        """
        return self.orientation_residual.value

    @property
    def limit_margin_rad(self) -> float:
        """
        Smallest distance to a joint limit, rad (m where the joint slides); negative beyond it.

        """
        return self.limit_margin.value

    @property
    def speed_ratio(self) -> float:
        """
        Largest joint speed over its limit.

        """
        return self.speed.value


@dataclass(frozen=True, kw_only=True)
class Survey:
    """
    A solution looked at densely: `POINTS` per segment and the last knot, K points.

    Attributes
    ----------
    times : (K,) s
    q, v, torque : (K, n) rad, rad/s at pace 1, N·m at the pace asked for.
    distance, angle : (K,) m, rad.
    linear, angular : (K,) m/s, rad/s.
    singular : (K,)

    """

    times: Array
    q: Array
    v: Array
    torque: Array
    distance: Array
    angle: Array
    linear: Array
    angular: Array
    singular: Array

    def segments(self, values: Array) -> tuple[Array, Array]:
        """
        Largest value inside each segment and the larger one of its two knots.

        """
        knots = values[::POINTS]
        inside = values[:-1].reshape(-1, POINTS)[:, 1:].max(axis=1)
        return inside, np.maximum(knots[:-1], knots[1:])


def survey(task: Task, solution: Solution) -> Survey:
    """
    Evaluate the spline through a solution against its path.

    """
    knots = solution.times
    fractions = np.arange(POINTS) / POINTS
    times = np.append((knots[:-1, None] + np.diff(knots)[:, None] * fractions).ravel(), knots[-1])
    cubic = interpolate(knots, solution.q, solution.ends)
    q, v = cubic.many(times), cubic.many(times, 1)
    target, V = targets(task.path, times, task.rows)
    e, J = pose_error(task.chain, target, q)
    distance, angle = task.off(e)
    linear, angular = task.off(np.einsum("kij,kj->ki", J, v) - V[:, task.rows])
    return Survey(
        times=times,
        q=q,
        v=v,
        torque=_torques(task, q, v, cubic.many(times, 2)),
        distance=distance,
        angle=angle,
        linear=linear,
        angular=angular,
        singular=np.asarray(np.linalg.svd(J, compute_uv=False)[:, task.rank - 1], dtype=np.float64),
    )


def _torques(task: Task, q: Array, v: Array, a: Array) -> Array:
    """
    Torque of the motion at the pace asked for, (K, n) N·m.

    """
    arm, data, pace = task.arm, task.arm.data(), task.pace
    return np.array([inverse_dynamics(arm, data, *x) for x in zip(q, pace * v, pace**2 * a, strict=True)])


def report(task: Task, solution: Solution, seen: Survey) -> Companion:
    """
    Put the figures of a survey together.

    """
    joints = task.arm.joints
    margin = np.minimum(task.arm.upper - seen.q, seen.q - task.arm.lower)
    speed = np.abs(seen.v) * task.pace / task.arm.velocity_limit
    torque = np.abs(seen.torque) / task.arm.torque_limit

    def peak(values: Array) -> Peak:
        k = int(np.argmax(values))
        return Peak(value=float(values[k]), at_s=float(seen.times[k]))

    def of_joint(values: Array, index: int) -> Peak:
        k, i = divmod(index, len(joints))
        unit = task.arm.joint_units[i] if values is margin else ""
        return Peak(value=float(values[k, i]), at_s=float(seen.times[k]), joint=joints[i], unit=unit)

    nearest = int(np.argmin(seen.singular))
    hardest = of_joint(torque, int(np.argmax(torque)))
    return Companion(
        joints=joints,
        times=solution.times,
        q=solution.q,
        position_residual=peak(seen.distance),
        orientation_residual=peak(seen.angle),
        linear_residual=peak(seen.linear),
        angular_residual=peak(seen.angular),
        limit_margin=of_joint(margin, int(np.argmin(margin))),
        speed=of_joint(speed, int(np.argmax(speed))),
        torque=hardest,
        singular=Peak(value=float(seen.singular[nearest]), at_s=float(seen.times[nearest])),
        messages=_messages(task, solution, hardest),
    )


def _messages(task: Task, solution: Solution, hardest: Peak) -> tuple[str, ...]:
    """
    What should be said in the log.

    """
    said = []
    away = 0.0 if task.start is None else float(np.abs(solution.q[0] - task.start).max())
    if away > 0.05:
        said.append(f"the companion starts {away:.3g} rad away from the given start")
    closed = solution.ends.winding is not None
    if hardest.value > 1.0:
        said.append(
            f"at t = {hardest.at_s:.6g} s joint '{hardest.joint}' needs {hardest.value:.3g} times its torque"
            " limit: run the path more slowly, or lead it away from there"
            + (" (a closed joint path may turn back where an open one goes through)" if closed else "")
        )
    return tuple(said)
