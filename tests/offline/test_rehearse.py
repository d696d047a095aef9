# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The loop of a rehearsal, with a small controller of the tests' own: what is called when, and how runs end.

The closed loops of real stacks are in test_closed_loop.py.

"""

from types import SimpleNamespace

import numpy as np
import pytest
from scipy.linalg import expm
from scipy.signal import lfilter

from prioritized_tracking.core.arm import dynamics
from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.offline.rehearse import default_seconds, rehearse, run_law
from tests.arms import planar_arm

RATE = 500.0


class JointController:
    """
    Independent joint servo: torque = M(q)(-stiffness (q - goal) - damping v) + Coriolis and gravity torque.

    """

    def __init__(self, *, stiffness=100.0, damping=20.0, plant=None, duration=0.0, robot=None):
        self.arm = planar_arm((1.0, 1.0))
        self.joints, self.rate, self.duration = self.arm.joints, RATE, duration
        self.goal, self.stiffness, self.damping = np.array([0.3, 0.8]), stiffness, damping
        self.tools, self.channels = {"tip": (0, 0, "path")}, {}
        self.described = {"tip": frozenset()}
        self.stack = SimpleNamespace(
            tasks=(), posture=SimpleNamespace(name="posture", unit="rad", tolerance=None)
        )
        tree = {"law": "own", "robot": robot or {}, "plant": plant}
        self.stack_file = SimpleNamespace(tree=tree, where=lambda *keys: ".".join(keys))
        self.calls = []
        self.data = self.arm.data()

    def start_configuration(self):
        return np.array([0.1, 0.5])

    def activate(self, t, q, v):
        self.calls.append(("activate", t))

    def start(self, t):
        self.calls.append(("start", t))

    def step(self, t, q, v):
        self.calls.append(("step", t))
        dynamics(self.arm, self.data, q, v)
        push = -self.stiffness * (q - self.goal) - self.damping * v
        report = SimpleNamespace(error=q - self.goal, share=2.0, apparent_inertia=1.0, validity=1.0)
        torque = self.data.M @ push + self.data.C @ v + self.data.g
        return SimpleNamespace(
            torque=torque, joint_velocity_reference=np.zeros(2), share_sum=2.0, branches=1, limited=False,
            events=(), tasks={"posture": report},
        )  # fmt: skip

    def pose_errors(self, q):
        return {"tip": (float(np.abs(q - self.goal).max()), 0.0)}


def test_closed_loop_is_the_sampled_linear_system():
    """
    The servo makes each joint a double integrator under zero-order hold; near the goal M is constant.

    Oracle: the exact discretisation of that linear system with scipy's expm. Tolerance: M changes by 0.1 %
    over the 1 mrad of motion.

    """
    controller = JointController(stiffness=400.0, damping=20.0)
    controller.start_configuration = lambda: controller.goal + 1e-3
    run = run_law(controller, seconds=0.5)
    held = expm(np.array([[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [0.0, 0.0, 0.0]]) / RATE)
    transition = held[:2, :2] + held[:2, 2:] @ np.array([[-400.0, -20.0]])
    expected = [np.array([1e-3, 0.0])]
    for _ in range(run.signals.count - 1):
        expected.append(transition @ expected[-1])
    errors = run.signals["q"] - controller.goal
    for joint in range(2):
        np.testing.assert_allclose(errors[:, joint], np.array(expected)[:, 0], rtol=0.0, atol=2e-6)


def test_order_of_calls_and_length():
    controller = JointController()
    run = run_law(controller, seconds=0.1)
    assert controller.calls[:2] == [("activate", 0.0), ("start", 0.0)]
    assert [call for call, _ in controller.calls[2:]] == ["step"] * 50
    np.testing.assert_allclose(run.signals["t"], np.arange(50) / RATE, rtol=1e-15)
    np.testing.assert_array_equal(run.signals["q"][0], [0.1, 0.5])
    np.testing.assert_array_equal(run.signals["torque_applied"][1:], run.signals["torque"][:-1])
    assert (run.ended, run.law, run.planned_s) == ("complete", "own", 0.1)
    assert run.computing_s > 0.0


def test_delay_shifts_the_torque():
    run = run_law(JointController(plant={"delay": 2}), seconds=0.1)
    np.testing.assert_array_equal(run.signals["torque_applied"][3:], run.signals["torque"][:-3])


def test_same_seed_same_bits_and_laws_share_their_disturbances():
    plant = {
        "mass_error": 0.1, "start_offset": 0.01, "position_noise": 1e-5, "velocity_noise": 1e-3,
        "torque_noise": 0.1, "delay": 1, "seed": 11,
        "friction": {"viscous": [0.5, 0.5], "coulomb": [0.5, 0.5]},
    }  # fmt: skip
    first, second = rehearse(lambda _law: JointController(plant=plant), ["x", "y"], seconds=0.2)
    for name in first.signals.names:
        assert first.signals[name].tobytes() == second.signals[name].tobytes()
    (other,) = rehearse(lambda _law: JointController(plant=plant | {"seed": 12}), seconds=0.2)
    assert (other.signals["q"][0] != first.signals["q"][0]).all()


def test_velocity_from_position_is_a_filtered_difference():
    """
    Oracle: scipy's lfilter on the recorded positions, a first-order low-pass of 40 Hz in its usual discrete
    form.

    """
    robot = {"velocity": "from_position", "velocity_cutoff": 40.0}
    run = run_law(JointController(plant={"position_noise": 1e-5}, robot=robot), seconds=0.2)
    q = run.signals["q_measured"]
    difference = np.diff(q, axis=0, prepend=q[:1]) * RATE
    pole = np.exp(-2.0 * np.pi * 40.0 / RATE)
    np.testing.assert_allclose(
        run.signals["v_measured"], lfilter([1 - pole], [1, -pole], difference, axis=0), atol=1e-12
    )
    assert np.abs(run.signals["v_measured"] - run.signals["v"]).max() > 1e-3


def test_start_of_the_plant_block_is_used_and_checked():
    run = run_law(JointController(plant={"start": [0.2, 0.7]}), seconds=0.01)
    np.testing.assert_array_equal(run.signals["q"][0], [0.2, 0.7])
    with pytest.raises(InputError, match=r"plant\.start"):
        run_law(JointController(plant={"start": [0.2]}), seconds=0.01)


def test_a_refused_start_points_to_the_plant_block():
    controller = JointController()

    def refuse(_t, _q, _v):
        raise InputError(Problem(what="the arm is elsewhere"))

    controller.activate = refuse
    with pytest.raises(InputError, match="plant: the arm is elsewhere"):
        run_law(controller, seconds=0.01)


def test_an_unstable_law_ends_early_with_an_event():
    """
    Negative damping; the run must stop near ten times the speed limit, long before overflow.

    """
    run = run_law(JointController(damping=-30.0), seconds=20.0)
    assert run.ended == "diverged"
    assert run.signals.count < 20.0 * RATE
    assert [event.kind for event in run.events] == ["diverged"]
    assert "times its limit" in run.events[0].text
    assert np.isfinite(run.signals["v"]).all()


@pytest.mark.parametrize("fault", ["nan", "singular"])
def test_a_law_without_an_answer_ends_the_run(fault):
    controller = JointController()
    healthy = controller.step

    def step(t, q, v):
        command = healthy(t, q, v)
        if t >= 0.05 and fault == "singular":
            raise np.linalg.LinAlgError("Singular matrix")
        if t >= 0.05:
            command.torque[1] = np.nan
        return command

    controller.step = step
    run = run_law(controller, seconds=1.0)
    assert run.ended == "diverged"
    assert run.signals.count == 25
    assert run.events[0].t == pytest.approx(0.05)


def test_interruption_keeps_what_was_recorded_and_skips_the_other_laws():
    seen = []

    def load(law):
        controller = JointController()
        healthy = controller.step

        def step(t, q, v):
            if law == "second" and t >= 0.1:
                raise KeyboardInterrupt
            return healthy(t, q, v)

        controller.step = step
        return controller

    runs = rehearse(
        load, ["first", "second", "third"], seconds=0.2, finished=lambda run: seen.append(run.law)
    )
    assert [(run.law, run.ended, run.signals.count) for run in runs] == [
        ("first", "complete", 100),
        ("second", "interrupted", 50),
    ]
    assert seen == ["first", "second"]
    assert runs[1].events[-1].kind == "interrupted"


def test_events_of_the_guard_are_kept_up_to_a_bound():
    controller = JointController()
    healthy = controller.step
    controller.step = lambda t, q, v: SimpleNamespace(
        **(vars(healthy(t, q, v)) | {"events": ("torque cut",)})
    )
    run = run_law(controller, seconds=3.0)
    assert len(run.events) == 1000
    assert run.events[3].text == "torque cut"
    assert run.events[3].t == pytest.approx(3 / RATE)


def test_the_meter_counts_every_cycle():
    class Counter:
        total, planned, closed = 0, 0, False

        def __call__(self, _law, cycles):
            self.planned = cycles
            return self

        def __enter__(self):
            return self

        def __exit__(self, *_details):
            self.closed = True

        def update(self, cycles, /):
            self.total += cycles

    counter = Counter()
    run_law(JointController(), seconds=0.5, meter=counter)
    assert (counter.total, counter.planned, counter.closed) == (250, 250, True)


def test_default_length():
    """
    The path and one second; an endless path twice at its pace; five seconds where nothing moves.

    """
    assert default_seconds(JointController(duration=4.0)) == 5.0
    assert default_seconds(JointController()) == 5.0
    endless = JointController(duration=np.inf)
    channel = SimpleNamespace(path=SimpleNamespace(file_duration=6.0), leader="path", pace=0.5)
    endless.channels = {"path": channel, "held": SimpleNamespace(path=None, leader="held", pace=1.0)}
    assert default_seconds(endless) == 24.0


def test_driver_gravity_is_part_of_the_plant():
    """
    A driver that adds gravity to a law that also does lifts the arm.

    """
    run = run_law(JointController(robot={"gravity_by_driver": True}), seconds=0.02)
    assert abs(run.signals["torque_applied"][5] - run.signals["torque"][4]).max() > 1.0
