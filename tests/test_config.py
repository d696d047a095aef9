# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The demo scenarios in config/: arms, paths, joint paths and gains, checked without the package.

Oracles: closed forms for solids; SciPy's splines and rotations; Pinocchio on the URDF file as it stands.

"""

import runpy
import sys
import xml.etree.ElementTree as ElementTree
from pathlib import Path

import numpy as np
import pinocchio
import pytest
import yaml
from scipy.interpolate import CubicSpline
from scipy.spatial.transform import Rotation

CONFIG = Path(__file__).parents[1] / "config"
ARMS = {"demo": ("seven_axis_arm", "probe", "nozzle_weld"), "planar": ("planar_arm", "pen", "reach_limit")}
UPPER, FORE = 0.45, 0.35  # m, links of the planar arm
CENTRE, RADIUS = np.array([0.6, 0.0, 0.3]), 0.1  # m, the weld


def read(name):
    """
    Times and columns of a CSV file of config/.

    """
    table = np.loadtxt(CONFIG / f"{name}.csv", delimiter=",", skiprows=1)
    return table[:, 0], table[:, 1:]


def block(stack):
    text = (CONFIG / f"{stack}_stack.yaml").read_text(encoding="utf-8")
    return yaml.safe_load(text)["/**"]["ros__parameters"]


def model(arm):
    return pinocchio.buildModelFromUrdf(str(CONFIG / f"{arm}.urdf"))


def columns(stack, robot):
    """
    Columns of the companion file in Pinocchio's joint order.

    """
    header = (
        (CONFIG / f"{ARMS[stack][2]}_companion.csv").read_text(encoding="utf-8").split("\n")[0].split(",")
    )
    return [header.index(name) - 1 for name in list(robot.names)[1:]]


# --- arms --------------------------------------------------------------------------------------------------


def solid_inertia(mass, shape):
    """
    Diagonal inertia of a solid box or cylinder (along z) about its centre, kg·m².

    """
    if shape.tag == "box":
        x, y, z = (float(text) for text in shape.get("size").split())
        return mass / 12.0 * np.array([y * y + z * z, x * x + z * z, x * x + y * y])
    r, length = float(shape.get("radius")), float(shape.get("length"))
    across = mass * (3.0 * r * r + length * length) / 12.0
    return np.array([across, across, mass * r * r / 2.0])


@pytest.mark.parametrize("arm", [arm for arm, _, _ in ARMS.values()])
def test_links_are_the_solids_they_look_like(arm):
    root = ElementTree.parse(CONFIG / f"{arm}.urdf").getroot()
    checked = 0
    for link in root.iter("link"):
        inertial, visual = link.find("inertial"), link.find("visual")
        if inertial is None:
            continue
        assert inertial.find("origin").attrib == visual.find("origin").attrib
        given = inertial.find("inertia")
        wanted = solid_inertia(float(inertial.find("mass").get("value")), visual.find("geometry")[0])
        # the file has ten decimals at most
        np.testing.assert_allclose(
            [float(given.get(key)) for key in ("ixx", "iyy", "izz")], wanted, rtol=1e-5
        )
        checked += 1
    assert checked >= 2
    assert not list(root.iter("mesh"))


def test_the_seven_axis_arm_is_plausible():
    arm = model("seven_axis_arm")
    assert arm.nq == arm.nv == 7
    assert sum(inertia.mass for inertia in arm.inertias) == pytest.approx(21.1)
    data = arm.createData()
    pinocchio.framesForwardKinematics(arm, data, np.zeros(7))
    shoulder = data.oMi[2].translation
    # forearm, upper arm, wrist and probe: 0.40 + 0.38 + 0.26 m
    assert np.linalg.norm(data.oMf[arm.getFrameId("probe")].translation - shoulder) == pytest.approx(1.04)
    worst = np.zeros(7)
    for q in np.random.default_rng(0).uniform(arm.lowerPositionLimit, arm.upperPositionLimit, (500, 7)):
        worst = np.maximum(worst, abs(pinocchio.computeGeneralizedGravity(arm, data, q)))
    assert np.all(
        worst < 0.6 * arm.upperEffortLimit if hasattr(arm, "upperEffortLimit") else 0.6 * arm.effortLimit
    )


# --- paths -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("path", [path for _, _, path in ARMS.values()])
def test_paths_start_and_end_at_rest(path):
    """
    End accelerations of the clamped spline stay below 0.01 m/s² and 0.05 rad/s², so no path is ramped.

    """
    t, x = read(path)
    for values, most in ((x[:, :3], 0.01), (2.0 * x[:, 3:], 0.05)):
        spline = CubicSpline(t, values, bc_type="clamped")
        assert max(np.linalg.norm(spline(t[0], 2)), np.linalg.norm(spline(t[-1], 2))) < 0.1 * most


def test_the_weld_is_one_turn_on_the_circle():
    t, x = read("nozzle_weld")
    assert t[-1] == 20.0
    fine = CubicSpline(t, x[:, :3], bc_type="clamped")(np.linspace(0.0, 20.0, 4001)) - CENTRE
    np.testing.assert_allclose(fine[:, 0], 0.0, atol=1e-12)
    # between knots 0.05 s apart the spline leaves the circle by h⁴/384 |x⁗|, |x⁗| ≈ r (2π·0.094)⁴
    np.testing.assert_allclose(np.hypot(fine[:, 1], fine[:, 2]), RADIUS, atol=1e-8)
    angle = np.unwrap(np.arctan2(fine[:, 2], fine[:, 1]))
    assert angle[-1] - angle[0] == pytest.approx(-2.0 * np.pi)


@pytest.mark.parametrize(("row", "pole"), [(2, -1.0), (0, 1.0)], ids=["zyz", "xyz"])
def test_each_euler_chart_fails_exactly_once_per_turn(row, pole):
    """
    The tool axis R·z meets -z (ZYZ fails) and +x (XYZ fails) once, on a knot.

    """
    _, x = read("nozzle_weld")
    axis = Rotation.from_quat(x[:, 3:]).as_matrix()[:, :, 2]
    angle = np.arccos(np.clip(pole * axis[:, row], -1.0, 1.0))  # rad, from the singular direction
    # arccos near 1 resolves sqrt(2 eps) = 2e-8
    assert np.sort(angle)[0] < 1e-7
    smallest = [k for k in range(1, len(angle) - 1) if angle[k] <= min(angle[k - 1], angle[k + 1])]
    assert len(smallest) == 1
    assert angle.max() == pytest.approx(np.pi / 2, abs=1e-7)


def test_the_drawing_touches_the_reach_limit_and_runs_along_it():
    t, x = read("reach_limit")
    fine = np.linspace(0.0, t[-1], 15001)
    radius = np.linalg.norm(CubicSpline(t, x[:, :3], bc_type="clamped")(fine), axis=1)
    limit = UPPER + FORE
    assert radius.max() < limit + 1e-7  # beyond it by what the spline overshoots between knots
    on_it = radius > limit - 1e-7
    assert np.sum(on_it) * (fine[1] - fine[0]) > 3.9  # s
    first = fine < 4.0  # the touch in passing: the elbow turns over
    assert radius[first].max() > limit - 1e-6
    assert radius.min() < 0.9 * limit


def test_the_kept_files_are_what_the_script_writes(tmp_path, monkeypatch):
    script = runpy.run_path(str(CONFIG / "make_demo.py"))
    monkeypatch.setitem(script["write_paths"].__globals__, "FOLDER", tmp_path)
    script["write_paths"]()
    for _, _, path in ARMS.values():
        kept = read(path)
        monkeypatch.setattr(sys.modules[__name__], "CONFIG", tmp_path)
        made = read(path)
        monkeypatch.undo()
        # one rounding of sin and cos may differ between machines
        np.testing.assert_allclose(np.column_stack(kept), np.column_stack(made), rtol=0.0, atol=1e-14)
        monkeypatch.setitem(script["write_paths"].__globals__, "FOLDER", tmp_path)
    kept = (CONFIG / "demo_stack_rough.yaml").read_text(encoding="utf-8")
    assert kept == script["rough"]((CONFIG / "demo_stack.yaml").read_text(encoding="utf-8"))


# --- companions --------------------------------------------------------------------------------------------


def pose_errors(stack):
    """
    Largest distance (m) and angle (rad) of the tool on the companion from the path, at 2000 instants.

    """
    arm, frame, path = ARMS[stack]
    robot = model(arm)
    data, frame_id = robot.createData(), robot.getFrameId(frame)
    t, x = read(path)
    s, q = read(f"{path}_companion")
    fine = np.linspace(0.0, t[-1], 2000)
    joints = CubicSpline(s, q[:, columns(stack, robot)], bc_type="clamped")(fine)
    positions = CubicSpline(t, x[:, :3], bc_type="clamped")(fine)
    quaternions = CubicSpline(t, x[:, 3:], bc_type="clamped")(fine)
    turns = Rotation.from_quat(quaternions)
    worst = np.zeros(2)
    for k in range(len(fine)):
        pinocchio.framesForwardKinematics(robot, data, joints[k])
        place = data.oMf[frame_id]
        angle = (turns[k].inv() * Rotation.from_matrix(place.rotation)).magnitude()
        worst = np.maximum(worst, [np.linalg.norm(place.translation - positions[k]), angle])
    return worst


@pytest.mark.parametrize(("stack", "position", "orientation"), [("demo", 1e-6, 1e-5), ("planar", 1e-6, 1e-2)])
def test_companions_move_the_tool_along_the_path(stack, position, orientation):
    """
    A tenth of what tracking is asked for. On its reach limit the planar arm's elbow angle is free to first
    order: 1e-7 m are sqrt(2·1e-7·0.8/(0.45·0.35)) = 1e-3 rad of it, and orientation is no task there.

    """
    errors = pose_errors(stack)
    assert errors[0] < position
    assert errors[1] < orientation


@pytest.mark.parametrize("stack", ARMS)
def test_companions_stay_clear_of_the_limits(stack):
    arm, _, path = ARMS[stack]
    robot = model(arm)
    s, q = read(f"{path}_companion")
    q = q[:, columns(stack, robot)]
    margin = np.minimum(q - robot.lowerPositionLimit, robot.upperPositionLimit - q).min()
    assert margin > 0.15  # rad
    spline = CubicSpline(s, q, bc_type="clamped")
    fine = np.linspace(0.0, s[-1], 4001)
    assert (abs(spline(fine, 1)) / robot.velocityLimit).max() < 0.6
    assert abs(spline([0.0, s[-1]], 2)).max() < 0.05  # rad/s²: starts and ends at rest


# --- gains -------------------------------------------------------------------------------------------------


def euler_axes(rotation, sequence):
    """
    The three rotation axes of an intrinsic sequence, as columns, from SciPy's angles.

    """
    unit = dict(zip("xyz", np.eye(3), strict=True))
    first, second, _ = rotation.as_euler(sequence.upper(), suppress_warnings=True)
    turned = Rotation.from_rotvec(first * unit[sequence[0]])
    twice = turned * Rotation.from_rotvec(second * unit[sequence[1]])
    return np.column_stack(
        [unit[sequence[0]], turned.apply(unit[sequence[1]]), twice.apply(unit[sequence[2]])]
    )


def task_rows(task, J, position, rotation):
    """
    Rows of a demo task on the joint velocity, written down from the definition of its chart.

    """
    if task["chart"] == "position":
        return J[["xyz".index(axis) for axis in task["axes"]]]
    if task["chart"] == "plane":
        return np.array([task["normal"]]) @ J[:3]
    if task["chart"] == "cylinder":
        out = position - np.array(task["point"])
        out -= np.array(task["axis"]) * (out @ task["axis"])
        return np.array([out / np.linalg.norm(out)]) @ J[:3]
    axes = euler_axes(rotation, task["sequence"])
    if np.linalg.svd(axes)[1][-1] < 0.2:
        return None  # off
    return axes.T @ J[3:]


def feedback_rate(tasks, M, J, position, rotation):
    """
    Largest eigenvalue of the feedback D (1/s) when each task owns every direction left to it.

    """
    inverse = np.linalg.inv(np.linalg.cholesky(M)).T
    left, D = np.eye(len(M)), np.zeros_like(M)
    for task in tasks:
        rows = task_rows(task, J, position, rotation)
        if rows is None:
            continue
        A = rows @ inverse @ left
        values, vectors = np.linalg.eigh(A @ A.T)
        own = (vectors.T @ A)[values > 1e-6]
        D += task["damping"] * own.T @ own
        left -= own.T @ np.diag(1.0 / values[values > 1e-6]) @ own
    return np.linalg.eigvalsh(D)[-1]


@pytest.mark.parametrize("stack", ARMS)
def test_gains_stand_one_cycle_of_delay(stack):
    """
    (λ_max(D) + max k_p)·dt at most half of 2 sin(π/6) = 1, the stability limit with one cycle of delay.

    The Euler charts are tried one after the other, each at the top of the orientation; what a hand-over adds
    (at most the posture's damping) is added.

    """
    arm, frame, path = ARMS[stack]
    parameters = block(stack)
    posture = parameters["tasks"]["posture"]
    tasks = [parameters["tasks"][name] for name in parameters["priority"][:-1]]
    robot = model(arm)
    data, frame_id = robot.createData(), robot.getFrameId(frame)
    rotors = np.diag(parameters["robot"]["rotor_inertia"])
    _, q = read(f"{path}_companion")
    worst = 0.0
    for joints in q[:: max(1, len(q) // 200), columns(stack, robot)]:
        M = np.triu(pinocchio.crba(robot, data, joints))
        M = M + np.triu(M, 1).T + rotors
        J = pinocchio.computeFrameJacobian(robot, data, joints, frame_id, pinocchio.LOCAL_WORLD_ALIGNED)
        place = data.oMf[frame_id]
        for order in (tasks, tasks[:-2] + tasks[:-3:-1]):
            worst = max(
                worst, feedback_rate(order, M, J, place.translation, Rotation.from_matrix(place.rotation))
            )
    decay = max(entry["stiffness"] / entry["damping"] for entry in [*tasks, posture])
    assert worst > posture["damping"]  # the path was really looked at
    assert (worst + posture["damping"] + decay) / parameters["rate"] <= 0.5
    assert parameters["robot"]["delay_cycles"] == 1
