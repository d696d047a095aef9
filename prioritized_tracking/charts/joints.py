# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Coordinates of the joint vector itself: all joints (posture) or chosen ones.

"""

from __future__ import annotations

from typing import Any, ClassVar

import numpy as np

from prioritized_tracking.charts.base import ChartWork, UnitRateChart
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.schema import Parameter


class JointChart(UnitRateChart):
    """
    A chart of the joint vector; bound to an arm's joints before use.

    """

    kind: ClassVar[str] = "joints"
    unit = "rad"
    indices: tuple[int, ...] = ()

    def bind(self, joints: tuple[str, ...], continuous: tuple[bool, ...]) -> None:
        """
        Tell the chart the arm's joints, in order, and which of them turn without end.

        """
        raise NotImplementedError(f"{type(self).__name__}.bind")

    def track_joints(self, q: Array, q_d: Array, v_d: Array, work: ChartWork) -> float:
        """
        Fill ``work`` from the measured and the reference joint positions (rad) and velocity (rad/s).

        Returns
        -------
        float
            1: joints never fail.

        """
        for row, index in enumerate(self.indices):
            work.x[row] = q[index]
            work.x_d[row] = q_d[index]
            work.x_dot_d[row] = v_d[index]
            work.rows[row, index] = 1.0
        return 1.0


class Joints(JointChart):
    """
    Positions of chosen joints, rad; never fails.

    """

    parameters = (
        Parameter(
            key="names",
            type="string_array",
            required=True,
            help="Joints whose positions are the coordinates.",
        ),
    )

    def __init__(self, *, names: Any) -> None:
        self.coordinates = tuple(str(name) for name in names)
        if not self.coordinates or len(set(self.coordinates)) != len(self.coordinates):
            got = list(self.coordinates)
            raise ValueError(f"names: expected at least one joint name, each once, got {got}")
        self.angular = (False,) * len(self.coordinates)

    def bind(self, joints: tuple[str, ...], continuous: tuple[bool, ...]) -> None:
        """
        See :meth:`JointChart.bind`.

        """
        self.indices = tuple(joints.index(name) for name in self.coordinates)
        self.angular = tuple(continuous[index] for index in self.indices)


class Posture(JointChart):
    """
    Positions of all joints, rad, in the inertia metric: the task that makes a stack complete.

    Its stiffness (1/s²) and damping (1/s) are scalars; it owns exactly what the tasks above leave.

    """

    coordinates: tuple[str, ...] = ()

    def __init__(self) -> None:
        pass

    def bind(self, joints: tuple[str, ...], continuous: tuple[bool, ...]) -> None:
        """
        See :meth:`JointChart.bind`.

        """
        self.coordinates = joints
        self.indices = tuple(range(len(joints)))
        self.angular = continuous


def joint_error(q: Array, q_d: Array, continuous: Array) -> Array:
    """
    q − q_d, rad, the short way round where a joint turns without end.

    """
    error = q - q_d
    return np.where(continuous, error - 2.0 * np.pi * np.round(error / (2.0 * np.pi)), error)
