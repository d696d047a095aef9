# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Paths that have no companion: what is said, with figures from closed forms of a planar arm.

"""

import numpy as np
import pytest

from prioritized_tracking.errors import InputError
from tests.arms import planar_arm
from tests.offline.companion_paths import circle, companion, line, points, rest_to_rest

AIM_M = 1.5e-7  # a hundredth of the solver's tolerance and what lies between the knots


def refusal(arm, frame, path, **settings):
    with pytest.raises(InputError) as refused:
        companion(arm, frame, path, where="stack.yaml:30 references.elbow", **settings)
    return refused.value.problems


def test_out_of_reach_is_said_with_where_and_how_far():
    """
    Closed form: the farthest point (2.1, 0.3) is sqrt(2.1² + 0.3²) − 2 = 0.12132 m beyond the reach limit.

    """
    times = np.linspace(0.0, 6.0, 121)
    bump = np.sin(np.pi * rest_to_rest(times / 6.0)) ** 2
    path = points(times, np.column_stack((1.5 + 0.6 * bump, 0.3 + 0.0 * bump, 0.0 * bump)))
    (problem,) = refusal(planar_arm(), "tip", path, rotation=False)
    assert problem.where == "stack.yaml:30 references.elbow"
    assert "cannot reach" in problem.what
    assert "worst at t = 3 s" in problem.what
    assert "2.1 0.3 0 m" in problem.expected
    assert "0.121 m" in problem.got


def test_a_coordinate_the_arm_cannot_move_counts_unless_it_is_left_out():
    times = np.linspace(0.0, 4.0, 81)
    s = rest_to_rest(times / 4.0)
    path = points(times, np.column_stack((1.2 + 0.3 * s, 0.3 + 0.0 * s, 0.0 * s + 0.05)))
    (problem,) = refusal(planar_arm(), "tip", path, rotation=False)
    assert "0.05 m (off by 0 0 -0.05 m)" in problem.got
    found = companion(planar_arm(), "tip", path, rotation=False, position="xy")
    assert found.position_residual_m < AIM_M


def test_a_limit_that_cuts_the_path_off_is_named():
    """
    The inner reach of two links of 1 m with an elbow of at most 2.5 rad: 2 cos(1.25) = 0.63 m.

    """
    times = np.linspace(0.0, 4.0, 81)
    s = rest_to_rest(times / 4.0)
    path = points(times, np.column_stack((1.2 - 0.9 * s, 0.0 * s, 0.0 * s)))
    (problem,) = refusal(planar_arm(limit=2.5), "tip", path, rotation=False)
    assert "beyond its limit" in problem.what
    assert "joint 'j2'" in problem.what
    assert f"no nearer to that pose than {2.0 * np.cos(1.25) - 0.3:.3g} m" in problem.got


def test_faster_than_the_joints_names_joint_speed_and_a_pace_that_fits():
    times = np.linspace(0.0, 4.0, 81)
    s = rest_to_rest(times / 4.0)
    path = points(times, np.column_stack((1.5 - 0.9 * s, 0.3 + 0.0 * s, 0.0 * s)))
    slow = planar_arm(velocity=0.4)
    found = refusal(slow, "tip", path, rotation=False)
    assert all("faster than joint" in problem.what for problem in found)
    assert found[0].expected == "at most 0.4 rad/s"
    pace = float(found[0].remedy.split()[3])
    fitting = companion(slow, "tip", path, rotation=False, pace=pace)
    assert 0.9 < fitting.speed_ratio <= 1.0
    assert refusal(slow, "tip", path, rotation=False, pace=1.1 * pace / fitting.speed_ratio)


def test_torque_beyond_the_motors_is_said():
    times = np.linspace(0.0, 4.0, 81)
    s = rest_to_rest(times / 4.0)
    path = points(times, np.column_stack((1.5 - 0.3 * s, 0.0 * s, 0.0 * s)))
    # holding two uniform links of 1 kg and 1 m out to 1.5 m takes up to g (0.5 + 1 + …) > 10 N·m
    found = companion(planar_arm(effort=2.0), "tip", path, rotation=False)
    assert found.torque.value > 1.0
    assert "torque limit" in found.messages[0]


def test_a_turn_that_limits_forbid_is_refused():
    (problem,) = refusal(planar_arm(limit=6.0), "tip", circle(0.0, 1.3), rotation=False)
    assert "no closed joint path" in problem.what
    assert "repeat: 1" in problem.remedy


def test_what_no_solver_could_use_is_refused_at_once():
    (nothing,) = refusal(planar_arm(), "tip", line(), rotation=False, position=False)
    assert "position or rotation" in nothing.what
    both = refusal(planar_arm(), "tip", line(), start=[0.0], preferred=[np.nan, 0.0])
    assert [problem.what for problem in both] == ["bad preferred configuration", "bad start configuration"]
    (fixed,) = refusal(planar_arm(), "base", line())
    assert "no joint moves the frame" in fixed.what
