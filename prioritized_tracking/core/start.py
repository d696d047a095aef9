# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What must be true of an arm before a controller may be activated.

"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass

import numpy as np

from prioritized_tracking.charts.joints import joint_error
from prioritized_tracking.core.arm import Arm
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.errors import Problem

#: Fastest joint at activation, rad/s: standing still, within sensor noise.
AT_REST_SPEED = 0.05


#: A tool turned by more than this (rad) has hardly been brought to its start with care.
_TURNED = 1.5
_TOOL_REMEDY = {
    False: "Move the arm to the start of the path first.",
    True: "Move the arm to the start of the path first; or are the quaternion's columns (x y z w) mixed up?",
}


@dataclass(frozen=True, kw_only=True)
class StartLimits:
    """
    How far from its references an arm may be when the controller is activated.

    Attributes
    ----------
    position, angle, joint : m, rad, rad.

    """

    position: float = 0.02
    angle: float = 0.1
    joint: float = 0.05


def state_problems(arm: Arm, q: Array, v: Array) -> list[Problem]:
    """
    Joints outside their limits, and joints that move.

    Parameters
    ----------
    q, v : (n,) rad and rad/s.

    """
    problems = []
    for j in np.flatnonzero((q < arm.lower) | (q > arm.upper)):
        problems.append(
            Problem(
                what=f"joint {arm.joints[j]} is outside its limits",
                expected=f"{arm.lower[j]:.4g} to {arm.upper[j]:.4g} rad",
                got=f"{q[j]:.4g} rad",
                remedy="Move the joint inside its limits first.",
            )
        )
    for j in np.flatnonzero(np.abs(v) > AT_REST_SPEED):
        problems.append(
            Problem(
                what=f"joint {arm.joints[j]} is moving",
                expected=f"at most {AT_REST_SPEED:g} rad/s at activation",
                got=f"{v[j]:.4g} rad/s",
                remedy="Wait until the arm stands still.",
            )
        )
    return problems


def tool_problems(
    errors: Mapping[str, tuple[float, float]], described: Mapping[str, Collection[str]], limits: StartLimits
) -> list[Problem]:
    """
    Frames whose reference starts elsewhere, in what their tasks describe of them.

    Parameters
    ----------
    errors : distance (m) and angle (rad) of each frame from its reference.
    described : units of its tasks, "m" and "rad": an orientation no task is about may be any.

    """
    problems = []
    for frame, (distance, angle) in errors.items():
        checks = (("m", distance, limits.position), ("rad", angle, limits.angle))
        counted = [check for check in checks if check[0] in described[frame]]
        if any(error > limit for _, error, limit in counted):
            problems.append(
                Problem(
                    what=f"the reference starts away from {frame}",
                    expected="at most "
                    + " and ".join(f"{limit:g} {unit}" for unit, _, limit in counted)
                    + " apart",
                    got=" and ".join(f"{error:.4g} {unit}" for unit, error, _ in counted),
                    remedy=_TOOL_REMEDY[angle > _TURNED],
                )
            )
    return problems


def joint_problems(arm: Arm, q: Array, references: Mapping[str, Array], limits: StartLimits) -> list[Problem]:
    """
    Joint references that start elsewhere.

    Parameters
    ----------
    references : joint positions (n,), rad, at which each joint channel starts.

    """
    problems = []
    for name, q_d in references.items():
        gap = np.abs(joint_error(q, q_d, arm.continuous))
        worst = int(np.argmax(gap))
        if gap[worst] > limits.joint:
            problems.append(
                Problem(
                    what=f"reference '{name}' starts away from joint {arm.joints[worst]}",
                    expected=f"at most {limits.joint:g} rad apart",
                    got=f"{gap[worst]:.4g} rad",
                    remedy="Move the arm to the start of the path first. A companion of another path starts "
                    "elsewhere too: compute it again.",
                )
            )
    return problems
