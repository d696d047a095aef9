# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
From a stack file to a controller: what is built, and every refusal that needs the arm.

"""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np
import pytest
import yaml

import prioritized_tracking as pt
from prioritized_tracking import assembly
from prioritized_tracking.core.references import JointPath, PosePath
from prioritized_tracking.errors import InputError
from prioritized_tracking.files import write_joints_csv
from prioritized_tracking.user_cache import user_cache

CONFIG = Path(__file__).parents[1] / "config"


@pytest.fixture
def stack(tmp_path, monkeypatch):
    """
    Write a changed copy of the planar demo: ``stack(change)`` gives its path.

    """
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    for file in CONFIG.iterdir():
        if file.is_file():
            shutil.copy(file, tmp_path)

    def write(change=lambda tree: None):
        content = yaml.safe_load((CONFIG / "planar_stack.yaml").read_text())
        change(content["/**"]["ros__parameters"])
        path = tmp_path / "changed.yaml"
        path.write_text(yaml.safe_dump(content, sort_keys=False))
        return path

    return write


def problems(path):
    """The message of a refused stack."""
    with pytest.raises(InputError) as caught:
        pt.load(path)
    return str(caught.value)


def test_the_demo_stack_becomes_the_controller_it_describes():
    """Names, order, gains, channels."""
    control = pt.load(CONFIG / "demo_stack.yaml")
    assert control.joints == (
        *("base_turn", "shoulder_lift", "upper_arm_roll", "elbow_bend"),
        *("forearm_roll", "wrist_bend", "flange_turn"),
    )
    assert control.rate == 1000.0
    assert control.names == ("seam_radius", "seam_height", "seam_along", "tool_zyz", "tool_xyz", "posture")
    assert [task.m for task in control.stack.tasks] == [1, 1, 2, 3, 3]
    assert isinstance(control.channels["weld"].path, PosePath)
    assert isinstance(control.channels["elbow"].path, JointPath)
    assert control.channels["elbow"].leader == "weld"
    assert control.duration == pytest.approx(control.channels["weld"].path.duration)
    assert any("handover" in note and "computed" in note for note in control.notes)


def test_the_documented_python_example_works():
    """load, activate, step, evaluate and what a command carries."""
    control = pt.load(CONFIG / "planar_stack.yaml")
    q = control.start_configuration()
    control.activate(0.0, q, np.zeros(2))
    control.start(0.0)
    command = control.step(0.001, q, np.zeros(2))
    assert command.torque.shape == (2,)
    assert command.joint_velocity_reference.shape == (2,)
    assert command.tasks["pen"].error.shape == (2,)
    assert 0.0 <= command.tasks["pen"].share <= 2.0
    assert command.events == ()
    control.hold(0.002)
    control.reset(0.003)
    assert control.evaluate(5.0, q, np.zeros(2)).torque.shape == (2,)


def test_law_and_parameters_can_be_overridden():
    """By keyword and by dotted key."""
    control = pt.load(CONFIG / "planar_stack.yaml", law="joint_impedance", parameters={"rate": 500.0})
    assert control.law.name == "joint_impedance"
    assert control.rate == 500.0


def test_given_bands_are_used_as_they_are(stack):
    """And are not reported as computed."""
    path = stack(lambda tree: tree["tasks"]["pen"].update(handover=[30.0, 300.0]))
    control = pt.load(path)
    assert control.stack.tasks[0].handover == (30.0, 300.0)
    assert not any("handover" in note for note in control.notes)


def test_the_shares_of_a_complete_stack_sum_to_n_anywhere():
    """Without activation, at random states and path times."""
    control, rng = pt.load(CONFIG / "demo_stack.yaml"), np.random.default_rng(0)
    for _ in range(50):
        q = rng.uniform(control.arm.lower, control.arm.upper)
        command = control.evaluate(rng.uniform(0, 20), q, rng.normal(size=7))
        assert abs(command.share_sum - 7) < 1e-9
        assert np.all(np.isfinite(command.torque))


def pen(tree):
    """The pen's task."""
    return tree["tasks"]["pen"]


TURN = {"chart": "joints", "names": ["elbowe"], "reference": "stretch", "stiffness": 1.0, "damping": 1.0}


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda t: pen(t).update(frame="pne"), ("tasks.pen.frame", "no link 'pne'", "Did you mean 'pen'?")),
        (lambda t: pen(t).update(base="nowhere"), ("tasks.pen.base", "no link 'nowhere'")),
        (lambda t: pen(t).update(base="pen"), ("tasks.pen.base", "different frames")),
        (lambda t: pen(t).update(damping=[150.0] * 3), ("tasks.pen.damping", "or 2", "x, z", "got:      3")),
        (
            lambda t: (pen(t).pop("axes"), pen(t).update(chart="plane", normal=[0, 1, 0])),
            ("tasks.pen", "no joint of the arm moves"),
        ),
        (lambda t: t["robot"].update(joints=["shoulder", "elbo"]), ("elbo", "elbow")),
        (lambda t: t["robot"].update(rotor_inertia=[0.3]), ("robot.rotor_inertia", "2")),
        (lambda t: t["robot"].pop("urdf"), ("robot.urdf", "no robot description")),
        (lambda t: t["references"]["drawing"].update(file="none.csv"), ("references.drawing", "none.csv")),
        (lambda t: t["references"]["stretch"].update(file="reach_limit.csv"), ("shoulder", "elbow")),
        (lambda t: t["robot"].update(velocity_limit=[0.05, 0.05]), ("faster than joint", "pace 0.")),
        (lambda t: t["references"]["drawing"].update(repeat=0), ("references.drawing", "Close the path")),
        (
            lambda t: (
                t["tasks"].pop("posture"),
                t.update(priority=["pen"]),
                t["references"].pop("stretch"),
                pen(t).update(axes="x"),
            ),
            ("priority", "cannot sum", "got:      at most 1", "posture"),
        ),
        (
            lambda t: (t["tasks"].update(turn=TURN), t["priority"].insert(0, "turn")),
            ("tasks.turn.names", "elbowe", "Did you mean 'elbow'?"),
        ),
    ],
)
def test_what_only_the_arm_can_tell_is_refused_with_place_and_remedy(stack, change, words):
    """Each message names the key and what to do."""
    text = problems(stack(change))
    for word in words:
        assert word in text, text


def test_several_problems_come_in_one_message(stack):
    """A wrong link, a wrong length and an open path that shall repeat, at once."""

    def change(tree):
        tree["tasks"]["pen"].update(frame="pne")
        tree["tasks"]["posture"].update(tolerance=[0.1] * 3)
        tree["references"]["drawing"].update(repeat=2)

    text = problems(stack(change))
    for word in ("3 problems", "pne", "tasks.posture.tolerance", "references.drawing"):
        assert word in text


def test_a_joint_file_beyond_the_limits_is_refused(stack, tmp_path):
    """The message names joint, time and limits."""
    control = pt.load(CONFIG / "planar_stack.yaml")
    times = np.asarray(control.channels["drawing"].path.knots)
    q = np.tile([0.0, 2.9], (len(times), 1))
    q[len(q) // 2] = [0.0, control.arm.upper[1] + 0.1]
    write_joints_csv(tmp_path / "beyond.csv", times, control.joints, q)
    text = problems(stack(lambda t: t["references"]["stretch"].update(file="beyond.csv")))
    assert "leaves the limits of joint elbow" in text
    assert f" {control.arm.upper[1]:.4g} rad" in text
    assert "pace 0." in text  # and too fast, in the same message


def test_a_companion_without_a_file_is_computed_once_and_cached(stack, tmp_path):
    """The second load reads the user's cache; a damaged cache is computed again."""
    path = stack(lambda tree: tree["references"]["stretch"].pop("file"))
    seen = []
    first = pt.load(path, progress=lambda fraction, text: seen.append(fraction))
    assert seen
    assert seen[-1] == 1.0
    (cached,) = (tmp_path / "cache" / "prioritized_tracking").iterdir()
    seen.clear()
    second = pt.load(path, progress=lambda fraction, text: seen.append(fraction))
    assert not seen
    np.testing.assert_array_equal(first.channels["stretch"].path.q, second.channels["stretch"].path.q)
    cached.write_text("t,shoulder\n")
    third = pt.load(path)
    np.testing.assert_array_equal(first.channels["stretch"].path.q, third.channels["stretch"].path.q)


def test_an_unwritable_cache_is_no_obstacle(stack, tmp_path, monkeypatch):
    """The companion is computed each time instead."""
    (tmp_path / "file").write_text("")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "file"))
    path = stack(lambda tree: tree["references"]["stretch"].pop("file"))
    assert isinstance(pt.load(path).channels["stretch"].path, JointPath)


def test_companion_of_a_stack_needs_a_channel(stack):
    """The message lists what there is."""
    with pytest.raises(InputError, match="drawing"):
        assembly.compute_companion(stack(), channel="drawin")


def test_a_reference_that_starts_away_from_the_arm_is_refused():
    """With distances and the limits."""
    control = pt.load(CONFIG / "planar_stack.yaml")
    with pytest.raises(InputError, match="starts away from pen"):
        control.activate(0.0, control.start_configuration() + 0.3, np.zeros(2))


@pytest.mark.parametrize(
    ("law", "kept", "words"),
    [
        ("cartesian_impedance", "posture", "needs a task on a tool frame"),
        ("joint_impedance", "pen", "needs a posture task"),
    ],
)
def test_a_law_without_the_tasks_it_takes_its_gains_from_is_refused(stack, law, kept, words):
    """The message names the key and the remedy."""

    def change(tree):
        tree.update(law=law, priority=[kept])
        tree["tasks"] = {kept: tree["tasks"][kept]}
        if kept == "pen":
            tree["references"].pop("stretch")
        else:
            tree["references"] = {"stretch": {"kind": "joints", "source": "hold"}}

    text = problems(stack(change))
    assert words in text
    assert "law" in text.splitlines()[0]


def test_the_cache_is_in_the_users_folder(monkeypatch, tmp_path):
    """XDG base directory specification: XDG_CACHE_HOME if absolute, else ~/.cache; nowhere without a home."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    assert user_cache() == tmp_path / "prioritized_tracking"
    monkeypatch.setenv("XDG_CACHE_HOME", "relative")
    monkeypatch.setenv("HOME", str(tmp_path / "me"))
    assert user_cache() == tmp_path / "me" / ".cache" / "prioritized_tracking"
    monkeypatch.setattr("os.path.expanduser", lambda path: path)
    assert user_cache() is None
