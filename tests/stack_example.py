# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
One stack file that uses every block, and ways to change it.

"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.parameters import StackFile, read_stack

STACK = """\
/**:
  ros__parameters:
    rate: 1000.0
    cycle: clock
    law: prioritized
    command: array
    telemetry_rate: 100.0
    robot:
      urdf: "arm.urdf"
      joints: [a1, a2, a3]
      locked: {finger_joint: 0.02}
      gravity: [0.0, 0.0, -9.81]
      on_silence: brake
      delay_cycles: 1
      rotor_inertia: [0.1, 0.1, 0.05]
      payload: {frame: tool, mass: 0.2, com: [0.0, 0.0, 0.05], inertia: [0.001, 0.001, 0.001]}
      friction: {viscous: [0.5, 0.5, 0.2], coulomb: [0.0, 0.0, 0.0]}
      torque_limit: [80.0, 80.0, 40.0]
      velocity_limit: [2.5, 2.5, 3.0]
    priority: [seam_radius, tool_zyz, tool_xyz, wrist, posture]
    feedback_floor: 0.0
    tasks:
      seam_radius:
        chart: cylinder
        point: [0.5, 0.0, 0.4]
        axis: [0.0, 0.0, 1.0]
        radius: 0.1
        frame: tool
        base: base_link
        reference: weld
        stiffness: 960.0
        damping: 120.0
        handover: [60.0, 600.0]
        force: 0.0
        tolerance: 0.02
      tool_zyz: {chart: euler, sequence: zyz, frame: tool, reference: weld, stiffness: 160, damping: 20}
      tool_xyz:
        chart: euler
        sequence: xyz
        frame: tool
        reference: weld
        stiffness: [160.0, 160.0, 80.0]
        damping: [20.0, 20.0, 10.0]
      wrist: {chart: joints, names: [a3], reference: elbow, stiffness: 20.0, damping: 5.0}
      posture: {chart: posture, reference: elbow}
    references:
      weld: {kind: pose, base: base_link, source: file, file: weld.csv, repeat: 1, pace: 1.0, start: service}
      elbow: {kind: joints, source: companion, follows: weld}
    guard: {state_timeout: 0.01, coast: 0.1, claim_speed: 0.6, max_overruns: 20, contact_torque: 0.0}
    plant:
      start: [0.0, 0.7, 1.2]
      payload: {frame: tool, mass: 0.5}
      mass_error: 0.05
      friction: {viscous: [0.5, 0.5, 0.2], coulomb: [1.0, 1.0, 0.5]}
      position_noise: 1e-5
      delay: 1
      seed: 0
"""


def write(folder: Path, text: str = STACK) -> Path:
    """
    Return the path of a stack file in `folder`, with empty files beside it for those it names.

    """
    for name in ("arm.urdf", "weld.csv"):
        (folder / name).write_text("")
    path = folder / "stack.yaml"
    path.write_text(text, encoding="utf-8")
    return path


def changed(*changes: tuple[str, str]) -> str:
    """
    Return the example with texts replaced, each of which must occur exactly once.

    """
    text = STACK
    for old, new in changes:
        assert text.count(old) == 1, f"{old!r} occurs {text.count(old)} times"
        text = text.replace(old, new)
    return text


def read(folder: Path, *changes: tuple[str, str]) -> StackFile:
    """
    Return the example as read, after changes.

    """
    return read_stack(write(folder, changed(*changes)))


def problems(folder: Path, *changes: tuple[str, str]) -> tuple[Problem, ...]:
    """
    Return the problems of the example after changes; none: an empty tuple.

    """
    try:
        read(folder, *changes)
    except InputError as error:
        return error.problems
    return ()


def refused(path: Path, **options: Any) -> tuple[Problem, ...]:
    """
    Return the problems of a file that must be refused.

    """
    with pytest.raises(InputError) as caught:
        read_stack(path, **options)
    return caught.value.problems


def line_of(text: str) -> int:
    """
    Return the line of the example that holds `text`, from 1.

    """
    return next(i for i, line in enumerate(STACK.splitlines(), start=1) if text in line)
