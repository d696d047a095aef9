# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The laws on whole arms: the Lyapunov function, the textbook form, the baselines' formulas.

"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from prioritized_tracking.charts import Cylindrical, Euler, Joints, Position
from prioritized_tracking.core import arm as arms
from prioritized_tracking.core.kernel import TWIN_STEP
from prioritized_tracking.core.laws import LAWS, ToolGains
from prioritized_tracking.core.references import JointHold, PoseHold
from prioritized_tracking.errors import InputError
from prioritized_tracking.offline.textbook import TextbookTask, blended
from tests.arms import planar_arm
from tests.stacks import controller, planar, seven_axes, task


def terms(arm, q, v):
    """M, C, g and friction of an arm, fresh arrays."""
    data = arm.data()
    arms.dynamics(arm, data, q, v)
    return data.M.copy(), data.C.copy(), data.g.copy(), arms.friction_torque(arm, v)


def random_states(arm, seed, count):
    """States inside the limits."""
    rng = np.random.default_rng(seed)
    low, high = np.maximum(arm.lower, -3.0), np.minimum(arm.upper, 3.0)
    for _ in range(count):
        yield rng.uniform(low, high), rng.normal(size=arm.n)


@pytest.mark.parametrize("make", [planar, seven_axes], ids=["planar", "seven axes"])
def test_the_lyapunov_function_falls_as_promised(make):
    """
    V = ½ sᵀ M s along the closed loop: V̇ = −sᵀ L D Lᵀ s − sᵀ(f(q̇) − f(q̇_r)) ≤ 0, in any hand-over.

    Source: Slotine & Li (1987). V̇ by central differences of V along q̈ from the arm's forward
    dynamics under the law's torque, with an exact model that has friction.

    """
    friction = {"viscous": [0.5, 0.3, 0.2], "coulomb": [1.0, 0.6, 0.4]}
    control = make(arm={"friction": friction}) if make is planar else make()
    arm, h, seen = control.arm, 1e-4, set()
    for q, v in random_states(arm, 0, 40):
        t = 1.3
        command = control.evaluate(t, q, v)
        seen.add(command.branches)
        s = v - command.joint_velocity_reference
        M, *_, friction_now = terms(arm, q, v)
        L = np.linalg.cholesky(M)
        expected = -s @ L @ control.law.D @ L.T @ s - s @ (
            friction_now - arms.friction_torque(arm, command.joint_velocity_reference)
        )
        acceleration = arms.forward_dynamics(arm, arm.data(), q, v, command.torque)
        values = []
        for dt in (h, -h):
            later = q + dt * v + 0.5 * dt**2 * acceleration
            error = v + dt * acceleration - control.evaluate(t + dt, later, v).joint_velocity_reference
            values.append(0.5 * error @ terms(arm, later, v)[0] @ error)
        rate = (values[0] - values[1]) / (2 * h)
        assert expected < 0.0
        assert abs(rate - expected) < 2e-3 * abs(expected) + 1e-3
    assert max(seen) > 1, "some of the states must be inside a band"


@pytest.mark.parametrize("make", [planar, seven_axes], ids=["planar", "seven axes"])
def test_torque_equals_the_textbook_form(make):
    """
    τ = M q̈_r + C q̇_r + g − L D Lᵀ s, q̇_r and D from the naive oracle (offline/textbook.py).

    """
    control = make()
    arm, stack = control.arm, control.stack
    for q, v in random_states(arm, 1, 12):
        command = control.evaluate(1.1, q, v)
        outcomes = []
        for evaluation in (control._here, control._there):
            claims = evaluation.room.claims
            tasks = [
                TextbookTask(claims.J[a:b], claims.nu[a:b], claims.validity[i], item.damping, item.handover)
                for i, (item, a, b) in enumerate(
                    zip(stack.tasks, stack.first_row[:-1], stack.first_row[1:], strict=True)
                )
            ]
            posture = (claims.posture, claims.posture_feed_forward)
            outcomes.append(blended(evaluation.data.M, tasks, posture, 40.0, stack.claim_speed))
        if max(len(outcome.leaves) for outcome in outcomes) > 16:
            continue
        M, C, g, _ = terms(arm, q, v)
        velocity = outcomes[0].velocity
        acceleration = (outcomes[1].velocity - velocity) / TWIN_STEP
        expected = M @ acceleration + C @ velocity + g - outcomes[0].feedback @ (v - velocity)
        np.testing.assert_allclose(command.joint_velocity_reference, velocity, atol=1e-8)
        # 1e-6: two computations of q̇_r agree to 1e-12, divided by the step of 1e-6 s
        np.testing.assert_allclose(command.torque, expected, atol=2e-5 * max(1.0, np.abs(expected).max()))
        np.testing.assert_allclose(control.law.outcome.report[0], outcomes[0].shares, atol=1e-9)


def test_reference_acceleration_is_the_derivative_of_the_reference_velocity():
    """q̈_r from the twin against central differences over a hundred times larger steps."""
    control = seven_axes()
    h = 1e-4
    for q, v in random_states(control.arm, 2, 15):
        M, C, g, _ = terms(control.arm, q, v)
        command = control.evaluate(1.0, q, v)
        L = np.linalg.cholesky(M)
        feedback = L @ control.law.D @ L.T @ (v - command.joint_velocity_reference)
        ahead, back = (control.evaluate(1.0 + dt, q + dt * v, v).joint_velocity_reference for dt in (h, -h))
        expected = M @ (ahead - back) / (2 * h) + C @ command.joint_velocity_reference + g - feedback
        np.testing.assert_allclose(command.torque, expected, atol=1e-2 * (1.0 + np.abs(expected).max()))


def turning(what, before):
    """
    An arm whose first joint turns at 1 rad/s, and an error that is ``before`` short of π: (controller, q).

    """
    arm = planar_arm((0.5, 0.4, 0.3), kind="continuous")
    q = np.array([0.2, 0.5, 0.3])
    R, p = controller(arm, []).pose(arm.frame_id("tip"), arm.frame_id("base"), q)
    back = Rotation.from_rotvec([0.0, 0.0, before - np.pi]).as_matrix()  # where the error is π − before
    goal = q + [before - np.pi, 0.0, 0.0]
    elbow = Joints(names=["j1"])
    elbow.bind(arm.joints, (True, True, True))
    tasks = {
        "cylindrical": [task("round", Cylindrical(), "tip", "base")],
        "euler": [task("turn", Euler(sequence="xyz"), "tip", "base")],
        "joints": [task("elbow", elbow, "", "", reference="joints")],
        "posture": [],
    }[what]
    held = JointHold(goal if what in ("joints", "posture") else q)
    return controller(arm, tasks, tool=PoseHold(back @ R, back @ p), joints=held), q


@pytest.mark.parametrize("what", ["cylindrical", "euler", "joints", "posture"])
def test_the_twin_keeps_the_turn_of_an_angle(what):
    """
    An error crosses π between the state and its twin: q̈_r sees its velocity, not a jump of 2π in 1e-6 s.

    """
    torques = []
    for before in (3e-7, 1e-3):  # the twin moves on by 1e-6 rad: across π, and not
        control, q = turning(what, before)
        command = control.evaluate(0.0, q, np.array([1.0, 0.0, 0.0]))
        error = next(iter(command.tasks.values())).error
        np.testing.assert_allclose(np.abs(error).max(), np.pi - before, atol=1e-12)
        torques.append(command.torque)
    # the error differs by 1e-3 of π; a jump would add M k_p 2π/1e-6, some 1e7 N·m
    np.testing.assert_allclose(torques[0], torques[1], rtol=0.02, atol=0.5)


@pytest.mark.parametrize("what", ["joints", "posture"])
def test_a_whole_turn_of_a_joint_without_end_makes_no_difference(what):
    """The errors go the short way round; a joint with limits has to turn back."""
    torques = []
    for turns in (0, 1, -2):
        control, q = turning(what, 2.5)
        torques.append(control.evaluate(0.0, q + [2 * np.pi * turns, 0.0, 0.0], np.ones(3)).torque)
    np.testing.assert_allclose(torques[1:], torques[:1] * 2, atol=1e-5)  # 4e-16 · 2π · M k_p / 1e-6 and less


def test_a_stiff_position_task_reads_as_an_impedance():
    """At rest and c = 1 the torque beyond gravity is −Jᵀ · stiffness · x̃ for the top task (Hogan 1985)."""
    arm = planar_arm((0.5, 0.4, 0.3))
    q = np.array([0.3, 0.8, 0.4])
    pen = task("pen", Position(axes="xy"), "tip", "base", handover=(1e6, 1e7))
    control = controller(
        arm, [pen], tool=PoseHold(np.eye(3), np.zeros(3)), joints=JointHold(q), posture_damping=1e-9
    )
    command = control.evaluate(0.0, q, np.zeros(3))
    J = control._here.poses[0][2][:2]
    s = -command.joint_velocity_reference
    M = control._here.data.M
    L = np.linalg.cholesky(M)
    feedback = -L @ control.law.D @ L.T @ s
    error = command.tasks["pen"].error
    np.testing.assert_allclose(feedback, -J.T @ (800.0 * error), atol=1e-6)


def test_feedback_floor_adds_to_every_direction():
    """D gains floor · I: the torque against s grows by floor · M s."""
    q, v = np.array([0.3, 0.8, 0.4]), np.array([0.1, -0.2, 0.3])
    plain, floored = planar(), planar(feedback_floor=5.0)
    a, b = plain.evaluate(0.5, q, v), floored.evaluate(0.5, q, v)
    M = terms(plain.arm, q, v)[0]
    np.testing.assert_allclose(b.torque - a.torque, -5.0 * M @ (v - a.joint_velocity_reference), atol=1e-4)


def test_push_acts_through_the_jacobian_of_what_is_owned():
    """A regular top task pushes with Jᵀ F, ramped."""
    arm = planar_arm((0.5, 0.4, 0.3))
    q = np.array([0.3, 0.8, 0.4])
    pen = task("pen", Position(axes="xy"), "tip", "base", handover=(1e6, 1e7), force=np.array([3.0, -2.0]))
    control = controller(arm, [pen], tool=PoseHold(np.eye(3), np.zeros(3)), joints=JointHold(q))
    control.evaluate(0.0, q, np.zeros(3))
    here, there, still = control._here, control._there, np.zeros(3)
    feedback = {}
    for scale in (0.0, 0.25, 1.0):
        control.law.torque(here, there, still, scale)
        feedback[scale] = control.law.outcome.feedback.copy()
    push = here.poses[0][2][:2].T @ [3.0, -2.0]
    np.testing.assert_allclose(feedback[1.0] - feedback[0.0], push, atol=1e-9)
    np.testing.assert_allclose(feedback[0.25] - feedback[0.0], 0.25 * push, atol=1e-9)


def test_push_of_a_lower_task_does_not_accelerate_a_higher_one():
    """J_1 M⁻¹ τ = 0 (dynamic consistency, Khatib 1987); along itself it pushes what is left of the task."""
    arm = planar_arm((0.5, 0.4, 0.3))
    q = np.array([0.3, 0.8, 0.4])
    torques = []
    for force in (5.0, 0.0):
        x, y = (
            task(axis, Position(axes=axis), "tip", "base", handover=(1e6, 1e7), force=np.array([push]))
            for axis, push in (("x", 0.0), ("y", force))
        )
        control = controller(arm, [x, y], tool=PoseHold(np.eye(3), np.zeros(3)), joints=JointHold(q))
        torques.append(control.evaluate(0.0, q, np.zeros(3)).torque)
    M, J = terms(arm, q, q)[0], control._here.poses[0][2][:2]
    acceleration = J @ np.linalg.solve(M, torques[0] - torques[1])
    np.testing.assert_allclose(acceleration[0], 0.0, atol=1e-9)
    # what x leaves of y feels the inertia 1/λ, λ = y-element of J M⁻¹ Jᵀ less what x has of it
    G = J @ np.linalg.solve(M, J.T)
    np.testing.assert_allclose(acceleration[1], 5.0 * (G[1, 1] - G[0, 1] ** 2 / G[0, 0]), rtol=1e-9)


@pytest.mark.parametrize("law", sorted(LAWS))
def test_every_law_is_at_rest_where_references_agree(law):
    """At the references, standing still, each law asks for gravity alone."""
    arm = planar_arm((0.5, 0.4, 0.3))
    q = np.array([0.3, 0.8, 0.4])
    pen = task("pen", Position(axes="xy"), "tip", "base")
    control = controller(arm, [pen], law=law)
    control.activate(0.0, q, np.zeros(3))
    np.testing.assert_allclose(control.step(0.0, q, np.zeros(3)).torque, terms(arm, q, q)[2], atol=1e-6)


def test_joint_impedance_formula():
    """τ = g − M (stiffness x̃ + damping (q̇ − q̇_d)), Hogan 1985 in the inertia metric."""
    control = planar(law="joint_impedance")
    q, v, t = np.array([0.5, 0.7, 0.2]), np.array([0.3, -0.1, 0.2]), 1.2
    target = control.channels["joints"].path.sample(t)
    M, _, g, _ = terms(control.arm, q, v)
    expected = g - M @ (320.0 * (q - target.q) + 40.0 * (v - target.v))
    np.testing.assert_allclose(control.evaluate(t, q, v).torque, expected, atol=1e-10)


def test_cartesian_impedance_formula():
    """τ = g − Jᵀ(K x̃ + D ẋ̃) + Nᵀ M(…); the null-space part accelerates no task (Khatib 1987)."""
    control = seven_axes(law="cartesian_impedance")
    t = 1.2
    for q, v in random_states(control.arm, 4, 10):
        M, _, g, _ = terms(control.arm, q, v)
        torque = control.evaluate(t, q, v).torque
        R, p, J = control._here.poses[0]
        target = control.channels["tool"].path.sample(t)
        error = np.concatenate([p - target.p, Rotation.from_matrix(R @ target.R.T).as_rotvec()])
        K = np.array([800.0] * 3 + [80.0] * 3)
        D = np.array([100.0] * 3 + [10.0] * 3)
        tool_torque = -J.T @ (K * error + D * (J @ v - target.V))
        rest = torque - g - tool_torque
        np.testing.assert_allclose(J @ np.linalg.solve(M, rest), 0.0, atol=1e-6)
        # rest = Nᵀ M a with N = I − J# J: twice projected is the same
        inverse = np.linalg.solve(M, J.T) @ np.linalg.pinv(J @ np.linalg.solve(M, J.T))
        posture = M @ (-320.0 * (q - control._here.room.q_d) - 40.0 * v)
        np.testing.assert_allclose(rest, posture - J.T @ (inverse.T @ posture), atol=1e-5)


def test_tool_gains_are_the_largest_of_the_highest_task_of_each_kind():
    """Of arrays the maximum; of several tasks on the tool the first; other frames do not count."""
    plain = seven_axes()
    frame, base = plain.stack.motions[0]
    gains = {"stiffness": np.array([10.0, 30.0, 20.0]), "damping": np.array([2.0, 1.0, 3.0])}
    tasks = (
        replace(task("turn", Euler(), frame, base), **gains),
        task("elbow", Position(), "panda_link4", base, stiffness=999.0),
        replace(task("tip", Position(), frame, base), stiffness=np.array([5.0, 7.0, 6.0])),
        task("again", Position(), frame, base, stiffness=888.0),
    )
    tool = ToolGains(replace(plain.stack, tasks=tasks))
    order = np.argsort(tool.rows)  # rows of the Jacobian: translation, then rotation
    np.testing.assert_array_equal(tool.rows[order], np.arange(6))
    np.testing.assert_array_equal(tool.stiffness[order], [7.0] * 3 + [30.0] * 3)
    np.testing.assert_array_equal(tool.damping[order], [100.0] * 3 + [3.0] * 3)


def test_inverse_jacobian_reaches_the_tool_velocity_exactly():
    """J q̇_r = V_d − k_p x̃ away from singularities: the defining property of tracking with J⁻¹."""
    control = seven_axes(law="inverse_jacobian")
    q = np.array([0.3, -0.6, 0.2, -2.0, 0.4, 1.7, 0.5])
    command = control.evaluate(1.0, q, np.zeros(7))
    R, p, J = control._here.poses[0]
    target = control.channels["tool"].path.sample(1.0)
    error = np.concatenate([p - target.p, Rotation.from_matrix(R @ target.R.T).as_rotvec()])
    np.testing.assert_allclose(J @ command.joint_velocity_reference, target.V - 8.0 * error, atol=1e-9)


def test_laws_for_rehearsals_only_say_so():
    """Tracking with the inverse must never reach hardware."""
    assert {name for name, law in LAWS.items() if law.rehearsal_only} == {
        "inverse_jacobian",
        "damped_inverse",
    }


def test_a_survey_of_a_state_without_solution_is_refused():
    """No branch, nothing to blend: the same message as for the torque, and no other exception."""
    control = planar()
    here, law = control.survey(1.0, np.array([0.5, 0.7, 0.2]))
    here.room.M[:] = 0.0
    with pytest.raises(InputError, match="positive definite"):
        law.survey(here)


def test_laws_say_what_they_need():
    """The laws that control one tool, and the one that only knows the joints."""
    assert {n for n, law in LAWS.items() if law.needs_tool} == {
        "cartesian_impedance",
        "inverse_jacobian",
        "damped_inverse",
    }
    assert {n for n, law in LAWS.items() if law.needs_posture} == {"joint_impedance"}
