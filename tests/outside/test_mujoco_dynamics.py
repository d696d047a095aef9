# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
MuJoCo as independent engine: it reads the same URDF with its own parser and computes with its own algorithms.

Compared over the open arms of example-robot-data, idealised (no contacts, constraints, damping, armature).

Tolerances: both engines work in double precision; sums of about 10³ products lose some 1e-13 of the largest
entry. 1e-10 of it is asked for, and 1e-8 where M is inverted (its condition number reaches 1e5).

"""

from __future__ import annotations

import contextlib
from dataclasses import dataclass

import numpy as np
import pytest

from prioritized_tracking.core.arm import (
    Arm,
    build_arm,
    dynamics,
    forward_dynamics,
    frame_motion,
    inertia,
    inverse_dynamics,
)
from prioritized_tracking.errors import InputError
from tests.arms import (
    DATA_ARMS,
    all_data_urdfs,
    bare_urdf,
    data_arm,
    data_urdf,
    followers,
    random_states,
)

mujoco = pytest.importorskip("mujoco")

EXACT = 1e-10
INVERTED = 1e-8


@pytest.fixture(autouse=True)
def _log_elsewhere(tmp_path, monkeypatch):
    """
    MuJoCo writes MUJOCO_LOG.TXT into the working directory.

    """
    monkeypatch.chdir(tmp_path)


@dataclass
class Twin:
    """
    The same arm in MuJoCo; vectors in our joint order.

    """

    model: object
    data: object
    qpos: np.ndarray
    dofs: np.ndarray

    @classmethod
    def of(cls, arm: Arm, text: str) -> Twin:
        """
        Build it from the URDF the arm was built from.

        """
        model = mujoco.MjModel.from_xml_string(bare_urdf(text, arm.recipe.locked, mujoco=True))
        flags = mujoco.mjtDisableBit
        model.opt.disableflags |= flags.mjDSBL_CONSTRAINT | flags.mjDSBL_CONTACT
        model.opt.gravity[:] = arm.gravity
        for loss in (model.dof_damping, model.dof_frictionloss, model.dof_armature):
            loss[:] = 0.0
        ids = [mujoco.mj_name2id(model, mujoco.mjtObj.mjOBJ_JOINT, name) for name in arm.joints]
        assert min(ids) >= 0
        assert model.nv == arm.n
        return cls(model, mujoco.MjData(model), model.jnt_qposadr[ids], model.jnt_dofadr[ids])

    def put(self, q: np.ndarray, v: np.ndarray) -> None:
        """
        Set the state and compute all that follows from it.

        """
        self.data.qpos[self.qpos] = q
        self.data.qvel[self.dofs] = v
        self.data.qfrc_applied[:] = 0.0
        mujoco.mj_forward(self.model, self.data)

    def mass_matrix(self) -> np.ndarray:
        """
        Return M by products with unit vectors.

        """
        columns = np.zeros((self.model.nv, self.model.nv))
        for dof in range(self.model.nv):
            mujoco.mj_mulM(self.model, self.data, columns[dof], np.eye(self.model.nv)[dof])
        return columns[np.ix_(self.dofs, self.dofs)]

    def bias(self) -> np.ndarray:
        """
        Return C q̇ + g.

        """
        return self.data.qfrc_bias[self.dofs]

    def inverse(self, a: np.ndarray) -> np.ndarray:
        """
        Return the torque for an acceleration at the state put last.

        """
        self.data.qacc[self.dofs] = a
        mujoco.mj_inverse(self.model, self.data)
        return self.data.qfrc_inverse[self.dofs]

    def forward(self, tau: np.ndarray) -> np.ndarray:
        """
        Return the acceleration under a torque at the state put last.

        """
        self.data.qfrc_applied[self.dofs] = tau
        mujoco.mj_forward(self.model, self.data)
        return self.data.qacc[self.dofs]

    def frame(self, name: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """
        Return rotation, position and Jacobian of a link in world axes.

        """
        body = mujoco.mj_name2id(self.model, mujoco.mjtObj.mjOBJ_BODY, name)
        assert body >= 0, name
        jacobian = np.zeros((6, self.model.nv))
        mujoco.mj_jacBody(self.model, self.data, jacobian[:3], jacobian[3:], body)
        return self.data.xmat[body].reshape(3, 3), self.data.xpos[body], jacobian[:, self.dofs]


def differ(ours: np.ndarray, theirs: np.ndarray) -> float:
    """
    Return the largest difference relative to the largest entry.

    """
    return float(np.abs(ours - theirs).max() / max(np.abs(theirs).max(), 1e-6))


def compare(arm: Arm, twin: Twin, count: int) -> dict[str, float]:
    """
    Return the largest relative differences over random states.

    """
    data, rng = arm.data(), np.random.default_rng(1)
    base = arm.frame_id(arm.root)
    worst = dict.fromkeys(("M", "bias", "inverse", "forward", "pose", "jacobian"), 0.0)
    links = [name for name in arm.frames if name != arm.root]
    R, p, J = np.zeros((3, 3)), np.zeros(3), np.zeros((6, arm.n))
    for q, v in random_states(arm, count):
        twin.put(q, v)
        a = rng.uniform(-3.0, 3.0, arm.n)
        tau = arm.torque_limit * rng.uniform(-1.0, 1.0, arm.n)
        dynamics(arm, data, q, v)
        M = twin.mass_matrix()
        found = {"M": differ(data.M, M), "bias": differ(data.C @ v + data.g, twin.bias())}
        inertia(arm, data, q)
        found["M"] = max(found["M"], differ(data.M, M))
        link = links[rng.integers(len(links))]
        frame_motion(arm, data, arm.frame_id(link), base, R, p, J)
        rotation, position, jacobian = twin.frame(link)
        found["pose"] = max(np.abs(R - rotation).max(), np.abs(p - position).max())
        found["jacobian"] = differ(J, jacobian)
        found["inverse"] = differ(inverse_dynamics(arm, arm.data(), q, v, a), twin.inverse(a))
        found["forward"] = differ(forward_dynamics(arm, data, q, v, tau), twin.forward(tau))
        worst = {key: max(worst[key], float(found[key])) for key in worst}
    return worst


def assert_close(worst: dict[str, float]) -> None:
    """
    Hold the differences against the tolerances.

    """
    for key, value in worst.items():
        assert value < (INVERTED if key == "forward" else EXACT), f"{key}: {value:.2e} of {worst}"


@pytest.mark.parametrize("name", sorted(DATA_ARMS))
def test_arms_agree_over_200_states(name):
    """
    Source: MuJoCo (crba by mj_mulM, qfrc_bias, mj_inverse, mj_forward, mj_jacBody).

    """
    arm = data_arm(name)
    assert_close(compare(arm, Twin.of(arm, data_urdf(name)), 200))


# Files of example-robot-data that are refused, and the fault that is named. Legged machines and humanoids
# that are accepted are compared standing on their root: branched trees, up to 43 joints.
REFUSED = {
    "centauro_description/urdf/centauro.urdf": "no room between the position limits",
    "double_pendulum_description/urdf/double_pendulum.urdf": "no usable effort limit",
    "double_pendulum_description/urdf/double_pendulum_continuous.urdf": "no usable effort limit",
    "double_pendulum_description/urdf/double_pendulum_simple.urdf": "no usable effort limit",
    "hector_description/robots/quadrotor_base.urdf": "no joint is left to control",
    "icub_description/robots/icub.urdf": "the inertia is not positive",
    "icub_description/robots/icub_reduced.urdf": "the inertia is not positive",
    "iris_description/robots/iris.urdf": "no usable effort limit",
    "iris_description/robots/iris_simple.urdf": "no joint is left to control",
    "quadruped_description/urdf/quadruped.urdf": "no room between the position limits",
    "romeo_description/urdf/romeo.urdf": "no usable effort limit",
    "romeo_description/urdf/romeo_laas_small.urdf": "the inertia is not positive",
    "tiago_description/robots/tiago_dual.urdf": "no usable velocity limit",
    "ur_description/urdf/ur3.urdf": "the URDF has no links",
}


@pytest.mark.parametrize("file", all_data_urdfs())
def test_every_file_agrees_or_is_refused_with_its_fault(file):
    """
    Source: MuJoCo, or the fault seen in the file.

    """
    text = data_urdf(file)
    if file in REFUSED:
        with pytest.raises(InputError, match=REFUSED[file]):
            build_arm(text, locked=followers(text))
        return
    arm = build_arm(text, locked=followers(text))
    try:
        twin = Twin.of(arm, text)
    except ValueError as error:  # stricter about bodies that cannot be, also about ones that never move
        if "inertia must" in str(error) or "mass and inertia" in str(error):
            return  # these are compared with Pinocchio's own URDF reader in tests/core
        raise
    assert_close(compare(arm, twin, 5))


def test_how_many_files_are_compared():
    """
    The comparison above is not empty: MuJoCo accepts most of what we accept.

    """
    accepted = 0
    for file in set(all_data_urdfs()) - set(REFUSED):
        with contextlib.suppress(ValueError):
            text = data_urdf(file)
            Twin.of(build_arm(text, locked=followers(text)), text)
            accepted += 1
    assert accepted >= 35  # 39 with example-robot-data 6.0


@pytest.mark.parametrize("name", ["panda", "ur10"])
def test_a_second_of_motion_agrees(name):
    """
    Source: MuJoCo, its Runge-Kutta integrator; ours has the same order and step: only rounding differs.

    Rounding (1e-16 of 100 rad/s²) is amplified by the motion's own divergence, e^(λt) with λ about 10/s.

    """
    arm = data_arm(name)
    twin = Twin.of(arm, data_urdf(name))
    twin.model.opt.integrator = mujoco.mjtIntegrator.mjINT_RK4
    twin.model.opt.timestep = dt = 1e-3
    data = arm.data()
    q, v = np.clip(np.full(arm.n, 0.3), arm.lower, arm.upper), np.zeros(arm.n)
    twin.put(q, v)
    for k in range(1000):
        tau = 0.02 * arm.torque_limit * np.sin(2.0 * np.pi * 1e-3 * k + np.arange(arm.n))
        twin.data.qfrc_applied[twin.dofs] = tau
        mujoco.mj_step(twin.model, twin.data)
        q, v = _runge_kutta(arm, data, q, v, tau, dt)
    assert np.abs(v).max() > 0.5  # it moved: the arm falls
    assert np.abs(q - twin.data.qpos[twin.qpos]).max() < 1e-8
    assert np.abs(v - twin.data.qvel[twin.dofs]).max() < 1e-7


def _runge_kutta(arm, data, q, v, tau, dt):
    """
    Return the state one classical Runge-Kutta step later.

    """
    a1 = forward_dynamics(arm, data, q, v, tau)
    v2 = v + 0.5 * dt * a1
    a2 = forward_dynamics(arm, data, q + 0.5 * dt * v, v2, tau)
    v3 = v + 0.5 * dt * a2
    a3 = forward_dynamics(arm, data, q + 0.5 * dt * v2, v3, tau)
    v4 = v + dt * a3
    a4 = forward_dynamics(arm, data, q + dt * v3, v4, tau)
    return q + dt / 6.0 * (v + 2.0 * v2 + 2.0 * v3 + v4), v + dt / 6.0 * (a1 + 2.0 * a2 + 2.0 * a3 + a4)
