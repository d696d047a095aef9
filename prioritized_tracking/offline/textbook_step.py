# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
One whole cycle of the law as a textbook writes it, in NumPy.

References and arm terms (Pinocchio) come from where the controller takes them; charts, hierarchy, blend, the
finite-difference twin and the torque are computed anew, with pseudo-inverses and explicit projectors.

"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np

from prioritized_tracking.core.arm import dynamics, frame_motion, inertia
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.offline import textbook_charts
from prioritized_tracking.offline.textbook import Array, Outcome, TextbookTask, blended

Errors: TypeAlias = dict[str, Array]
Samples: TypeAlias = Mapping[str, Any]
"""A sample of each channel: R, p, V, A of a pose, or q, v, a of joints."""

#: s, step of the finite-difference twin.
STEP = 1e-6


@dataclass
class _Target:
    """
    A reference moved on for a moment.

    """

    R: Any = None
    p: Any = None
    V: Any = None
    q: Any = None
    v: Any = None


class TextbookController:
    """
    The law of a controller, written down plainly.

    Parameters
    ----------
    controller : Controller
        With the law `prioritized`; built from a stack file, which the charts are made from.

    Raises
    ------
    InputError
        A chart of coordinates relative to the reference that has no formula here.

    """

    def __init__(self, controller: Controller) -> None:
        self.arm, self.stack, self.channels = controller.arm, controller.stack, controller.channels
        self.data = controller.arm.data()
        self._tools = controller.tools
        self._gravity_by_driver = controller.gravity_by_driver
        self._entries = controller.stack_file.tree["tasks"]
        self._formulas: dict[str, textbook_charts.Formula] = {}
        for task in self.stack.tasks:
            entry = self._entries[task.name]
            if entry["chart"] in textbook_charts.FORMULAS:
                self._formulas[task.name] = textbook_charts.FORMULAS[entry["chart"]](entry)
            elif task.chart.kind == "pose" and entry["chart"] != "rotation_vector":
                if task.chart.relative:
                    raise InputError(
                        Problem(what=f"chart '{entry['chart']}' of task {task.name} has no textbook form")
                    )
                self._formulas[task.name] = textbook_charts.of_class(task.chart)

    def evaluate(self, t: float, q: Array, v: Array) -> Array:
        """
        Torque (n,), N·m, before any limit, at a state and a path time: as `Controller.evaluate`.

        """
        return self.torque(q, v, self._samples(t, q))

    def torque(self, q: Array, v: Array, samples: Samples) -> Array:
        """
        τ = M q̈_r + C q̇_r + g + f(q̇_r) − L D Lᵀ s + push, N·m, from a state and a sample of each channel.

        """
        arm, data = self.arm, self.data
        dynamics(arm, data, q, v)
        M, C, g = data.M.copy(), data.C.copy(), data.g.copy()
        here, errors = self._reference(q, samples, M, {})
        moved = {name: _moved(sample) for name, sample in samples.items()}
        inertia(arm, data, q + STEP * v)
        there, _ = self._reference(q + STEP * v, moved, data.M.copy(), errors, twin=True)
        velocity = here.velocity
        acceleration = (there.velocity - velocity) / STEP
        friction = arm.viscous * velocity + arm.coulomb * np.tanh(velocity / 0.02)
        feedback = here.feedback + self.stack.feedback_floor * M
        torque: Array = M @ acceleration + C @ velocity + friction - feedback @ (v - velocity) + here.push
        return torque if self._gravity_by_driver else torque + g

    def _reference(
        self, q: Array, samples: Samples, M: Array, nominal: Errors, *, twin: bool = False
    ) -> tuple[Outcome, Errors]:
        """
        Reference velocity, feedback and push, and the errors.

        A twin keeps the turns of the ``nominal`` errors, and needs no feedback.

        """
        errors: Errors = {}
        poses = {motion: self._pose(*motion) for motion in self.stack.motions}
        tasks = []
        for task in self.stack.tasks:
            if task.chart.kind == "pose":
                R, p, J = poses[task.frame, task.base]
                rows, nu, c = self._claim(task, R, p, samples[task.reference], nominal, errors)
                J = rows @ J
            else:
                J, nu, c = self._joint_claim(task, q, samples[task.reference], nominal, errors)
            tasks.append(TextbookTask(c * J, c * nu, c, task.damping, task.handover, task.force))
        posture = self.stack.posture
        if posture is None:
            return blended(M, tasks, claim_speed=self.stack.claim_speed, with_feedback=not twin), errors
        target = samples[posture.reference]
        error = _error(posture.name, q - target.q, self.arm.continuous, nominal, errors)
        claims = (target.v - posture.k_p * error, target.v)
        limit = self.stack.claim_speed
        return blended(M, tasks, claims, posture.damping, limit, with_feedback=not twin), errors

    def _claim(
        self,
        task: Any,
        R: Array,
        p: Array,
        target: Any,
        nominal: Errors,
        errors: dict[str, Array],
    ) -> tuple[Array, Array, float]:
        """
        Rows, ν_r/c = rate · (ẋ_d − k_p x̃) and c of a pose task.

        """
        if task.name not in self._formulas:
            x, c = textbook_charts.rotation_vector(R, target.R)
            rows = np.hstack([np.zeros((3, 3)), np.eye(3)])
            return rows, R @ target.R.T @ target.V[3:] - task.k_p * x, c
        formula = self._formulas[task.name]
        here, there = formula(R, p), formula(target.R, target.p)
        error = _error(task.name, here.x - there.x, np.array(task.chart.angular), nominal, errors)
        c = here.validity * there.validity
        if c == 0.0:  # ẋ_d exists only where the chart is valid
            return here.rows, np.zeros(len(error)), c
        x_dot_d = np.linalg.solve(there.rate, there.rows @ target.V)
        return here.rows, here.rate @ (x_dot_d - task.k_p * error), c

    def _joint_claim(
        self, task: Any, q: Array, target: Any, nominal: Errors, errors: Errors
    ) -> tuple[Array, Array, float]:
        """
        Rows, ν_r and c = 1 of a task on chosen joints.

        """
        chosen = list(task.chart.indices)
        error = _error(task.name, (q - target.q)[chosen], self.arm.continuous[chosen], nominal, errors)
        return np.eye(self.arm.n)[chosen], target.v[chosen] - task.k_p * error, 1.0

    def _pose(self, frame: str, base: str) -> tuple[Array, Array, Array]:
        R, p, J = np.eye(3), np.zeros(3), np.zeros((6, self.arm.n))
        frame_motion(self.arm, self.data, self.arm.frame_id(frame), self.arm.frame_id(base), R, p, J)
        return R, p, J

    def _samples(self, t: float, q: Array) -> Samples:
        """
        Every channel at path time t (s); those without a path hold at q.

        """
        samples: dict[str, Any] = {}
        rest = np.zeros(6)
        for name, channel in self.channels.items():
            if channel.path is not None:
                samples[name] = channel.path.sample(t, 1.0, 0.0)
            elif channel.kind == "joints":
                samples[name] = _Target(q=q, v=np.zeros(self.arm.n))
            else:
                inertia(self.arm, self.data, q)
                frame = next(tool for tool, held in self._tools.items() if held[2] == name)
                base = next(base for tool, base in self.stack.motions if tool == frame)
                R, p, _ = self._pose(frame, base)
                samples[name] = _Target(R=R, p=p, V=rest)
        return samples


def _error(name: str, difference: Array, angular: Any, nominal: Errors, errors: Errors) -> Array:
    """
    Wrap the error where it is an angle, next to the nominal one if there is one, and note it.

    """
    near = nominal.get(name, np.zeros(len(difference)))
    turns = np.round((difference - near) / (2.0 * np.pi))
    errors[name] = np.where(angular, difference - 2.0 * np.pi * turns, difference)
    return errors[name]


def _moved(sample: Any) -> _Target:
    """
    A reference `STEP` later: constant acceleration, the exponential of the rotation.

    """
    h = STEP
    acceleration = getattr(sample, "A", None)
    if getattr(sample, "R", None) is None:
        a = getattr(sample, "a", np.zeros(len(sample.q)))
        return _Target(q=sample.q + h * sample.v + 0.5 * h**2 * a, v=sample.v + h * a)
    A = np.zeros(6) if acceleration is None else acceleration
    moved = h * sample.V + 0.5 * h**2 * A
    x, y, z = moved[3:]
    K = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    turn = np.eye(3) + K + 0.5 * K @ K  # exact to |ω h|³/6
    return _Target(R=turn @ sample.R, p=sample.p + moved[:3], V=sample.V + h * A)
