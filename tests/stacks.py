# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Controllers built by hand for tests of the law.

"""

from __future__ import annotations

import numpy as np
from scipy.spatial.transform import Rotation

from prioritized_tracking.charts import Cylinder, Euler, Plane, Position
from prioritized_tracking.core.channels import Channel
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.core.references import JointHold, JointPath, PosePath
from prioritized_tracking.core.stack import PostureTask, Stack, Task
from tests.arms import data_arm, planar_arm


def task(
    name,
    chart,
    frame,
    base,
    *,
    stiffness=800.0,
    damping=100.0,
    handover=(50.0, 500.0),
    reference="tool",
    **rest,
):
    """A task with the same gain for each coordinate."""
    m = len(chart.coordinates)
    return Task(
        name=name, chart=chart, frame=frame, base=base, reference=reference, stiffness=np.full(m, stiffness),
        damping=np.full(m, damping), handover=handover, force=rest.pop("force", np.zeros(m)), **rest,
    )  # fmt: skip


def controller(arm, tasks, *, tool=None, joints=None, base="base", **settings):
    """A controller with a posture at the end, a pose channel 'tool' and a joint channel 'joints'."""
    posture = PostureTask(
        name="posture", reference="joints", stiffness=320.0, damping=settings.pop("posture_damping", 40.0)
    )
    floor = settings.pop("feedback_floor", 0.0)
    stack = Stack(
        tasks=tuple(tasks), posture=posture, claim_speed=0.6 * arm.velocity_limit, feedback_floor=floor
    )
    leader = "tool" if tool is not None and joints is not None else "joints"
    channels = {
        "tool": Channel(path=tool, kind="pose", base=base, leader="tool"),
        "joints": Channel(path=joints, kind="joints", base="", leader=leader),
    }
    return Controller(arm, stack, channels, **settings)


def circle(center, radius, duration=4.0, count=41):
    """A pose path round a circle in the xy plane, at rest at both ends, the tool rocking on the way."""
    z = np.linspace(0.0, 1.0, count)
    smooth = z**4 * (35 - 84 * z + 70 * z**2 - 20 * z**3)
    angle = 2 * np.pi * smooth
    positions = np.column_stack(
        [center[0] + radius * np.cos(angle), center[1] + radius * np.sin(angle), np.full(count, center[2])]
    )
    turned = Rotation.from_rotvec(np.outer(0.5 * np.sin(angle), [0.3, 0.9, 0.1]))
    return PosePath(duration * z, positions, turned.as_quat())


def planar(**settings):
    """Three planar links; the tip's position over the posture, no joint path that agrees."""
    arm = planar_arm((0.5, 0.4, 0.3), **settings.pop("arm", {}))
    z = np.linspace(0.0, 1.0, 21)
    smooth = z**4 * (35 - 84 * z + 70 * z**2 - 20 * z**3)
    joints = JointPath(3.0 * z, np.outer(1 - smooth, [0.4, 0.9, 0.5]) + np.outer(smooth, [0.9, 0.2, 0.1]))
    pen = task("pen", Position(axes="xy"), "tip", "base", handover=(0.5, 50.0))
    return controller(arm, [pen], tool=circle((0.6, 0.3, 0.0), 0.2), joints=joints, **settings)


#: A comfortable posture of the 7-axis arm, rad.
REST = np.array([0.0, -0.785, 0.0, -2.356, 0.0, 1.571, 0.785])


def seven_axes(**settings):
    """A 7-axis open arm with surface, position and two Euler charts."""
    arm = data_arm("panda", rotor_inertia=[0.1] * 7)
    frame, base = "panda_link8", arm.root
    tasks = [
        task("radius", Cylinder(radius=0.35), frame, base),
        task("height", Plane(point=(0.0, 0.0, 0.5)), frame, base),
        task("along", Position(axes="xy"), frame, base),
        task("zyz", Euler(sequence="zyz"), frame, base, stiffness=80.0, damping=10.0, handover=(5.0, 50.0)),
        task("xyz", Euler(sequence="xyz"), frame, base, stiffness=80.0, damping=10.0, handover=(5.0, 50.0)),
    ]
    return controller(
        arm, tasks, tool=circle((0.35, 0.0, 0.5), 0.1), joints=JointHold(REST), base=base, **settings
    )
