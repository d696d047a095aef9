# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Open arms on paths through their singularities: what a user would write, made by a script.

Each scenario is a folder with the maker's URDF, a pose file and a stack file; the companion is computed
by the package from the pose file. The pose file is the tool's motion for smooth joint motions through the
singularity, so that the path can be reached; the joint motions themselves are not given away.

"""

from __future__ import annotations

import atexit
import functools
import shutil
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.spatial.transform import Rotation

from prioritized_tracking.assembly import compute_companion
from prioritized_tracking.core.arm import Arm, frame_motion, inertia
from prioritized_tracking.files import write_joints_csv, write_pose_csv
from prioritized_tracking.offline.companion import Companion
from tests.arms import DATA_ARMS, data_arm, data_urdf

KNOTS = 0.02  # s


@dataclass(frozen=True, kw_only=True)
class Through:
    """
    An arm and its way through a singularity.

    Attributes
    ----------
    arm : name in `tests.arms.DATA_ARMS`.
    tool : controlled link.
    start, end : (n,) rad; the singularity lies between.
    seconds : duration of the path.
    rotor_inertia : (n,) kg·m², plausible: the files carry none.
    damping : of position (N·s/m) and of orientation (N·m·s/rad).

    """

    arm: str
    tool: str
    start: tuple[float, ...]
    end: tuple[float, ...]
    seconds: float
    rotor_inertia: tuple[float, ...]
    damping: tuple[float, float]

    def joints(self, s: np.ndarray) -> np.ndarray:
        """
        Joint positions (N, n) at path times (N,): a quintic from rest to rest.

        """
        u = np.clip(s / self.seconds, 0.0, 1.0)[:, None]
        start, end = np.array(self.start), np.array(self.end)
        return start + (end - start) * u**3 * (10.0 + u * (6.0 * u - 15.0))


WRIST = Through(
    arm="ur10",
    tool="tool0",
    start=(0.2, -1.3, 1.6, -1.0, 0.7, 0.3),
    end=(0.7, -0.9, 1.1, -1.3, -0.5, -0.2),  # the fifth joint goes through 0: axes 4 and 6 in line
    seconds=5.0,
    rotor_inertia=(1.2, 1.2, 0.8, 0.2, 0.2, 0.2),
    damping=(400.0, 20.0),
)

ELBOW = Through(
    arm="panda",
    tool="panda_link8",
    start=(0.3, 0.5, 0.2, -1.2, 0.3, 1.5, 0.4),
    end=(
        0.0,
        0.8,
        0.0,
        -0.2,
        -0.109,
        1.7,
        0.1,
    ),  # stretched at −0.467 in the fourth joint with the fifth at 0
    seconds=5.0,
    rotor_inertia=(0.6, 0.6, 0.5, 0.5, 0.2, 0.2, 0.1),
    damping=(300.0, 12.0),
)

STACK = """\
/**:
  ros__parameters:
    rate: 1000.0
    law: prioritized
    robot:
      urdf: arm.urdf
      joints: [{joints}]
      {locked}
      rotor_inertia: [{rotor_inertia}]
      delay_cycles: 1
    priority: [tool_position, tool_zyz, tool_xyz, posture]
    tasks:
      tool_position: {{chart: position, frame: {tool}, reference: way, stiffness: {k_t}, damping: {d_t}}}
      tool_zyz:
        {{chart: euler, sequence: zyz, frame: {tool}, reference: way, stiffness: {k_r}, damping: {d_r}}}
      tool_xyz:
        {{chart: euler, sequence: xyz, frame: {tool}, reference: way, stiffness: {k_r}, damping: {d_r}}}
      posture: {{chart: posture, reference: joints, stiffness: 320.0, damping: 40.0}}
    references:
      way: {{kind: pose, source: file, file: way.csv}}
      joints: {{kind: joints, source: companion, file: companion.csv, follows: way}}
"""


def tool_motion(arm: Arm, tool: str) -> Callable[[np.ndarray], tuple[np.ndarray, np.ndarray, np.ndarray]]:
    """
    Return a function of q (n,) that gives R, p and the Jacobian (6, n) of the tool.

    """
    data, frame, base = arm.data(), arm.frame_id(tool), arm.frame_id(arm.root)

    def at(q: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        R, p, J = np.zeros((3, 3)), np.zeros(3), np.zeros((6, arm.n))
        inertia(arm, data, q)
        frame_motion(arm, data, frame, base, R, p, J)
        return R, p, J

    return at


def smallest_singular_value(arm: Arm, tool: str, q: np.ndarray) -> float:
    """
    Of the whole Jacobian, m and rad per rad.

    """
    return float(np.linalg.svd(tool_motion(arm, tool)(q)[2], compute_uv=False)[-1])


@functools.cache
def _folder() -> Path:
    """
    One folder for all scenarios of a test run, removed at its end.

    """
    folder = Path(tempfile.mkdtemp(prefix="open_arms_"))
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    return folder


@functools.cache
def stack_of(way: Through) -> tuple[Path, Companion]:
    """
    Write the files of a scenario and compute its companion; return the stack file and the companion.

    """
    folder = _folder() / way.arm
    folder.mkdir()
    arm = data_arm(way.arm)
    (folder / "arm.urdf").write_text(data_urdf(way.arm), encoding="utf-8")
    locked = ", ".join(f"{name}: {position}" for name, position in DATA_ARMS[way.arm][1].items())
    stack = folder / "stack.yaml"
    stack.write_text(
        STACK.format(
            joints=", ".join(arm.joints),
            locked=f"locked: {{{locked}}}" if locked else "",
            rotor_inertia=", ".join(map(str, way.rotor_inertia)),
            tool=way.tool,
            d_t=way.damping[0],
            k_t=8.0 * way.damping[0],
            d_r=way.damping[1],
            k_r=8.0 * way.damping[1],
        ),
        encoding="utf-8",
    )
    times = np.linspace(0.0, way.seconds, round(way.seconds / KNOTS) + 1)
    motion = tool_motion(arm, way.tool)
    poses = [motion(q)[:2] for q in way.joints(times)]
    quaternions = Rotation.from_matrix([R for R, _ in poses]).as_quat()
    write_pose_csv(folder / "way.csv", times, [p for _, p in poses], quaternions)
    companion = compute_companion(stack)
    write_joints_csv(folder / "companion.csv", companion.times, companion.joints, companion.q)
    return stack, companion
