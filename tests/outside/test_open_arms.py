# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Open arms, not ours, through their singularities; and the demo's arm with everything wrong that is wrong
on real ones.

The arms are those of example-robot-data: a 6-axis one through its wrist singularity, a 7-axis one through
the stretched elbow, where its wrist is as far out as it goes. Run as a user would: stack file, pose file,
companion, rehearsal. Figures to reach: torque steps of at most 0.2 N·m per ms, 1e-4 m at the tool.

Figures are printed (`pytest -rP` shows them).

"""

from __future__ import annotations

import functools
from pathlib import Path

import numpy as np
import pytest

import prioritized_tracking as pt
from prioritized_tracking.core.arm import inertia, inverse_dynamics
from prioritized_tracking.core.references import JointPath
from prioritized_tracking.offline.plant import build_plant
from prioritized_tracking.offline.rehearse import rehearse
from prioritized_tracking.offline.summary import summarise_run
from tests.outside.paths import ELBOW, WRIST, smallest_singular_value, stack_of, tool_motion

ROUGH = Path(__file__).resolve().parents[2] / "config" / "demo_stack_rough.yaml"
WAYS = pytest.mark.parametrize("way", [WRIST, ELBOW], ids=["wrist", "elbow"])


@functools.cache
def runs_of(stack, laws, settle=0.0, seconds=None, **overrides):
    """
    Rehearse a stack; return the run and its figures by law.

    """
    parameters = {f"plant.{key}": value for key, value in overrides.items()}
    found = rehearse(lambda law: pt.load(stack, law=law, parameters=parameters), laws, seconds=seconds)
    return {run.law: (run, summarise_run(run, settle=settle)) for run in found}


def worst_step(figures):
    """
    Largest torque step of any joint, N·m per cycle.

    """
    return max(joint["largest_step_nm"] for joint in figures["torque"].values())


def tell(title, figures, frame):
    """
    Print one line of figures.

    """
    tool = figures["tool"][frame]
    distance, angle = tool["position_error_max_m"], tool["orientation_error_max_rad"]
    print(f"{title}: {figures['law']}, {figures['verdict']}, {figures['ended']};")
    print(f"  {distance:.3g} m, {angle:.3g} rad, torque step {worst_step(figures):.3g} N·m per cycle,")
    print(f"  up to {figures['branches']['max']:.0f} branches")


# ---- through singularities -----------------------------------------------------------------------------


@WAYS
def test_the_path_is_really_singular(way):
    """
    By singular values of the Jacobian on the companion, found from the poses alone.

    The wrist is passed from one side to the other: det J changes sign, so it vanishes in between,
    whatever the steps of the companion. A 7-axis arm has no determinant; the stretched elbow is a place,
    and it is met.

    """
    stack, companion = stack_of(way)
    arm = pt.load(stack).arm
    assert companion.position_residual_m < 1e-6
    assert companion.orientation_residual_rad < 1e-6
    assert companion.singular.value < 1e-3
    path = JointPath(companion.times, companion.q)
    if arm.n == 6:
        motion = tool_motion(arm, way.tool)

        def side(s):
            return np.sign(np.linalg.det(motion(path.sample(s).q)[2]))

        low, high = 0.0, way.seconds
        assert side(low) == -side(high) != 0.0
        for _ in range(50):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if side(middle) == side(low) else (low, middle)
        assert smallest_singular_value(arm, way.tool, path.sample(low).q) < 1e-9
    else:
        # shoulder, elbow and wrist centre in line: the maker's offsets 0.0825 m, lengths 0.316 and 0.384 m
        stretched = -np.arctan(0.0825 / 0.316) - np.arctan(0.0825 / 0.384)
        fourth = companion.q[:, 3] - stretched
        assert fourth[0] < -0.1 < 0.1 < fourth[-1]
        assert companion.singular.value < 1e-5
    singular = companion.singular
    print(f"{way.arm}: smallest singular value {singular.value:.2g} at {singular.at_s:.3f} s")


@WAYS
def test_tracks_through_it(way):
    """
    Whole run, no settling time: error, torque step, shares, limits. The lost direction goes to the
    posture and back.

    """
    stack, companion = stack_of(way)
    run, figures = runs_of(stack, ("prioritized",))["prioritized"]
    tell(way.arm, figures, way.tool)
    assert figures["verdict"] == "pass", figures["reasons"]
    assert figures["tool"][way.tool]["position_error_max_m"] <= 1e-4
    assert figures["tool"][way.tool]["orientation_error_max_rad"] <= 1e-3
    assert worst_step(figures) <= 0.2
    n = len(run.signals.joints)
    assert np.abs(run.signals["share_sum"] - n).max() <= 1e-9
    free = run.signals["posture.share"]
    at = round(companion.singular.at_s * run.rate)
    assert free[0] == pytest.approx(n - 6, abs=1e-9)
    assert free[at] == pytest.approx(
        n - 5, abs=1e-9
    )  # one direction of the tool is nobody's but the posture's
    assert free[-1] == pytest.approx(n - 6, abs=1e-9)
    assert figures["branches"]["max"] >= 2  # handed over, not switched
    assert not run.events


@WAYS
def test_the_inverse_of_the_jacobian_does_not(way):
    """
    Same run with q̇_r = J⁻¹ (…): it fails, or its torque steps are at least a hundred times as large.

    """
    stack, _ = stack_of(way)
    _, ours = runs_of(stack, ("prioritized",))["prioritized"]
    _, theirs = runs_of(stack, ("inverse_jacobian",))["inverse_jacobian"]
    tell(way.arm, theirs, way.tool)
    assert theirs["ended"] == "diverged" or worst_step(theirs) >= 100.0 * worst_step(ours)


# ---- with everything wrong -----------------------------------------------------------------------------

LAWS = ("prioritized", "cartesian_impedance", "joint_impedance")


@pytest.fixture(scope="module")
def rough():
    """
    The rough demo in full: 8 % mass error, 0.5 kg that nobody knows of, friction, noise, a cycle of
    delay.

    """
    return runs_of(ROUGH, LAWS, settle=2.0)


def test_the_rough_demo_has_everything_wrong():
    """
    What the stack file says.

    """
    plant = pt.load(ROUGH).stack_file.tree["plant"]
    assert 0.05 <= plant["mass_error"] <= 0.10
    assert plant["payload"]["mass"] == 0.5
    assert plant["delay"] == 1
    for key in ("position_noise", "velocity_noise", "start_offset"):
        assert plant[key] > 0.0
    for kind in ("viscous", "coulomb"):
        assert min(plant["friction"][kind]) > 0.0


@pytest.mark.parametrize("law", LAWS)
def test_rough_runs_end_well(rough, law):
    """
    No law diverges, leaves a limit or saturates; the errors stand beside each other in the output.

    """
    run, figures = rough[law]
    tell("demo, rough", figures, "probe")
    assert figures["verdict"] == "pass", figures["reasons"]
    assert figures["saturated_longest_s"] == 0.0
    if law == "prioritized":
        assert np.abs(run.signals["share_sum"] - 7.0).max() <= 1e-9


def test_rough_errors_are_those_of_the_disturbance(rough):
    """
    By the closed loop of Slotine & Li 1987 with a disturbance δ: M ṡ + C s + L D Lᵀ s = −δ, J s = ẋ̃ +
    k_p x̃.

    δ is what the true arm needs beyond the model. s follows it at once (40 1/s and more, the path takes
    20 s); the filter from s to x̃ is integrated along the run. Nothing else may move the probe: an
    instability would. Left out: ṡ, C s, noise and delay, good for a tenth or so.

    """
    run, _ = rough["prioritized"]
    controller = pt.load(ROUGH)
    model, q, v = controller.arm, run.signals["q"], run.signals["v"]
    true = build_plant(model, controller.stack_file.tree["plant"], rate=run.rate).arm
    k_p = controller.stack.tasks[0].k_p[0]
    assert all(task.k_p == pytest.approx(k_p) for task in controller.stack.tasks if task.unit == "m")
    motion, data = tool_motion(model, "probe"), model.data()
    every, x, predicted = 50, np.zeros(3), []
    for k in range(0, run.signals.count, every):
        near = slice(max(k - 50, 0), k + 51)
        a = np.polyfit(run.signals["t"][near], v[near], 1)[0]
        controller.evaluate(float(run.signals["t"][k]), q[k], v[k])
        inertia(model, data, q[k])
        L = np.linalg.cholesky(data.M)
        delta = inverse_dynamics(true, true.data(), q[k], v[k], a)
        delta -= inverse_dynamics(model, data, q[k], v[k], a)
        J = motion(q[k])[2][:3]
        still = -J @ np.linalg.solve(L @ controller.law.D @ L.T, delta) / k_p
        x = still + (x - still) * np.exp(-k_p * every / run.rate)
        predicted.append(np.linalg.norm(x))
    measured = run.signals["probe.position_error"][::every]
    settled = run.signals["t"][::every] >= 2.0
    gap = np.abs(np.array(predicted) - measured)[settled].max()
    print(f"position error up to {measured[settled].max():.3g} m, predicted to within {gap:.2g} m")
    assert gap < 0.15 * measured[settled].max()


def step_deviation(M, G, period, sigma):
    """
    Deviation (n,) of the torque step between two cycles from white noise on the measured velocity.

    τ_k = −G (v_k + noise), v_{k+1} = v_k + T M⁻¹ τ_{k−1}: one cycle of delay. By the spectrum: the mean
    over the circle of (1 − z⁻¹) (I + G P)⁻¹ G with P = T M⁻¹ z⁻¹/(z − 1).

    """
    identity, variance, count = np.eye(len(M)), 0.0, 128
    for z in np.exp(1j * np.pi * (np.arange(count) + 0.5) / count):
        P = period * np.linalg.inv(M) / (z * (z - 1.0))
        H = (1.0 - 1.0 / z) * np.linalg.solve(identity + G @ P, G)
        variance += np.sum(np.abs(H) ** 2, axis=1) / count
    return sigma * np.sqrt(variance)


def test_rough_torque_steps_are_those_of_the_noise(rough):
    """
    The noise of the velocity alone explains the torque steps; the loop adds nothing at the rate of the
    cycles.

    Gain G of the law from q̇ to τ by differences, the loop around it by its spectrum (see
    `step_deviation`). Left out: noise of position (a hundredth of the velocity's times k_p), friction, C;
    5 % are allowed.

    """
    run, _ = rough["prioritized"]
    controller = pt.load(ROUGH)
    arm, data = controller.arm, controller.arm.data()
    sigma, h = controller.stack_file.tree["plant"]["velocity_noise"], 1e-4
    expected = []
    for k in range(0, run.signals.count, 500):
        t, q, v = float(run.signals["t"][k]), run.signals["q"][k], run.signals["v"][k]
        ends = [[controller.evaluate(t, q, v + side * e).torque for side in (-h, h)] for e in np.eye(arm.n)]
        G = np.array([(low - high) / (2.0 * h) for low, high in ends]).T
        inertia(arm, data, q)
        expected.append(step_deviation(data.M, G, 1.0 / run.rate, sigma))
    expected = np.sqrt(np.mean(np.square(expected), axis=0))
    found = np.sqrt(np.mean(np.square(np.diff(run.signals["torque"], axis=0)), axis=0))
    print("torque steps, rms, N·m: found", np.round(found, 4), "expected", np.round(expected, 4))
    np.testing.assert_allclose(found, expected, rtol=0.05)


def test_the_rough_arm_comes_to_rest(rough):
    """
    In the last half second of holding no joint is faster than a hundredth of a rad/s: the noise is a
    tenth of it.

    """
    run, _ = rough["prioritized"]
    assert run.signals["t"][-1] > 20.9
    assert np.abs(run.signals["v"][-500:]).max() < 0.01


@pytest.mark.parametrize(("mass_error", "seed"), [(0.05, 1), (0.1, 2)])
def test_other_rough_arms(mass_error, seed):
    """
    Other arms off by 5 and 10 %, other noise; 14 s, in which both Euler charts fail, one after the other.

    """
    found = runs_of(ROUGH, ("prioritized",), settle=2.0, seconds=14.0, mass_error=mass_error, seed=seed)
    run, figures = found["prioritized"]
    tell(f"demo, rough, {mass_error:.0%}, seed {seed}", figures, "probe")
    assert figures["verdict"] == "pass", figures["reasons"]
    assert figures["tool"]["probe"]["position_error_max_m"] < 0.01
    assert np.abs(run.signals["share_sum"] - 7.0).max() <= 1e-9
