# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Control laws: from two evaluations of a stack to a joint torque.

`Prioritized` is what this package is for. The others are the laws in use today, kept for comparison
on the same references: two impedance laws (Hogan 1985) and, for rehearsals only, tracking with the
inverse and with the damped inverse of the Jacobian (Nakamura & Hanafusa 1986; Wampler 1986).

"""

from __future__ import annotations

from typing import Any, ClassVar

import numpy as np

from prioritized_tracking.core.arm import Arm
from prioritized_tracking.core.branches import blend, branch_buffer, branches_of
from prioritized_tracking.core.kernel import (
    TWIN_STEP,
    allocate_outcome,
    inverse_dynamics,
    prepare,
    prioritized_torque,
    reference_velocity,
)
from prioritized_tracking.core.rotation import Array, rotation_log
from prioritized_tracking.core.stack import Evaluation, Stack, decay_rate
from prioritized_tracking.errors import InputError, Problem

#: Damping λ of the damped inverse, in the mixed units of the Jacobian (m, rad).
DAMPED_INVERSE = 0.05


def unsolvable() -> InputError:
    """
    What a law says when a state has no solution; compiled code itself raises nothing.

    """
    return InputError(
        Problem(
            what="no torque can be computed in this state",
            expected="a positive definite inertia matrix, and finite numbers throughout",
            remedy="Check the joint state, the references, and the masses and rotor inertias of the arm.",
        )
    )


class Law:
    """
    A control law: from evaluated charts to torque.

    Attributes
    ----------
    name : value of the parameter ``law``.
    rehearsal_only : never to be run on hardware.
    tracks : uses the twin.
    has_shares : blends hierarchies, so that its tasks have shares.
    needs_tool, needs_posture : it takes its gains from a task on a tool frame, from a posture task.
    outcome : filled by ``torque``; see `kernel.Outcome`.
    velocity : (n,) q̇_r, rad/s.
    branches, pruned : how many exact hierarchies were blended, and whether there were too many.

    """

    name: ClassVar[str]
    rehearsal_only: ClassVar[bool] = False
    tracks: ClassVar[bool] = True
    has_shares: ClassVar[bool] = False
    needs_tool: ClassVar[bool] = False
    needs_posture: ClassVar[bool] = False

    def __init__(self, arm: Arm, stack: Stack) -> None:
        self.outcome = allocate_outcome(arm.n, len(stack.tasks))
        self.velocity = np.zeros(arm.n)
        self.layout = stack.layout(arm)
        self.branches, self.pruned = 1, False

    @property
    def D(self) -> Array:
        """
        Feedback of the last state in whitened coordinates, (n, n), 1/s.

        """
        return self.outcome.D

    def torque(self, here: Evaluation, there: Evaluation, v: Array, push_scale: float) -> None:
        """
        Fill ``outcome`` and ``velocity``.

        Parameters
        ----------
        here, there : evaluated charts at the state and, if the law tracks, at its twin
            ``TWIN_STEP`` later.
        v : (n,) measured joint velocity, rad/s.
        push_scale : 0 … 1, ramp of the steady push.

        Raises
        ------
        InputError
            The state has no solution.

        """
        raise NotImplementedError

    def survey(self, here: Evaluation) -> None:
        """
        Fill ``velocity`` and the shares and feedback of ``outcome``, without torque and twin.

        Raises
        ------
        InputError
            The state has no solution.

        """
        raise InputError(
            Problem(
                what=f"law '{self.name}' has no shares",
                remedy="Evaluate it with torque, or take prioritized.",
            )
        )

    def prepare(self, here: Evaluation, nominal: Evaluation | None = None) -> None:
        """
        Form the claims of an evaluation and factorise its inertia matrix.

        """
        if not prepare(self.layout, here.room, (nominal or here).room, nominal is not None):
            raise unsolvable()

    def finish(self, feed_forward: Array, feedback: Array, velocity: Array) -> None:
        """
        Fill the outcome of a law that computes its torque itself.

        """
        if not np.isfinite(feed_forward + feedback).all():
            raise unsolvable()
        self.outcome.feed_forward[:] = feed_forward
        self.outcome.feedback[:] = feedback
        self.velocity[:] = velocity


class Prioritized(Law):
    """
    The passivity-based law of Slotine & Li (1987) over the reference velocity of the hierarchy.

    """

    name = "prioritized"
    has_shares = True

    def __init__(self, arm: Arm, stack: Stack) -> None:
        super().__init__(arm, stack)
        most_rows = max((task.m for task in stack.tasks), default=1)
        self._branch_buffer = branch_buffer(arm.n, len(stack.tasks), most_rows)
        self._branches = branches_of(self._branch_buffer, arm.n, len(stack.tasks))
        self._gains = stack.gains
        self._floor = stack.feedback_floor

    def torque(self, here: Evaluation, there: Evaluation, v: Array, push_scale: float) -> None:
        """
        See :meth:`Law.torque`.

        """
        count, self.pruned = prioritized_torque(
            self.layout,
            self._gains,
            here.sizes,
            here.buffer,
            there.buffer,
            self._branch_buffer,
            here.terms,
            v,
            push_scale,
            self._floor,
            self.outcome,
        )
        self._take(here, count)

    def survey(self, here: Evaluation) -> None:
        """
        See :meth:`Law.survey`.

        """
        room, outcome = here.room, self.outcome
        count, self.pruned = reference_velocity(self.layout, self._gains, room, room, self._branches, False)
        self._take(here, count)
        blend(self._branches, count, self._floor, outcome.report, outcome.D, outcome.push)

    def _take(self, here: Evaluation, count: int) -> None:
        """
        Note the number of branches; 0 means that the state has no solution.

        """
        if count == 0:
            raise unsolvable()
        self.branches = count
        self.velocity[:] = here.room.velocity


class ToolGains:
    """
    Gains of the laws that control one tool frame as a whole.

    They act on the frame of the first pose task, with the gains of its highest translation task and
    of its highest rotation task (the largest of several per coordinate).

    Attributes
    ----------
    reference : channel of that frame, the first of ``stack.motions``; empty: the stack has no pose task.
    rows : rows of the frame's Jacobian in use: translation, rotation or both.
    stiffness, damping, k_p : (6,) gains in these rows.

    """

    def __init__(self, stack: Stack) -> None:
        pose_tasks = [task for task in stack.tasks if task.chart.kind == "pose"]
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

    def error(self, here: Evaluation) -> tuple[Array, Array, Array]:
        """
        Pose error (p − p_d, log(R R_dᵀ)), reference velocity and Jacobian, in the rows in use.

        """
        if not self.reference:
            return np.zeros(0), np.zeros(0), self.jacobian(here)
        R, p, _ = here.poses[0]
        pose: Any = here.targets[self.reference]
        error = np.zeros(6)
        error[:3] = p - pose.p
        rotation_log(R @ pose.R.T, error[3:])
        return error[self.rows], pose.V[self.rows], self.jacobian(here)

    def jacobian(self, here: Evaluation) -> Array:
        """
        Jacobian of the frame in the rows in use.

        """
        if not self.reference:
            return np.zeros((0, here.arm.n))
        jacobian: Array = here.poses[0][2][self.rows]
        return jacobian


class JointImpedance(Law):
    """
    Gravity and a joint spring-damper in the inertia metric: τ = g − M (k x̃ + d (q̇ − q̇_d)).

    Stiffness k (1/s²) and damping d (1/s) are those of the posture task (Hogan 1985).

    """

    name = "joint_impedance"
    tracks = False
    needs_posture = True

    def torque(self, here: Evaluation, there: Evaluation, v: Array, push_scale: float) -> None:
        """
        See :meth:`Law.torque`; needs no twin.

        """
        self.prepare(here)
        feedback = here.data.M @ self.spring_damper(here, v)
        self.finish(here.data.g, feedback, here.room.claims.posture_feed_forward)

    def spring_damper(self, here: Evaluation, v: Array) -> Array:
        """
        −k x̃ − d (q̇ − q̇_d), rad/s².

        """
        posture = here.stack.posture
        if posture is None:
            return np.zeros_like(v)
        room = here.room
        return -posture.stiffness * room.posture_error - posture.damping * (
            v - room.claims.posture_feed_forward
        )


class CartesianImpedance(JointImpedance):
    """
    Gravity, a spring-damper at the tool through Jᵀ, and the posture's spring-damper in the null space.

    τ = g − Jᵀ (K x̃ + D (V − V_d)) + Nᵀ M (…), N dynamically consistent (Hogan 1985; Khatib 1987).

    """

    name = "cartesian_impedance"
    needs_tool, needs_posture = True, False

    def __init__(self, arm: Arm, stack: Stack) -> None:
        super().__init__(arm, stack)
        self._tool = ToolGains(stack)

    def torque(self, here: Evaluation, there: Evaluation, v: Array, push_scale: float) -> None:
        """
        See :meth:`Law.torque`; needs no twin.

        """
        self.prepare(here)
        tool, claims = self._tool, here.room.claims
        error, V_d, J = tool.error(here)
        wrench = -tool.stiffness * error - tool.damping * (J @ v - V_d)
        J_hat = J @ claims.L_inverse.T
        posture = self.spring_damper(here, v) @ claims.L  # Lᵀ a: the same in whitened coordinates
        free = posture - np.linalg.pinv(J_hat, rcond=1e-6) @ (J_hat @ posture)
        self.finish(here.data.g, J.T @ wrench + claims.L @ free, claims.posture_feed_forward)


class InverseJacobian(Law):
    """
    Tracking with q̇_r = J⁻¹ (V_d − k_p x̃), the pseudo-inverse and the posture where J is not square.

    Feedback is Jᵀ D J s with the tool's damping, and the posture's damping · M s.

    """

    name = "inverse_jacobian"
    rehearsal_only = True
    needs_tool = True

    def __init__(self, arm: Arm, stack: Stack) -> None:
        super().__init__(arm, stack)
        self._tool = ToolGains(stack)

    def inverse(self, J: Array) -> Array:
        """
        The plain (pseudo-)inverse.

        """
        return np.asarray(np.linalg.pinv(J), dtype=np.float64)

    def reference(self, here: Evaluation, nominal: Evaluation | None = None) -> Array:
        """
        q̇_r (n,), rad/s; ``nominal`` is given for its finite-difference twin.

        """
        self.prepare(here, nominal)
        error, V_d, J = self._tool.error(here)
        posture = here.room.claims.posture
        velocity: Array = self.inverse(J) @ (V_d - self._tool.k_p * error - J @ posture) + posture
        return velocity

    def torque(self, here: Evaluation, there: Evaluation, v: Array, push_scale: float) -> None:
        """
        See :meth:`Law.torque`.

        """
        velocity = self.reference(here)
        acceleration = (self.reference(there, here) - velocity) / TWIN_STEP
        s = v - velocity
        J = self._tool.jacobian(here)
        feedback: Array = -J.T @ (self._tool.damping * (J @ s))
        if here.stack.posture:
            feedback -= here.stack.posture.damping * (here.data.M @ s)
        self.finish(inverse_dynamics(here.terms, velocity, acceleration), feedback, velocity)


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
