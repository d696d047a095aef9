# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Schema of the stack file: tasks and their references.

"""

from __future__ import annotations

from prioritized_tracking.schema import Block, Parameter

POSTURE = "posture"
"""Name of the chart of all joints, which completes a stack."""

TASK_KEYS = (
    Parameter(key="chart", type="string", required=True, help="Coordinates of the task."),
    Parameter(key="reference", type="string", required=True, help="Channel that says where to be."),
    Parameter(key="frame", type="string", required=True, help="Controlled frame, a link of the arm."),
    Parameter(key="base", type="string", help="Link the coordinates live in; left out: the root link."),
    Parameter(
        key="stiffness",
        type="double_or_array",
        unit="N/m or N·m/rad",
        required=True,
        low=0.0,
        changeable=True,
        help="One, or one per coordinate; stiffness / damping is the rate at which errors decay.",
    ),
    Parameter(
        key="damping",
        type="double_or_array",
        unit="N·s/m or N·m·s/rad",
        required=True,
        low=0.0,
        exclusive=True,
        changeable=True,
        help="One, or one per coordinate. Stiffness acts through it, so it cannot be 0.",
    ),
    Parameter(
        key="handover",
        type="double_array",
        unit="kg or kg·m²",
        length=2,
        low=0.0,
        high=1e9,  # an apparent inertia of 1e12 and more is rounding, and would be owned
        exclusive=True,
        help="Apparent inertia: full share below the first, none above the second; left out: computed.",
    ),
    Parameter(
        key="force",
        type="double_or_array",
        unit="N or N·m",
        default=0.0,
        help="Steady push along the coordinates: one, or one per coordinate.",
    ),
    Parameter(
        key="tolerance",
        type="double_or_array",
        unit="m or rad",
        low=0.0,
        exclusive=True,
        changeable=True,
        help="Protective stop when an error exceeds it; left out: none.",
    ),
)

_POSTURE_GAINS = (
    Parameter(
        key="stiffness",
        type="double",
        unit="1/s²",
        low=0.0,
        default=320.0,
        changeable=True,
        help="Stiffness per inertia; 320 with damping 40 lets errors decay at 8 1/s.",
    ),
    Parameter(
        key="damping",
        type="double",
        unit="1/s",
        low=0.0,
        exclusive=True,
        default=40.0,
        changeable=True,
        help="Damping per inertia. Stiffness acts through it, so it cannot be 0.",
    ),
)


def task_keys(chart: str, kind: str) -> tuple[Parameter, ...]:
    """
    Return the keys a task has whatever the coordinates of its chart.

    Parameters
    ----------
    chart : str
        Name of the chart. A posture has scalar gains with defaults, and neither band nor push: it
        owns exactly what the tasks above leave.
    kind : str
        "pose" or "joints"; a task on joints has neither frame nor base.

    """
    if kind == "pose":
        return TASK_KEYS
    keys = tuple(p for p in TASK_KEYS if p.key not in ("frame", "base"))
    if chart != POSTURE:
        return keys
    gains = {p.key: p for p in _POSTURE_GAINS}
    return tuple(gains.get(p.key, p) for p in keys if p.key not in ("handover", "force"))


REFERENCE = Block(
    key="references",
    help="A channel: where its tasks shall be at each time.",
    parameters=(
        Parameter(
            key="kind", type="string", required=True, choices=("pose", "joints"), help="What it consists of."
        ),
        Parameter(
            key="source",
            type="string",
            required=True,
            choices=("hold", "file", "topic", "companion"),
            help="Held at activation, a CSV file, a topic, or computed for a pose channel.",
        ),
        Parameter(
            key="base", type="string", help="Link its poses live in; left out: the root link. Pose only."
        ),
        Parameter(key="file", type="string", help="CSV file of source: file, or a stored companion."),
        Parameter(
            key="repeat",
            type="integer",
            low=0,
            high=1_000_000,
            default=1,
            help="Passes; 0: endless, closed paths only.",
        ),
        Parameter(
            key="pace",
            type="double",
            low=0.01,
            high=1.0,
            default=1.0,
            changeable=True,
            help="Speed along the path, 1: as in the file.",
        ),
        Parameter(
            key="start",
            type="string",
            choices=("service", "activation"),
            default="service",
            help="When it begins: at the ~/start service, or by itself at activation.",
        ),
        Parameter(
            key="follows",
            type="string",
            help="Channel whose path time it takes entirely (start, pace, repeat, hold). Joints only.",
        ),
    ),
)
