# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The arm: from the text of a URDF to inertia, Coriolis matrix, gravity and Jacobians.

"""

from __future__ import annotations

from .arm import GRAVITY, Arm, build_arm
from .motion import (
    FRICTION_SPEED,
    ArmData,
    dynamics,
    forward_dynamics,
    frame_motion,
    frame_pose,
    friction,
    friction_torque,
    inertia,
    inverse_dynamics,
)

__all__ = [
    "FRICTION_SPEED",
    "GRAVITY",
    "Arm",
    "ArmData",
    "build_arm",
    "dynamics",
    "forward_dynamics",
    "frame_motion",
    "frame_pose",
    "friction",
    "friction_torque",
    "inertia",
    "inverse_dynamics",
]
