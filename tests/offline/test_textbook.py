# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The whole cycle in plain NumPy, which speed is measured against, gives the torque of the controller.

"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import prioritized_tracking as pt
from prioritized_tracking.offline.bench.cases import reference_source, state_at, states_by_branches
from prioritized_tracking.offline.textbook_step import TextbookController

ROOT = Path(__file__).parents[2]

#: N·m. Two computations of q̇_r agree to about 1e-13 rad/s; over the twin's step of 1e-6 s and times an
#: inertia of a few kg·m² that is less than 1e-5.
AGREES = 1e-5

OTHER_TASKS = {
    "priority": ["shell", "tip", "turn", "roll", "flange", "posture"],
    "tasks.seam_radius": None,
    "tasks.seam_height": None,
    "tasks.seam_along": None,
    "tasks.tool_zyz": None,
    "tasks.tool_xyz": None,
    "tasks.shell.chart": "cylinder",
    "tasks.shell.point": [0.6, 0.0, 0.3],
    "tasks.shell.axis": [1.0, 0.1, 0.0],
    "tasks.shell.radius": 0.1,
    "tasks.tip.chart": "position",
    "tasks.tip.axes": "yz",
    "tasks.tip.force": [3.0, -2.0],
    "tasks.turn.chart": "rotation_vector",
    "tasks.roll.chart": "euler",
    "tasks.roll.sequence": "yxz",
    "tasks.flange.chart": "joints",
    "tasks.flange.names": ["flange_turn", "base_turn"],
    "tasks.flange.reference": "elbow",
    "tasks.flange.stiffness": 100.0,
    "tasks.flange.damping": 10.0,
    "feedback_floor": 2.0,
    "robot.friction.viscous": [2.0, 2.0, 1.0, 1.0, 0.5, 0.3, 0.2],
    "robot.friction.coulomb": [1.0, 1.0, 0.8, 0.5, 0.5, 0.3, 0.2],
}
for _name in ("shell", "tip", "turn", "roll"):
    OTHER_TASKS |= {f"tasks.{_name}.frame": "probe", f"tasks.{_name}.reference": "weld"}
    OTHER_TASKS |= {f"tasks.{_name}.stiffness": 200.0, f"tasks.{_name}.damping": 20.0}

HOLDS = {"references.drawing.source": "hold", "references.drawing.file": None} | {
    "references.stretch": None,
    "references.stretch.kind": "joints",
    "references.stretch.source": "hold",
}


def load(name, parameters):
    return pt.load(ROOT / "config" / f"{name}_stack.yaml", parameters=parameters)


@pytest.mark.parametrize(
    ("make", "numbers"),
    [
        (lambda: reference_source().load(), {1, 2, 3}),
        (lambda: load("planar", {}), {1, 2}),
        (lambda: load("demo", OTHER_TASKS), {1, 2, 3}),
        (lambda: load("planar", HOLDS), {1}),
    ],
    ids=["reference", "planar", "other charts", "holds"],
)
def test_gives_the_torque_of_the_controller(make, numbers):
    """Outside the bands and inside; states with more branches than are followed would differ."""
    controller = make()
    book = TextbookController(controller)
    found = states_by_branches(controller, 400)
    assert set(found) >= numbers
    for states in found.values():
        for t, q, v in states[:12]:
            command = controller.evaluate(t, q, v)
            if not command.pruned:
                np.testing.assert_allclose(book.evaluate(t, q, v), command.torque, atol=AGREES)


def test_a_driver_that_adds_gravity():
    controller = load("planar", {"robot.gravity_by_driver": True})
    t, q, v = state_at(controller, 3.0)
    expected = controller.evaluate(t, q, v).torque
    np.testing.assert_allclose(TextbookController(controller).evaluate(t, q, v), expected, atol=AGREES)
