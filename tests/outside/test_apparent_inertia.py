# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The apparent inertia a controller reports, against published and closed-form figures.

1/λ of the hierarchy is the inertia a task feels: 1/(uᵀ J M⁻¹ Jᵀ u) along a free direction (Khatib 1995),
and for a task below others the same with the motion of the others blocked. So a single coordinate below
the five other ones of a pose feels the diagonal element of the Cartesian inertia (J M⁻¹ Jᵀ)⁻¹ itself,
which is in print.

"""

from __future__ import annotations

import numpy as np
import pytest

from prioritized_tracking.charts.position import Position
from prioritized_tracking.charts.rotation import Euler, RotationVector
from prioritized_tracking.core.arm import frame_motion, inertia
from prioritized_tracking.core.channels import Channel
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.core.stack import PostureTask, Stack, Task
from tests.arms import data_arm, planar_arm, random_states
from tests.outside.test_published_arms import PRINTED, QN, six_axis

WIDE = (1e5, 1e6)  # kg or kg·m²: everything below is owned whole


def task(chart, frame, base, name="", handover=WIDE):
    """
    A task that holds a frame where it is.

    """
    m = len(chart.coordinates)
    return Task(
        name=name or "".join(chart.coordinates), chart=chart, frame=frame, base=base, reference="hold",
        stiffness=np.full(m, 100.0), damping=np.full(m, 10.0), handover=handover, force=np.zeros(m),
    )  # fmt: skip


def evaluate(arm, q, tasks, posture_damping=40.0):
    """
    Command and controller of a stack of pose tasks over a posture, all holding at q.

    """
    posture = PostureTask(name="posture", reference="joints", stiffness=320.0, damping=posture_damping)
    stack = Stack(tasks=tuple(tasks), posture=posture, claim_speed=arm.velocity_limit)
    channels = {
        "hold": Channel(path=None, kind="pose", base=arm.root, leader="hold"),
        "joints": Channel(path=None, kind="joints", base="", leader="joints"),
    }
    controller = Controller(arm, stack, channels)
    return controller.evaluate(0.0, q, np.zeros(arm.n)), controller


@pytest.mark.parametrize(
    ("degrees", "expected", "half_digit"),
    [(90.0, 4.0 / 3.0, 1e-12), (60.0, 1.527778, 5e-7), (30.0, 3.083333, 5e-7), (5.0, 77.543556, 5e-7),
     (1.0, 1915.9148, 5e-5)],
)  # fmt: skip
@pytest.mark.parametrize("axis", ["x", "y"])
def test_tip_along_the_second_link(degrees, expected, half_digit, axis):
    """
    Khatib 1995: uniform rods of 1 kg and 1 m; the arm is turned so that its second link lies along the
    axis.

    """
    bend = np.radians(degrees)
    q = np.array([(0.0 if axis == "x" else 0.5 * np.pi) - bend, bend])
    command, _ = evaluate(planar_arm((1.0, 1.0)), q, [task(Position(axes=axis), "tip", "base")])
    report = command.tasks[axis]
    assert report.apparent_inertia == pytest.approx(expected, abs=half_digit)
    assert report.share == 1.0
    assert command.share_sum == pytest.approx(2.0, abs=1e-12)


def test_tip_in_the_heaviest_direction():
    """
    Of a task with two coordinates the largest over its directions is reported: the top eigenvalue of Λ,
    here by the closed form of the two-link arm (J and M of unit rods).

    """
    for q2 in np.radians([20.0, 75.0, 140.0]):
        q = np.array([0.7, q2])
        c1, s1, c12, s12 = np.cos(q[0]), np.sin(q[0]), np.cos(q.sum()), np.sin(q.sum())
        J = np.array([[-s1 - s12, -s12], [c1 + c12, c12]])
        M = np.array([[5.0 / 3.0 + np.cos(q2), 1.0 / 3.0 + 0.5 * np.cos(q2)], [0.0, 1.0 / 3.0]])
        M[1, 0] = M[0, 1]
        heaviest = np.linalg.eigvalsh(np.linalg.inv(J @ np.linalg.inv(M) @ J.T))[-1]
        command, _ = evaluate(planar_arm((1.0, 1.0)), q, [task(Position(axes="xy"), "tip", "base")])
        assert command.tasks["xy"].apparent_inertia == pytest.approx(heaviest, rel=1e-12)


PUBLISHED = {"x": 17.2954, "y": 12.1909, "z": 13.3348}  # kg


@pytest.mark.parametrize("axis", sorted(PUBLISHED))
def test_published_cartesian_inertia(axis):
    """
    Armstrong, Khatib & Burdick 1986 with Corke & Armstrong-Hélouvry 1994 (see test_published_arms): the
    diagonal of (J M⁻¹ Jᵀ)⁻¹ in translation, felt by one axis below the other two and the orientation.

    """
    arm = six_axis()
    others = "".join(a for a in "xyz" if a != axis)
    charts = [RotationVector(), Position(axes=others), Position(axes=axis)]
    command, _ = evaluate(arm, QN, [task(chart, "link6", "base") for chart in charts])
    assert command.tasks[axis].apparent_inertia == pytest.approx(PUBLISHED[axis], abs=PRINTED)
    assert command.tasks["posture"].share == pytest.approx(0.0, abs=1e-12)


def test_published_rotational_block():
    """
    As above: the orientation below all of the position feels the rotational block; its largest
    eigenvalue, from the printed digits (each moves it by no more than half a digit times the norm of a
    matrix of ones, 3).

    """
    block = np.array([[0.1941, 0.0, 0.1941], [0.0, 0.1713, 0.0], [0.1941, 0.0, 0.5791]])
    charts = [Position(axes="xyz"), RotationVector()]
    command, _ = evaluate(six_axis(), QN, [task(chart, "link6", "base", chart.unit) for chart in charts])
    found = command.tasks["rad"].apparent_inertia
    assert found == pytest.approx(np.linalg.eigvalsh(block)[-1], abs=3.0 * PRINTED)


def zyz_axes(R):
    """
    E of ZYZ in base axes (Diebel 2006), straight from the matrix.

    """
    first = np.arctan2(R[1, 2], R[0, 2])
    return np.column_stack([[0.0, 0.0, 1.0], [-np.sin(first), np.cos(first), 0.0], R[:, 2]])


@pytest.mark.parametrize(("name", "frame"), [("ur10", "tool0"), ("panda", "panda_link8")])
def test_a_failing_chart_feels_heavier_by_its_validity(name, frame):
    """
    Definition: rows are scaled by c, so 1/λ grows by 1/c². Against the plain (J M⁻¹ Jᵀ)⁻¹ with E from a
    table.

    """
    arm = data_arm(name)
    data, R, p, J = arm.data(), np.zeros((3, 3)), np.zeros(3), np.zeros((6, arm.n))
    seen = []
    for q, _ in random_states(arm, 60, seed=3):
        command, _ = evaluate(arm, q, [task(Euler(sequence="zyz"), frame, arm.root, "angles", (1e9, 1e10))])
        c = command.tasks["angles"].validity
        seen.append(c)
        if c < 0.05:
            continue
        inertia(arm, data, q)
        frame_motion(arm, data, arm.frame_id(frame), arm.frame_id(arm.root), R, p, J)
        rows = zyz_axes(R).T @ J[3:]
        heaviest = 1.0 / np.linalg.eigvalsh(rows @ np.linalg.solve(data.M, rows.T))[0]
        assert command.tasks["angles"].apparent_inertia == pytest.approx(heaviest / c**2, rel=1e-9)
    assert min(seen) < 0.5
    assert max(seen) == 1.0


def test_a_shared_direction_shows_in_share_and_inertia():
    """
    Inside its band a direction is owned in part: share S(log position), inertia that of the owned
    directions of the heavier branch; below the band all, above it nothing. Tip mass 3.083333 kg at 30° as
    above.

    """
    q, mass = np.radians([-30.0, 30.0]), 3.083333
    for low, high, expected in ((4.0, 40.0, 1.0), (1.0, 3.0, 0.0), (1.0, 10.0, None), (2.0, 200.0, None)):
        z = np.clip(np.log(high / mass) / np.log(high / low), 0.0, 1.0)
        share = z**3 * (10.0 + z * (6.0 * z - 15.0))
        assert expected in (None, share)
        tip = task(Position(axes="x"), "tip", "base", handover=(low, high))
        command, _ = evaluate(planar_arm((1.0, 1.0)), q, [tip])
        assert command.tasks["x"].share == pytest.approx(share, abs=1e-6)
        assert command.tasks["posture"].share == pytest.approx(2.0 - share, abs=1e-6)
        heavier = mass if share > 0.5 else np.inf
        assert command.tasks["x"].apparent_inertia == pytest.approx(heavier, rel=1e-6)
