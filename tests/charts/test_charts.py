# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
One list of properties, run over every registered chart.

"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pinocchio as pin
import pytest
from scipy.integrate import solve_ivp
from scipy.spatial.transform import Rotation

from prioritized_tracking.charts import registry
from prioritized_tracking.charts.base import ChartWork
from prioritized_tracking.charts.joints import joint_error
from prioritized_tracking.charts.rotation import SEQUENCES

REGISTRY = registry()

#: Reference that charts with relative coordinates are evaluated against.
REFERENCE = Rotation.from_rotvec([0.3, -0.2, 0.5]).as_matrix()


@dataclass(frozen=True)
class Case:
    """A chart with parameters, and poses (R, p) at or next to which it fails."""

    name: str
    parameters: dict
    degenerate: tuple = ()

    def make(self):
        """The chart."""
        return REGISTRY[self.name](**self.parameters)


def rotated(*rotvec):
    """A rotation by a rotation vector (rad)."""
    return Rotation.from_rotvec(rotvec).as_matrix()


def euler_degenerate(sequence):
    """Poses at which a sequence fails: its middle angle at 0 and π, or ±π/2."""
    middles = (0.0, np.pi) if sequence[0] == sequence[2] else (0.5 * np.pi, -0.5 * np.pi)
    return tuple(
        (Rotation.from_euler(sequence.upper(), [0.4, middle, -0.7]).as_matrix(), np.zeros(3))
        for middle in middles
    )


TILTED = {"point": [0.1, -0.2, 0.3], "axis": [1.0, 2.0, -0.5]}
AXIS = np.array([1.0, 2.0, -0.5]) / np.linalg.norm([1.0, 2.0, -0.5])
ON_AXIS = tuple((np.eye(3), np.array([0.1, -0.2, 0.3]) + s * AXIS) for s in (0.0, 0.7))
#: Turned by π − 1e-9 and by exactly π from the reference.
HALF_TURNS = tuple((rotated(0.0, 0.0, angle) @ REFERENCE, np.zeros(3)) for angle in (np.pi - 1e-9, np.pi))

CASES = [
    *(Case("position", {"axes": axes}) for axes in ("xyz", "xz", "y")),
    Case("rotation_vector", {}, HALF_TURNS),
    *(Case("euler", {"sequence": s}, euler_degenerate(s)) for s in SEQUENCES),
    Case("plane", {"point": [0.0, 0.1, 0.2], "normal": [0.0, 3.0, 4.0]}),
    Case("cylinder", {**TILTED, "radius": 0.4}, ON_AXIS),
    Case(
        "cylinder",
        {"point": [0.0, 0.0, 0.0], "axis": [0.0, 0.0, -2.0], "radius": 0.05},
        ((np.eye(3), np.zeros(3)),),
    ),
    Case("cylindrical", {**TILTED, "near_axis": [0.05, 0.2]}, ON_AXIS),
    Case("cylindrical", {"axis": [1.0, 0.0, 0.0], "near_axis": [0.05, 0.2]}, ((np.eye(3), np.zeros(3)),)),
]
JOINT_CHARTS = {"posture", "joints"}

every_chart = pytest.mark.parametrize(
    "case", CASES, ids=lambda c: f"{c.name}-{'-'.join(map(str, c.parameters.values()))}"
)


def evaluated(chart, R, p):
    """(x, rows, rate, validity) of a chart at a pose, fresh arrays."""
    m = len(chart.coordinates)
    if not chart.relative:
        x, rows, rate = np.zeros(m), np.zeros((m, 6)), np.eye(m)
        return x, rows, rate, chart.evaluate(R, p, x, rows, rate)
    work = ChartWork.allocate(m, 6)
    validity = chart.track(R, p, REFERENCE, np.zeros(3), np.zeros(6), work)
    # ω = J_l(x̃) x̃˙; pinocchio's Jexp3 is the right Jacobian, J_l(x̃) = J_r(−x̃)
    return work.x.copy(), work.rows.copy(), pin.Jexp3(-work.x), validity


def random_poses(rng, count):
    """Poses all over the place."""
    for R in Rotation.random(count, random_state=rng).as_matrix():
        yield R, rng.uniform(-1.0, 1.0, 3)


def moved(R, p, V, t):
    """The pose after time t of constant (v, ω) in base axes."""
    return Rotation.from_rotvec(t * V[3:]).as_matrix() @ R, p + t * V[:3]


def test_every_registered_chart_is_in_the_list():
    """A new chart must come with a case."""
    assert {case.name for case in CASES} | JOINT_CHARTS == set(REGISTRY)


@every_chart
def test_rows_times_velocity_are_rate_times_coordinate_velocity(case):
    """rows · V = rate · ẋ. Source: central differences of second order."""
    chart, rng, h = case.make(), np.random.default_rng(0), 1e-5
    good = 0
    for R, p in random_poses(rng, 300):
        V = rng.normal(size=6)
        _, rows, rate, validity = evaluated(chart, R, p)
        if validity < 0.05:
            continue
        good += 1
        ahead, back = (evaluated(chart, *moved(R, p, V, t))[0] for t in (h, -h))
        step = np.zeros(len(ahead))
        chart.difference(ahead, back, step)
        np.testing.assert_allclose(rate @ step / (2 * h), rows @ V, atol=1e-7)
    assert good > 30


@every_chart
def test_rows_and_rate_stay_bounded_everywhere(case):
    """Also exactly at, and next to, the poses where the chart fails."""
    chart, rng = case.make(), np.random.default_rng(1)
    poses = list(random_poses(rng, 200))
    for R, p in case.degenerate:
        poses.append((R, p))
        poses += [moved(R, p, rng.normal(size=6), 10.0**-k) for k in range(1, 17)]
    for R, p in poses:
        x, rows, rate, validity = evaluated(chart, R, p)
        assert np.all(np.isfinite(x))
        assert np.abs(rows).max() <= 1.0 + 1e-12  # rows are unit vectors or parts of them
        assert np.all(np.isfinite(rate))
        assert np.abs(rate).max() <= 6.0  # radius at most |p| + |point|; J_l at most π/2
        assert 0.0 <= validity <= 1.0


@every_chart
def test_all_rows_have_one_unit(case):
    """Rows act on translation only, or on rotation only."""
    chart, rng = case.make(), np.random.default_rng(2)
    other = slice(3, 6) if chart.unit == "m" else slice(0, 3)
    for R, p in random_poses(rng, 50):
        assert np.all(evaluated(chart, R, p)[1][:, other] == 0.0)


@every_chart
def test_validity_is_zero_before_the_chart_fails(case):
    """At each degenerate pose and all around it (1e-3 m, 1e-3 rad)."""
    chart, rng = case.make(), np.random.default_rng(3)
    for R, p in case.degenerate:
        for _ in range(20):
            direction = rng.normal(size=6)
            assert evaluated(chart, *moved(R, p, direction / np.linalg.norm(direction), 1e-3))[3] == 0.0


@every_chart
def test_charts_without_a_degenerate_pose_never_fade(case):
    """Validity 1 all over the place; the others must fade somewhere and be good somewhere."""
    chart, rng = case.make(), np.random.default_rng(4)
    validities = [evaluated(chart, R, p)[3] for R, p in random_poses(rng, 400)]
    assert max(validities) == 1.0
    if not case.degenerate:
        assert min(validities) == 1.0


@every_chart
def test_validity_is_twice_continuously_differentiable(case):
    """
    Along a line into the degenerate pose: changes of the second difference shrink with the step.

    """
    chart = case.make()
    direction = np.array([0.3, -0.1, 0.2, 0.5, 0.6, 0.62])
    for R, p in case.degenerate:
        changes, values = [], []
        for steps in (1500, 3000):
            times, dt = np.linspace(0.0, 2.0, steps + 1, retstep=True)
            validity = np.array([evaluated(chart, *moved(R, p, direction, t))[3] for t in times])
            second = np.diff(validity, 2) / dt**2
            changes.append(np.abs(np.diff(second)).max())
            values.append(validity)
        assert values[0].min() == 0.0
        assert values[0].max() == 1.0, "the line must lead through the whole fade"
        assert changes[1] < 0.7 * changes[0]


@every_chart
def test_rank_and_rate_are_regular_where_the_chart_is_fully_valid(case):
    """Where c = 1, ẋ_d = rate⁻¹ rows V exists and the rows have full rank."""
    chart, rng = case.make(), np.random.default_rng(5)
    for R, p in random_poses(rng, 200):
        _, rows, rate, validity = evaluated(chart, R, p)
        if validity == 1.0:
            assert np.linalg.cond(rate) < 100.0
            assert np.linalg.matrix_rank(rows, tol=1e-3) == len(rows)


@every_chart
def test_difference_equals_the_integral_of_the_coordinate_velocity(case):
    """
    ∫ rate⁻¹ rows V dt along a motion is the difference of the coordinates, up to whole turns.

    Source: scipy's DOP853 at 1e-11.

    """
    chart, rng = case.make(), np.random.default_rng(6)
    done = 0
    for R, p in random_poses(rng, 200):
        V = rng.normal(size=6) * 0.5

        def velocity(t, _, R=R, p=p, V=V):
            _, rows, rate, _ = evaluated(chart, *moved(R, p, V, t))
            return np.linalg.solve(rate, rows @ V)

        if min(evaluated(chart, *moved(R, p, V, t))[3] for t in np.linspace(0, 0.5, 20)) < 0.2:
            continue
        m = len(chart.coordinates)
        integral = solve_ivp(velocity, (0.0, 0.5), np.zeros(m), method="DOP853", rtol=1e-11, atol=1e-12).y[
            :, -1
        ]
        before, after = evaluated(chart, R, p)[0], evaluated(chart, *moved(R, p, V, 0.5))[0]
        step, residual = np.zeros(m), np.zeros(m)
        chart.difference(after, before, step)
        chart.difference(step, integral, residual)
        np.testing.assert_allclose(residual, 0.0, atol=1e-9)
        done += 1
        if done == 8:
            return
    assert done >= 3


@every_chart
def test_differences_wrap_where_coordinates_are_angles(case):
    """Within [−π, π], and whole turns make no difference; lengths do not wrap."""
    chart, rng = case.make(), np.random.default_rng(7)
    m, angular = len(chart.coordinates), np.array(chart.angular)
    for _ in range(50):
        x, x_d = rng.uniform(-3.0, 3.0, (2, m))
        turns = rng.integers(-3, 4, m)
        plain, turned = np.zeros(m), np.zeros(m)
        chart.difference(x, x_d, plain)
        chart.difference(x + 2 * np.pi * turns * angular, x_d, turned)
        np.testing.assert_allclose(turned, plain, atol=1e-12)
        assert np.all(np.abs(plain[angular]) <= np.pi + 1e-12)
        np.testing.assert_array_equal(plain[~angular], (x - x_d)[~angular])


@every_chart
def test_agreement_gives_exactly_the_reference_motion(case):
    """At the reference pose both sides have the same coordinates, and relative charts pass V_d on."""
    chart, rng = case.make(), np.random.default_rng(8)
    m = len(chart.coordinates)
    for R, p in random_poses(rng, 60):
        V, work = rng.normal(size=6), ChartWork.allocate(m, 6)
        validity = chart.track(R, p, R, p, V, work)
        np.testing.assert_allclose(work.x, work.x_d, atol=1e-12)
        if chart.relative:
            assert validity == 1.0
            np.testing.assert_allclose(work.x_dot_d, work.rows @ V, atol=1e-12)
        else:
            assert validity == evaluated(chart, R, p)[3] ** 2
            np.testing.assert_array_equal(work.rows, work.rows_d)
            np.testing.assert_array_equal(work.rate, work.rate_d)
            np.testing.assert_array_equal(work.x_dot_d, 0.0)


def test_the_fade_of_each_chart_is_the_documented_one():
    """Half of the quintic smoothstep's input gives a validity of ½: the middle of each documented span."""
    middle = {
        "euler": (REGISTRY["euler"](sequence="zyz"), rotated(0, np.arccos(1 - 0.35**2), 0), np.zeros(3)),
        "tait": (REGISTRY["euler"](sequence="xyz"), rotated(0, np.arcsin(1 - 0.35**2), 0), np.zeros(3)),
        "cylinder": (REGISTRY["cylinder"](radius=1.0), np.eye(3), np.array([0.35, 0.0, 9.0])),
        "cylindrical": (REGISTRY["cylindrical"](), np.eye(3), np.array([0.0, 0.035, 9.0])),
        "rotation_vector": (REGISTRY["rotation_vector"](), rotated(2.8, 0, 0) @ REFERENCE, np.zeros(3)),
    }  # fmt: skip
    for chart, R, p in middle.values():
        assert abs(evaluated(chart, R, p)[3] - 0.5) < 1e-9


def test_cylindrical_azimuth_counts_from_base_x_right_handed():
    """About z: atan2(y, x)."""
    chart = REGISTRY["cylindrical"]()
    x = evaluated(chart, np.eye(3), np.array([-0.3, 0.4, 0.7]))[0]
    np.testing.assert_allclose(x, [0.5, np.arctan2(0.4, -0.3), 0.7])


@pytest.mark.parametrize(
    ("name", "parameters", "word"),
    [
        ("position", {"axes": "zx"}, "axes"),
        ("euler", {"sequence": "xxy"}, "sequence"),
        ("euler", {"validity": [0.5, 0.2]}, "validity"),
        ("euler", {"validity": [0.0, 0.2]}, "validity"),
        ("plane", {"normal": [0, 0, 0]}, "normal"),
        ("plane", {"point": [0, 0, np.nan]}, "point"),
        ("cylinder", {"radius": 0.0}, "radius"),
        ("cylinder", {"radius": np.nan}, "radius"),
        ("cylinder", {"radius": 1.0, "axis": [0, 0]}, "axis"),
        ("cylindrical", {"near_axis": [0.05, 0.02]}, "near_axis"),
        ("cylindrical", {"axis": [np.inf, 0, 0]}, "axis"),
        ("joints", {"names": ["a", "a"]}, "names"),
        ("joints", {"names": []}, "names"),
    ],
)
def test_wrong_parameters_are_named(name, parameters, word):
    """The message begins with the key and says what was expected and got."""
    with pytest.raises(ValueError) as caught:
        REGISTRY[name](**parameters)
    text = str(caught.value)
    assert text.startswith(f"{word}: expected")
    assert "got" in text


@pytest.mark.parametrize("name", sorted(JOINT_CHARTS))
def test_joint_charts_select_joints_and_wrap_endless_ones(name):
    """Rows select, errors of endless joints go the short way round, others do not."""
    chart = REGISTRY[name](**({"names": ["c", "a"]} if name == "joints" else {}))
    chart.bind(("a", "b", "c"), (False, False, True))
    m = len(chart.coordinates)
    work = ChartWork.allocate(m, 3)
    q, q_d, v_d = np.array([4.0, 1.0, 3.0]), np.array([-4.0, 0.5, -3.0]), np.array([0.1, 0.2, 0.3])
    assert chart.track_joints(q, q_d, v_d, work) == 1.0
    indices = list(chart.indices)
    np.testing.assert_array_equal(work.rows, np.eye(3)[indices])
    error = np.zeros(m)
    chart.difference(work.x, work.x_d, error)
    np.testing.assert_allclose(error, np.array([8.0, 0.5, 6.0 - 2 * np.pi])[indices])
    np.testing.assert_allclose(work.x_dot_d, v_d[indices])
    np.testing.assert_allclose(
        joint_error(q, q_d, np.array([False, False, True])), [8.0, 0.5, 6.0 - 2 * np.pi]
    )
