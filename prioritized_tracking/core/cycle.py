# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
One control cycle: (time, joint positions, joint velocities) → torque and telemetry.

The same cycle serves the node, rehearsals and audits. It knows no clock, no file and no ROS; time is
an argument.

"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np

from prioritized_tracking.charts.position import described_axes
from prioritized_tracking.core.arm import Arm, ArmData, dynamics, frame_pose, inertia
from prioritized_tracking.core.channels import Channel, References, Samples
from prioritized_tracking.core.claims import Room
from prioritized_tracking.core.command import HUGE, Command, limit_torque, usable
from prioritized_tracking.core.kernel import TWIN_STEP, Outcome
from prioritized_tracking.core.laws import LAWS, Law
from prioritized_tracking.core.references import JointHold, PoseHold
from prioritized_tracking.core.rotation import Array, rotation_log
from prioritized_tracking.core.stack import Evaluation, Stack
from prioritized_tracking.core.start import StartLimits, joint_problems, state_problems, tool_problems
from prioritized_tracking.errors import InputError, Problem


class Controller:
    """
    A stack on an arm, with its references and a law.

    Parameters
    ----------
    arm, stack : the mechanism and the priority list.
    channels : references by name.
    law : name of the law, see `core.laws.LAWS`.
    rate : control rate, Hz.
    gravity_by_driver : the driver adds gravity itself; it still counts in the limits.
    start_limits : see `StartLimits`.

    Attributes
    ----------
    joints : names in command order.
    tools : for each controlled frame (frame, base, channel) numbers and name.
    described : for each controlled frame the units of its tasks, "m" and "rad": what of its pose counts.
    stack_file : the file it was built from; None: built by hand.
    notes : what the user should be told about it.

    """

    def __init__(
        self,
        arm: Arm,
        stack: Stack,
        channels: Mapping[str, Channel],
        *,
        law: str = "prioritized",
        rate: float = 1000.0,
        gravity_by_driver: bool = False,
        start_limits: StartLimits | None = None,
    ) -> None:
        self.arm, self.stack, self.channels, self.rate = arm, stack, dict(channels), rate
        self.joints = arm.joints
        self.gravity_by_driver = gravity_by_driver
        self.start_limits = start_limits or StartLimits()
        self.stack_file: Any = None
        self.notes: tuple[str, ...] = ()
        self.law: Law = LAWS[law](arm, stack)
        self._torque_limit = np.array(arm.torque_limit)
        self.tools = {
            task.frame: (arm.frame_id(task.frame), arm.frame_id(task.base), task.reference)
            for task in reversed(stack.tasks)
            if task.chart.kind == "pose"
        }
        self.described = {
            frame: frozenset(task.unit for task in stack.tasks if task.frame == frame) for frame in self.tools
        }
        self._axes = {frame: self._described_axes(frame) for frame in self.tools}
        self.names = tuple(t.name for t in stack.tasks) + ((stack.posture.name,) if stack.posture else ())
        ends = (*stack.first_row, stack.first_row[-1] + arm.n)
        self._blocks = tuple((name, slice(*ends[i : i + 2])) for i, name in enumerate(self.names))
        self._here, self._there = Evaluation(arm, stack), Evaluation(arm, stack)
        self._data: ArmData = arm.data()
        self._references = References(channels)
        self._samples: Samples = {}

    @property
    def room(self) -> Room:
        """
        Arrays of the last evaluation; the next one overwrites them.

        """
        return self._here.room

    @property
    def duration(self) -> float:
        """
        Time the longest reference takes at its pace, s; inf for endless ones, 0 for holds.

        """
        return self._references.duration

    # ------------------------------------------------------------------ life

    def activate(self, t: float, q: Array, v: Array) -> None:
        """
        Take the arm's state as the start: hold references start here, paths wait at their beginning.

        Parameters
        ----------
        t : controller time, s.
        q, v : (n,) rad and rad/s.

        Raises
        ------
        InputError
            If the arm moves, is outside its limits, or a reference starts away from it. Bring the
            arm to the start of the path first.

        """
        q, v = self._state(q, v)
        references = self._references
        references.activate(t, self._holder(q))
        self._samples = references.at(t)
        starts = {name: self._samples[name].q for name, c in self.channels.items() if c.kind == "joints"}
        problems = state_problems(self.arm, q, v)
        problems += tool_problems(self.pose_errors(q), self.described, self.start_limits)
        problems += joint_problems(self.arm, q, starts, self.start_limits)
        if problems:
            references.deactivate()
            raise InputError(problems)
        if any(channel.at_activation for channel in self.channels.values()):
            references.start(t, only_at_activation=True)

    def start(self, t: float) -> None:
        """
        Begin, or go on, along the paths.

        """
        self._require_active()
        self._references.start(t)

    def hold(self, t: float) -> None:
        """
        Brake along the paths and hold there.

        """
        self._require_active()
        self._references.hold(t)

    def reset(self, t: float) -> None:
        """
        Go back to holding; never resumes a motion by itself.

        """
        self.hold(t)

    # ----------------------------------------------------------------- cycle

    def step(self, t: float, q: Array, v: Array) -> Command:
        """
        Run one cycle.

        Parameters
        ----------
        t : controller time, s; must not go back.
        q, v : (n,) measured joint positions (rad) and velocities (rad/s).

        Returns
        -------
        Command
            With the torque within its limits.

        Raises
        ------
        InputError
            Before activation, or for a state that is not n finite numbers.

        """
        self._require_active()
        q, v = self._state(q, v)
        references = self._references
        self._samples = references.at(t)
        outcome = self._law(q, v, self._samples, references.push_scale(t))
        torque, limited = limit_torque(outcome.feed_forward, outcome.feedback, self._torque_limit)
        return self._command(torque, limited)

    def evaluate(self, t: float, q: Array, v: Array) -> Command:
        """
        The bare law at any state and any path time; changes nothing.

        Parameters
        ----------
        t : path time of every reference, s.
        q, v : (n,) rad and rad/s.

        Returns
        -------
        Command
            With the torque before any limit. References that hold do so at ``q`` unless the
            controller has been activated.

        """
        q, v = self._state(q, v)
        outcome = self._law(q, v, self._references.at_path_time(t, self._holder(q)), 1.0)
        return self._command(outcome.feed_forward + outcome.feedback, False)

    def survey(self, t: float, q: Array) -> tuple[Evaluation, Law]:
        """
        Shares, feedback and reference velocity at any joint positions and path time, without torque.

        Parameters
        ----------
        t, q : as for ``evaluate``.

        Returns
        -------
        here, law : arrays that the next call overwrites.

        """
        q, _ = self._state(q, np.zeros(self.arm.n))
        here = self._here
        inertia(self.arm, here.data, q)
        here.update(q, self._references.at_path_time(t, self._holder(q)))
        self.law.survey(here)
        return here, self.law

    def rehearse_one_cycle(self) -> None:
        """
        Go through everything a cycle needs, at the start of the references, without sending anything.

        """
        q, _ = self._state(self.start_configuration(), np.zeros(self.arm.n))
        self._samples = self._references.at_path_time(0.0, self._holder(q))
        outcome = self._law(q, np.zeros_like(q), self._samples, 1.0)
        self._command(limit_torque(outcome.feed_forward, outcome.feedback, self._torque_limit)[0], False)
        self.pose_errors(q)
        if self.law.has_shares:
            self.survey(0.0, q)

    def _law(self, q: Array, v: Array, samples: Samples, push_scale: float) -> Outcome:
        """
        Evaluate the stack at the state and, for tracking laws, at its twin; then the law.

        """
        here, there = self._here, self._there
        dynamics(self.arm, here.data, q, v)
        here.update(q, samples)
        if self.law.tracks:
            twin = q + TWIN_STEP * v
            inertia(self.arm, there.data, twin)
            there.follow(here, twin, TWIN_STEP)
        self.law.torque(here, there, v, push_scale)
        return self.law.outcome

    def _command(self, torque: Array, limited: bool) -> Command:
        """
        Put torque and telemetry together.

        """
        here, law = self._here, self.law
        if self.gravity_by_driver:
            torque = torque - here.data.g
        room = here.room
        return Command(
            torque,
            law.velocity.copy(),
            law.branches,
            law.pruned,
            limited,
            (),
            self._blocks,
            np.concatenate((room.error, room.posture_error)),
            law.outcome.report.copy(),
            room.claims.validity.copy(),
        )

    # ------------------------------------------------------------ references

    def _holder(self, q: Array) -> Callable[[str, Channel], PoseHold | JointHold]:
        """
        What makes a hold at joint positions q for a channel.

        """

        def hold_here(name: str, channel: Channel) -> PoseHold | JointHold:
            if channel.kind == "joints":
                return JointHold(q)
            for frame, base, reference in self.tools.values():
                if reference == name:
                    return PoseHold(*self.pose(frame, base, q))
            return PoseHold(np.eye(3), np.zeros(3))  # drives nothing

        return hold_here

    def pose(self, frame: int, base: int, q: Array) -> tuple[Array, Array]:
        """
        Pose of a frame in a base at joint positions q: (3, 3) and (3,), m.

        """
        return frame_pose(self.arm, self._data, q, frame, base)

    def pose_errors(self, q: Array) -> dict[str, tuple[float, float]]:
        """
        Distance (m) and angle (rad) of each controlled frame at q from the last cycle's reference.

        The distance counts in the axes that tasks describe; without any, in all of them.

        """
        errors = {}
        for name, (frame, base, reference) in self.tools.items():
            target = self._samples[reference]
            R, p = self.pose(frame, base, q)
            angle = rotation_log(R @ target.R.T, np.zeros(3))
            axes = self._axes[name]
            errors[name] = (math.dist(p[axes], target.p[axes]), float(angle))
        return errors

    def _described_axes(self, frame: str) -> Any:
        """
        What selects the described axes of a frame's position.

        """
        axes = described_axes(task.chart for task in self.stack.tasks if task.frame == frame)
        return [i for i, axis in enumerate("xyz") if axis in axes] if 0 < len(axes) < 3 else slice(0, 3)

    def start_configuration(self) -> Array:
        """
        Joint positions (n,), rad, where the joint references start; mid-range where there are none.

        """
        for channel in self.channels.values():
            if channel.kind == "joints" and channel.path is not None:
                return np.array(channel.path.sample(0.0, 0.0, 0.0).q)
        low, high = (np.where(np.isfinite(limit), limit, 0.0) for limit in (self.arm.lower, self.arm.upper))
        return 0.5 * (low + high)

    # ---------------------------------------------------------------- checks

    def _state(self, q: Array, v: Array) -> tuple[Array, Array]:
        """
        The measured state as finite arrays of the right length.

        """
        q, v = np.ascontiguousarray(q, dtype=np.float64), np.ascontiguousarray(v, dtype=np.float64)
        shape = (self.arm.n,)
        if q.shape != shape or v.shape != shape or not (usable(q) and usable(v)):
            raise InputError(
                [
                    Problem(
                        what=f"joint {name} cannot be used",
                        expected=f"{self.arm.n} numbers ({unit}), finite and below {HUGE:g}: "
                        + ", ".join(self.joints),
                        got=f"shape {array.shape}, {np.array2string(array, threshold=14)}",
                        remedy="Check the joint state's names and lengths.",
                    )
                    for name, unit, array in (("positions", "rad", q), ("velocities", "rad/s", v))
                    if array.shape != shape or not usable(array)
                ]
            )
        return q, v

    def _require_active(self) -> None:
        """
        Refuse to work before activation.

        """
        if not self._references.active:
            raise InputError(
                Problem(what="the controller is not active", remedy="Call activate(t, q, v) first.")
            )
