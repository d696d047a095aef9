# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Arms for the tests: planar chains with closed forms, and the open models of example-robot-data.

"""

from __future__ import annotations

import functools
import importlib.metadata
import xml.etree.ElementTree as ElementTree
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from scipy.spatial.transform import Rotation

from prioritized_tracking.core.arm import Arm, build_arm, dynamics, frame_motion, inertia

# ---- planar chains ---------------------------------------------------------------------------------


def body(name: str, mass: float, com: Sequence[float], inertia: Sequence[float]) -> str:
    """
    Return a link with principal moments (kg·m², about its centre of mass).

    """
    xx, yy, zz = inertia
    x, y, z = com
    return (
        f'<link name="{name}"><inertial><origin xyz="{x!r} {y!r} {z!r}"/><mass value="{mass!r}"/>'
        f'<inertia ixx="{xx!r}" iyy="{yy!r}" izz="{zz!r}" ixy="0" ixz="0" iyz="0"/></inertial></link>'
    )


def joint(
    name: str,
    parent: str,
    child: str,
    *,
    kind: str = "revolute",
    xyz: Sequence[float] = (0.0, 0.0, 0.0),
    rpy: Sequence[float] = (0.0, 0.0, 0.0),
    axis: Sequence[float] = (0.0, 0.0, 1.0),
    limit: str = '<limit lower="-3" upper="3" effort="200" velocity="5"/>',
    more: str = "",
) -> str:
    """
    Return a joint.

    """
    words = [" ".join(repr(float(x)) for x in triple) for triple in (xyz, rpy, axis)]
    return (
        f'<joint name="{name}" type="{kind}"><parent link="{parent}"/><child link="{child}"/>'
        f'<origin xyz="{words[0]}" rpy="{words[1]}"/><axis xyz="{words[2]}"/>{limit}{more}</joint>'
    )


def planar_urdf(
    lengths: Sequence[float] = (1.0, 1.0),
    masses: Sequence[float] | None = None,
    coms: Sequence[float] | None = None,
    inertias: Sequence[float] | None = None,
    *,
    kind: str = "revolute",
    effort: float = 200.0,
    velocity: float = 5.0,
    limit: float = 3.0,
) -> str:
    """
    Return a chain in the xy plane: links base, link1 … linkN, tip; joints j1 … jN about z.

    Left out: masses 1 kg, centres of mass half way, inertias of uniform rods m l²/12.

    """
    n = len(lengths)
    masses = [1.0] * n if masses is None else masses
    coms = [0.5 * length for length in lengths] if coms is None else coms
    rods = [m * length**2 / 12.0 for m, length in zip(masses, lengths, strict=True)]
    inertias = rods if inertias is None else inertias
    bound = f'<limit lower="{-limit!r}" upper="{limit!r}" effort="{effort!r}" velocity="{velocity!r}"/>'
    parts = ['<robot name="planar"><link name="base"/>']
    for i in range(n):
        moments = (0.5 * inertias[i], 0.5 * inertias[i], inertias[i])
        parts.append(body(f"link{i + 1}", masses[i], (coms[i], 0.0, 0.0), moments))
        above, start = ("base", 0.0) if i == 0 else (f"link{i}", lengths[i - 1])
        parts.append(joint(f"j{i + 1}", above, f"link{i + 1}", kind=kind, xyz=(start, 0.0, 0.0), limit=bound))
    parts.append('<link name="tip"/>')
    parts.append(joint("tip_joint", f"link{n}", "tip", kind="fixed", xyz=(lengths[-1], 0.0, 0.0), limit=""))
    return "".join(parts) + "</robot>"


def planar_arm(lengths: Sequence[float] = (1.0, 1.0), **changes: object) -> Arm:
    """
    Return that chain with gravity along −y; `changes` go to `planar_urdf` or to `build_arm`.

    """
    shape = ("masses", "coms", "inertias", "kind", "effort", "velocity", "limit")
    text = planar_urdf(lengths, **{key: value for key, value in changes.items() if key in shape})
    rest = {"gravity": (0.0, -9.81, 0.0)} | {k: v for k, v in changes.items() if k not in shape}
    return build_arm(text, **rest)


# ---- example-robot-data ----------------------------------------------------------------------------

# Fixed-base arms: file, joints held besides those that mimic others.
DATA_ARMS: dict[str, tuple[str, dict[str, float]]] = {
    "kinova": ("kinova_description/robots/kinova.urdf", {}),
    "panda": ("panda_description/urdf/panda.urdf", {"panda_finger_joint1": 0.02}),
    "so100": ("so_arm_description/urdf/so100.urdf", {}),
    "so101": ("so_arm_description/urdf/so101.urdf", {}),
    "talos_left_arm": ("talos_data/robots/talos_left_arm.urdf", {}),
    "two_dof": ("asr_twodof_description/urdf/TwoDofs.urdf", {}),
    "ur3": ("ur_description/urdf/ur3_robot.urdf", {}),
    "ur3_gripper": ("ur_description/urdf/ur3_gripper.urdf", {}),
    "ur5": ("ur_description/urdf/ur5_robot.urdf", {}),
    "ur5_gripper": ("ur_description/urdf/ur5_gripper.urdf", {}),
    "ur10": ("ur_description/urdf/ur10_robot.urdf", {}),
    "xarm7": ("xarm_description/urdf/xarm7.urdf", {}),
    "z1": ("z1_description/urdf/z1.urdf", {"jointGripper": -0.5}),
}


@functools.cache
def data_folder() -> Path:
    """
    Return the folder of robots in the installed package example-robot-data.

    """
    for file in importlib.metadata.files("example-robot-data") or ():
        if file.as_posix().endswith(DATA_ARMS["panda"][0]):
            return Path(str(file.locate())).resolve().parents[2]
    raise FileNotFoundError("example-robot-data carries no robots")


def all_data_urdfs() -> list[str]:
    """
    Return every URDF of the package, relative to `data_folder`.

    """
    return sorted(path.relative_to(data_folder()).as_posix() for path in data_folder().rglob("*.urdf"))


def data_urdf(name: str) -> str:
    """
    Return the text of an arm of `DATA_ARMS`, or of a file of `all_data_urdfs`.

    """
    return (data_folder() / DATA_ARMS.get(name, (name,))[0]).read_text(encoding="utf-8")


def data_arm(name: str, **settings: object) -> Arm:
    """
    Return an arm of `DATA_ARMS` (e.g. "panda", "ur5", "kinova"); `settings` go to `build_arm`.

    """
    return build_arm(data_urdf(name), source=name, **{"locked": DATA_ARMS[name][1], **settings})


def followers(text: str) -> dict[str, float]:
    """
    Return position 0 for every joint of a URDF that mimics another one.

    """
    joints = ElementTree.fromstring(text).findall("joint")
    moving = [element for element in joints if element.get("type") != "fixed"]
    return {element.get("name", ""): 0.0 for element in moving if element.find("mimic") is not None}


# ---- the same text for other engines ---------------------------------------------------------------


def bare_urdf(text: str, locked: dict[str, float], *, mujoco: bool = False) -> str:
    """
    Return the URDF without meshes and extensions, and with locked joints made fixed where they are held.

    Independent of the package: ElementTree and SciPy rotations only. With `mujoco`, compiler options are
    added that keep every link and every inertia as stated.

    """
    source = ElementTree.fromstring(text)
    robot = ElementTree.Element("robot", name="bare")
    for element in source:
        if element.tag not in ("link", "joint"):
            continue
        for child in list(element):
            if child.tag in ("visual", "collision", "mimic", "dynamics", "safety_controller"):
                element.remove(child)
        if element.tag == "joint" and element.get("name") in locked:
            _fix(element, locked[element.get("name", "")])
        robot.append(element)
    if mujoco:
        options = {"discardvisual": "true", "inertiafromgeom": "false"}
        options |= dict.fromkeys(("fusestatic", "strippath", "balanceinertia"), "false")
        ElementTree.SubElement(ElementTree.SubElement(robot, "mujoco"), "compiler", options)
    return ElementTree.tostring(robot, encoding="unicode")


def _fix(element: ElementTree.Element, position: float) -> None:
    """
    Turn a joint element into a fixed one, displaced by `position`.

    """
    origin, axis = element.find("origin"), element.find("axis")
    rpy, xyz = (
        np.array([float(word) for word in ("0 0 0" if origin is None else origin.get(key, "0 0 0")).split()])
        for key in ("rpy", "xyz")
    )
    words = "1 0 0" if axis is None else axis.get("xyz", "1 0 0")
    along = np.array([float(word) for word in words.split()])
    along /= np.linalg.norm(along)
    turn = Rotation.from_euler("xyz", rpy)
    if element.get("type") == "prismatic":
        xyz = xyz + turn.apply(along * position)
    elif element.get("type") != "fixed":
        turn = turn * Rotation.from_rotvec(along * position)
    for child in list(element):
        if child.tag not in ("parent", "child"):
            element.remove(child)
    element.set("type", "fixed")
    place = {"xyz": xyz, "rpy": turn.as_euler("xyz")}
    attributes = {key: " ".join(repr(float(x)) for x in value) for key, value in place.items()}
    ElementTree.SubElement(element, "origin", attributes)


# ---- states and finite differences -----------------------------------------------------------------


def random_states(arm: Arm, count: int, seed: int = 0) -> list[tuple[np.ndarray, np.ndarray]]:
    """
    Return random positions within the limits (±π where there are none) and velocities within ±2 (rad/s).

    """
    rng = np.random.default_rng(seed)
    low = np.where(np.isfinite(arm.lower), arm.lower, -np.pi)
    high = np.where(np.isfinite(arm.upper), arm.upper, np.pi)
    return [(rng.uniform(low, high), rng.uniform(-2.0, 2.0, arm.n)) for _ in range(count)]


# ---- the model at a state ------------------------------------------------------------------------------

EXACT = 1e-11  # relative: two implementations of the same sums


def motion(arm, q, frame, base, v=None):
    """
    Return R, p, J and the data after `dynamics` (with v) or `inertia`.

    """
    data = arm.data()
    R, p, J = np.zeros((3, 3)), np.zeros(3), np.zeros((6, arm.n))
    if v is None:
        inertia(arm, data, q)
    else:
        dynamics(arm, data, q, v)
    frame_motion(arm, data, arm.frame_id(frame), arm.frame_id(base), R, p, J)
    return R, p, J, data


def close(ours, theirs, scale=None):
    """
    Compare relative to the largest entry.

    """
    size = max(float(np.abs(theirs).max(initial=0.0)), 1e-3) if scale is None else scale
    np.testing.assert_allclose(ours, theirs, rtol=0.0, atol=EXACT * size)
