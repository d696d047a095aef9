# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Whole closed-loop runs in MuJoCo: the package's prioritized law on somebody else's arm.

MuJoCo reads the same URDF with its own parser and integrates its own dynamics (Runge-Kutta of fourth
order, the torque of each cycle held through `qfrc_applied`), idealised: no contacts, constraints,
damping; rotor inertia as armature. The controller sees MuJoCo's state at 1 kHz. The same stack runs on
the package's own plant, by itself; the two trajectories must be one. Both go through a singularity.

Tolerance. Each plant makes an integration error in every cycle, MuJoCo's of the order h⁵, ours by
estimate below 1e-9 rad and far below it as a rule (one step of order 5 at least); the loop forgets what
is older than 1/k_p = 0.06 … 0.12 s, some 100 cycles. 1e-8 rad and ten times that in rad/s are asked for.
That integration is all the difference there is, is shown apart: with steps so long that it can be seen it
shrinks as the order says.

"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import prioritized_tracking as pt
from prioritized_tracking.offline.plant import PlantState, advance, build_plant, initial_state
from tests.arms import data_arm, data_urdf
from tests.outside.paths import WRIST, smallest_singular_value, stack_of

mujoco = pytest.importorskip("mujoco")

from tests.outside.test_mujoco_dynamics import Twin  # noqa: E402  (needs mujoco)

CONFIG = Path(__file__).resolve().parents[2] / "config"


@pytest.fixture(autouse=True)
def _log_elsewhere(tmp_path, monkeypatch):
    """
    MuJoCo writes MUJOCO_LOG.TXT into the working directory.

    """
    monkeypatch.chdir(tmp_path)


def twin_of(arm, text, timestep):
    """
    The arm in MuJoCo, with the rotors' inertia and that integration step (s).

    """
    twin = Twin.of(arm, text)
    twin.model.opt.integrator = mujoco.mjtIntegrator.mjINT_RK4
    twin.model.opt.timestep = timestep
    twin.model.dof_armature[twin.dofs] = arm.rotor_inertia
    return twin


def run_in_mujoco(controller, text, cycles, substeps):
    """
    Return q, v, torque, each (cycles, n), and the shares' sums.

    """
    q = controller.start_configuration()
    twin = twin_of(controller.arm, text, 1.0 / controller.rate / substeps)
    twin.put(q, np.zeros_like(q))
    controller.activate(0.0, q, np.zeros_like(q))
    controller.start(0.0)
    log, shares = np.zeros((3, cycles, q.size)), np.zeros(cycles)
    for k in range(cycles):
        q, v = twin.data.qpos[twin.qpos].copy(), twin.data.qvel[twin.dofs].copy()
        command = controller.step(k / controller.rate, q, v)
        log[:, k], shares[k] = (q, v, command.torque), command.share_sum
        twin.data.qfrc_applied[twin.dofs] = command.torque
        for _ in range(substeps):
            mujoco.mj_step(twin.model, twin.data)
    assert not any(warning.number for warning in twin.data.warning)
    return log, shares


def run_in_plant(controller, cycles):
    """
    The same on the package's own plant.

    """
    q = controller.start_configuration()
    plant = build_plant(controller.arm, {}, rate=controller.rate)
    data, state = plant.data(), initial_state(plant, q)
    controller.activate(0.0, q, np.zeros_like(q))
    controller.start(0.0)
    log = np.zeros((3, cycles, q.size))
    for k in range(cycles):
        command = controller.step(k / controller.rate, state.q, state.v)
        log[:, k] = state.q, state.v, command.torque
        state = advance(plant, data, state, command.torque, k)
    return log


def compare(stack, text, seconds, substeps=2):
    """
    Run a stack in both; return the controller, MuJoCo's log and the largest differences of q, v and
    torque.

    """
    controller = pt.load(stack)
    assert controller.law.name == "prioritized"
    cycles = round(seconds * controller.rate)
    theirs, shares = run_in_mujoco(controller, text, cycles, substeps)
    assert np.abs(shares - controller.arm.n).max() <= 1e-9
    apart = np.abs(run_in_plant(pt.load(stack), cycles) - theirs).max(axis=(1, 2))
    print(f"apart: {apart[0]:.1e} rad, {apart[1]:.1e} rad/s, {apart[2]:.1e} N·m")
    return controller, theirs, apart


def singular_values(controller, tool, q, every=10):
    """
    Smallest singular value of the tool's Jacobian along a run.

    """
    return np.array([smallest_singular_value(controller.arm, tool, x) for x in q[::every]])


def test_planar_arm_along_its_reach_limit():
    """
    Source: MuJoCo. Our two-axis arm; 9 s: it passes the stretched posture once and lies in it at the end.

    """
    text = (CONFIG / "planar_arm.urdf").read_text(encoding="utf-8")
    controller, (q, v, _), apart = compare(CONFIG / "planar_stack.yaml", text, 9.0)
    elbow = q[:, 1]
    assert elbow.min() < -0.5 < 0.5 < elbow[0]  # stretched in passing: singular, det J = l1 l2 sin(elbow)
    assert np.abs(elbow[-1000:]).max() < 1e-3  # and for the whole last second
    assert np.abs(v[-1000:, 0]).min() > 0.1  # while it moves along the limit
    assert apart[0] < 1e-8
    assert apart[1] < 1e-7
    errors = controller.pose_errors(q[-1])
    assert errors["pen"][0] < 3e-5


def test_open_arm_through_its_wrist_singularity():
    """
    Source: MuJoCo. The 6-axis arm of test_open_arms on its whole path.

    """
    stack, _ = stack_of(WRIST)
    controller, (q, _, _), apart = compare(stack, data_urdf(WRIST.arm), WRIST.seconds + 0.5)
    assert singular_values(controller, WRIST.tool, q).min() < 2e-3
    assert apart[0] < 1e-8
    assert apart[1] < 1e-7
    position, angle = controller.pose_errors(q[-1])[WRIST.tool]
    assert position < 1e-5
    assert angle < 1e-4


def test_the_difference_is_integration_and_shrinks_by_its_order():
    """
    One held torque for 40 ms on the falling 6-axis arm, joints at up to 3 rad/s: halving MuJoCo's step
    divides the difference by 2⁴, until the tolerance of our plant is reached, 1e-9 rad and rad/s a step.

    """
    arm = data_arm("ur10", rotor_inertia=WRIST.rotor_inertia)
    q, v = np.array(WRIST.start), np.array([1.0, -2.0, 3.0, -3.0, 3.0, -3.0])
    torque = np.array([100.0, -150.0, 80.0, 20.0, -20.0, 10.0])
    plant = build_plant(arm, {}, rate=25.0)
    start = PlantState(q=q, v=v, pending=(), applied=torque, step=plant.period)
    ours = advance(plant, plant.data(), start, torque, 0)
    apart = []
    for substeps in (2, 4, 8, 16, 256):
        twin = twin_of(arm, data_urdf("ur10"), plant.period / substeps)
        twin.put(q, v)
        twin.data.qfrc_applied[twin.dofs] = torque
        for _ in range(substeps):
            mujoco.mj_step(twin.model, twin.data)
        gap = np.concatenate([ours.q - twin.data.qpos[twin.qpos], ours.v - twin.data.qvel[twin.dofs]])
        apart.append(np.abs(gap).max())
    print("apart by substeps:", " ".join(f"{gap:.2e}" for gap in apart))
    ratios = np.array(apart[:3]) / np.array(apart[1:4])
    assert (ratios > 12.0).all()
    assert (ratios < 24.0).all()
    assert apart[-1] < 1e-8
