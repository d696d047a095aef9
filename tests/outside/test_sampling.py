# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
How much gain a control rate carries: stability limits of sampled control, on the package's own closed
loop.

Oracles: the limits of a spring-damper on one inertia under a zero-order hold, kT/2 < b < 2m/T with exact
velocity, bT/m < 1 with one cycle of delay, 2 with the velocity from a backward difference, 0.8284 with
both (k → 0; worked out from the characteristic polynomials, which are repeated here as matrices:
Franklin, Powell & Workman, Digital Control of Dynamic Systems); the delayed difference equation v_{k+1} =
v_k − a v_{k−d}, stable for 0 < a < 2 sin(π/(2(2d+1))) (Levin & May 1976, from memory); uniform joint
damping b < 2 λmin(M)/T.

The loop is measured, not modelled: its matrix comes from one cycle of controller and plant at a time,
started from small displacements of position, velocity and torque under way. It is checked by simulation
on both sides.

"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import prioritized_tracking as pt
from prioritized_tracking.charts.joints import Joints
from prioritized_tracking.core.arm import inertia
from prioritized_tracking.core.channels import Channel
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.core.references import JointHold, PoseHold
from prioritized_tracking.core.sampling import MARGIN, decay_rates, rate_bound
from prioritized_tracking.core.stack import PostureTask, Stack, Task
from prioritized_tracking.offline.plant import advance, build_plant, initial_state
from tests.arms import data_arm, planar_arm

CONFIG = Path(__file__).resolve().parents[2] / "config"
RATE = 1000.0
T = 1.0 / RATE
SMALL = 1e-5  # rad, rad/s, N·m: step of the differences; second-order terms are 1e-10 of the first
MEASURED = 1e-6  # relative accuracy of a limit found from such a matrix


# ---- the loop under test -------------------------------------------------------------------------------


def hold(arm, law, tasks, posture, q):
    """
    An active controller whose joint reference stays at q.

    """
    stack = Stack(tasks=tuple(tasks), posture=posture, claim_speed=arm.velocity_limit)
    channel = Channel(path=JointHold(q), kind="joints", base="", leader="joints")
    controller = Controller(arm, stack, {"joints": channel}, law=law, rate=RATE)
    controller.activate(0.0, q, np.zeros(arm.n))
    return controller


def posture_loop(arm, law, stiffness, damping):
    """
    One joint under a posture alone; gains in 1/s² and 1/s.

    """
    posture = PostureTask(name="posture", reference="joints", stiffness=stiffness, damping=damping)
    return hold(arm, law, (), posture, np.zeros(arm.n))


def joints_loop(arm, q, stiffness, damping):
    """
    All joints under one chart of joint angles; gains in N·m/rad and N·m·s/rad.

    """
    chart = Joints(names=arm.joints)
    chart.bind(arm.joints, tuple(arm.continuous))
    task = Task(
        name="all", chart=chart, frame="", base="", reference="joints", handover=(1e6, 1e7),
        stiffness=np.full(arm.n, stiffness), damping=np.full(arm.n, damping), force=np.zeros(arm.n),
    )  # fmt: skip
    posture = PostureTask(name="posture", reference="joints", stiffness=0.0, damping=1.0)
    return hold(arm, "prioritized", (task,), posture, q)


def one_joint():
    """
    A joint about the vertical, inertia 1.7 kg·m² (uniform rod of 5.1 kg and 1 m).

    """
    return planar_arm((1.0,), masses=(5.1,), gravity=(0.0, 0.0, -9.81), effort=1e6, velocity=1e3)


def cycle_map(controller, q, delay, *, difference=False):
    """
    Return the function that takes (displacement, velocity, torques under way) through one cycle.

    With `difference` the controller is given the velocity (q_k − q_{k−1})/T instead of the true one, and
    the first part of the vector is q_k − q_{k−1}.

    """
    arm = controller.arm
    plant = build_plant(arm, {"delay": delay}, rate=RATE)
    data, start = plant.data(), initial_state(plant, q)
    still = start.applied

    def through(x):
        d, v, under_way = x[: arm.n], x[arm.n : 2 * arm.n], x[2 * arm.n :].reshape(delay, arm.n)
        position = q if difference else q + d
        state = replace(start, q=position, v=v, pending=tuple(still + torque for torque in under_way))
        torque = controller.step(0.0, position, d / T if difference else v).torque
        after = advance(plant, data, state, torque, 0)
        pending = [torque - still for torque in after.pending]
        return np.concatenate([after.q - q, after.v, *pending])

    return through


def loop_matrix(controller, q, delay, *, difference=False):
    """
    Central differences of one cycle about rest at q.

    """
    through = cycle_map(controller, q, delay, difference=difference)
    size = (2 + delay) * controller.arm.n
    columns = [(through(SMALL * e) - through(-SMALL * e)) / (2.0 * SMALL) for e in np.eye(size)]
    return np.array(columns).T


def radius(matrix):
    """
    Spectral radius.

    """
    return float(np.abs(np.linalg.eigvals(matrix)).max())


def bisect(stable, low, high):
    """
    Return where a monotone property ends, to 1e-8 of it; `low` and `high` lie on either side.

    """
    assert stable(low) != stable(high)
    side = stable(low)
    while high - low > 1e-8 * high:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if stable(middle) == side else (low, middle)
    return 0.5 * (low + high)


def damping_limit(law, delay, difference=False):
    """
    Largest stable damping (1/s) of one joint without stiffness; position does not come back and is left
    out.

    """
    arm = one_joint()

    def stable(damping):
        controller = posture_loop(arm, law, 0.0, damping)
        matrix = loop_matrix(controller, np.zeros(1), delay, difference=difference)
        return radius(matrix if difference else matrix[1:, 1:]) < 1.0

    return bisect(stable, 100.0, 3000.0)


# ---- one axis ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("delay", "difference", "limit"),
    [(0, False, 2.0), (1, False, 1.0), (0, True, 2.0), (1, True, 2.0 * (np.sqrt(2.0) - 1.0))],
)
def test_largest_damping(delay, difference, limit):
    """
    bT/m, k → 0: 2; with one cycle of delay 1; with the velocity from a backward difference 2; with both
    0.8284.

    """
    found = damping_limit("joint_impedance", delay, difference) * T
    assert found == pytest.approx(limit, rel=MEASURED)


@pytest.mark.parametrize("law", ["joint_impedance", "prioritized"])
@pytest.mark.parametrize("delay", [0, 1, 2, 3])
def test_rate_bound_by_the_loop(law, delay):
    """
    Levin & May 1976 (from memory): 2 sin(π/(2(2d+1))); to three digits 2, 1, 0.618, 0.445.

    """
    assert damping_limit(law, delay) * T == pytest.approx(rate_bound(delay), rel=MEASURED)
    assert rate_bound(delay) == pytest.approx([2.0, 1.0, 0.618, 0.445][delay], abs=5e-4)


@pytest.mark.parametrize("delay", [0, 1, 2, 3])
def test_rate_bound_by_the_difference_equation(delay):
    """
    Roots of z^{d+1} − z^d + a = 0, just inside and just outside.

    """
    for factor, stable in ((1.0 - 1e-9, True), (1.0 + 1e-9, False)):
        polynomial = np.zeros(delay + 2)
        polynomial[:2] = 1.0, -1.0
        polynomial[-1] += factor * rate_bound(delay)
        assert (np.abs(np.roots(polynomial)).max() < 1.0) == stable


def textbook_matrix(k, b, delay):
    """
    Sampled unit inertia under u = −k x − b v, a number of cycles late (Franklin, Powell & Workman).

    """
    matrix = np.zeros((2 + delay, 2 + delay))
    held, feedback = np.array([0.5 * T**2, T]), np.array([-k, -b])
    matrix[:2, :2] = [[1.0, T], [0.0, 1.0]]
    if delay == 0:
        matrix[:2, :2] += np.outer(held, feedback)
        return matrix
    matrix[:2, 2] = held
    matrix[2:-1, 3:] = np.eye(delay - 1)
    matrix[-1, :2] = feedback
    return matrix


@pytest.mark.parametrize("delay", [0, 1, 2])
@pytest.mark.parametrize(
    ("law", "stiffness", "damping", "k", "b"),
    [
        ("joint_impedance", 320.0, 40.0, 320.0, 40.0),
        ("joint_impedance", 2e5, 700.0, 2e5, 700.0),
        ("prioritized", 320.0, 40.0, 320.0, 40.0 + 8.0),
        ("prioritized", 7000.0, 350.0, 7000.0, 350.0 + 20.0),
    ],
)
def test_the_loop_is_the_sampled_spring_damper(law, stiffness, damping, k, b, delay):
    """
    Textbook matrix, element by element. Of the prioritized law k = k_p d and b = d + k_p: the rate r of
    the rule.

    """
    arm = one_joint()
    controller = posture_loop(arm, law, stiffness, damping)
    found = loop_matrix(controller, np.zeros(1), delay)
    inertia_of_rod = 5.1 / 3.0
    expected = textbook_matrix(k, b, delay)
    expected[:2, 2:] /= inertia_of_rod  # torques instead of accelerations under way
    expected[2:, :2] *= inertia_of_rod
    np.testing.assert_allclose(found, expected, rtol=1e-6, atol=1e-9)


@pytest.mark.parametrize("stiffness", [320.0, 5000.0])
def test_least_and_most_damping_with_stiffness(stiffness):
    """
    kT/2 < b < 2m/T, exact velocity, no delay: a spring without damper gains energy by sampling.

    """
    arm = one_joint()

    def stable(damping):
        controller = posture_loop(arm, "joint_impedance", stiffness, damping)
        return radius(loop_matrix(controller, np.zeros(1), 0)) < 1.0

    least = bisect(stable, 0.1 * stiffness * T, 100.0)
    most = bisect(stable, 100.0, 3000.0)
    assert least == pytest.approx(0.5 * stiffness * T, rel=1e-4)  # a radius so near 1 loses digits
    assert most == pytest.approx(2.0 / T, rel=MEASURED)


@pytest.mark.parametrize("delay", [0, 1, 2, 3])
@pytest.mark.parametrize("factor", [0.97, 1.03])
def test_both_sides_by_simulation(delay, factor):
    """
    3 % below the bound a disturbance dies out, 3 % above it grows: the whole loop, cycle by cycle.

    """
    arm = one_joint()
    controller = posture_loop(arm, "prioritized", 0.0, factor * rate_bound(delay) / T)
    plant = build_plant(arm, {"delay": delay}, rate=RATE)
    data, state = plant.data(), initial_state(plant, np.zeros(1))
    state = replace(state, v=np.array([1e-3]))
    speeds = np.zeros(400)
    for cycle in range(speeds.size):
        command = controller.step(cycle * T, state.q, state.v)
        state = advance(plant, data, state, command.torque, cycle)
        speeds[cycle] = abs(state.v[0])
    ratio = speeds[-50:].max() / speeds[:50].max()
    assert ratio < 0.5 if factor < 1.0 else ratio > 2.0


# ---- whole arms ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["planar", "panda"])
def test_uniform_joint_damping(name):
    """
    b < 2 λmin(M)/T, from M alone; the chart's damping in N·m·s/rad has no inertia in it.

    """
    arm = planar_arm((0.7, 0.5), masses=(3.0, 1.5), effort=1e6) if name == "planar" else data_arm("panda")
    q = np.array([0.3, 0.9, 0.1, -1.2, 0.4, 1.0, 0.2])[: arm.n]
    data = arm.data()
    inertia(arm, data, q)
    expected = 2.0 * np.linalg.eigvalsh(data.M)[0] / T

    def stable(damping):
        matrix = loop_matrix(joints_loop(arm, q, 0.0, damping), q, 0)
        return radius(matrix[arm.n :, arm.n :]) < 1.0

    assert bisect(stable, 0.5 * expected, 2.0 * expected) == pytest.approx(expected, rel=1e-5)


def along(controller, count):
    """
    Yield (path time, q, q̇) of the joint reference at `count` places of the path.

    """
    path = next(c.path for c in controller.channels.values() if c.kind == "joints")
    for s in np.linspace(0.0, controller.duration, count):
        sample = path.sample(s)
        yield float(s), np.array(sample.q), np.array(sample.v)


@pytest.mark.parametrize("name", ["planar_stack", "demo_stack"])
def test_the_ready_stacks_keep_half_of_the_bound(name):
    """
    Rule: r = λmax(D) + max k_p below half of the bound for one cycle of delay, all along the path.

    """
    controller = pt.load(CONFIG / f"{name}.yaml")
    assert controller.stack_file.tree["robot"]["delay_cycles"] == 1
    fastest = 0.0
    for s, q, v in along(controller, 401):
        controller.evaluate(s, q, v)
        fastest = max(fastest, sum(decay_rates(controller.stack, controller.law.D)))
    allowed = MARGIN * rate_bound(1) * controller.rate
    print(f"{name}: fastest rate {fastest:.1f} 1/s of {allowed:.0f} 1/s allowed")
    assert MARGIN == 0.5
    assert 50.0 < fastest <= allowed == pytest.approx(500.0)


def standing(controller, s, scale):
    """
    The same stack with all gains scaled, standing at path time s of its references.

    """
    tasks = tuple(
        replace(t, damping=scale * t.damping, stiffness=scale * t.stiffness) for t in controller.stack.tasks
    )
    old = controller.stack.posture
    posture = replace(old, damping=scale * old.damping, stiffness=scale * old.stiffness)
    channels = {}
    for name, channel in controller.channels.items():
        sample = channel.path.sample(s)
        here = JointHold(sample.q) if channel.kind == "joints" else PoseHold(sample.R, sample.p)
        channels[name] = replace(channel, path=here)
    stack = replace(controller.stack, tasks=tasks, posture=posture)
    again = Controller(controller.arm, stack, channels, rate=controller.rate)
    q = next(np.array(c.path.sample(0.0).q) for c in channels.values() if c.kind == "joints")
    again.activate(0.0, q, np.zeros(q.size))
    return again, q


@pytest.mark.parametrize(
    ("name", "times"), [("planar_stack", (0.0, 3.0, 9.0)), ("demo_stack", (0.0, 6.0, 10.0, 13.0))]
)
def test_the_rule_tells_where_the_whole_loop_becomes_unstable(name, times):
    """
    Spectral radius of the sampled linearisation, one cycle of delay: below 1 with the gains as they are;
    with all gains scaled until λmax(D) + max k_p meets the bound it passes 1. Within 2 %: the fastest
    direction need not have the largest k_p, 8 … 16 1/s of 1000.

    """
    controller = pt.load(CONFIG / f"{name}.yaml")
    for s in times:
        whole, q = standing(controller, s, 1.0)
        matrix = loop_matrix(whole, q, 1)
        assert radius(matrix) < 1.0
        whole.evaluate(0.0, q, np.zeros(q.size))
        of_feedback, of_error = decay_rates(whole.stack, whole.law.D)
        predicted = (rate_bound(1) / T - of_error) / of_feedback
        for factor, stable in ((0.98, True), (1.02, False)):
            scaled, _ = standing(controller, s, factor * predicted)
            assert (radius(loop_matrix(scaled, q, 1)) < 1.0) == stable, (s, factor, predicted)
        print(f"{name}: at {s:g} s all gains may grow {predicted:.2f} times")
