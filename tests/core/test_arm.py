# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The arm model against Pinocchio's own URDF reader, reduced models and finite differences.

"""

from __future__ import annotations

import copy
import pickle

import numpy as np
import pinocchio as pin
import pytest
from scipy.spatial.transform import Rotation

from prioritized_tracking.core.arm import (
    build_arm,
    forward_dynamics,
    frame_pose,
    inertia,
    inverse_dynamics,
)
from prioritized_tracking.errors import InputError
from tests.arms import (
    all_data_urdfs,
    bare_urdf,
    body,
    close,
    data_arm,
    data_urdf,
    followers,
    joint,
    motion,
    planar_arm,
    planar_urdf,
    random_states,
)

# ---- against Pinocchio's own reader ----------------------------------------------------------------


def reference(text, arm):
    """
    Return Pinocchio's model of the whole URDF and functions to its coordinates; its joints are never locked.

    Continuous joints have (cos, sin) there, held joints are present and at rest: an independent way to the
    same arm, without our reader, our locking and our plain angles.

    """
    model = pin.buildModelFromXML(bare_urdf(text, {}))
    held = arm.recipe.locked
    names = list(model.names)

    def configuration(q):
        full = pin.neutral(model)
        for name, position in [*zip(arm.joints, q, strict=True), *held.items()]:
            j = model.joints[names.index(name)]
            full[j.idx_q : j.idx_q + j.nq] = position if j.nq == 1 else (np.cos(position), np.sin(position))
        return full

    dofs = np.array([model.joints[names.index(name)].idx_v for name in arm.joints])

    def velocity(v):
        full = np.zeros(model.nv)
        full[dofs] = v
        return full

    return model, model.createData(), configuration, velocity, dofs


@pytest.mark.parametrize("file", all_data_urdfs())
def test_agrees_with_pinocchios_reader(file):
    """
    M, C, g, poses and Jacobians of every readable file of example-robot-data, held joints off zero.

    """
    text = data_urdf(file)
    try:
        arm = build_arm(text, locked=dict.fromkeys(followers(text), 0.1))
    except InputError:
        return  # what is refused, and why: tests/outside/test_mujoco_dynamics.py
    model, work, configuration, velocity, dofs = reference(text, arm)
    for i, (q, v) in enumerate(random_states(arm, 3)):
        full, rates = configuration(q), velocity(v)
        M = np.array(pin.crba(model, work, full))
        C = np.array(pin.computeCoriolisMatrix(model, work, full, rates))
        g = np.array(pin.computeGeneralizedGravity(model, work, full))
        frame = arm.frames[-1 - i * len(arm.frames) // 3]
        R, p, J, data = motion(arm, q, frame, arm.root, v)
        close(data.M, M[np.ix_(dofs, dofs)])
        close(data.C, C[np.ix_(dofs, dofs)])
        close(data.g, g[dofs])
        pin.framesForwardKinematics(model, work, full)
        theirs = model.getFrameId(frame, pin.FrameType.BODY)
        close(R, work.oMf[theirs].rotation)
        close(p, work.oMf[theirs].translation)
        pin.computeJointJacobians(model, work, full)
        aligned = pin.ReferenceFrame.LOCAL_WORLD_ALIGNED
        close(J, pin.getFrameJacobian(model, work, theirs, aligned)[:, dofs])


def test_continuous_joints_equal_a_cos_sin_model():
    """
    The plain angle of a continuous joint, also far beyond a turn, is (cos, sin) in Pinocchio's reading.

    """
    arm = data_arm("kinova")
    model, work, configuration, velocity, dofs = reference(data_urdf("kinova"), arm)
    assert model.nq > model.nv == arm.n
    assert arm.continuous.any()
    assert np.all(np.isinf(arm.upper[arm.continuous]))
    for q, v in random_states(arm, 5):
        q = q + 6.0 * np.pi * arm.continuous
        tau = velocity(np.arange(arm.n))
        close(
            forward_dynamics(arm, arm.data(), q, v, tau[dofs]),
            pin.aba(model, work, configuration(q), velocity(v), tau)[dofs],
        )


def test_locked_joints_equal_a_reduced_model():
    """
    Pinocchio's buildReducedModel; revolute, prismatic and continuous joints held off zero.

    """
    for name, held in [
        ("panda", {"panda_joint4": -1.3, "panda_finger_joint1": 0.03, "panda_joint1": 0.4}),
        ("kinova", {"j2s6s200_joint_1": 2.5, "j2s6s200_joint_6": 0.2}),
    ]:
        arm = data_arm(name, locked=held)
        full, _, configuration, _, _ = reference(data_urdf(name), arm)
        ids = [full.getJointId(joint_name) for joint_name in arm.recipe.locked]
        reduced = pin.buildReducedModel(full, ids, configuration(np.zeros(arm.n)))
        work = reduced.createData()
        for q, v in random_states(arm, 5):
            there = pin.neutral(reduced)
            for j, (joint_name, position) in enumerate(zip(arm.joints, q, strict=True), start=1):
                assert reduced.names[j] == joint_name
                k, m = reduced.joints[j].idx_q, reduced.joints[j].nq
                there[k : k + m] = position if m == 1 else (np.cos(position), np.sin(position))
            close(inverse_dynamics(arm, arm.data(), q, v, v), pin.rnea(reduced, work, there, v, v))


# ---- Jacobians -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "frame", "base"),
    [
        ("panda", "panda_link8", "panda_link0"),
        ("panda", "panda_hand", "panda_link3"),  # a base that moves
        ("panda", "panda_link2", "panda_link6"),  # a base beyond the frame
        ("ur10", "tool0", "world"),
        ("kinova", "j2s6s200_end_effector", "j2s6s200_link_2"),
        ("z1", "link06", "link03"),
    ],
)
def test_jacobian_by_finite_differences(name, frame, base):
    """
    Central differences of the pose in base axes, step 1e-6: error h² plus rounding/h, below 1e-8.

    """
    arm, h = data_arm(name), 1e-6
    for q, v in random_states(arm, 10):
        R, _, J, _ = motion(arm, q, frame, base, v)
        R2, p2, _, _ = motion(arm, q + h * v, frame, base)
        R1, p1, _, _ = motion(arm, q - h * v, frame, base)
        V = J @ v
        np.testing.assert_allclose((p2 - p1) / (2.0 * h), V[:3], atol=1e-8)
        turn = Rotation.from_matrix(R2 @ R1.T).as_rotvec() / (2.0 * h)
        np.testing.assert_allclose(turn, V[3:], atol=1e-8)
        np.testing.assert_allclose(R @ R.T, np.eye(3), atol=1e-12)


def test_relative_pose_of_two_arms():
    """
    A base on another arm, against the product of homogeneous matrices.

    """
    arm = two_arms()
    for q, _ in random_states(arm, 10):
        T = {}
        for name in ("left_tip", "right_tip"):
            T[name] = np.eye(4)
            T[name][:3, :3], T[name][:3, 3], _, _ = motion(arm, q, name, "torso")
        R, p, J, _ = motion(arm, q, "left_tip", "right_tip")
        relative = np.linalg.inv(T["right_tip"]) @ T["left_tip"]
        close(R, relative[:3, :3])
        close(p, relative[:3, 3])
        assert np.abs(J[:, :2]).max() > 0.1
        assert np.abs(J[:, 2:]).max() > 0.1


def test_fixed_base_beside_the_root():
    """
    A base that never moves but stands elsewhere, turned: p and J in its axes.

    """
    place = {"xyz": (0.3, -0.2, 0.1), "rpy": (0.4, 0.5, 0.6)}
    stand = '<link name="stand"/>' + joint("s", "base", "stand", kind="fixed", **place)
    arm = build_arm(planar_urdf().replace("</robot>", stand + "</robot>"))
    q = np.array([0.4, 0.9])
    R, p, J, _ = motion(arm, q, "tip", "base")
    turn = Rotation.from_euler("xyz", (0.4, 0.5, 0.6)).as_matrix()
    R_s, p_s, J_s, _ = motion(arm, q, "tip", "stand")
    close(R_s, turn.T @ R)
    close(p_s, turn.T @ (p - [0.3, -0.2, 0.1]))
    close(J_s, np.vstack((turn.T @ J[:3], turn.T @ J[3:])))


# ---- order of joints -------------------------------------------------------------------------------


def two_arms(**settings):
    """
    Return a torso with two two-link arms; the right one comes first in the text.

    """
    parts = ['<robot name="two"><link name="torso"/>']
    for side, y in (("right", -0.3), ("left", 0.3)):
        parts += [
            body(f"{side}_upper", 2.0, (0.2, 0.0, 0.0), (0.01, 0.05, 0.06)),
            body(f"{side}_lower", 1.0, (0.15, 0.01, 0.0), (0.01, 0.02, 0.02)),
            f'<link name="{side}_tip"/>',
            joint(f"{side}_1", "torso", f"{side}_upper", xyz=(0.0, y, 0.2), rpy=(0.3, 0.1, 0.0)),
            joint(f"{side}_2", f"{side}_upper", f"{side}_lower", xyz=(0.4, 0.0, 0.0), axis=(0.0, 3.0, 4.0)),
            joint(f"{side}_tip", f"{side}_lower", f"{side}_tip", kind="fixed", xyz=(0.3, 0.0, 0.0), limit=""),
        ]
    return build_arm("".join(parts) + "</robot>", **settings)


ORDERS = [
    (["left_1", "left_2", "right_1", "right_2"], False),  # branches are taken in command order
    (["right_1", "right_2", "left_1", "left_2"], False),
    (["left_1", "right_1", "left_2", "right_2"], True),
    (["right_2", "left_2", "left_1", "right_1"], True),
]


@pytest.mark.parametrize(("order", "permuted"), ORDERS)
def test_any_command_order(order, permuted):
    """
    All results follow the command order; only orders no tree traversal has cost a permutation.

    """
    plain, arm = two_arms(), two_arms(joints=order)
    assert arm.joints == tuple(order)
    assert (arm.built.order is not None) == permuted
    index = [plain.joints.index(name) for name in order]
    grid = np.ix_(index, index)
    for q, v in random_states(plain, 5):
        R, p, J, data = motion(plain, q, "left_tip", "right_tip", v)
        R2, p2, J2, data2 = motion(arm, q[index], "left_tip", "right_tip", v[index])
        close(R2, R)
        close(p2, p)
        close(J2, J[:, index])
        close(data2.M, data.M[grid])
        close(data2.C, data.C[grid])
        close(data2.g, data.g[index])
        work = arm.data()
        inertia(arm, work, q[index])
        close(work.M, data.M[grid])
        tau = 3.0 * np.cos(q)
        a = forward_dynamics(plain, plain.data(), q, v, tau)
        close(forward_dynamics(arm, work, q[index], v[index], tau[index]), a[index])
        close(inverse_dynamics(arm, work, q[index], v[index], a[index]), tau[index])


def test_rotor_inertia_goes_with_its_joint():
    """
    Also under a permutation: M grows on its diagonal, in command order.

    """
    order, rotors = ["left_1", "right_1", "left_2", "right_2"], np.array([0.1, 0.2, 0.3, 0.4])
    bare, arm = two_arms(joints=order), two_arms(joints=order, rotor_inertia=rotors)
    q, v, a = np.full(4, 0.3), np.ones(4), np.arange(4.0)
    _, _, _, before = motion(bare, q, "left_tip", "torso")
    _, _, _, after = motion(arm, q, "left_tip", "torso")
    close(after.M - before.M, np.diag(rotors))
    extra = inverse_dynamics(arm, arm.data(), q, v, a) - inverse_dynamics(bare, bare.data(), q, v, a)
    close(extra, rotors * a)
    assert np.array_equal(arm.rotor_inertia, rotors)


# ---- an arm as an object ---------------------------------------------------------------------------


def test_copies_compute_the_same():
    """
    Arms go through pickle (to worker processes) and deepcopy.

    """
    arm = two_arms(joints=["left_1", "right_1", "left_2", "right_2"])
    q, v = np.full(4, 0.3), np.ones(4)
    wanted = motion(arm, q, "left_tip", "right_tip", v)
    for twin in (pickle.loads(pickle.dumps(arm)), copy.deepcopy(arm)):
        found = motion(twin, q, "left_tip", "right_tip", v)
        for a, b in zip(found[:3], wanted[:3], strict=True):
            assert np.array_equal(a, b)
        assert np.array_equal(found[3].C, wanted[3].C)


def test_data_of_two_callers_are_independent():
    """
    One arm, two work data.

    """
    arm = planar_arm()
    first, second = arm.data(), arm.data()
    inertia(arm, first, np.zeros(2))
    before = first.M.copy()
    inertia(arm, second, np.ones(2))
    assert np.array_equal(first.M, before)
    assert not np.array_equal(second.M, before)


def test_immutable():
    """
    Nobody changes an arm by accident.

    """
    arm = planar_arm(friction={"viscous": [1.0, 1.0]})
    with pytest.raises(AttributeError):
        arm.lower = np.zeros(2)
    for array in (arm.lower, arm.upper, arm.continuous, arm.velocity_limit, arm.torque_limit, arm.viscous):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1


def test_limits_and_names_come_from_the_urdf_or_the_parameters():
    """
    Figures as written; parameters win.

    """
    arm = planar_arm(effort=70.0, velocity=2.5, limit=1.5)
    assert arm.n == 2
    assert arm.root == "base"
    assert arm.frames == ("base", "link1", "link2", "tip")
    assert arm.torque_limit.tolist() == [70.0, 70.0]
    assert arm.velocity_limit.tolist() == [2.5, 2.5]
    assert (arm.lower.tolist(), arm.upper.tolist()) == ([-1.5, -1.5], [1.5, 1.5])
    other = planar_arm(torque_limit=[5, 6], velocity_limit=np.array([1.0, 2.0]))
    assert other.torque_limit.tolist() == [5.0, 6.0]
    assert other.velocity_limit.tolist() == [1.0, 2.0]


def test_nothing_is_written_to_the_terminal(capfd):
    """
    Neither for good nor for bad descriptions, missing meshes included.

    """
    data_arm("panda")
    data_arm("ur5")
    with pytest.raises(InputError):
        build_arm(planar_urdf().replace('link="link2"', 'link="none"'))
    assert capfd.readouterr() == ("", "")


def test_frame_pose_is_the_pose_of_frame_motion():
    """Also with a base that moves, and where Pinocchio numbers the joints otherwise."""
    arm = data_arm("panda")
    rng = np.random.default_rng(4)
    for frame, base in ((arm.frames[-1], arm.root), (arm.frames[-2], arm.frames[3])):
        q = rng.uniform(-1.0, 1.0, arm.n)
        R, p = motion(arm, q, frame, base)[:2]
        found = frame_pose(arm, arm.data(), q, arm.frame_id(frame), arm.frame_id(base))
        np.testing.assert_allclose(found[0], R, atol=1e-14)
        np.testing.assert_allclose(found[1], p, atol=1e-14)
