# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The control cycle from outside: activation, start, hold, limits, bad states.

"""

from __future__ import annotations

import gc
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from prioritized_tracking.charts import Position, RotationVector
from prioritized_tracking.core import arm as arms
from prioritized_tracking.core.command import limit_torque
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.core.references import JointHold, PoseHold
from prioritized_tracking.core.start import StartLimits
from prioritized_tracking.errors import InputError
from tests.arms import planar_arm
from tests.stacks import REST, controller, planar, seven_axes, task

BENT = np.array([0.3, 0.8, 0.4])
STILL = np.zeros(3)
ANYWHERE = StartLimits(position=10.0, angle=10.0, joint=10.0)


def holding(force=(0.0, 0.0), **settings):
    """A planar arm that holds tip and posture where it is activated."""
    arm = planar_arm((0.5, 0.4, 0.3), **settings.pop("arm", {}))
    pen = task("pen", Position(axes="xy"), "tip", "base", force=np.array(force))
    return controller(arm, [pen], **settings)


def test_a_step_is_the_bare_law_within_the_limits():
    """step and evaluate agree where no limit acts, at the same path time."""
    control = planar(arm={"effort": 1e4})
    q = control.start_configuration()
    control.start_limits = ANYWHERE
    control.activate(5.0, q, STILL)
    control.start(5.0)
    v = np.array([0.1, -0.2, 0.3])
    stepped, bare = control.step(6.25, BENT, v), control.evaluate(1.25, BENT, v)
    np.testing.assert_allclose(stepped.torque, bare.torque, atol=1e-4)


def test_evaluate_changes_nothing():
    """A step gives the same numbers whether or not the law was evaluated elsewhere in between."""
    results = []
    for disturb in (False, True):
        control = holding()
        control.activate(0.0, BENT, STILL)
        control.step(0.001, BENT + 1e-3, STILL)
        if disturb:
            control.evaluate(3.0, BENT + 0.5, STILL + 1.0)
        results.append(control.step(0.002, BENT + 1e-3, STILL + 0.01))
    np.testing.assert_array_equal(results[0].torque, results[1].torque)


def test_the_same_steps_give_the_same_numbers():
    """No state of a controller leaks into another one."""
    torques = []
    for _ in range(2):
        control = holding()
        control.activate(0.0, BENT, STILL)
        torques.append([control.step(1e-3 * k, BENT + 1e-4 * k, STILL).torque for k in range(5)])
    np.testing.assert_array_equal(*torques)


def test_paths_wait_for_start_and_hold_brakes_along_them():
    """Before start the reference stays, after hold it comes to rest within the ramp and stays."""
    control = planar()
    control.start_limits = ANYWHERE
    q = control.start_configuration()
    control.activate(0.0, q, STILL)

    def reference(t):
        control.step(t, q, STILL)
        return control._samples["tool"].p.copy()

    np.testing.assert_array_equal(reference(0.7), reference(0.0))
    control.start(1.0)
    assert np.linalg.norm(reference(2.5) - reference(1.0)) > 0.05
    control.hold(2.5)
    assert np.linalg.norm(reference(2.6) - reference(2.5)) > 1e-3
    np.testing.assert_allclose(reference(9.0), reference(3.0), atol=1e-12)
    control.start(10.0)
    assert np.linalg.norm(reference(11.0) - reference(10.0)) > 1e-3


def test_each_frame_holds_where_it_is_itself():
    """Two frames, each with a channel that holds: no task has an error at activation."""
    arm = planar_arm((0.5, 0.4, 0.3))
    tasks = [
        task(name, Position(axes="xy"), frame, "base", reference=name)
        for name, frame in (("pen", "tip"), ("elbow", "link2"))
    ]
    plain = controller(arm, tasks)
    channels = {name: replace(plain.channels["tool"], leader=name) for name in ("pen", "elbow")}
    control = Controller(arm, plain.stack, {**channels, "joints": plain.channels["joints"]})
    control.activate(0.0, BENT, STILL)
    for report in control.step(0.001, BENT, STILL).tasks.values():
        np.testing.assert_allclose(report.error, 0.0, atol=1e-15)


def started_apart(**changes):
    """The planar arm with changed channels, activated at 0: {name: keywords of Channel}."""
    plain = planar()
    channels = {name: replace(c, **changes.get(name, {})) for name, c in plain.channels.items()}
    control = Controller(plain.arm, plain.stack, channels, start_limits=ANYWHERE)
    control.activate(0.0, control.start_configuration(), STILL)

    def reference(t):
        control.step(t, BENT, STILL)
        return control._samples["tool"].p, control._samples["joints"].q

    tool, joints = (channels[name].path for name in ("tool", "joints"))
    return control, reference, lambda s: tool.sample(s).p, lambda s: joints.sample(s).q


def test_a_path_that_starts_at_activation_does_so_alone_and_at_its_pace():
    """The other one waits for start, which changes nothing for the first."""
    control, reference, tip, joints = started_apart(
        tool={"at_activation": True, "pace": 0.5}, joints={"leader": "joints"}
    )
    np.testing.assert_allclose(reference(1.0)[0], tip(0.5), atol=1e-12)
    np.testing.assert_allclose(reference(1.0)[1], joints(0.0), atol=1e-12)
    control.start(2.0)
    np.testing.assert_allclose(reference(3.0)[0], tip(1.5), atol=1e-12)
    np.testing.assert_allclose(reference(3.0)[1], joints(1.0), atol=1e-12)
    assert control.duration == pytest.approx(max(4.0 / 0.5, 3.0))


def test_a_follower_takes_its_leaders_time():
    """Start, pace and hold of the leader; its own pace means nothing."""
    control, reference, tip, joints = started_apart(
        tool={"pace": 0.5}, joints={"leader": "tool", "pace": 0.1}
    )
    control.start(1.0)
    np.testing.assert_allclose(reference(3.0)[0], tip(1.0), atol=1e-12)
    np.testing.assert_allclose(reference(3.0)[1], joints(1.0), atol=1e-12)
    control.hold(3.0)
    held = reference(9.0)
    np.testing.assert_allclose(held[0], tip(1.0 + 0.5 * 0.25), atol=1e-9)  # half the ramp of 0.5 s
    np.testing.assert_allclose(held[1], joints(1.0 + 0.5 * 0.25), atol=1e-9)


def test_torque_has_no_step_when_a_path_is_held_and_resumed():
    """No larger change in a cycle than in plain tracking; a jump of the rate would be tens of N·m."""
    control = planar()
    control.start_limits = ANYWHERE
    q = control.start_configuration()
    control.activate(0.0, q, STILL)
    control.start(0.0)
    torques = []
    for k in range(4000):
        t = 1e-3 * k
        if k == 1500:
            control.hold(t)
        if k == 2800:
            control.start(t)
        torques.append(control.step(t, q, STILL).torque)
    steps = np.abs(np.diff(torques, axis=0)).max(axis=1)
    around = np.r_[1495:1510, 2795:2810]
    assert steps[around].max() < 1.2 * steps[600:1400].max()


def test_the_push_ramps_up_after_start_and_down_after_hold():
    """Only while tracking: none before start, S(½) = ½ of it after 0.25 s, all of it after 0.5 s."""
    plain, pushing = holding(), holding(force=(30.0, -20.0))
    for control in (plain, pushing):
        control.activate(0.0, BENT, STILL)

    def share(t):
        torque = pushing.step(t, BENT, STILL).torque - plain.step(t, BENT, STILL).torque
        J = pushing._here.poses[0][2][:2]
        whole = J.T @ [30.0, -20.0]
        np.testing.assert_allclose(torque, torque @ whole / (whole @ whole) * whole, atol=1e-9)
        return torque @ whole / (whole @ whole)

    assert share(0.9) == 0.0
    pushing.start(1.0)
    assert [share(t) for t in (1.0, 1.25, 1.5, 3.0)] == pytest.approx([0.0, 0.5, 1.0, 1.0], abs=1e-9)
    pushing.hold(4.0)
    assert [share(t) for t in (4.0, 4.25, 4.5, 9.0)] == pytest.approx([1.0, 0.5, 0.0, 0.0], abs=1e-9)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("which", ["q", "v"])
def test_a_state_that_is_not_finite_is_refused_and_changes_nothing(bad, which):
    """The next good state gets the torque it would have got."""
    control, other = holding(), holding()
    for c in (control, other):
        c.activate(0.0, BENT, STILL)
    state = {"q": BENT.copy(), "v": STILL.copy()}
    state[which][1] = bad
    with pytest.raises(InputError, match="finite"):
        control.step(0.001, **state)
    np.testing.assert_array_equal(
        control.step(0.002, BENT, STILL).torque, other.step(0.002, BENT, STILL).torque
    )


@pytest.mark.parametrize("q", [np.zeros(2), np.zeros((3, 1)), [], [0.0, 0.0, 0.0, 0.0]])
def test_a_state_of_the_wrong_shape_is_refused(q):
    """The message names the joints."""
    control = holding()
    control.activate(0.0, BENT, STILL)
    with pytest.raises(InputError, match="j1, j2, j3"):
        control.step(0.0, q, STILL)


def test_nothing_works_before_activation():
    """Each call says what to do first."""
    control = holding()
    for call in (
        lambda: control.step(0.0, BENT, STILL),
        lambda: control.start(0.0),
        lambda: control.hold(0.0),
    ):
        with pytest.raises(InputError, match=r"activate\(t, q, v\)"):
            call()


def test_activation_reports_everything_at_once():
    """Outside a limit, moving, away from both references."""
    control = planar()
    with pytest.raises(InputError) as caught:
        control.activate(0.0, np.array([3.1, 0.9, 0.5]), np.array([0.0, 0.2, 0.0]))
    text = str(caught.value)
    for words in ("j1 is outside", "j2 is moving", "away from tip", "'joints' starts away from joint j1"):
        assert words in text
    with pytest.raises(InputError, match="not active"):
        control.step(0.0, BENT, STILL)


@pytest.mark.parametrize(("chart", "free"), [(Position(axes="xy"), "angle"), (RotationVector(), "distance")])
def test_only_what_tasks_describe_is_judged_at_activation(chart, free):
    """A pen of which only the position counts may be turned as it likes, and the other way round."""
    arm = planar_arm((0.5, 0.4, 0.3))
    R, p = holding().pose(arm.frame_id("tip"), arm.frame_id("base"), BENT)
    away = {"angle": (np.eye(3), p), "distance": (R, p + [0.3, 0.0, 0.0])}
    for other, (R_d, p_d) in away.items():
        control = controller(arm, [task("pen", chart, "tip", "base")], tool=PoseHold(R_d, p_d))
        if other == free:
            control.activate(0.0, BENT, STILL)
        else:
            with pytest.raises(InputError, match="away from tip"):
                control.activate(0.0, BENT, STILL)


def test_a_refused_activation_leaves_no_hold_behind():
    """evaluate goes on to hold at the state it is asked about."""
    control = holding()
    with pytest.raises(InputError, match="moving"):
        control.activate(0.0, BENT, STILL + 1.0)
    for report in control.evaluate(0.0, BENT + 0.3, STILL).tasks.values():
        np.testing.assert_allclose(report.error, 0.0, atol=1e-15)


def test_gravity_by_driver_is_left_out_but_counted():
    """The command lacks gravity; the sum with it stays within the limit."""
    plain, shared = holding(), holding(gravity_by_driver=True)
    data = plain.arm.data()
    arms.dynamics(plain.arm, data, BENT, STILL)
    for control in (plain, shared):
        control.activate(0.0, BENT, STILL)
    a, b = (c.step(0.001, BENT + 0.01, STILL) for c in (plain, shared))
    arms.dynamics(plain.arm, data, BENT + 0.01, STILL)
    np.testing.assert_allclose(a.torque - b.torque, data.g, atol=1e-12)
    far = shared.step(0.002, BENT + 0.5, STILL)
    arms.dynamics(plain.arm, data, BENT + 0.5, STILL)
    assert np.all(np.abs(far.torque + data.g) <= shared.arm.torque_limit + 1e-9)


vectors = arrays(float, 4, elements=st.floats(-100, 100))


@given(vectors, vectors, arrays(float, 4, elements=st.floats(0.1, 50)))
def test_torque_limits_cut_feedback_before_feed_forward(feed_forward, feedback, limit):
    """Never beyond the limit; feedback scaled as one vector; feed-forward whole where it fits."""
    torque, limited = limit_torque(feed_forward, feedback, limit)
    assert np.all(np.abs(torque) <= limit)
    fits = np.all(np.abs(feed_forward + feedback) <= limit)
    assert limited == (not fits)
    if fits:
        np.testing.assert_array_equal(torque, feed_forward + feedback)
    elif np.all(np.abs(feed_forward) <= limit):
        part = torque - feed_forward
        length = np.dot(feedback, feedback)
        scale = np.dot(part, feedback) / length if length > 1e-12 else 0.0
        assert -1e-9 <= scale <= 1.0 + 1e-9
        np.testing.assert_allclose(part, scale * feedback, atol=1e-9)  # same direction
        if length > 1e-12 and np.abs(feedback).max() > 1e-6:  # as much of it as fits
            more = np.abs(feed_forward + (scale + 1e-3) * feedback)
            assert np.any(more > limit - 1e-9)


def test_the_limited_torque_has_no_step_where_a_limit_begins_to_act():
    """
    Joint 1 is beyond its limit but for the feedback, as joint 2 reaches its own.

    """
    torques = [
        limit_torque(np.array([120.0, 0.0]), np.array([-30.0, 100.0 + e]), np.full(2, 100.0))[0]
        for e in (-1e-9, 1e-9)
    ]
    np.testing.assert_allclose(torques[0], [90.0, 100.0], atol=1e-6)
    np.testing.assert_allclose(torques[1], torques[0], atol=1e-6)


def test_a_command_reports_every_task_in_order():
    """Names, shapes and ranges of the telemetry."""
    control = seven_axes()
    command = control.evaluate(0.5, REST, np.zeros(7))
    assert (
        list(command.tasks) == ["radius", "height", "along", "zyz", "xyz", "posture"] == list(control.names)
    )
    assert [report.error.shape for report in command.tasks.values()] == [(1,), (1,), (2,), (3,), (3,), (7,)]
    assert abs(command.share_sum - 7.0) < 1e-9
    for report in command.tasks.values():
        assert 0.0 <= report.share <= 7.0
        assert 0.0 <= report.validity <= 1.0
        assert report.apparent_inertia > 0.0
        assert np.isinf(report.apparent_inertia) == (report.share == 0.0)


def test_reports_of_one_cycle_are_not_overwritten_by_the_next():
    """A telemetry thread may read them later."""
    control = holding()
    control.activate(0.0, BENT, STILL)
    first = control.step(0.001, BENT + 0.01, STILL)
    kept = (first.torque.copy(), first.tasks["pen"].error.copy(), first.joint_velocity_reference.copy())
    control.step(0.002, BENT - 0.02, STILL)
    for now, before in zip(
        (first.torque, first.tasks["pen"].error, first.joint_velocity_reference), kept, strict=True
    ):
        np.testing.assert_array_equal(now, before)


def test_cycles_leave_nothing_for_the_garbage_collector():
    """With the collector off, thousands of cycles add no tracked object and make no reference cycle."""
    control = holding()
    control.activate(0.0, BENT, STILL)

    def run(count):
        for k in range(count):
            control.step(0.001 * k, BENT + 1e-6 * k, STILL)

    run(100)
    gc.collect()
    gc.disable()
    try:
        before = len(gc.get_objects())
        run(3000)
        assert len(gc.get_objects()) - before < 10  # the frame objects of this function and the like
        assert gc.collect() < 10
    finally:
        gc.enable()


def test_axes_no_task_is_about_do_not_count_at_the_start():
    """A planar arm whose path was drawn 3 cm off its plane may start; 3 cm along its plane it may not."""
    for offset, refused in (((0.0, 0.0, 0.03), False), ((0.03, 0.0, 0.0), True)):
        control = holding()
        R, p = (np.array(part) for part in control.pose(*control.tools["tip"][:2], BENT))
        pen = control.stack.tasks[0]
        control = controller(control.arm, [pen], tool=PoseHold(R, p + offset), joints=JointHold(BENT))
        if refused:
            with pytest.raises(InputError, match="away from tip"):
                control.activate(0.0, BENT, STILL)
        else:
            control.activate(0.0, BENT, STILL)
            assert control.pose_errors(BENT)["tip"][0] < 1e-12


def test_a_tool_that_starts_turned_right_round_hints_at_the_order_of_the_quaternion():
    """Rows with w first, under a header that says otherwise, look like this; so does a wrong companion."""
    control = planar()
    turned = task("turn", RotationVector(), "tip", "base")
    R, p = (np.array(part) for part in control.pose(*control.tools["tip"][:2], BENT))
    flip = np.diag([1.0, -1.0, -1.0])
    control = controller(control.arm, [turned], tool=PoseHold(flip @ R, p), joints=JointHold(BENT + 0.2))
    with pytest.raises(InputError) as caught:
        control.activate(0.0, BENT, STILL)
    assert "x y z w" in str(caught.value)
    assert "companion" in str(caught.value)
