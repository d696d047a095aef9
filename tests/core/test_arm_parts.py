# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What belongs to an arm besides its links: payload, friction, gravity, changed masses, every kind of joint.

"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from prioritized_tracking.core.arm import (
    build_arm,
    forward_dynamics,
    friction_torque,
    inverse_dynamics,
)
from tests.arms import (
    body,
    close,
    joint,
    motion,
    planar_arm,
    planar_urdf,
    random_states,
)

# ---- payload, friction, gravity, changes -----------------------------------------------------------


def composite(m, c, moment, m2, c2, moment2):
    """
    Return mass, centre and inertia (about it, about z) of two bodies on the x axis.

    By the parallel axis theorem.

    """
    total = m + m2
    centre = (m * c + m2 * c2) / total
    return total, centre, moment + m * (c - centre) ** 2 + moment2 + m2 * (c2 - centre) ** 2


def test_payload_equals_the_composite_body():
    """
    A body at the tip, against a second link with the figures worked out by hand.

    """
    payload = {"frame": "tip", "mass": 2.5, "com": [0.1, 0.0, 0.0], "inertia": [0.02, 0.03, 0.04]}
    arm = planar_arm((0.7, 0.5), masses=(3.0, 1.5), payload=payload)
    mass, centre, moment = composite(1.5, 0.25, 1.5 * 0.25 / 12.0, 2.5, 0.6, 0.04)
    by_hand = planar_arm(
        (0.7, 0.5), masses=(3.0, mass), coms=(0.35, centre), inertias=(3.0 * 0.49 / 12.0, moment)
    )
    for q, v in random_states(arm, 5):
        for a in (np.zeros(2), v[::-1]):
            close(
                inverse_dynamics(arm, arm.data(), q, v, a), inverse_dynamics(by_hand, by_hand.data(), q, v, a)
            )


def test_payload_axes_are_those_of_its_frame():
    """
    A turned frame: the largest moment and the com along the frame's own x axis, seen about the joint's z.

    """
    turned = (
        planar_urdf((1.0,))
        .replace('rpy="0.0 0.0 0.0"', f'rpy="0.0 {np.pi / 2!r} 0.0"')
        .replace('xyz="0.0 0.0 0.0" rpy', 'xyz="0 0 0" rpy')
    )
    payload = {"frame": "tip", "mass": 2.0, "com": [0.5, 0.0, 0.2], "inertia": [0.3, 0.2, 0.1]}
    arm = build_arm(turned, payload=payload)
    turn = Rotation.from_euler("xyz", (0.0, np.pi / 2, 0.0)).as_matrix()
    assert np.allclose(motion(arm, np.zeros(1), "tip", "link1")[0], turn)
    bare = build_arm(turned)
    gain = motion(arm, np.zeros(1), "tip", "link1")[3].M - motion(bare, np.zeros(1), "tip", "link1")[3].M
    com = np.array([1.0, 0.0, 0.0]) + turn @ [0.5, 0.0, 0.2]
    moment = (turn @ np.diag([0.3, 0.2, 0.1]) @ turn.T)[2, 2]
    assert gain[0, 0] == pytest.approx(moment + 2.0 * (com[0] ** 2 + com[1] ** 2), rel=1e-12)


def test_payload_of_no_mass_is_none():
    """
    The stack file's default payload changes nothing.

    """
    zero = [0.0, 0.0, 0.0]
    arm = planar_arm(payload={"frame": "tip", "mass": 0.0, "com": zero, "inertia": zero})
    assert arm.recipe.payloads == ()


def test_friction():
    """
    viscous q̇ + coulomb tanh(q̇/0.02), and forward dynamics the inverse of inverse dynamics with it.

    """
    arm = planar_arm(friction={"viscous": [0.5, 0.2], "coulomb": [2.0, 0.0]}, rotor_inertia=[0.1, 0.2])
    found = friction_torque(arm, np.array([0.02, -3.0]))
    np.testing.assert_allclose(found, [0.01 + 2.0 * np.tanh(1.0), -0.6], rtol=1e-14)
    for q, v in random_states(arm, 5):
        tau = inverse_dynamics(arm, arm.data(), q, v, np.array([3.0, -4.0]))
        np.testing.assert_allclose(forward_dynamics(arm, arm.data(), q, v, tau), [3.0, -4.0], rtol=1e-10)
    plain = planar_arm(rotor_inertia=[0.1, 0.2])
    extra = inverse_dynamics(arm, arm.data(), q, v, v) - inverse_dynamics(plain, plain.data(), q, v, v)
    np.testing.assert_allclose(extra, friction_torque(arm, v), atol=1e-12)


def test_turned_gravity_equals_a_turned_base():
    """
    Gravity is given in root axes: an arm on the wall is an upright arm under turned gravity.

    """
    turn = Rotation.from_euler("xyz", (0.3, -0.7, 0.2))
    text = planar_urdf((0.7, 0.5))
    wall = text.replace(
        '<link name="base"/>',
        '<link name="world"/><link name="base"/>'
        + joint("wall", "world", "base", kind="fixed", rpy=(0.3, -0.7, 0.2)),
    )
    upright, mounted = build_arm(text, gravity=turn.inv().apply([0.0, 0.0, -9.81])), build_arm(wall)
    for q, v in random_states(upright, 5):
        torque = inverse_dynamics(mounted, mounted.data(), q, v, v)
        close(inverse_dynamics(upright, upright.data(), q, v, v), torque)


def test_weightless():
    """
    Zero gravity is allowed.

    """
    arm = planar_arm(gravity=(0, 0, 0))
    _, _, _, data = motion(arm, np.ones(2), "tip", "base", np.ones(2))
    assert np.all(data.g == 0.0)


def test_changes_scale_masses_link_by_link():
    """
    Twice the mass of all links is twice M and g, without the rotors; one link alone by superposition.

    """
    arm = planar_arm((0.7, 0.5), rotor_inertia=[0.1, 0.2])
    q, v = np.array([0.4, -1.0]), np.array([1.0, 2.0])
    _, _, _, data = motion(arm, q, "tip", "base", v)
    twice = arm.with_changes(mass_scale=[2.0] * len(arm.frames))
    _, _, _, double = motion(twice, q, "tip", "base", v)
    rotors = np.diag([0.1, 0.2])
    close(double.M - rotors, 2.0 * (data.M - rotors))
    close(double.g, 2.0 * data.g)
    first = motion(arm.with_changes(mass_scale={"link1": 2.0}), q, "tip", "base", v)[3]
    second = motion(arm.with_changes(mass_scale={"link2": 2.0}), q, "tip", "base", v)[3]
    close(first.g + second.g, 3.0 * data.g)
    again = motion(twice.with_changes(mass_scale={"link1": 0.5, "link2": 0.5}), q, "tip", "base", v)[3]
    close(again.M, data.M)


def test_changes_add_a_payload_and_replace_the_rest():
    """
    The plant carries its payload besides the controller's; the original arm stays what it was.

    """
    carried = {"frame": "tip", "mass": 1.0}
    arm = planar_arm(payload=carried)
    same = {"rotor_inertia": [0.5, 0.5], "gravity": (0.0, -1.0, 0.0)}
    plant = arm.with_changes(payload=carried, friction={"coulomb": [1.0, 1.0]}, **same)
    expected = planar_arm(payload={**carried, "mass": 2.0}, **same)
    q, v = np.array([0.4, -1.0]), np.array([1.0, 2.0])
    _, _, _, data = motion(plant, q, "tip", "base", v)
    _, _, _, wanted = motion(expected, q, "tip", "base", v)
    close(data.M, wanted.M)
    close(data.g, wanted.g)
    assert np.array_equal(plant.coulomb, [1.0, 1.0])
    assert np.array_equal(arm.coulomb, [0.0, 0.0])
    assert arm.gravity[1] == -9.81
    assert arm.with_changes().warnings == arm.warnings


@pytest.mark.parametrize("axis", [(1, 0, 0), (0, 1, 0), (0, 0, 1), (0, 0, -1), (1, 2, 3)])
@pytest.mark.parametrize("kind", ["revolute", "prismatic", "continuous"])
def test_every_axis_and_kind(kind, axis):
    """
    Pose of the child against the formula of the URDF format, non-unit axes normalised.

    """
    limit = '<limit lower="-2" upper="2" effort="10" velocity="1"/>'
    text = (
        '<robot name="one"><link name="a"/>'
        + body("b", 1.0, (0.1, 0.2, 0.3), (0.1, 0.1, 0.1))
        + joint("j", "a", "b", kind=kind, xyz=(0.1, 0.2, 0.3), rpy=(0.4, 0.5, 0.6), axis=axis, limit=limit)
        + "</robot>"
    )
    arm = build_arm(text)
    R, p, _, _ = motion(arm, np.array([0.7]), "b", "a")
    turn, along = Rotation.from_euler("xyz", (0.4, 0.5, 0.6)), np.array(axis) / np.linalg.norm(axis)
    if kind == "prismatic":
        close(R, turn.as_matrix())
        close(p, turn.apply(0.7 * along) + [0.1, 0.2, 0.3])
    else:
        close(R, (turn * Rotation.from_rotvec(0.7 * along)).as_matrix())
        close(p, np.array([0.1, 0.2, 0.3]))
    assert bool(arm.continuous[0]) == (kind == "continuous")
    assert np.isinf(arm.upper[0]) == (kind == "continuous")
