# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Serial chains of any number of joints and stacks of any number of tasks, to see how times grow.

Hand-over bands are far away, so that there is one branch, whatever the chain.

"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np

import prioritized_tracking as pt
from prioritized_tracking.core.cycle import Controller

_REACH, _MASS = 1.4, 18.0  # m, kg of a whole chain: the size of an arm that stands on a table
_AXES = ("0 0 1", "0 1 0", "0 1 0", "1 0 0")
_FAR = "[1.0e6, 1.0e7]"  # kg or kg·m²

_CHARTS = (
    "chart: position",
    "chart: euler, sequence: zyz",
    "chart: euler, sequence: xyz",
    "chart: cylindrical, point: [9.0, 0.0, 0.0]",
)


def chain_urdf(n: int) -> str:
    """
    A chain of n equal rods along z, with joint axes that change from one to the next.

    """
    length, mass = _REACH / n, _MASS / n
    across, along = mass * (3 * 0.05**2 + length**2) / 12.0, 0.5 * mass * 0.05**2
    inertia = f'ixx="{across}" iyy="{across}" izz="{along}" ixy="0" ixz="0" iyz="0"'
    parts = ['<robot name="chain"><link name="link0"/>']
    for i in range(1, n + 1):
        parts.append(
            f'<link name="link{i}"><inertial><origin xyz="0 0 {length / 2}"/><mass value="{mass}"/>'
            f"<inertia {inertia}/></inertial></link>"
            f'<joint name="joint{i}" type="revolute"><parent link="link{i - 1}"/><child link="link{i}"/>'
            f'<origin xyz="0 0 {length if i > 1 else 0.2}"/><axis xyz="{_AXES[(i - 1) % 4]}"/>'
            '<limit lower="-2.8" upper="2.8" velocity="2" effort="500"/></joint>'
        )
    return "".join(parts) + "</robot>"


def tool_tasks(n: int, count: int) -> list[str]:
    """
    Tasks of 3 rows each on the last link, its pose described over and over.

    """
    return [f"{_CHARTS[i % len(_CHARTS)]}, frame: link{n}, reference: link{n}" for i in range(count)]


def link_tasks(n: int, count: int) -> list[str]:
    """
    Tasks of 1 row each, on different links, so that each of them owns something.

    """
    return [
        f"chart: position, axes: '{'xyz'[i % 3]}', frame: link{link}, reference: link{link}"
        for i, link in enumerate(range(n - count + 1, n + 1))
    ]


def load_chain(folder: Path, n: int, tasks: list[str]) -> Controller:
    """
    A chain of n joints with these tasks and a posture, holding where it is, ready for a cycle.

    Parameters
    ----------
    folder : for the URDF and the stack file.
    tasks : chart, frame and reference of each, as the entries of a stack file; the reference holds.

    """
    (folder / f"chain{n}.urdf").write_text(chain_urdf(n), encoding="utf-8")
    common = f"stiffness: 480.0, damping: 30.0, handover: {_FAR}"
    names = [f"task{i}" for i in range(len(tasks))]
    channels = sorted({keys.rpartition(" ")[2] for keys in tasks})
    text = "\n".join(
        [
            "/**:",
            "  ros__parameters:",
            "    rate: 1000.0",
            "    robot:",
            f"      urdf: chain{n}.urdf",
            f"      rotor_inertia: [{', '.join(['0.3'] * n)}]",
            f"    priority: [{', '.join([*names, 'posture'])}]",
            "    tasks:",
            *(f"      {name}: {{{keys}, {common}}}" for name, keys in zip(names, tasks, strict=True)),
            "      posture: {chart: posture, reference: rest}",
            "    references:",
            *(f"      {channel}: {{kind: pose, source: hold}}" for channel in channels),
            "      rest: {kind: joints, source: hold}",
        ]
    )
    path = folder / f"chain{n}_{len(tasks)}.yaml"
    path.write_text(text + "\n", encoding="utf-8")
    controller = pt.load(path)
    controller.activate(0.0, bent(n), np.zeros(n))
    return controller


def bent(n: int) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    """
    Joint positions (n,), rad, of a chain that is bent as much as a seven-axis arm at work, whatever n.

    """
    return np.array([(4.0 / n if n > 7 else 0.6) * (1.0 + 0.5 * math.cos(2.0 * i)) for i in range(n)])
