# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Schema of the stack file: every key, its type, unit, range, default, meaning.

One description serves the node's parameters, the command line, and the documentation.

"""

from __future__ import annotations

from prioritized_tracking.parameters.stack_arm import PLANT, ROBOT
from prioritized_tracking.parameters.stack_tasks import REFERENCE
from prioritized_tracking.schema import Block, Parameter, Table

LAWS = ("prioritized", "cartesian_impedance", "joint_impedance", "inverse_jacobian", "damped_inverse")
"""Control laws; the last two run in rehearsals only, never on an arm."""

LOWEST_RATE, HIGHEST_RATE = 50.0, 4000.0
"""
Hz. Below: with one cycle of delay, gains are bounded by decay rate · period < 1, and half of that
is 25 1/s at 50 Hz, too soft to hold a tool. Above: more than interpreted code and joint state
messages can keep; arms with torque interfaces run at 200 to 1000 Hz.

"""

ROS_KEYS = ("use_sim_time", "start_type_description_service", "qos_overrides")
"""Parameters every ROS node has; accepted and left to ROS."""


def _limit(key: str, unit: str, default: float, high: float | None, text: str) -> Parameter:
    return Parameter(
        key=key, type="double", unit=unit, low=0.0, high=high, exclusive=True, default=default, help=text
    )


def _switch(key: str, default: bool, text: str) -> Parameter:
    return Parameter(key=key, type="bool", default=default, help=text)


GUARD = Block(
    key="guard",
    help="Process limits; not a safety function.",
    parameters=(
        _limit("state_timeout", "s", 0.01, 1.0, "Age of a joint state up to which it is extrapolated."),
        _limit("coast", "s", 0.1, 1.0, "Time of gravity torque and decaying damping once the state is lost."),
        _switch(
            "approach",
            False,
            "At activation, move slowly to where the references start. No collision checking.",
        ),
        _limit("approach_speed", "rad/s", 0.1, 1.0, "Fastest joint in that approach."),
        _limit(
            "start_position", "m", 0.02, 1.0, "Largest distance of the tool from its reference at activation."
        ),
        _limit(
            "start_angle", "rad", 0.1, 3.15, "Largest rotation of the tool from its reference at activation."
        ),
        _limit("start_joint", "rad", 0.05, 6.3, "Largest error of a joint from its reference at activation."),
        _limit("torque_rate", "N·m/s", 2000.0, None, "Fastest change of a joint torque."),
        _limit(
            "claim_speed",
            "",
            0.6,
            10.0,
            "Share of joint speed limits that claims may ask for near singularities.",
        ),
        Parameter(
            key="max_overruns",
            type="integer",
            low=1,
            high=100_000,
            default=20,
            help="Late cycles in a row that lead to a protective stop.",
        ),
        _switch("sole_commander", True, "Stop when somebody else sends torque on the command topic."),
        Parameter(
            key="contact_torque",
            type="double",
            unit="N·m",
            low=0.0,
            default=0.0,
            help="Momentum residual that leads to a protective stop; 0: off.",
        ),
    ),
)

STACK = Block(
    key="",
    help="The stack file.",
    parameters=(
        Parameter(
            key="rate",
            type="double",
            unit="Hz",
            low=LOWEST_RATE,
            high=HIGHEST_RATE,
            required=True,
            help="Control cycles per second.",
        ),
        Parameter(
            key="cycle",
            type="string",
            choices=("clock", "state"),
            default="clock",
            help="clock: fixed rate by the steady clock; state: one cycle per joint state.",
        ),
        Parameter(
            key="law",
            type="string",
            choices=LAWS,
            default="prioritized",
            changeable=True,
            help="Control law.",
        ),
        _switch("autostart", False, "The node configures and activates itself."),
        Parameter(
            key="command",
            type="string",
            choices=("array", "joint_state", "none"),
            default="array",
            help="Message of the torque command; none: computes and shows, sends nothing.",
        ),
        Parameter(
            key="telemetry_rate",
            type="double",
            unit="Hz",
            low=0.1,
            high=HIGHEST_RATE,
            default=100.0,
            help="Rate of every output but the command; left out: 100, or `rate` where that is less.",
        ),
        Parameter(
            key="base_dir",
            type="string",
            help="Folder that relative paths start from; left out: the folder of the file.",
        ),
        Parameter(
            key="priority",
            type="string_array",
            required=True,
            changeable=True,
            help="Names of the tasks, highest first; a posture comes last.",
        ),
        Parameter(
            key="feedback_floor",
            type="double",
            unit="1/s",
            low=0.0,
            default=0.0,
            help="Damping in every direction: better against friction, at the price of compliance.",
        ),
    ),
    blocks=(
        ROBOT,
        Table(
            key="tasks",
            help="Tasks by name.",
            entry=Block(key="task", help="A chart on a frame, with gains."),
        ),
        Table(key="references", help="Channels by name.", entry=REFERENCE),
        GUARD,
        PLANT,
    ),
)
