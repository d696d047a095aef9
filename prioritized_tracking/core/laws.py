# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Control laws: from two evaluations of a stack to a joint torque.

`Prioritized` is what this package is for. The others are the laws in use today, kept for comparison
on the same references: two impedance laws (Hogan 1985) and, for rehearsals only, tracking with the
inverse and with the damped inverse of the Jacobian (Nakamura & Hanafusa 1986; Wampler 1986).

"""

from __future__ import annotations

from typing import ClassVar, NamedTuple

import numpy as np

from prioritized_tracking.core.arm import Arm, friction_torque
from prioritized_tracking.core.branches import allocate_branches, blend
from prioritized_tracking.core.channels import Samples
from prioritized_tracking.core.hierarchy import hierarchy
from prioritized_tracking.core.rotation import Array, rotation_log
from prioritized_tracking.core.stack import Evaluation, Stack, decay_rate

#: Step of the finite-difference twin (s): q̇_r has 1e-15 relative noise, so q̈_r has about 1e-9.
TWIN_STEP = 1e-6

#: Damping λ of the damped inverse, in the mixed units of the Jacobian (m, rad).
DAMPED_INVERSE = 0.05


class Torque(NamedTuple):
    """
    Outcome of a law, before any limit.

    feed_forward : (n,) what the motion needs: M q̈_r + C q̇_r + g + f(q̇_r), N·m.
    feedback : (n,) the rest: −L D Lᵀ s and the like, N·m.
    velocity_reference : (n,) q̇_r, rad/s.

    """

    feed_forward: Array
    feedback: Array
    velocity_reference: Array


class Law:
    """
    A tracking law τ = M q̈_r + C q̇_r + g + f(q̇_r) + feedback, given by its q̇_r and its feedback.

    Attributes
    ----------
    name : value of the parameter ``law``.
    rehearsal_only : never to be run on hardware.
    report : (2, r + 1) share and apparent inertia of each task, posture last; NaN where the law
        has no shares.
    D : (n, n) feedback in whitened coordinates, 1/s.
    branches, pruned : how many exact hierarchies were blended, and whether there were too many.

    """

    name: ClassVar[str]
    rehearsal_only: ClassVar[bool] = False
    tracks: ClassVar[bool] = True

    def __init__(self, arm: Arm, stack: Stack) -> None:
        self.report = np.full((2, len(stack.tasks) + 1), np.nan)
        self.D = np.zeros((arm.n, arm.n))
        self.push = np.zeros(arm.n)
        self.branches, self.pruned = 1, False

    def reference(self, here: Evaluation, samples: Samples, twin: bool) -> Array:
        """
        Reference velocity q̇_r (n,), rad/s, in an evaluated state.

        """
        raise NotImplementedError

    def feedback(self, here: Evaluation, s: Array, push_scale: float) -> Array:
        """
        Torque (n,), N·m, against s = q̇ − q̇_r.

        """
        raise NotImplementedError

    def torque(
        self,
        here: Evaluation,
        samples: Samples,
        there: Evaluation,
        samples_there: Samples,
        v: Array,
        push_scale: float,
    ) -> Torque:
        """
        Torque of a tracking law.

        Parameters
        ----------
        here, samples : evaluation at the state and the references it was made with.
        there, samples_there : the same for the twin, ``TWIN_STEP`` later.
        v : (n,) measured joint velocity, rad/s.
        push_scale : 0 … 1, ramp of the steady push.

        """
        velocity = self.reference(here, samples, False)
        acceleration = (self.reference(there, samples_there, True) - velocity) / TWIN_STEP
        data = here.data
        feed_forward = data.M @ acceleration + data.C @ velocity + data.g
        feed_forward += friction_torque(here.arm, velocity)
        return Torque(feed_forward, self.feedback(here, v - velocity, push_scale), velocity)


class Prioritized(Law):
    """
    The passivity-based law of Slotine & Li (1987) over the reference velocity of the hierarchy.

    """

    name = "prioritized"

    def __init__(self, arm: Arm, stack: Stack) -> None:
        super().__init__(arm, stack)
        most_rows = max((task.m for task in stack.tasks), default=1)
        self._branches = allocate_branches(arm.n, len(stack.tasks), most_rows)
        self._floor = stack.feedback_floor * np.eye(arm.n)

    def reference(self, here: Evaluation, samples: Samples, twin: bool) -> Array:
        """
        q̇_r = L⁻ᵀ u; in the nominal evaluation also feedback, push and shares.

        """
        found = self._branches
        count, pruned = hierarchy(here.stack.gains, here.claims, found, not twin)
        if not twin:
            blend(found, count, self.report, self.D, self.push)
            self.D += self._floor
            self.branches, self.pruned = count, pruned
        velocity: Array = (found.weight[:count] @ found.u[:count]) @ here.claims.L_inverse
        return velocity

    def feedback(self, here: Evaluation, s: Array, push_scale: float) -> Array:
        """
        −L D Lᵀ s + push.

        """
        L = here.claims.L
        torque: Array = L @ (push_scale * self.push - self.D @ (s @ L))
        return torque


class ToolGains:
    """
    Gains of the laws that control one tool frame as a whole.

    They act on the frame of the first pose task, with the gains of its highest translation task and
    of its highest rotation task (the largest of several per coordinate).

    Attributes
    ----------
    motion : index into ``stack.motions``; None: the stack has no pose task.
    reference : channel of that frame.
    rows : rows of the frame's Jacobian in use: translation, rotation or both.
    stiffness, damping, k_p : (6,) gains in these rows.

    """

    def __init__(self, stack: Stack) -> None:
        pose_tasks = [task for task in stack.tasks if task.chart.kind == "pose"]
        self.motion = 0 if pose_tasks else None
        self.reference = pose_tasks[0].reference if pose_tasks else ""
        rows: list[int] = []
        stiffness, damping = np.zeros((2, 6))
        for unit, part in (("m", slice(0, 3)), ("rad", slice(3, 6))):
            for task in pose_tasks:
                if task.unit == unit and (task.frame, task.base) == stack.motions[0]:
                    stiffness[part], damping[part] = task.stiffness.max(), task.damping.max()
                    rows += range(part.start, part.stop)
                    break
        self.rows = np.array(rows, dtype=np.intp)
        self.stiffness, self.damping = stiffness[self.rows], damping[self.rows]
        self.k_p = decay_rate(self.stiffness, self.damping)

    def error(self, here: Evaluation, samples: Samples) -> tuple[Array, Array, Array]:
        """
        Pose error (p − p_d, log(R R_dᵀ)), reference velocity and Jacobian, in the rows in use.

        """
        if self.motion is None:
            return np.zeros(0), np.zeros(0), np.zeros((0, here.arm.n))
        R, p, J = here.poses[self.motion]
        pose = samples[self.reference]
        error = np.zeros(6)
        error[:3] = p - pose.p
        rotation_log(R @ pose.R.T, error[3:])
        return error[self.rows], pose.V[self.rows], J[self.rows]


class JointImpedance(Law):
    """
    Gravity and a joint spring-damper in the inertia metric: τ = g − M (k x̃ + d (q̇ − q̇_d)).

    Stiffness k (1/s²) and damping d (1/s) are those of the posture task (Hogan 1985).

    """

    name = "joint_impedance"
    tracks = False

    def torque(
        self,
        here: Evaluation,
        samples: Samples,
        there: Evaluation,
        samples_there: Samples,
        v: Array,
        push_scale: float,
    ) -> Torque:
        """
        See :meth:`Law.torque`; needs no twin.

        """
        return Torque(here.data.g.copy(), here.data.M @ self.spring_damper(here, v), here.v_d.copy())

    def spring_damper(self, here: Evaluation, v: Array) -> Array:
        """
        −k x̃ − d (q̇ − q̇_d), rad/s².

        """
        posture = here.stack.posture
        if posture is None:
            return np.zeros_like(v)
        return -posture.stiffness * here.posture_error - posture.damping * (v - here.v_d)


class CartesianImpedance(JointImpedance):
    """
    Gravity, a spring-damper at the tool through Jᵀ, and the posture's spring-damper in the null space.

    τ = g − Jᵀ (K x̃ + D (V − V_d)) + Nᵀ M (…), N dynamically consistent (Hogan 1985; Khatib 1987).

    """

    name = "cartesian_impedance"

    def __init__(self, arm: Arm, stack: Stack) -> None:
        super().__init__(arm, stack)
        self._tool = ToolGains(stack)

    def torque(
        self,
        here: Evaluation,
        samples: Samples,
        there: Evaluation,
        samples_there: Samples,
        v: Array,
        push_scale: float,
    ) -> Torque:
        """
        See :meth:`Law.torque`; needs no twin.

        """
        tool = self._tool
        error, V_d, J = tool.error(here, samples)
        wrench = -tool.stiffness * error - tool.damping * (J @ v - V_d)
        J_hat = J @ here.claims.L_inverse.T
        posture = self.spring_damper(here, v) @ here.claims.L  # Lᵀ a: the same in whitened coordinates
        free = posture - np.linalg.pinv(J_hat, rcond=1e-6) @ (J_hat @ posture)
        return Torque(here.data.g.copy(), J.T @ wrench + here.claims.L @ free, here.v_d.copy())


class InverseJacobian(Law):
    """
    Tracking with q̇_r = J⁻¹ (V_d − k_p x̃), the pseudo-inverse and the posture where J is not square.

    Feedback is Jᵀ D J s with the tool's damping, and the posture's damping · M s.

    """

    name = "inverse_jacobian"
    rehearsal_only = True

    def __init__(self, arm: Arm, stack: Stack) -> None:
        super().__init__(arm, stack)
        self._tool = ToolGains(stack)

    def inverse(self, J: Array) -> Array:
        """
        The plain (pseudo-)inverse.

        """
        return np.asarray(np.linalg.pinv(J), dtype=np.float64)

    def reference(self, here: Evaluation, samples: Samples, twin: bool) -> Array:
        """
        See :meth:`Law.reference`.

        """
        error, V_d, J = self._tool.error(here, samples)
        inverse = self.inverse(J)
        posture = here.claims.posture
        velocity: Array = inverse @ (V_d - self._tool.k_p * error - J @ posture) + posture
        return velocity

    def feedback(self, here: Evaluation, s: Array, push_scale: float) -> Array:
        """
        See :meth:`Law.feedback`.

        """
        J = here.poses[0][2][self._tool.rows] if self._tool.motion is not None else np.zeros((0, s.size))
        torque: Array = -J.T @ (self._tool.damping * (J @ s))
        if here.stack.posture:
            torque -= here.stack.posture.damping * (here.data.M @ s)
        return torque


class DampedInverse(InverseJacobian):
    """
    As `InverseJacobian`, with Jᵀ (J Jᵀ + λ² I)⁻¹: the gain σ/(σ² + λ²) stays below 1/(2λ).

    """

    name = "damped_inverse"

    def inverse(self, J: Array) -> Array:
        """
        The damped inverse (Nakamura & Hanafusa 1986; Wampler 1986).

        """
        return damped_inverse(J, DAMPED_INVERSE)


def damped_inverse(J: Array, damping: float) -> Array:
    """
    Jᵀ (J Jᵀ + λ² I)⁻¹.

    """
    gram = J @ J.T + damping**2 * np.eye(J.shape[0])
    return np.asarray(np.linalg.solve(gram, J).T, dtype=np.float64)


LAWS: dict[str, type[Law]] = {
    law.name: law for law in (Prioritized, CartesianImpedance, JointImpedance, InverseJacobian, DampedInverse)
}
