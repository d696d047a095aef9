# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Kinematics over many joint positions against Pinocchio, one at a time.

"""

import numpy as np
import pytest

from prioritized_tracking.core.arm import frame_motion, inertia
from prioritized_tracking.offline.companion.chain import Chain
from tests.arms import data_arm, planar_arm, random_states


@pytest.mark.parametrize("name", ["ur5", "panda", "kinova", "talos_left_arm", "z1"])
def test_every_frame_relative_to_root_and_to_moving_bases(name):
    arm = data_arm(name)
    q = np.array([x for x, _ in random_states(arm, 4)])
    data, R, p, J = arm.data(), np.zeros((3, 3)), np.zeros(3), np.zeros((6, arm.n))
    middle = arm.frames[len(arm.frames) // 2]
    for frame, base in [(frame, base) for frame in arm.frames for base in (arm.root, middle)]:
        ids = arm.frame_id(frame), arm.frame_id(base)
        many = Chain(arm, *ids).motion(q)
        for k in range(len(q)):
            inertia(arm, data, q[k])
            frame_motion(arm, data, *ids, R, p, J)
            # products of at most ten rotations of entries below 1 and lengths of about 1 m
            for got, expected in zip(many, (R, p, J), strict=True):
                np.testing.assert_allclose(got[k], expected, atol=1e-13)


def test_joints_are_in_command_order():
    arm = planar_arm((1.0, 0.8, 0.5), joints=["j3", "j1", "j2"])
    q = np.array([[0.3, -0.4, 0.9]])
    _, p, J = Chain(arm, arm.frame_id("tip"), arm.frame_id("base")).motion(q)
    angles = np.cumsum([-0.4, 0.9, 0.3])
    links = np.array([1.0, 0.8, 0.5])[:, None] * np.column_stack((np.cos(angles), np.sin(angles)))
    np.testing.assert_allclose(p[0, :2], links.sum(axis=0), atol=1e-14)
    # the third link alone turns with j3, the first in command order
    np.testing.assert_allclose(J[0, :2, 0], [-links[2, 1], links[2, 0]], atol=1e-14)
