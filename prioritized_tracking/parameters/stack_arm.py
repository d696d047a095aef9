# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Schema of the stack file: the arm as the controller knows it, and as it is simulated.

"""

from __future__ import annotations

from prioritized_tracking.schema import Block, Parameter, Table

_VISCOUS = Parameter(
    key="viscous", type="double_array", unit="N·m·s/rad", low=0.0, help="Per joint; left out: none."
)
_COULOMB = Parameter(
    key="coulomb", type="double_array", unit="N·m", low=0.0, help="Per joint; left out: none."
)
_PAYLOAD = (
    Parameter(key="frame", type="string", required=True, help="Link that carries it."),
    Parameter(key="mass", type="double", unit="kg", required=True, low=0.0, high=1000.0, help="Mass."),
    Parameter(
        key="com",
        type="double_array",
        unit="m",
        length=3,
        low=-10.0,
        high=10.0,
        default=(0.0, 0.0, 0.0),
        help="Centre of mass in that link's frame.",
    ),
    Parameter(
        key="inertia",
        type="double_array",
        unit="kg·m²",
        length=3,
        low=0.0,
        default=(0.0, 0.0, 0.0),
        help="Diagonal of the inertia about the centre of mass, in that link's axes.",
    ),
)


def _payload(whose: str) -> Block:
    return Block(
        key="payload", help=f"Load at a link, {whose}; left out: none.", parameters=_PAYLOAD, optional=True
    )


def _friction(whose: str) -> Block:
    text = f"Joint friction, {whose}; left out: none."
    return Block(key="friction", help=text, parameters=(_VISCOUS, _COULOMB), optional=True)


def _noise(key: str, unit: str, high: float) -> Parameter:
    text = "Standard deviation per cycle."
    return Parameter(key=key, type="double", unit=unit, low=0.0, high=high, default=0.0, help=text)


ROBOT = Block(
    key="robot",
    help="The arm.",
    parameters=(
        Parameter(key="urdf", type="string", help="URDF file; left out: the robot_description topic."),
        Parameter(
            key="joints",
            type="string_array",
            help="Controlled joints, in the order of commands; left out: all moving joints.",
        ),
        Parameter(
            key="gravity",
            type="double_array",
            unit="m/s²",
            length=3,
            low=-100.0,
            high=100.0,
            default=(0.0, 0.0, -9.81),
            help="Gravity in the axes of the root link.",
        ),
        Parameter(
            key="gravity_by_driver",
            type="bool",
            default=False,
            help="The driver adds the gravity torque itself; it still counts towards limits.",
        ),
        Parameter(
            key="on_silence",
            type="string",
            choices=("brake", "hold_last", "zero"),
            help="What the driver does when commands cease; required for the node.",
        ),
        Parameter(
            key="velocity",
            type="string",
            choices=("measured", "from_position"),
            default="measured",
            help="Joint velocity: as measured, or differentiated from positions.",
        ),
        Parameter(
            key="velocity_cutoff",
            type="double",
            unit="Hz",
            low=0.1,
            high=2000.0,
            help="Cut-off of the filter of velocity: from_position, where it is required.",
        ),
        Parameter(
            key="enable_topic",
            type="string",
            default="",
            help="Topic of std_msgs/Bool: false freezes path time and sends nothing; empty: none.",
        ),
        Parameter(
            key="delay_cycles",
            type="integer",
            low=0,
            high=20,
            default=1,
            help="Whole cycles from a joint state to its torque; gain limits count with them.",
        ),
        Parameter(
            key="rotor_inertia",
            type="double_array",
            unit="kg·m²",
            low=0.0,
            help="Per joint, reflected to the joint (gear ratio squared); left out: none.",
        ),
        Parameter(
            key="torque_limit",
            type="double_array",
            unit="N·m",
            low=0.0,
            exclusive=True,
            help="Per joint; left out: effort limits of the URDF.",
        ),
        Parameter(
            key="velocity_limit",
            type="double_array",
            unit="rad/s",
            low=0.0,
            exclusive=True,
            help="Per joint; left out: velocity limits of the URDF.",
        ),
    ),
    blocks=(
        Table(
            key="locked",
            help="Every other moving joint, held at this position.",
            entry=Parameter(
                key="joint", type="double", unit="rad or m", help="Position the joint is held at."
            ),
        ),
        _payload("known to the controller"),
        _friction("compensated"),
    ),
)

PLANT = Block(
    key="plant",
    help="The simulated arm, where it differs from the one the controller knows; all optional.",
    parameters=(
        Parameter(
            key="start",
            type="double_array",
            unit="rad",
            help="Joint positions; left out: where the references start.",
        ),
        Parameter(
            key="start_offset",
            type="double",
            unit="rad",
            low=0.0,
            high=3.2,
            default=0.0,
            help="Random, per joint.",
        ),
        Parameter(
            key="mass_error",
            type="double",
            low=0.0,
            high=0.5,
            default=0.0,
            help="Relative, random, per link; 0.05: 5 %.",
        ),
        _noise("position_noise", "rad", 0.1),
        _noise("velocity_noise", "rad/s", 10.0),
        _noise("torque_noise", "N·m", 1000.0),
        Parameter(
            key="delay",
            type="integer",
            low=0,
            high=20,
            default=0,
            help="Whole cycles from a joint state to its torque.",
        ),
        Parameter(
            key="seed", type="integer", low=0, high=2**32 - 1, default=0, help="Same seed, same numbers."
        ),
    ),
    blocks=(_payload("unknown to the controller"), _friction("of the simulated joints")),
)
