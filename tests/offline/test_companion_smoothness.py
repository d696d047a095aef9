# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The banded systems of the whole-path problem against dense ones, its cost against closed forms.

"""

import numpy as np
import pytest

from prioritized_tracking.offline.companion.smoothness import Ends, Smoothness

N_JOINTS = 2
TURN = np.array([2.0 * np.pi, 0.0])
ALL_ENDS = {
    "free": Ends(rest=False, winding=None),
    "rest": Ends(rest=True, winding=None),
    "closed": Ends(rest=False, winding=np.zeros(N_JOINTS)),
    "winding": Ends(rest=False, winding=TURN),
}
UNEVEN = np.cumsum([0.0, 0.1, 0.1, 0.05, 0.05, 0.1, 0.2, 0.1, 0.1, 0.07, 0.1])


def dense(smoothness, width):
    """
    The matrix of the cost by polarisation of the cost itself: no banded storage, no order of knots.

    """
    basis = np.eye(width).reshape(width, -1, N_JOINTS)
    zero = smoothness.gradient(np.zeros_like(basis[0]))
    return np.array([(smoothness.gradient(x) - zero).ravel() for x in basis]).T


@pytest.mark.parametrize("name", ALL_ENDS)
@pytest.mark.parametrize("times", [UNEVEN, np.linspace(0.0, 1.0, 12)])
def test_banded_solution_is_the_dense_one(name, times):
    smoothness = Smoothness(times, N_JOINTS, ALL_ENDS[name])
    rng = np.random.default_rng(0)
    J = rng.normal(size=(smoothness.count, 3, N_JOINTS))
    blocks = J.transpose(0, 2, 1) @ J
    right = rng.normal(size=(smoothness.count, N_JOINTS))
    width = smoothness.count * N_JOINTS
    matrix = 1e-6 * dense(smoothness, width)
    for k in range(smoothness.count):
        matrix[N_JOINTS * k : N_JOINTS * (k + 1), N_JOINTS * k : N_JOINTS * (k + 1)] += blocks[k]
    got = smoothness.solve(blocks, 1e-6, right)
    expected = np.linalg.solve(matrix, right.ravel()).reshape(right.shape)
    np.testing.assert_allclose(got, expected, rtol=1e-13 * np.linalg.cond(matrix), atol=1e-12)


@pytest.mark.parametrize("name", ALL_ENDS)
def test_gradient_is_that_of_the_cost(name):
    smoothness = Smoothness(UNEVEN, N_JOINTS, ALL_ENDS[name])
    rng = np.random.default_rng(1)
    q, step = rng.normal(size=(2, smoothness.count, N_JOINTS))
    # the cost is quadratic: central differences are exact but for rounding
    slope = (smoothness.cost(q + step) - smoothness.cost(q - step)) / 2.0
    assert slope == pytest.approx(2.0 * np.sum(smoothness.gradient(q) * step), rel=1e-9)


def test_a_cubic_has_its_third_derivative():
    """
    q = a t³ on uneven knots: third derivative 6 a everywhere, also by divided differences.

    The stencils overlap; the length given to each is a third of its span, so that they add up to the
    path without its ends.

    """
    smoothness = Smoothness(UNEVEN, 1, Ends(rest=False, winding=None))
    a = 0.7
    spans = (UNEVEN[3:] - UNEVEN[:-3]).sum() / 3.0
    assert smoothness.cost(a * UNEVEN[:, None] ** 3) == pytest.approx((6.0 * a) ** 2 * spans, rel=1e-9)
    # below the cubic nothing is rough: rounding of 1e-16 / 0.05³ squared
    assert smoothness.cost(3.0 + 2.0 * UNEVEN[:, None] - UNEVEN[:, None] ** 2) < 1e-20


def test_rest_makes_moving_ends_dear():
    times = np.linspace(0.0, 1.0, 51)
    moving, still = times[:, None], (times**4 * (35 - 84 * times + 70 * times**2 - 20 * times**3))[:, None]
    free, rest = (Smoothness(times, 1, Ends(rest=rest, winding=None)) for rest in (False, True))
    assert free.cost(moving) < 1e-15
    assert rest.cost(moving) > 100.0 * rest.cost(still)
    # ends of the septic are at rest to the third derivative: continuing it by rest adds h · O(h²) only
    assert rest.cost(still) == pytest.approx(free.cost(still), rel=0.05)


def test_a_steady_turn_of_a_closed_path_is_smooth():
    times = UNEVEN
    smoothness = Smoothness(times, N_JOINTS, ALL_ENDS["winding"])
    steady = np.outer(times / times[-1], TURN)[:-1]
    assert smoothness.cost(steady) < 1e-16
    assert Smoothness(times, N_JOINTS, ALL_ENDS["closed"]).cost(steady) > 1.0
