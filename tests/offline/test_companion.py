# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Companions through singularities, looked at as a controller sees them.

Most paths here are made from a smooth joint motion through a singularity by forward kinematics, so
that a joint path is known to exist. The companion is judged by Pinocchio's (not the solver's) kinematics,
at points between its knots, on the spline a controller lays through them.

"""

import functools
from pathlib import Path

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from scipy.spatial.transform import Rotation

from prioritized_tracking.core.arm import build_arm
from prioritized_tracking.core.references import JointPath, PosePath
from prioritized_tracking.offline.companion import solve_companion
from tests.arms import data_arm, planar_arm
from tests.offline.companion_paths import (
    circle,
    companion,
    largest_errors,
    line,
    motion_of,
    path_of,
    points,
    rest_to_rest,
)

CONFIG = Path(__file__).parents[2] / "config"

# What the solver aims at: a hundredth of the tolerance of 1e-5 m and 1e-4 rad at the knots; between
# them a cubic over h = 0.02 s adds h⁴/384 · |d⁴q/dt⁴|, below 1e-8 for the motions here.
AIM_M, AIM_RAD = 1.5e-7, 1.5e-6
# Where two singularities meet the solver may stop at a tenth of the tolerance, when following more
# closely would multiply the effort: here the arm is stretched and its redundancy vanishes with it.
LOOSE = {"seven_axis_elbow": 10.0}


def jerk(found):
    """
    Largest third difference of the knots per third power of their distance (even knots only), rad/s³.

    """
    step = np.diff(found.times)
    assert np.ptp(step) < 1e-9
    return np.abs(np.diff(found.q, n=3, axis=0)).max() / step[0] ** 3


def singular_values(arm, frame, q, rows=slice(None)):
    return np.array([np.linalg.svd(motion_of(arm, frame, x)[2][rows], compute_uv=False)[-1] for x in q])


# ---- through singularities -------------------------------------------------------------------------

# Arm, frame, first and last joint positions. Each has the singularity inside, not at an end.
THROUGH = {
    # Joint 5 of a 6-axis arm with an offset wrist passes 0: axes 4 and 6 are parallel.
    "wrist": ("ur5", "tool0", [0.1, -1.2, 1.5, -0.4, 0.5, 0.2], [0.6, -0.8, 1.2, -0.1, -0.5, 0.6]),
    # Joint 3 passes 0: the arm is stretched.
    "elbow": ("ur5", "tool0", [0.1, -1.2, 0.5, -0.4, 0.9, 0.2], [0.6, -0.8, -0.5, -0.1, 0.8, 0.6]),
    # The wrist passes over the first axis.
    "shoulder": ("ur5", "tool0", [0.1, -2.6, 0.9, -0.4, 1.0, 0.2], [0.4, -0.2, 0.9, -0.1, 1.2, 0.2]),
    # Offset elbow: stretched at q4 = −(atan(82.5/316) + atan(82.5/384)) = −0.467 (vendor's DH table).
    "seven_axis_elbow": (
        *("panda", "panda_link8"),
        *([0.1, 0.3, 0.0, -1.0, 0.0, 1.5, 0.3], [0.6, 0.5, 0.0, -0.3, 0.0, 1.8, 0.3]),
    ),
    # Our own arm: the elbow goes through 0 with everything else moving.
    "seven_axis_fold": (
        *("own", "probe"),
        *([0.1, 0.3, 0.0, 1.0, 0.3, 0.9, 0.3], [0.6, 0.5, 0.2, -0.6, -0.1, 1.2, 0.3]),
    ),
}


def passing(name):
    """
    Arm, frame and joint motion of a row of THROUGH.

    """
    arm, frame, first, last = THROUGH[name]
    first, last = np.array(first), np.array(last)
    return the_arm(arm), frame, lambda s: first + s * (last - first)


@functools.cache
def the_arm(name):
    if name == "own":
        return build_arm((CONFIG / "seven_axis_arm.urdf").read_text(encoding="utf-8"))
    return data_arm(name)


@functools.cache
def passage(name):
    arm, frame, joints = passing(name)
    path, q = path_of(arm, frame, joints)
    return arm, frame, path, q, companion(arm, frame, path)


@pytest.mark.parametrize("name", THROUGH)
def test_passes_a_singularity(name):
    arm, frame, path, q, found = passage(name)
    # the path is what its name says: the known motion comes within a hundredth of its usual rank
    known = singular_values(arm, frame, q)
    assert known.min() < 0.02 * known.max()
    assert 50 < np.argmin(known) < len(known) - 50
    position, orientation, linear, angular = largest_errors(arm, frame, path, found)
    loose = LOOSE.get(name, 1.0)
    assert position < loose * AIM_M
    assert orientation < loose * AIM_RAD
    # a position error e that comes and goes within a knot distance h has a velocity below 4 e / h
    assert linear < loose * 4.0 * AIM_M / 0.02
    assert angular < loose * 4.0 * AIM_RAD / 0.02
    assert found.limit_margin_rad > 0.0
    assert found.speed_ratio < 1.0


@pytest.mark.parametrize("name", ["wrist", "elbow", "shoulder"])
def test_without_redundancy_it_is_as_smooth_as_the_known_motion(name):
    """
    A joint path that bounces off a singularity instead of passing it has a kink, here thousands of rad/s³.

    """
    _, _, path, q, found = passage(name)
    known = np.abs(np.diff(q, n=3, axis=0)).max() / 0.02**3
    # another of the arm's configurations is found, not the known one: same kind of motion, some factor
    assert jerk(found) < 5.0 * known
    assert found.singular.value < 1e-3
    there = path.knots[np.argmin(singular_values(*passage(name)[:2], q))]
    assert found.singular.at_s == pytest.approx(there, abs=0.05)


@pytest.mark.parametrize("name", THROUGH)
def test_reported_figures_are_those_of_the_controllers_spline(name):
    arm, frame, path, _, found = passage(name)
    worst = largest_errors(arm, frame, path, found)
    reported = [
        found.position_residual_m,
        found.orientation_residual_rad,
        found.linear_residual.value,
        found.angular_residual.value,
    ]
    # both look at points, not at all of the same ones; below 1e-10 it is rounding
    np.testing.assert_allclose(reported, worst, rtol=0.3, atol=1e-9)


@pytest.mark.parametrize("name", THROUGH)
def test_starts_and_ends_at_rest(name):
    """
    The rule for files: end accelerations of the clamped spline below 0.05 rad/s² (independent: SciPy).

    """
    _, _, path, _, found = passage(name)
    spline = CubicSpline(found.times, found.q, bc_type="clamped")
    assert np.abs(spline(found.times[[0, -1]], 2)).max() < 0.05
    assert not path.ramped
    assert JointPath(found.times, found.q, leader=path).messages == ()


def test_touches_the_outer_boundary_and_folds_through():
    """
    Two links, tip position only; closed form: x = l1 c1 + l2 c12. Elbow 0.9 → −0.9 through 0.

    """
    arm = planar_arm((1.0, 0.8))
    path, q = path_of(arm, "tip", lambda s: [0.3 + 1.2 * s, 0.9 - 1.8 * s])
    found = companion(arm, "tip", path, rotation=False)
    follower = JointPath(found.times, found.q, leader=path)
    for u in np.linspace(0.0, 6.0, 997):
        a, b = follower.sample_file(u).q
        tip = np.array([np.cos(a) + 0.8 * np.cos(a + b), np.sin(a) + 0.8 * np.sin(a + b), 0.0])
        assert np.linalg.norm(tip - path.sample_file(u).p) < AIM_M
    assert found.q[0, 1] * found.q[-1, 1] < 0.0
    # inside the reach circle there are two solutions, mirrored at the line to the tip; this is one of them
    known = np.interp(found.times[::50], path.knots, q[:, 1])
    np.testing.assert_allclose(np.abs(found.q[::50, 1]), np.abs(known), atol=1e-5)


def test_draws_along_the_reach_limit():
    """
    The tip runs on the circle of radius l1 + l2 for a while: singular at every point of it.

    The path is a cubic through points of the circle, off it by h⁴/384 · l ω⁴ < 1e-10 m; an elbow angle e
    shortens the arm by l e²/4, so the elbow may stray by sqrt(4 AIM / l) ≈ 8e-4 rad and is on the path.

    """
    arm = planar_arm()
    ramp = functools.partial(np.maximum, 0.0)

    def joints(s):
        return [0.3 + 1.2 * s, 3.0 * ramp(0.4 - s) ** 3 - 2.0 * ramp(s - 0.6) ** 3]

    path, q = path_of(arm, "tip", joints)
    found = companion(arm, "tip", path, rotation=False)
    assert found.position_residual_m < AIM_M
    stretched = (np.abs(q[:, 1]) < 1e-12).nonzero()[0]
    inside = (found.times > path.knots[stretched[0]]) & (found.times < path.knots[stretched[-1]])
    assert inside.sum() > 20
    assert np.abs(found.q[inside, 1]).max() < np.sqrt(4.0 * AIM_M)
    assert jerk(found) < 5.0 * np.abs(np.diff(q, n=3, axis=0)).max() / 0.02**3


def test_rounding_of_the_file_does_not_shake_the_arm():
    """
    Six decimals: position errors of 5e-7 m, several times that in the joints next to a singularity.

    """
    arm, frame, joints = passing("wrist")
    path, q = path_of(arm, frame, joints, digits=6)
    found = companion(arm, frame, path)
    assert found.position_residual_m < 1e-6
    assert found.orientation_residual_rad < 5e-6
    known = np.abs(np.diff(q, n=2, axis=0)).max() / 0.02**2
    # rounding alone makes second differences of up to 4 · 5e-7 · |J⁻¹| / h² = 5e-3 |J⁻¹|
    assert np.abs(np.diff(found.q, n=2, axis=0)).max() / 0.02**2 < 5.0 * known + 0.3


@pytest.mark.parametrize("miss", [1e-5, 1e-2])
def test_a_narrow_miss_of_the_wrist_singularity(miss):
    """
    The exact joint path turns two joints by half a turn within miss/0.2 s; nobody wants that for 1e-5 rad.

    """
    arm, frame, joints = passing("wrist")
    path, _ = path_of(arm, frame, joints, seconds=8.0)
    turned = Rotation.from_quat(path.quaternions) * Rotation.from_rotvec([miss, 0.0, 0.0])
    path = PosePath(path.knots, path.positions, turned.as_quat())
    found = companion(arm, frame, path)
    assert found.orientation_residual_rad < 1e-4
    assert found.position_residual_m < 1e-5
    assert found.speed_ratio < 1.0


# ---- limits, speed, reach --------------------------------------------------------------------------


def test_limits_are_kept_where_the_arm_can_choose():
    """
    Three links, tip position: one degree of freedom to spare. The free choice breaks the tighter limits.

    """
    times = np.linspace(0.0, 6.0, 121)
    s = rest_to_rest(times / 6.0)
    path = points(times, np.column_stack((0.6 + 1.1 * s, 0.4 + 0.8 * s, 0.0 * s)))
    settings = {"rotation": False, "preferred": [-1.2, 1.9, 1.2]}
    free = companion(planar_arm((1.0, 0.8, 0.5), limit=3.0), "tip", path, **settings)
    assert np.abs(free.q).max() > 1.8
    tight = companion(planar_arm((1.0, 0.8, 0.5), limit=1.8), "tip", path, **settings)
    assert np.abs(tight.q).max() < 1.8
    assert tight.limit_margin_rad == pytest.approx(1.8 - np.abs(tight.q).max(), abs=1e-6)
    assert tight.position_residual_m < AIM_M


def test_whole_turns_are_chosen_inside_the_limits():
    arm = planar_arm(limit=4.0)
    times = np.linspace(0.0, 8.0, 161)
    angle = 2.4 + 1.4 * rest_to_rest(times / 8.0)  # past π: written as an angle it would wrap
    path = points(times, np.column_stack((1.6 * np.cos(angle), 1.6 * np.sin(angle), 0.0 * angle)))
    found = companion(arm, "tip", path, rotation=False)
    assert found.limit_margin_rad > 0.0
    assert found.position_residual_m < AIM_M


# ---- closed and ramped paths -----------------------------------------------------------------------


@pytest.mark.parametrize("lengths", [(1.0, 1.0), (1.0, 0.8, 0.5)])
def test_a_repeated_path_has_a_companion_that_closes_smoothly(lengths):
    arm, path = planar_arm(lengths), circle(1.0, 0.3)
    found = companion(arm, "tip", path, rotation=False)
    np.testing.assert_array_equal(found.q[0], found.q[-1])
    assert largest_errors(arm, "tip", path, found)[0] < AIM_M
    # velocities before and after the seam agree as between any other two segments
    step = np.diff(np.vstack((found.q[-3:], found.q[1:3])), n=3, axis=0)
    assert np.abs(step).max() < 2.0 * np.abs(np.diff(found.q, n=3, axis=0)).max()


def test_a_joint_without_limits_advances_by_a_turn():
    arm, path = planar_arm(kind="continuous"), circle(0.0, 1.3, repeat=0)
    found = companion(arm, "tip", path, rotation=False)
    np.testing.assert_array_equal(found.q[-1] - found.q[0], [2.0 * np.pi, 0.0])
    assert largest_errors(arm, "tip", path, found)[0] < AIM_M


def test_a_path_that_does_not_rest_keeps_its_speed_in_file_time():
    """
    Constant speed: a controller ramps the time of such a path; the companion must not stop by itself.

    """
    times = np.linspace(0.0, 4.0, 81)
    path = points(times, np.column_stack((1.5 - 0.2 * times, 0.3 + 0.0 * times, 0.0 * times)))
    assert path.ramped
    arm = planar_arm()
    found = companion(arm, "tip", path, rotation=False)
    position, _, linear, _ = largest_errors(arm, "tip", path, found)
    assert position < AIM_M
    assert linear < 1e-5


# ---- choices ---------------------------------------------------------------------------------------


def test_the_start_is_taken_where_the_path_allows_it():
    arm, path = planar_arm((1.0, 0.8, 0.5)), line()
    for elbow in (0.9, -0.9):
        seed = companion(arm, "tip", path, rotation=False, preferred=[-elbow, elbow, elbow]).q[0]
        found = companion(arm, "tip", path, rotation=False, start=seed)
        np.testing.assert_allclose(found.q[0], seed, atol=2e-3)
        assert found.messages == ()
    far = companion(planar_arm(), "tip", path, rotation=False, start=[2.0, 0.1])
    assert "away from the given start" in far.messages[0]


def test_the_elbow_goes_where_it_is_preferred():
    up = companion(planar_arm(), "tip", line(), rotation=False, preferred=[-0.5, 1.0])
    down = companion(planar_arm(), "tip", line(), rotation=False, preferred=[0.5, -1.0])
    assert up.q[0, 1] > 0.0 > down.q[0, 1]


def test_same_inputs_same_companion():
    arm, path = the_arm("own"), passage("seven_axis_fold")[2]
    again = companion(arm, "probe", path)
    np.testing.assert_array_equal(again.q, passage("seven_axis_fold")[4].q)


def test_progress_rises_to_one():
    seen = []
    companion(planar_arm(), "tip", line(), rotation=False, progress=lambda *what: seen.append(what))
    fractions = [fraction for fraction, _ in seen]
    assert fractions == sorted(fractions)
    assert 0.0 <= fractions[0] < 0.05
    assert fractions[-1] == 1.0
    assert all(text for _, text in seen)


def test_relative_to_a_base_that_moves():
    """
    Frame and base on different links of one chain: only the joints between them count.

    """
    arm = planar_arm((1.0, 0.8, 0.5))
    times = np.linspace(0.0, 4.0, 201)
    q = np.outer(rest_to_rest(times / 4.0), [0.0, 1.0, -1.2]) + [0.3, 0.2, 0.5]
    poses = [motion_of(arm, "tip", x, base="link1")[:2] for x in q]
    path = PosePath(times, [p for _, p in poses], Rotation.from_matrix([R for R, _ in poses]).as_quat())
    found = solve_companion(arm, arm.frame_id("tip"), arm.frame_id("link1"), path)
    known = np.array([np.interp(found.times, times, x) for x in q.T[1:]]).T
    np.testing.assert_allclose(found.q[:, 1:], known, atol=1e-6)
    assert np.ptp(found.q[:, 0]) < 1e-9
