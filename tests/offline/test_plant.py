# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The simulated arm against a closed-form arm, conservation of energy and its own promises.

"""

import dataclasses
from pathlib import Path

import numpy as np
import pinocchio as pin
import pytest
from scipy.integrate import RK45, solve_ivp

from prioritized_tracking.core.arm import build_arm, inverse_dynamics
from prioritized_tracking.errors import InputError
from prioritized_tracking.offline import integrator
from prioritized_tracking.offline import plant as plants
from prioritized_tracking.offline.plant import advance, build_plant, diverged, initial_state, measure

CONFIG = Path(__file__).parents[2] / "config"
GRAVITY = 9.81

_LINK = """
  <joint name="{joint}" type="revolute"><parent link="{parent}"/><child link="{link}"/>
    <origin xyz="{x} 0 0"/><axis xyz="0 0 1"/>
    <limit lower="-6" upper="6" velocity="20" effort="100"/></joint>
  <link name="{link}"><inertial><origin xyz="0.5 0 0"/><mass value="1"/>
    <inertia ixx="0.01" iyy="0.083333333333333333" izz="0.083333333333333333" ixy="0" ixz="0" iyz="0"/>
  </inertial></link>"""

TWO_LINK = (
    '<robot name="two_link"><link name="ground"/>'
    + _LINK.format(joint="a", parent="ground", link="upper", x=0)
    + _LINK.format(joint="b", parent="upper", link="lower", x=1)
    + '<joint name="tip_joint" type="fixed"><parent link="lower"/><child link="tip"/>'
    + '<origin xyz="1 0 0"/></joint><link name="tip"/></robot>'
)


@pytest.fixture
def arm():
    """
    Two uniform rods, m = l = 1, axes z, gravity along -y.

    """
    return build_arm(TWO_LINK, gravity=(0.0, -GRAVITY, 0.0))


def closed_form(q, v, torque, viscous, coulomb):
    """
    Return q̈ of the two rods: Spong, Hutchinson & Vidyasagar, Robot Modeling and Control, planar elbow arm.

    """
    c2, s2, c1, c12 = np.cos(q[1]), np.sin(q[1]), np.cos(q[0]), np.cos(q[0] + q[1])
    inertia = 1.0 / 12.0
    m22 = 0.25 + inertia
    m12 = m22 + 0.5 * c2
    m11 = 0.25 + inertia + 1.0 + m22 + c2
    h = -0.5 * s2
    coriolis = np.array([h * v[1] * v[0] + h * (v[0] + v[1]) * v[1], -h * v[0] * v[0]])
    weight = GRAVITY * np.array([1.5 * c1 + 0.5 * c12, 0.5 * c12])
    drag = viscous * v + coulomb * np.tanh(v / 0.02)
    return np.linalg.solve([[m11, m12], [m12, m22]], torque - coriolis - weight - drag)


def test_follows_the_closed_form_arm_integrated_by_another_method(arm):
    """
    Oracle: the textbook equations under scipy's DOP853 at rtol 1e-12, torque held for each period.

    Tolerance: 1e-9 for each integration step, at most 2 steps a period on average, 400 periods.

    """
    viscous, coulomb = np.array([0.5, 0.3]), np.array([1.5, 0.8])
    plant = build_plant(arm, {"friction": {"viscous": viscous, "coulomb": coulomb}}, rate=1000.0)
    state, data = initial_state(plant, np.array([-1.2, 0.4])), plant.data()
    truth = np.array([-1.2, 0.4, 0.0, 0.0])
    crossings = 0
    for k in range(400):
        torque = 12.0 * np.array([np.sin(0.05 * k), np.cos(0.08 * k)])

        def rates(_t, y, torque=torque):
            return np.concatenate([y[2:], closed_form(y[:2], y[2:], torque, viscous, coulomb)])

        before = state.v
        truth = solve_ivp(rates, (0.0, 1e-3), truth, method="DOP853", rtol=1e-12, atol=1e-13).y[:, -1]
        state = advance(plant, data, state, torque, k)
        crossings += int((state.v * before < 0.0).any())
        np.testing.assert_allclose(np.concatenate([state.q, state.v]), truth, rtol=0.0, atol=8e-7)
    assert crossings >= 4, "the test must pass through friction's steep place"


def test_the_integrator_is_the_published_pair():
    """
    Oracle: the tableau of scipy's RK45, after Dormand & Prince 1980.

    """
    for stage, row in enumerate(integrator._A[:-1], start=1):
        np.testing.assert_allclose(row, RK45.A[stage, :stage], rtol=1e-15)
    np.testing.assert_allclose(integrator._A[-1], RK45.B, rtol=1e-15)
    np.testing.assert_allclose(np.abs(integrator._ERROR), np.abs(RK45.E), rtol=1e-14)


@pytest.mark.parametrize("decay", [1.0, 1e3, 1e5])
def test_the_integrator_keeps_to_its_tolerance(decay):
    """
    Oracle: exp(-t), and a turn by 1 rad; steps only as small as needed, and a hint from one period to the
    next.

    """
    calls = []

    def rates(y, out):
        calls.append(1)
        out[:] = (-decay * y[0], -y[2], y[1])

    y, step, work = np.array([1.0, 1.0, 0.0]), 1e-3, np.zeros((integrator.STAGES, 3))
    for _ in range(1000):
        y, step = integrator.integrate(rates, y, 1e-3, step=step, tolerance=1e-9, work=work)
        assert 0.0 < step <= 1e-3
    np.testing.assert_allclose(y, [np.exp(-decay), np.cos(1.0), np.sin(1.0)], rtol=0.0, atol=1e-8)
    stable = max(decay * 1e-3 / 3.3, 1.0)  # the pair is stable to 3.3 / rate
    assert len(calls) < 1000 * (1 + 6 * 2 * stable + 6)


def test_the_integrator_gives_up_where_nothing_is_finite():
    def rates(y, out):
        out[:] = np.inf if y[0] > 0.5 else 1.0

    work = np.zeros((integrator.STAGES, 1))
    with np.errstate(invalid="ignore"):
        y, _ = integrator.integrate(rates, np.zeros(1), 1.0, step=1.0, tolerance=1e-9, work=work)
    assert np.isnan(y).all()


def test_energy_is_kept_without_friction():
    """
    The seven-axis arm falls freely for 1 s. Oracle: kinetic plus potential energy by Pinocchio.

    Tolerance: 1e-9 rad/s for each of a thousand steps, in an energy whose slope is a momentum of some 3
    kg·m²/s.

    """
    text = (CONFIG / "seven_axis_arm.urdf").read_text()
    arm = build_arm(text, rotor_inertia=[0.3, 0.3, 0.2, 0.2, 0.1, 0.1, 0.1])
    plant = build_plant(arm, {}, rate=1000.0)
    state, data = initial_state(plant, np.array([0.2, 0.6, 0.3, -1.0, 0.4, 0.8, 0.1])), plant.data()

    def energy(state):
        work = arm.model.createData()
        rotors = 0.5 * float(arm.rotor_inertia @ state.v**2)
        model = arm.model.copy()
        model.armature = np.zeros(arm.n)
        kinetic = pin.computeKineticEnergy(model, work, state.q, state.v)
        return kinetic + rotors + pin.computePotentialEnergy(model, work, state.q)

    start, peak = energy(state), 0.0
    for k in range(1000):
        state = advance(plant, data, state, np.zeros(arm.n), k)
        peak = max(peak, float(np.abs(state.v).max()))
    assert peak > 1.0
    assert abs(energy(state) - start) < 3e-6


def test_friction_rate(arm):
    """
    M's smallest eigenvalue is known in closed form: at q2 = 0 the matrix is [[8/3, 5/6], [5/6, 1/3]].

    """
    smallest = np.linalg.eigvalsh([[8 / 3, 5 / 6], [5 / 6, 1 / 3]])[0]
    zero, data = np.zeros(2), arm.data()
    assert plants.friction_rate(arm, data, zero) == 0.0
    viscous = arm.with_changes(friction={"viscous": [3.0, 3.0], "coulomb": [0.0, 0.0]})
    assert plants.friction_rate(viscous, data, zero) == pytest.approx(3.0 / smallest, rel=1e-12)
    both = arm.with_changes(friction={"viscous": [1.0, 1.0], "coulomb": [0.1, 0.1]})
    assert plants.friction_rate(both, data, zero) == pytest.approx(6.0 / smallest, rel=1e-12)


def test_absurd_friction_is_refused(arm):
    with pytest.raises(InputError, match=r"plant\.friction") as caught:
        build_plant(arm, {"friction": {"viscous": [0.0, 0.0], "coulomb": [1e4, 1e4]}}, rate=1000.0)
    assert "rotor_inertia" in str(caught.value)


@pytest.mark.parametrize("delay", [0, 1, 3])
def test_torque_arrives_after_the_delay(arm, delay):
    """
    Command k holds during cycle k + delay; until the first arrives the arm is held against its weight.

    """
    plant = build_plant(arm, {"delay": delay}, rate=1000.0)
    state, data = initial_state(plant, np.array([0.4, 0.5])), plant.data()
    weight = inverse_dynamics(arm, arm.data(), state.q, np.zeros(2), np.zeros(2))
    for k in range(8):
        q = state.q
        state = advance(plant, data, state, np.array([k + 1.0, -k]), k)
        if k < delay:
            np.testing.assert_allclose(state.applied, weight, rtol=1e-12)
            np.testing.assert_allclose(state.q, q, atol=1e-12)
        else:
            np.testing.assert_array_equal(state.applied, [k - delay + 1.0, -(k - delay)])


def test_motors_keep_to_their_limits(arm):
    plant = build_plant(arm, {}, rate=1000.0)
    state = advance(plant, plant.data(), initial_state(plant, np.zeros(2)), np.array([1e3, -1e3]), 0)
    np.testing.assert_array_equal(state.applied, [100.0, -100.0])


def test_nothing_is_changed_and_the_same_call_gives_the_same_bits(arm):
    plant = build_plant(arm, {"torque_noise": 0.3, "delay": 1}, rate=1000.0)
    state, data = initial_state(plant, np.array([0.4, 0.5])), plant.data()
    kept = (state.q.copy(), state.v.copy(), state.pending[0].copy())
    torque = np.array([1.0, 2.0])
    once = advance(plant, data, state, torque, 5)
    advance(plant, data, once, torque, 6)
    again = advance(plant, data, state, torque, 5)
    assert once.q.tobytes() == again.q.tobytes()
    assert once.v.tobytes() == again.v.tobytes()
    for array, before in zip((state.q, state.v, state.pending[0]), kept, strict=True):
        np.testing.assert_array_equal(array, before)
    torque[:] = 0.0
    np.testing.assert_array_equal(once.pending[0], [1.0, 2.0])


def test_seed_decides_every_random_number(arm):
    block = {"mass_error": 0.1, "start_offset": 0.01, "position_noise": 1e-4, "velocity_noise": 1e-3}

    def numbers(**changes):
        plant = build_plant(arm, block | changes, rate=1000.0)
        state = initial_state(plant, np.array([0.4, 0.5]))
        weight = inverse_dynamics(plant.arm, plant.arm.data(), np.array([0.4, 0.5]), np.zeros(2), np.zeros(2))
        return (
            weight,
            state.q,
            np.concatenate(measure(plant, state, 2500)) - np.concatenate([state.q, state.v]),
        )

    first, again, other = numbers(seed=3), numbers(seed=3), numbers(seed=4)
    for a, b, c in zip(first, again, other, strict=True):
        assert a.tobytes() == b.tobytes()
        assert (a != c).all()
    # one deviation does not shift the numbers of another
    np.testing.assert_array_equal(numbers(seed=3, mass_error=0.0)[1], first[1])
    np.testing.assert_allclose(numbers(seed=3, start_offset=0.0)[2], first[2], atol=1e-15)


def test_noise_has_the_stated_deviation(arm):
    """
    8000 numbers: the standard error of a standard deviation is 1/√(2·8000) = 0.8 %; five of them.

    """
    block = {"position_noise": 1e-4, "velocity_noise": 1e-3, "torque_noise": 0.2, "seed": 1}
    plant = build_plant(arm, block, rate=1000.0)
    state = initial_state(plant, np.array([0.4, 0.5]))
    measured = [measure(plant, state, k) for k in range(4000)]
    assert np.std([q - state.q for q, _ in measured]) == pytest.approx(1e-4, rel=0.04)
    assert np.std([v - state.v for _, v in measured]) == pytest.approx(1e-3, rel=0.04)
    data = plant.data()
    applied = [advance(plant, data, state, np.ones(2), k).applied for k in range(4000)]
    assert np.std(applied) == pytest.approx(0.2, rel=0.04)
    assert np.mean(applied) == pytest.approx(1.0, abs=5 * 0.2 / np.sqrt(8000))


def test_unknown_payload_weighs_on_the_joints(arm):
    """
    Oracle: 0.5 kg at the tip of the stretched arm, lever 2 m about the first joint and 1 m about the second.

    """
    plant = build_plant(arm, {"payload": {"frame": "tip", "mass": 0.5}}, rate=1000.0)
    zero = np.zeros(2)
    extra = inverse_dynamics(plant.arm, plant.arm.data(), zero, zero, zero)
    extra -= inverse_dynamics(plant.model, plant.model.data(), zero, zero, zero)
    np.testing.assert_allclose(extra, [0.5 * GRAVITY * 2.0, 0.5 * GRAVITY * 1.0], rtol=1e-12)


def test_mass_error_scales_each_link_within_its_bound(arm):
    """
    Stretched out, gravity is g (0.5 m1 + 1.5 m2, 0.5 m2): both masses can be read off.

    """
    zero = np.zeros(2)
    seen = []
    for seed in range(50):
        plant = build_plant(arm, {"mass_error": 0.1, "seed": seed}, rate=1000.0)
        weight = inverse_dynamics(plant.arm, plant.arm.data(), zero, zero, zero) / GRAVITY
        m2 = weight[1] / 0.5
        seen.append(((weight[0] - 1.5 * m2) / 0.5, m2))
    seen = np.array(seen)
    assert np.abs(seen - 1.0).max() <= 0.1 + 1e-12
    assert (seen.min(axis=0) < 0.95).all()
    assert (seen.max(axis=0) > 1.05).all()
    assert abs(np.corrcoef(seen.T)[0, 1]) < 0.5, "links are scaled independently"


def test_start_offset_is_bounded_and_kept_inside_the_limits(arm):
    starts = np.array(
        [
            initial_state(
                build_plant(arm, {"start_offset": 0.2, "seed": s}, rate=1e3), np.array([0.0, 5.9])
            ).q
            for s in range(40)
        ]
    )
    assert 0.15 < np.abs(starts[:, 0]).max() <= 0.2
    assert starts[:, 1].max() == 6.0


def test_driver_adds_the_model_gravity(arm):
    """
    A zero command then leaves the arm at rest, and the sum is what the limits clip.

    """
    plant = build_plant(arm, {}, rate=1000.0, driver_gravity=True)
    state = initial_state(plant, np.array([0.4, 0.5]))
    after = advance(plant, plant.data(), state, np.zeros(2), 0)
    np.testing.assert_allclose(after.v, 0.0, atol=1e-12)
    assert after.applied[0] > 10.0
    clipped = advance(plant, plant.data(), state, np.array([99.0, 0.0]), 0)
    assert clipped.applied[0] == 100.0


@pytest.mark.parametrize(("speed", "lost"), [(199.0, False), (201.0, True), (np.nan, True), (np.inf, True)])
def test_divergence_is_ten_times_the_speed_limit_or_no_number(arm, speed, lost):
    plant = build_plant(arm, {}, rate=1000.0)
    state = dataclasses.replace(initial_state(plant, np.zeros(2)), v=np.array([0.0, speed]))
    assert diverged(plant, state) is lost
