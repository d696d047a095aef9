# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The inverse and the damped inverse of a Jacobian, as the comparison laws use them.

Sources: Nakamura & Hanafusa 1986; Wampler 1986; the pseudo-inverse of Penrose 1955. The figures near the
stretched two-link arm were computed from the closed form of its Jacobian; half of the last printed digit
is asked for.

"""

from __future__ import annotations

import numpy as np
import pytest

from prioritized_tracking.charts.position import Position
from prioritized_tracking.core import laws
from prioritized_tracking.core.channels import Channel
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.core.laws import DampedInverse, InverseJacobian, damped_inverse
from prioritized_tracking.core.references import PoseSample
from prioritized_tracking.core.stack import PostureTask, Stack, Task
from tests.arms import planar_arm

STRETCHED = np.array([0.0, np.radians(1.0)])  # rad: almost
INWARD = np.array([-0.1, 0.0])  # m/s


class Moving:
    """
    A pose reference at a point, with a velocity: as far from its frame as the test wants.

    """

    duration = 0.0

    def __init__(self, p: np.ndarray, v: np.ndarray) -> None:
        self.p, self.V = np.array([*p, 0.0]), np.array([*v, 0.0, 0.0, 0.0, 0.0])

    def sample(self, s: float, rate: float = 1.0, acceleration: float = 0.0) -> PoseSample:
        """
        The same velocity everywhere.

        """
        return PoseSample(R=np.eye(3), p=self.p, V=self.V, A=np.zeros(6))


def stretched(q: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """
    Tip (2,) and Jacobian (2, 2) of two links of 1 m, in closed form.

    """
    a, b = q[0], q[0] + q[1]
    p = np.array([np.cos(a) + np.cos(b), np.sin(a) + np.sin(b)])
    return p, np.array([[-p[1], -np.sin(b)], [p[0], np.cos(b)]])


def reference_velocity(law: str, q: np.ndarray, v: np.ndarray, offset: tuple[float, float] = (0.0, 0.0)):
    """
    q̇_r of a law at q on a two-link arm whose tip should move with velocity v, `offset` ahead of it.

    """
    arm = planar_arm((1.0, 1.0))
    tip = Task(
        name="tip", chart=Position(axes="xy"), frame="tip", base="base", reference="path",
        stiffness=np.full(2, 80.0), damping=np.full(2, 10.0), handover=(10.0, 100.0), force=np.zeros(2),
    )  # fmt: skip
    stack = Stack(tasks=(tip,), posture=None, claim_speed=arm.velocity_limit)
    path = Moving(stretched(q)[0] + offset, v)
    channel = Channel(path=path, kind="pose", base="base", leader="path")
    controller = Controller(arm, stack, {"path": channel}, law=law)
    # The law wants all three axes of the frame's position: z, which the arm cannot move, is met already.
    return controller.evaluate(0.0, q, np.zeros(2)).joint_velocity_reference


@pytest.mark.parametrize(
    ("law", "damping", "expected", "half_digit"),
    [
        ("inverse_jacobian", None, (-5.729, 11.459), 5e-4),
        ("damped_inverse", 0.01, (-2.168623, 4.338227), 5e-7),
        ("damped_inverse", 0.05, (-0.135878, 0.272799), 5e-7),
    ],
)
def test_laws_near_the_stretched_arm(law, damping, expected, half_digit, monkeypatch):
    """
    Two unit links at q2 = 1°, the tip asked to come in at 0.1 m/s; the whole way through a controller.

    """
    if damping is not None:
        monkeypatch.setattr(laws, "DAMPED_INVERSE", damping)
    found = reference_velocity(law, STRETCHED, INWARD)
    np.testing.assert_allclose(found, expected, atol=half_digit)


def test_the_damping_in_use():
    """
    The third figure above is the one of the law as it comes.

    """
    assert laws.DAMPED_INVERSE == 0.05


@pytest.mark.parametrize("law", ["inverse_jacobian", "damped_inverse"])
def test_position_errors_are_claimed_at_the_rate_of_the_gains(law):
    """
    By the law itself: q̇_r = J⁻¹ (v_d + k_p (x_d − x)), k_p = 80/10 1/s, here 1 cm ahead along y; numpy
    inverts.

    """
    q = np.array([0.4, 1.1])
    J = stretched(q)[1]
    wanted = INWARD + 8.0 * np.array([0.0, 0.01])
    inverse = np.linalg.inv(J)
    if law == "damped_inverse":
        inverse = J.T @ np.linalg.inv(J @ J.T + 0.05**2 * np.eye(2))
    found = reference_velocity(law, q, INWARD, (0.0, 0.01))
    np.testing.assert_allclose(found, inverse @ wanted, rtol=1e-12)


def make_law(kind):
    """
    A law without tasks, for its inverse alone.

    """
    arm = planar_arm((1.0, 1.0))
    posture = PostureTask(name="posture", reference="none", stiffness=0.0, damping=1.0)
    return kind(arm, Stack(tasks=(), posture=posture, claim_speed=arm.velocity_limit))


def rotations(rng, n):
    """
    Random orthogonal (n, n).

    """
    return np.linalg.qr(rng.standard_normal((n, n)))[0]


@pytest.mark.parametrize("shape", [(2, 2), (3, 2), (2, 4), (6, 6), (6, 7)])
def test_gains_by_singular_value(shape):
    """
    Source as above: along a singular pair the inverse has the gain 1/σ, the damped one σ/(σ² + λ²) <=
    1/(2λ).

    Matrices with chosen singular values from 1 down to 1e-3; condition 1e3 (1e6 in J Jᵀ) costs that much
    of 1e-16.

    """
    rng = np.random.default_rng(sum(shape))
    plain, damped = make_law(InverseJacobian), make_law(DampedInverse)
    k = min(shape)
    for _ in range(20):
        U, V = rotations(rng, shape[0])[:, :k], rotations(rng, shape[1])[:, :k]
        sigma = np.geomspace(1.0, 10.0 ** rng.uniform(-3.0, -1.0), k)
        J = (U * sigma) @ V.T
        np.testing.assert_allclose(plain.inverse(J), (V / sigma) @ U.T, atol=1e-11, rtol=1e-11)
        gain = sigma / (sigma**2 + 0.05**2)
        np.testing.assert_allclose(damped.inverse(J), (V * gain) @ U.T, atol=1e-11, rtol=1e-11)
        assert np.linalg.norm(damped.inverse(J), 2) <= 1.0 / (2.0 * 0.05) * (1.0 + 1e-12)


@pytest.mark.parametrize("damping", [1e-3, 0.01, 0.05, 0.3])
def test_the_largest_damped_gain(damping):
    """
    σ/(σ² + λ²) is largest at σ = λ, where it is 1/(2λ); it vanishes with σ instead of growing.

    """

    def gain(sigma):
        return float(damped_inverse(np.array([[sigma, 0.0]]), damping)[0, 0])

    assert gain(damping) == pytest.approx(1.0 / (2.0 * damping), rel=1e-14)
    for sigma in damping * np.geomspace(1e-6, 1e6, 49):
        assert gain(sigma) == pytest.approx(sigma / (sigma**2 + damping**2), rel=1e-13)
        assert gain(sigma) <= gain(damping) * (1.0 + 1e-15)


def test_the_plain_inverse_explodes_and_then_gives_up():
    """
    Penrose 1955: the pseudo-inverse is not continuous where rank is lost: 1/σ up to the rank decision,
    then 0.

    This is the step that the hand-over of the prioritized law does without.

    """
    law = make_law(InverseJacobian)
    gains = [float(law.inverse(np.diag([1.0, sigma]))[1, 1]) for sigma in (1e-2, 1e-6, 1e-12, 1e-17)]
    np.testing.assert_allclose(gains[:3], [1e2, 1e6, 1e12], rtol=1e-12)
    assert gains[3] == 0.0
