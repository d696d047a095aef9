# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Default hand-over bands, against a naive version of their definition.

"""

from __future__ import annotations

import numpy as np
import scipy.linalg
from scipy.stats import qmc

from prioritized_tracking.charts import Cylinder, Euler, Joints, Plane, Position, RotationVector
from prioritized_tracking.core import arm as arms
from prioritized_tracking.core import bands
from prioritized_tracking.core.smooth import smoothstep
from tests.arms import data_arm, planar_arm


def jacobians(arm, frame, charts):
    """Whitened task Jacobians over the first 256 Sobol points, computed afresh."""
    low = np.where(np.isfinite(arm.lower), arm.lower, -2 * np.pi)
    high = np.where(np.isfinite(arm.upper), arm.upper, 2 * np.pi)
    data = arm.data()
    R, p, J = np.eye(3), np.zeros(3), np.zeros((6, arm.n))
    for point in qmc.Sobol(arm.n, scramble=False).random_base2(8):
        arms.inertia(arm, data, low + point * (high - low))
        arms.frame_motion(arm, data, arm.frame_id(frame), arm.frame_id(arm.root), R, p, J)
        found = []
        for chart in charts:
            m = len(chart.coordinates)
            if isinstance(chart, RotationVector):
                rows = np.eye(6)[3:]
            else:
                rows = np.zeros((m, 6))
                chart.evaluate(R, p, np.zeros(m), rows, np.eye(m))
            found.append(rows @ J @ np.linalg.inv(np.linalg.cholesky(data.M)).T)
        yield found


def naive_medians(arm, frame, charts):
    """Median of the largest 1/λ of nominal rank, each chart in the null space of what is above it."""
    samples = list(jacobians(arm, frame, charts))
    medians = []
    for i in range(len(charts)):
        alone = np.array([np.sort(np.linalg.svd(s[i], compute_uv=False) ** 2)[::-1] for s in samples])
        rank = int(np.sum(np.median(alone, axis=0) > 1e-9))
        values = []
        for s, own in zip(samples, alone, strict=True):
            null = np.eye(arm.n)
            for above in s[:i]:
                A = above @ null
                _, sigma, Vt = np.linalg.svd(A)
                scale = np.linalg.svd(above, compute_uv=False)[0]
                keep = sigma**2 > 1e-6 * sigma[0] ** 2 if sigma[0] ** 2 > 1e-9 * scale**2 else sigma > np.inf
                taken = Vt[: len(sigma)][keep]
                null = null - taken.T @ taken
            lam = np.linalg.svd(s[i] @ null, compute_uv=False) ** 2
            regular = lam[rank - 1] > 1e-6 * lam[0] and lam[0] > 1e-9 * own[0]
            with np.errstate(divide="ignore"):  # exactly singular at the middle of the joint space
                values.append(1.0 / (lam[rank - 1] if regular else own[rank - 1]))
        medians.append(np.median(values))
    return medians


def test_equals_the_naive_definition_on_a_planar_arm():
    """One task, and one below it that loses a rank."""
    arm = planar_arm((0.5, 0.4, 0.3))
    charts = [Position(axes="x"), Position(axes="xy")]
    seen = bands.survey(arm, [(c, "tip", arm.root) for c in charts])
    np.testing.assert_allclose(seen.apparent, naive_medians(arm, "tip", charts), rtol=1e-6)
    assert seen.rank == (1, 2)
    assert seen.total_rank == 2


def test_equals_the_naive_definition_on_seven_axes():
    """The demo's kind of stack on an open arm: the last chart takes the value of the chart alone."""
    arm = data_arm("panda", rotor_inertia=[0.1] * 7)
    charts = [Cylinder(radius=0.3), Plane(), Position(axes="xy"), Euler(sequence="zyz"), RotationVector()]
    seen = bands.survey(arm, [(c, "panda_link8", arm.root) for c in charts])
    np.testing.assert_allclose(seen.apparent, naive_medians(arm, "panda_link8", charts), rtol=1e-6)
    assert seen.rank == (1, 1, 2, 3, 3)
    assert seen.total_rank == 6


def test_the_order_of_commands_makes_no_difference():
    """The samples go with the joints of the model, not with the order they are commanded in."""
    names = [f"panda_joint{i}" for i in range(1, 8)]
    found = []
    for joints in (names, names[::-1], names[3:] + names[:3]):
        arm = data_arm("panda", rotor_inertia=[0.1] * 7, joints=joints)
        charts = [(chart, "panda_link8", arm.root) for chart in (Position(), Euler(sequence="zyz"))]
        found.append(bands.survey(arm, charts).apparent)
    np.testing.assert_allclose(found[1:], found[:1] * 2, rtol=1e-9)


def test_a_joint_chart_completes_the_count():
    """Six directions of the tool and one joint: seven."""
    arm = data_arm("panda", rotor_inertia=[0.1] * 7)
    elbow = Joints(names=["panda_joint3"])
    elbow.bind(arm.joints, (False,) * 7)
    charts = [
        (Position(), "panda_link8", arm.root),
        (RotationVector(), "panda_link8", arm.root),
        (elbow, "", ""),
    ]
    assert bands.survey(arm, charts).total_rank == 7


def test_a_coordinate_nothing_moves_has_no_rank():
    """The height of a planar arm."""
    arm = planar_arm((0.5, 0.4))
    seen = bands.survey(arm, [(Position(axes="z"), "tip", arm.root)])
    assert seen.rank == (0,)
    assert np.isinf(seen.apparent[0])


def test_the_band_is_ten_to_a_hundred_times_the_median():
    """And hardly any of the survey's own states is inside it where the arm is regular."""
    arm = planar_arm((0.5, 0.4, 0.3))
    pen = Position(axes="xy")
    apparent = bands.survey(arm, [(pen, "tip", arm.root)]).apparent[0]
    low, high = bands.default_band(apparent)
    assert low == 10.0 * apparent
    assert high == 100.0 * apparent
    inside = 0
    for (J_hat,) in jacobians(arm, "tip", [pen]):
        weakest = scipy.linalg.eigvalsh(J_hat @ J_hat.T)[0]
        share = smoothstep((np.log(high) + np.log(max(weakest, 1e-300))) / np.log(high / low))
        inside += 0.0 < share < 1.0
    assert inside <= 0.1 * bands.SAMPLES
