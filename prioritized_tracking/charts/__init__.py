# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Charts: sets of coordinates of one motion, and the registry that finds them.

"""

from __future__ import annotations

from importlib.metadata import entry_points

from prioritized_tracking.charts.base import Chart
from prioritized_tracking.charts.cylindrical import Cylindrical
from prioritized_tracking.charts.joints import Joints, Posture
from prioritized_tracking.charts.position import Position
from prioritized_tracking.charts.rotation import Euler, RotationVector
from prioritized_tracking.charts.surface import Cylinder, Plane

#: Entry-point group under which plug-in packages register charts of their own.
ENTRY_POINT_GROUP = "prioritized_tracking.charts"

#: The charts of this package; setup.py registers the same names.
BUILT_IN: dict[str, type[Chart]] = {
    "position": Position,
    "rotation_vector": RotationVector,
    "euler": Euler,
    "plane": Plane,
    "cylinder": Cylinder,
    "cylindrical": Cylindrical,
    "posture": Posture,
    "joints": Joints,
}


def registry() -> dict[str, type[Chart]]:
    """
    All charts by name: the built-in ones and those of installed plug-in packages.

    A plug-in can add a name but not replace a built-in one: a stack file must mean the same
    everywhere.

    """
    charts = dict(BUILT_IN)
    for entry in entry_points(group=ENTRY_POINT_GROUP):
        if entry.name not in charts:
            charts[entry.name] = entry.load()
    return charts
