# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Arms whose figures were published: a 6-axis industrial arm, and the makers' kinematics of two open arms.

6-axis arm: parameters from Armstrong, Khatib & Burdick 1986 and Corke & Armstrong-Hélouvry, "A search for
consensus among model parameters reported for the PUMA 560 robot", ICRA 1994, pp. 1608-1613; results as
printed with four decimals in the regression tests of a public general-purpose kinematics and dynamics
toolbox. Tolerance: half of the last printed digit, 5e-5, unless a line says why not.

"""

from __future__ import annotations

import numpy as np
import pytest

from prioritized_tracking.core.arm import (
    build_arm,
    dynamics,
    forward_dynamics,
    frame_motion,
    friction_torque,
    inertia,
    inverse_dynamics,
)
from tests.arms import body, data_arm, joint

PRINTED = 5.001e-5
D = (0.0, 0.0, 0.15005, 0.4318, 0.0, 0.0)
A = (0.0, 0.4318, 0.0203, 0.0, 0.0, 0.0)
ALPHA = (np.pi / 2, 0.0, -np.pi / 2, np.pi / 2, -np.pi / 2, 0.0)
MASS = (0.0, 17.4, 4.8, 0.82, 0.34, 0.09)
COM = (
    (0.0, 0.0, 0.0), (-0.3638, 0.006, 0.2275), (-0.0203, -0.0141, 0.070), (0.0, 0.019, 0.0),
    (0.0, 0.0, 0.0), (0.0, 0.0, 0.032),
)  # fmt: skip
MOMENTS = (
    (0.0, 0.35, 0.0), (0.13, 0.524, 0.539), (0.066, 0.086, 0.0125), (1.8e-3, 1.3e-3, 1.8e-3),
    (0.3e-3, 0.4e-3, 0.3e-3), (0.15e-3, 0.15e-3, 0.04e-3),
)  # fmt: skip
MOTOR = np.array([200.0e-6, 200.0e-6, 200.0e-6, 33.0e-6, 33.0e-6, 33.0e-6])
GEAR = np.array([-62.6111, 107.815, -53.7063, 76.0364, 71.923, 76.686])
VISCOUS = np.array([1.48e-3, 0.817e-3, 1.38e-3, 71.2e-6, 82.6e-6, 36.7e-6])
COULOMB = np.array([0.395, 0.126, 0.132, 11.2e-3, 9.26e-3, 3.96e-3])
QN = np.array([0.0, np.pi / 4, np.pi, 0.0, np.pi / 4, 0.0])
V123 = np.array([1.0, 2.0, 3.0, 1.0, 2.0, 3.0])


def six_axis_urdf() -> str:
    """
    Return the arm; a standard Denavit-Hartenberg row is the joint, then a fixed step d, a, α to link i.

    Link 1 has an inertia but no mass in the source (it stands on its axis).

    """
    parts = ['<robot name="published"><link name="base"/>']
    for i in range(6):
        above = "base" if i == 0 else f"link{i}"
        limit = '<limit lower="-6.3" upper="6.3" effort="200" velocity="10"/>'
        parts += [
            f'<link name="turning{i + 1}"/>',
            joint(f"q{i + 1}", above, f"turning{i + 1}", limit=limit),
            body(f"link{i + 1}", MASS[i], COM[i], MOMENTS[i]),
            joint(f"dh{i + 1}", f"turning{i + 1}", f"link{i + 1}", kind="fixed", limit="",
                  xyz=(A[i], 0.0, D[i]), rpy=(ALPHA[i], 0.0, 0.0)),
        ]  # fmt: skip
    return "".join(parts) + "</robot>"


def six_axis(**settings):
    """
    Return the arm with its rotors, reflected: G² J_m.

    """
    return build_arm(six_axis_urdf(), rotor_inertia=GEAR**2 * MOTOR, **settings)


@pytest.fixture(scope="module")
def arm():
    """
    The arm without friction.

    """
    return six_axis()


def pose(arm, q, link):
    """
    Return position and Jacobian of a link in the base, and the data.

    """
    data = arm.data()
    R, p, J = np.zeros((3, 3)), np.zeros(3), np.zeros((6, arm.n))
    inertia(arm, data, np.asarray(q, dtype=float))
    frame_motion(arm, data, arm.frame_id(link), arm.frame_id(arm.root), R, p, J)
    return p, J, data


def test_position(arm):
    """
    Source: as above.

    """
    p, _, _ = pose(arm, QN, "link6")
    np.testing.assert_allclose(p, [0.5963, -0.1501, -0.01435], atol=PRINTED)


def test_gravity_torque(arm):
    """
    Source: as above.

    """
    data = arm.data()
    dynamics(arm, data, QN, np.zeros(6))
    np.testing.assert_allclose(data.g, [0.0, 31.6399, 6.0351, 0.0, 0.0283, 0.0], atol=PRINTED)


def test_inertia(arm):
    """
    Source: as above.

    """
    M = [
        [3.6594, -0.4044, 0.1006, -0.0025, 0.0, 0.0],
        [-0.4044, 4.4137, 0.3509, 0.0, 0.0024, 0.0],
        [0.1006, 0.3509, 0.9378, 0.0, 0.0015, 0.0],
        [-0.0025, 0.0, 0.0, 0.1925, 0.0, 0.0],
        [0.0, 0.0024, 0.0015, 0.0, 0.1713, 0.0],
        [0.0, 0.0, 0.0, 0.0, 0.0, 0.1941],
    ]
    data = arm.data()
    dynamics(arm, data, QN, np.zeros(6))
    np.testing.assert_allclose(data.M, M, atol=PRINTED)
    torque = [3.1500, 9.4805, 3.6189, 0.1901, 0.3519, 0.5823]
    np.testing.assert_allclose(data.M @ V123, torque, atol=PRINTED)


def test_coriolis_matrix(arm):
    """
    Source: as above; Christoffel symbols there too.

    """
    C = [
        [-0.1735, -2.0494, -0.1178, -0.0002, -0.0045, 0.0001],
        [0.6274, 1.1572, 1.9287, -0.0015, -0.0003, 0.0],
        [-0.3608, -0.7734, -0.0018, -0.0009, -0.0064, 0.0],
        [0.0011, 0.0005, -0.0001, 0.0002, 0.0002, -0.0001],
        [-0.0002, 0.0028, 0.0046, -0.0002, 0.0, 0.0],
        [0.0001, 0.0, 0.0, 0.0, 0.0, 0.0],
    ]
    data = arm.data()
    dynamics(arm, data, QN, V123)
    np.testing.assert_allclose(data.C, C, atol=PRINTED)


def test_cartesian_inertia(arm):
    """
    Source: as above; (J M⁻¹ Jᵀ)⁻¹ in base axes: the apparent inertia of the tool.

    """
    expected = [
        [17.2954, -2.7542, -9.6233, 0.0, 0.2795, 0.0],
        [-2.7542, 12.1909, 1.2459, -0.3254, -0.0703, -0.9652],
        [-9.6233, 1.2459, 13.3348, 0.0, 0.2767, 0.0],
        [0.0, -0.3254, 0.0, 0.1941, 0.0, 0.1941],
        [0.2795, -0.0703, 0.2767, 0.0, 0.1713, 0.0],
        [0.0, -0.9652, 0.0, 0.1941, 0.0, 0.5791],
    ]
    _, J, data = pose(arm, QN, "link6")
    np.testing.assert_allclose(np.linalg.inv(J @ np.linalg.solve(data.M, J.T)), expected, atol=PRINTED)


def test_manipulability(arm):
    """
    Source: as above; √det(J Jᵀ) of the whole, of translation and of rotation.

    """
    _, J, _ = pose(arm, QN, "link6")
    for rows, expected, half in ((J, 0.0786, 5e-5), (J[:3], 0.111181, 5e-7), (J[3:], 2.44949, 5e-6)):
        assert np.sqrt(np.linalg.det(rows @ rows.T)) == pytest.approx(expected, abs=half)


@pytest.mark.parametrize(
    ("a", "expected"),
    [
        (np.zeros(6), [29.1421, 56.5044, 16.3528, 1.2645, 1.1239, 0.5196]),
        (np.ones(6), [32.4952, 60.8670, 17.7436, 1.4545, 1.2991, 0.7138]),
    ],
)
def test_torque_with_friction(a, expected):
    """
    Source: as above, B G² q̇ + |G| T_c at q̇ = 1 rad/s, where tanh(1/0.02) is 1 to the last digit.

    """
    arm = six_axis(friction={"viscous": VISCOUS * GEAR**2, "coulomb": np.abs(GEAR) * COULOMB})
    torque = inverse_dynamics(arm, arm.data(), QN, np.ones(6), a)
    np.testing.assert_allclose(torque, expected, atol=PRINTED)


def test_forward_dynamics_with_friction():
    """
    Source: as above. Our Coulomb friction is smoothed: at 0.1 rad/s 1 − tanh(0.1/0.02) = 9e-5 is missing.

    """
    arm = six_axis(friction={"viscous": VISCOUS * GEAR**2, "coulomb": np.abs(GEAR) * COULOMB})
    v, tau = np.array([0.1, 0.2, 0.8, 0.2, 0.5, 1.0]), np.array([1.0, 3.2, 1.8, 0.1, 0.7, 4.6])
    expected = [-7.4102, -9.8432, -10.9694, -4.4314, -0.9881, 21.0228]
    found = forward_dynamics(arm, arm.data(), QN, v, tau)
    missing = arm.viscous * v + arm.coulomb - friction_torque(arm, v)
    assert missing[0] == pytest.approx(9.08e-5 * arm.coulomb[0], rel=1e-2)
    data = arm.data()
    inertia(arm, data, QN)
    np.testing.assert_allclose(found - np.linalg.solve(data.M, missing), expected, atol=PRINTED)
    np.testing.assert_allclose(found, expected, atol=1e-3)


# ---- kinematics by the makers' tables --------------------------------------------------------------


def row(theta: float, d: float, a: float, alpha: float, *, modified: bool = False) -> np.ndarray:
    """
    Return one Denavit-Hartenberg transform, standard or modified (Craig 1986).

    """

    def turn(angle, i, j):
        T = np.eye(4)
        T[i, i] = T[j, j] = np.cos(angle)
        T[i, j], T[j, i] = -np.sin(angle), np.sin(angle)
        return T

    def shift(x, z):
        T = np.eye(4)
        T[0, 3], T[2, 3] = x, z
        return T

    about_z, about_x = turn(theta, 0, 1) @ shift(0.0, d), turn(alpha, 1, 2) @ shift(a, 0.0)
    return about_x @ about_z if modified else about_z @ about_x


def in_base(arm, q, link):
    """
    Return the pose of a link in the root as a (4, 4) matrix.

    """
    data = arm.data()
    T, J = np.eye(4), np.zeros((6, arm.n))
    inertia(arm, data, q)
    frame_motion(arm, data, arm.frame_id(link), arm.frame_id(arm.root), T[:3, :3], T[:3, 3], J)
    return T


def test_ur5_kinematics():
    """
    Maker's table (standard DH). The URDF's base is turned by π about z; its fixed rotations are printed to 11
    digits.

    """
    d, a = (0.089159, 0.0, 0.0, 0.10915, 0.09465, 0.0823), (0.0, -0.425, -0.39225, 0.0, 0.0, 0.0)
    alpha = (np.pi / 2, 0.0, 0.0, np.pi / 2, -np.pi / 2, 0.0)
    arm = data_arm("ur5")
    for q in np.random.default_rng(0).uniform(-np.pi, np.pi, (50, 6)):
        table = np.diag([-1.0, -1.0, 1.0, 1.0])
        for i in range(6):
            table = table @ row(q[i], d[i], a[i], alpha[i])
        np.testing.assert_allclose(in_base(arm, q, "tool0"), table, atol=1e-10)


def test_panda_kinematics():
    """
    Maker's table (modified DH, Craig 1986), flange at 0.107 m.

    """
    d, a = (0.333, 0.0, 0.316, 0.0, 0.384, 0.0, 0.0), (0.0, 0.0, 0.0, 0.0825, -0.0825, 0.0, 0.088)
    alpha = (0.0, -np.pi / 2, np.pi / 2, np.pi / 2, -np.pi / 2, np.pi / 2, np.pi / 2)
    arm = data_arm("panda")
    home = np.array([0.0, -np.pi / 4, 0.0, -3 * np.pi / 4, 0.0, np.pi / 2, np.pi / 4])
    flange = in_base(arm, home, "panda_link8")[:3, 3]
    np.testing.assert_allclose(flange, [0.3068906, 0.0, 0.5902821], atol=5e-8)
    for q in np.random.default_rng(0).uniform(arm.lower, arm.upper, (50, 7)):
        table = np.eye(4)
        for i in range(7):
            table = table @ row(q[i], d[i], a[i], alpha[i], modified=True)
        table = table @ row(0.0, 0.107, 0.0, 0.0)
        np.testing.assert_allclose(in_base(arm, q, "panda_link8"), table, atol=1e-10)
