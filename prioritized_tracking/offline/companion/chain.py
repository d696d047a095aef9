# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Kinematics of one frame at many joint positions at once.

A whole path is some thousand configurations; calling the arm model once per configuration costs
more than all the algebra that follows. Here the chain from root to frame is walked once, each
step an operation over all configurations.

"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from prioritized_tracking.core.arm import Arm
from prioritized_tracking.core.rotation import Array


@dataclass(frozen=True)
class _Link:
    """
    One moving joint of a chain: constant placement before it, axis, command index.

    """

    rotation: Array
    translation: Array
    axis: Array
    revolute: bool
    index: int


@dataclass(frozen=True)
class _Branch:
    """
    The moving joints from the root to a frame and the constant placement after the last.

    """

    links: tuple[_Link, ...]
    rotation: Array
    translation: Array


class Chain:
    """
    Pose and Jacobian of a frame relative to a base frame, for N joint positions at once.

    Parameters
    ----------
    arm : Arm
    frame_id, base_id : int
        Frames of ``arm.model``; the base may move.

    """

    def __init__(self, arm: Arm, frame_id: int, base_id: int) -> None:
        self.n = arm.n
        self._frame = _branch(arm, frame_id)
        self._base = _branch(arm, base_id)

    def motion(self, q: Array) -> tuple[Array, Array, Array]:
        """
        Pose and Jacobian at every joint position.

        Parameters
        ----------
        q : (N, n) rad, command order.

        Returns
        -------
        R : (N, 3, 3) orientation of the frame, base axes.
        p : (N, 3) position of its origin in the base, m.
        J : (N, 6, n) Jacobian of (velocity of the origin, angular velocity), base axes.

        """
        R_b, p_b, J_b = _walk(self._base, q)
        R_f, p_f, J_f = _walk(self._frame, q)
        to_base = R_b.transpose(0, 2, 1)
        r = p_f - p_b
        J = J_f - J_b
        # the base turning carries the frame's origin along: ω_b × r, column by column
        J[:, :3] -= np.cross(J_b[:, 3:], r[:, :, None], axis=1)
        J[:, :3] = to_base @ J[:, :3]
        J[:, 3:] = to_base @ J[:, 3:]
        return to_base @ R_f, np.einsum("kij,kj->ki", to_base, r), J


def _branch(arm: Arm, frame_id: int) -> _Branch:
    """
    Read the chain of moving joints above a frame from the arm model.

    """
    model = arm.model
    frame = model.frames[frame_id]
    order = {name: i for i, name in enumerate(arm.joints)}
    links: list[_Link] = []
    joint = frame.parentJoint
    while joint > 0:
        motion = np.array(model.joints[joint].createData().S).reshape(6)
        revolute = bool(np.any(motion[3:] != 0.0))
        placement = model.jointPlacements[joint]
        links.append(
            _Link(
                placement.rotation.copy(),
                placement.translation.copy(),
                motion[3:] if revolute else motion[:3],
                revolute,
                order[model.names[joint]],
            )
        )
        joint = model.parents[joint]
    placement = frame.placement
    return _Branch(tuple(reversed(links)), placement.rotation.copy(), placement.translation.copy())


def _walk(branch: _Branch, q: Array) -> tuple[Array, Array, Array]:
    """
    Pose (root axes) and Jacobian of a branch's end at every joint position.

    """
    N, n = q.shape
    R = np.broadcast_to(np.eye(3), (N, 3, 3))
    p = np.zeros((N, 3))
    axes = np.zeros((len(branch.links), N, 3))
    origins = np.zeros((len(branch.links), N, 3))
    for axis, origin, link in zip(axes, origins, branch.links, strict=True):
        p = p + R @ link.translation
        R = R @ link.rotation
        axis[:] = R @ link.axis
        origin[:] = p
        if link.revolute:
            R = R @ _turn(link.axis, q[:, link.index])
        else:
            p = p + axis * q[:, link.index, None]
    p = p + R @ branch.translation
    R = R @ branch.rotation
    J = np.zeros((N, 6, n))
    for axis, origin, link in zip(axes, origins, branch.links, strict=True):
        if link.revolute:
            J[:, :3, link.index] = np.cross(axis, p - origin)
            J[:, 3:, link.index] = axis
        else:
            J[:, :3, link.index] = axis
    return R, p, J


def _turn(axis: Array, angle: Array) -> Array:
    """
    Rotation matrices about one unit axis, Rodrigues' formula; angle (N,) rad -> (N, 3, 3).

    """
    x, y, z = axis
    K = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    sine, cosine = np.sin(angle)[:, None, None], np.cos(angle)[:, None, None]
    turn: Array = np.eye(3) + sine * K + (1.0 - cosine) * (K @ K)
    return turn
