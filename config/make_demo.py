# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Write the paths of both demo scenarios, the joint paths that go with them, and the rough variant of the first.

    python config/make_demo.py

The files are kept in the repository; run this only after changing a path, an arm or demo_stack.yaml.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from scipy.optimize import brentq

from prioritized_tracking.cli import main
from prioritized_tracking.files import write_pose_csv

FOLDER = Path(__file__).resolve().parent
KNOT_SPACING = 0.05  # s

# The weld: a circle at the foot of a nozzle that sticks out of an upright tank wall, towards the arm.
CENTRE = np.array([0.60, 0.0, 0.30])  # m, in base_link; the wall is the plane x = 0.60
RADIUS = 0.10  # m
WELD_DURATION = 20.0  # s

# The planar arm of planar_arm.urdf.
UPPER, FORE = 0.45, 0.35  # m
DRAWING_DURATION = 15.0  # s

ROUGH_PLANT = """\
    # The simulated arm, and what the controller does not know of it.
    plant:
      start_offset: 0.002              # rad, random per joint
      mass_error: 0.08                 # 8 % of each link's mass and inertia, random
      payload: {frame: probe, mass: 0.5}     # kg, at the tip of the probe
      friction:                        # in the joints, not compensated
        viscous: [1.0, 1.0, 0.8, 0.8, 0.4, 0.3, 0.2]        # N·m·s/rad
        coulomb: [1.0, 1.0, 0.8, 0.8, 0.4, 0.3, 0.2]        # N·m
      position_noise: 1.0e-5           # rad, standard deviation
      velocity_noise: 1.0e-3           # rad/s
      delay: 1                         # cycles from state to torque
      seed: 0
"""


def smoothstep(u: np.ndarray | float) -> np.ndarray:
    """
    Quintic from 0 to 1 with zero velocity and acceleration at both ends, held outside.

    """
    u = np.clip(u, 0.0, 1.0)
    return u**3 * (10.0 + u * (6.0 * u - 15.0))


def about_y(angles: np.ndarray) -> np.ndarray:
    """
    Quaternions (N, 4), x y z w, of turns (N,) in rad about the y axis.

    """
    zero = np.zeros_like(angles)
    return np.stack([zero, np.sin(angles / 2.0), zero, np.cos(angles / 2.0)], axis=1)


def weld_times() -> np.ndarray:
    """
    Knots (N,) in s; the two instants where an Euler chart fails exactly are knots.

    """
    times = np.linspace(0.0, WELD_DURATION, round(WELD_DURATION / KNOT_SPACING) + 1)
    for quarter in (0.25, 0.75):
        u = brentq(lambda u, p=quarter: float(smoothstep(u)) - p, 0.0, 1.0, xtol=1e-15)
        instant = u * WELD_DURATION
        times[np.argmin(abs(times - instant))] = instant
    return times


def weld_pose(progress: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """
    Positions (N, 3) in m and quaternions (N, 4), x y z w, once round the weld, in base_link.

    Seen from the arm the probe starts on the left, goes through the bottom and comes back over the top. It
    tilts in the x-z plane: 45 degrees to the wall at the sides, straight at the wall at the bottom (direction
    +x, where the angles XYZ fail), straight down along the wall at the top (direction -z, where ZYZ fail).

    """
    around = -2.0 * np.pi * progress
    positions = CENTRE + RADIUS * np.stack([np.zeros_like(around), np.cos(around), np.sin(around)], axis=1)
    # rad, from pointing down towards pointing at the wall
    tilt = np.pi / 4.0 * (1.0 + np.sin(2.0 * np.pi * progress))
    return positions, about_y(np.pi - tilt)


def planar_joints(times: np.ndarray) -> np.ndarray:
    """
    Joint angles (N, 2) in rad of the arm as it draws.

    The elbow swings from one side to the other, so that the pen touches the reach limit in passing; stretches
    again, while the pen runs along the limit; and folds to the first side. Made from joint angles, the path
    can be reached exactly.

    """
    shoulder = -0.9 + 2.0 * smoothstep(times / DRAWING_DURATION)
    elbow = 1.2 - 2.2 * smoothstep(times / 4.0)
    elbow += 1.0 * smoothstep((times - 4.0) / 3.0) + 1.3 * smoothstep((times - 11.0) / 4.0)
    return np.stack([shoulder, elbow], axis=1)


def planar_pose(q: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """
    Positions (N, 3) in m and quaternions (N, 4), x y z w, of the pen for joint angles (N, 2), in base_link.

    """
    first, second = q[:, 0], q.sum(axis=1)
    x = UPPER * np.cos(first) + FORE * np.cos(second)
    z = UPPER * np.sin(first) + FORE * np.sin(second)
    return np.stack([x, np.zeros_like(x), z], axis=1), about_y(-second)


def write_paths() -> None:
    """
    Write both pose paths.

    """
    times = weld_times()
    write_pose_csv(FOLDER / "nozzle_weld.csv", times, *weld_pose(smoothstep(times / WELD_DURATION)))
    times = np.linspace(0.0, DRAWING_DURATION, round(DRAWING_DURATION / KNOT_SPACING) + 1)
    write_pose_csv(FOLDER / "reach_limit.csv", times, *planar_pose(planar_joints(times)))


def rough(stack: str) -> str:
    """
    The text of demo_stack.yaml with a simulated arm that the controller does not know well.

    """
    head, mark, _ = stack.partition("    # The simulated arm is the one the controller knows;")
    assert mark, "demo_stack.yaml has lost the comment before its plant block"
    return f"# Written by make_demo.py: demo_stack.yaml with another plant block.\n#\n{head}{ROUGH_PLANT}"


def write_stacks() -> None:
    """
    Write demo_stack_rough.yaml.

    """
    text = (FOLDER / "demo_stack.yaml").read_text(encoding="utf-8")
    (FOLDER / "demo_stack_rough.yaml").write_text(rough(text), encoding="utf-8")


def write_companions() -> None:
    """
    Compute and write both companions, by the command a user has for it.

    """
    for stack, path in (("demo", "nozzle_weld"), ("planar", "reach_limit")):
        out = FOLDER / f"{path}_companion.csv"
        if code := main(["companion", str(FOLDER / f"{stack}_stack.yaml"), "--out", str(out)]):
            raise SystemExit(code)


if __name__ == "__main__":
    write_paths()
    write_companions()
    write_stacks()
