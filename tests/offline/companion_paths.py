# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Paths for the tests of the companion, and their judge: Pinocchio's kinematics on a controller's spline.

"""

import numpy as np
from scipy.spatial.transform import Rotation

from prioritized_tracking.core.arm import frame_motion, inertia
from prioritized_tracking.core.references import JointPath, PosePath
from prioritized_tracking.core.rotation import rotation_log
from prioritized_tracking.offline.companion import solve_companion

LAP = np.linspace(0.0, 6.0, 121)


def motion_of(arm, frame, q, base=None):
    """
    Pose and Jacobian of a frame by Pinocchio.

    """
    data, R, p, J = arm.data(), np.zeros((3, 3)), np.zeros(3), np.zeros((6, arm.n))
    inertia(arm, data, q)
    frame_motion(arm, data, arm.frame_id(frame), arm.frame_id(base or arm.root), R, p, J)
    return R, p, J


def rest_to_rest(z):
    """
    Quintic from 0 to 1 with no velocity and no acceleration at both ends.

    """
    return z**3 * (10.0 + z * (6.0 * z - 15.0))


def path_of(arm, frame, joints, *, seconds=6.0, digits=None):
    """
    Pose path of the joint motion joints(s), s from 0 to 1 at rest at both ends; and the joint motion.

    """
    times = np.linspace(0.0, seconds, round(seconds / 0.02) + 1)
    q = np.array([joints(s) for s in rest_to_rest(times / seconds)])
    poses = [motion_of(arm, frame, x)[:2] for x in q]
    positions = np.array([p for _, p in poses])
    quaternions = Rotation.from_matrix([R for R, _ in poses]).as_quat()
    if digits is not None:
        positions, quaternions = positions.round(digits), quaternions.round(digits)
    return PosePath(times, positions, quaternions), q


def points(times, positions, **settings):
    """
    Pose path through points, orientation of the base.

    """
    quaternions = np.tile([0.0, 0.0, 0.0, 1.0], (len(times), 1))
    return PosePath(times, positions, quaternions, **settings)


def companion(arm, frame, path, **settings):
    return solve_companion(arm, arm.frame_id(frame), arm.frame_id(arm.root), path, **settings)


def largest_errors(arm, frame, path, found):
    """
    Largest errors of position (m), orientation (rad), velocity (m/s, rad/s) of a controller's own spline.

    """
    follower = JointPath(found.times, found.q, leader=path, continuous=arm.continuous)
    worst, turn = np.zeros(4), np.zeros(3)
    for u in np.linspace(0.0, path.file_duration, 1237):  # prime to the knots: most points lie between them
        joint, pose = follower.sample_file(u), path.sample_file(u)
        R, p, J = motion_of(arm, frame, joint.q)
        rotation_log(R @ pose.R.T, turn)
        slip = J @ joint.v - pose.V
        errors = (p - pose.p, turn, slip[:3], slip[3:])
        worst = np.maximum(worst, [np.linalg.norm(x) for x in errors])
    return worst


def circle(centre, radius, phase=0.0, repeat=3):
    angle = 2.0 * np.pi * LAP / 6.0 + phase
    offset = np.column_stack((np.cos(angle), np.sin(angle), 0.0 * angle))
    offset[-1] = offset[0]
    return points(LAP, np.array([centre, 0.0, 0.0]) + radius * offset, repeat=repeat)


def line(seconds=4.0):
    times = np.linspace(0.0, seconds, 81)
    s = rest_to_rest(times / seconds)
    return points(times, np.column_stack((1.5 - 0.5 * s, 0.3 + 0.0 * s, 0.0 * s)))
