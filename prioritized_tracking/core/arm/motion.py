# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What an arm does: inertia, Coriolis and gravity terms, poses and Jacobians, accelerations, torques.

Results go to preallocated `ArmData`. All vectors are in command order, also where Pinocchio numbers the
joints otherwise; quantities in the frame of the root link unless a base is named.

"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pinocchio as pin

from prioritized_tracking.compiled import compiled
from prioritized_tracking.core.arm.urdf_elements import Array

if TYPE_CHECKING:
    from prioritized_tracking.core.arm.arm import Arm

FRICTION_SPEED = 0.02  # rad/s: Coulomb friction is smoothed by tanh(v / FRICTION_SPEED)

_WORLD = pin.Convention.WORLD  # this form of the composite-body algorithm fills the joint Jacobians too
_ALIGNED = pin.ReferenceFrame.LOCAL_WORLD_ALIGNED


class ArmData:
    """
    Work data of one caller; results are overwritten by the next call.

    Attributes
    ----------
    M, C : (n, n) ndarray
        Inertia (kg·m²) and Coriolis matrix (N·m·s/rad) of the last `dynamics` or `inertia`.
    g : (n,) ndarray
        Gravity torque, N·m, of the last `dynamics`.
    pin : pinocchio.Data

    """

    __slots__ = ("C", "M", "g", "grid", "pin", "views")

    def __init__(self, arm: Arm) -> None:
        n = arm.n
        self.pin = arm.model.createData()
        self.M = np.zeros((n, n))
        self.C = np.zeros((n, n))
        self.g = np.zeros(n)
        self.views = (self.pin.M, self.pin.C, self.pin.g)  # into Pinocchio's memory; its own joint order
        order = arm.built.order
        self.grid: Any = None if order is None else np.ix_(order, order)


def dynamics(arm: Arm, data: ArmData, q: Array, v: Array) -> None:
    """
    Fill `data.M`, `data.C`, `data.g`, and Pinocchio's joint placements and Jacobians.

    Parameters
    ----------
    q, v : (n,) ndarray
        rad, rad/s.

    """
    model, work, order = arm.built.model, data.pin, arm.built.order
    if order is not None:
        q, v = q[order], v[order]
    pin.computeCoriolisMatrix(model, work, q, v)
    pin.computeGeneralizedGravity(model, work, q)
    pin.crba(model, work, q, _WORLD)
    if order is None:
        data.M[...], data.C[...], data.g[...] = data.views
    else:
        data.M[data.grid], data.C[data.grid], data.g[order] = data.views


def inertia(arm: Arm, data: ArmData, q: Array) -> None:
    """
    Fill `data.M`, and Pinocchio's joint placements and Jacobians, only.

    """
    order = arm.built.order
    if order is None:
        pin.crba(arm.built.model, data.pin, q, _WORLD)
        data.M[...] = data.views[0]
    else:
        pin.crba(arm.built.model, data.pin, q[order], _WORLD)
        data.M[data.grid] = data.views[0]


def frame_motion(arm: Arm, data: ArmData, frame_id: int, base_id: int, R: Array, p: Array, J: Array) -> None:
    """
    Fill the pose of a frame in a base frame and its Jacobian; call `dynamics` or `inertia` first.

    Parameters
    ----------
    frame_id, base_id : int
        From `Arm.frame_id`.
    R, p : (3, 3) and (3,) ndarray, filled
        Axes and origin (m) of the frame, base axes.
    J : (6, n) ndarray, filled
        J q̇ = (velocity of the frame's origin, angular velocity) relative to the base, base axes. A base that
        moves too gives Rᵦᵀ (J_f − [I −[r]ₓ; 0 I] J_b) with r from base to frame.

    """
    built, work = arm.built, data.pin
    pose = pin.updateFramePlacement(built.model, work, frame_id)
    jacobian = _jacobian(built.model, work, frame_id)
    if base_id not in built.at_root:
        base = built.ground.get(base_id)
        if base is None:
            base = pin.updateFramePlacement(built.model, work, base_id)
            jacobian -= _carried(_jacobian(built.model, work, base_id), pose, base)
        turn = base.rotation.T
        jacobian = np.vstack((turn @ jacobian[:3], turn @ jacobian[3:]))
        pose = base.actInv(pose)
    R[...], p[...] = pose.rotation, pose.translation
    if built.order is None:
        J[...] = jacobian
    else:
        J[:, built.order] = jacobian


def frame_pose(arm: Arm, data: ArmData, q: Array, frame_id: int, base_id: int) -> tuple[Array, Array]:
    """
    Return axes (3, 3) and origin (3,), m, of a frame in a base frame at joint positions q, rad.

    """
    built, work = arm.built, data.pin
    pin.forwardKinematics(built.model, work, q if built.order is None else q[built.order])
    pose = pin.updateFramePlacement(built.model, work, frame_id)
    if base_id not in built.at_root:
        base = built.ground.get(base_id)
        pose = (pin.updateFramePlacement(built.model, work, base_id) if base is None else base).actInv(pose)
    return pose.rotation, pose.translation


def _jacobian(model: Any, work: Any, frame_id: int) -> Array:
    """
    Return the Jacobian (6, n) of a frame's origin in root axes, the model's joint order.

    """
    jacobian: Array = pin.getFrameJacobian(model, work, frame_id, _ALIGNED)
    return jacobian.reshape(6, -1)  # the binding drops the second dimension when n is 1


def _carried(base_jacobian: Array, pose: Any, base: Any) -> Array:
    """
    Return the Jacobian of what a moving base carries along at the frame's origin: v_b + ω_b × r.

    """
    x, y, z = (pose.translation - base.translation).tolist()
    carried = base_jacobian.copy()
    carried[:3] += np.array([[0.0, z, -y], [-z, 0.0, x], [y, -x, 0.0]]) @ base_jacobian[3:]
    return carried


@compiled
def friction(v: Array, viscous: Array, coulomb: Array) -> Array:
    """
    Return viscous friction, plus Coulomb friction smoothed over `FRICTION_SPEED`, N·m.

    """
    torque: Array = viscous * v + coulomb * np.tanh(v / FRICTION_SPEED)
    return torque


def friction_torque(arm: Arm, v: Array) -> Array:
    """
    Return f(v), N·m, of an arm's own friction.

    """
    return friction(v, arm.viscous, arm.coulomb)


def forward_dynamics(arm: Arm, data: ArmData, q: Array, v: Array, tau: Array) -> Array:
    """
    Return q̈ (n,) rad/s² under the torque `tau`, friction and rotors counted.

    Overwrites Pinocchio's work data: give a simulation its own `ArmData`. Articulated-body algorithm
    (Featherstone 2008).

    """
    drive = tau if arm.frictionless else tau - friction_torque(arm, v)
    order = arm.built.order
    if order is None:
        return np.array(pin.aba(arm.built.model, data.pin, q, v, drive))
    result = np.empty(arm.n)
    result[order] = pin.aba(arm.built.model, data.pin, q[order], v[order], drive[order])
    return result


def inverse_dynamics(arm: Arm, data: ArmData, q: Array, v: Array, a: Array) -> Array:
    """
    Return the torque (n,) N·m for the acceleration `a`, friction and rotors counted.

    The inverse of `forward_dynamics`, with the same care about `data`. Recursive Newton-Euler algorithm.

    """
    order = arm.built.order
    if order is None:
        return np.array(pin.rnea(arm.built.model, data.pin, q, v, a)) + friction_torque(arm, v)
    result = np.empty(arm.n)
    result[order] = pin.rnea(arm.built.model, data.pin, q[order], v[order], a[order])
    return result + friction_torque(arm, v)
