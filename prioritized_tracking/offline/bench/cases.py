# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What is measured: the reference case, states on a path, states inside bands, serial chains of any length.

"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

import prioritized_tracking as pt
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.parameters.stack_paths import find_package

Array = NDArray[np.float64]
State: TypeAlias = tuple[float, Array, Array]
"""Path time (s), joint positions (rad) and velocities (rad/s)."""

_WELD = {"frame": "probe", "reference": "weld"}
_FORCE = {"stiffness": 4800.0, "damping": 300.0}
_MOMENT = {"stiffness": 192.0, "damping": 12.0}

Progress: TypeAlias = Callable[[float, str], None]

#: The demo's arm and path with 6 tasks of 1 + 3 + 3 + 3 + 3 + 7 = 20 rows.
_REFERENCE_TASKS: dict[str, dict[str, Any]] = {
    "height": {"chart": "plane", "point": [0.6, 0.0, 0.3], "normal": [-1.0, 0.0, 0.0], **_WELD, **_FORCE},
    "tip": {"chart": "position", **_WELD, **_FORCE},
    "around": {"chart": "cylindrical", "point": [0.6, 0.0, 0.3], "axis": [1.0, 0.0, 0.0], **_WELD, **_FORCE},
    "turn_zyz": {"chart": "euler", "sequence": "zyz", **_WELD, **_MOMENT},
    "turn_xyz": {"chart": "euler", "sequence": "xyz", **_WELD, **_MOMENT},
}


@dataclass(frozen=True)
class Source:
    """
    Where a controller comes from; can be sent to another process.

    """

    path: str
    parameters: Mapping[str, Any]

    def load(
        self, law: str | None = None, progress: Callable[[float, str], None] | None = None
    ) -> Controller:
        """
        Build the controller.

        """
        return pt.load(self.path, law=law, parameters=self.parameters, progress=progress)


def demo_file(name: str) -> Path:
    """
    A stack file of the demo.

    Raises
    ------
    InputError
        The package's shared files are not installed.

    """
    folder = find_package("prioritized_tracking", Path.cwd())
    path = folder / "config" / name if folder else None
    if path is None or not path.is_file():
        raise InputError(
            Problem(
                what="the demo's files are not found",
                expected=f"config/{name} beside the package, or in share/prioritized_tracking",
                remedy="Install the package with pip or colcon, or run inside its source tree.",
            )
        )
    return path


def reference_source() -> Source:
    """
    7 joints, 6 tasks, 20 rows: the demo's arm and path, described more often than necessary.

    """
    parameters: dict[str, Any] = {"priority": [*_REFERENCE_TASKS, "posture"], "law": "prioritized"}
    for old in ("seam_radius", "seam_height", "seam_along", "tool_zyz", "tool_xyz"):
        parameters[f"tasks.{old}"] = None
    for name, keys in _REFERENCE_TASKS.items():
        parameters |= {f"tasks.{name}.{key}": value for key, value in keys.items()}
    return Source(str(demo_file("demo_stack.yaml")), parameters)


def rows(controller: Controller) -> int:
    """
    Rows of a stack, the posture's included.

    """
    stack = controller.stack
    return stack.first_row[-1] + (controller.arm.n if stack.posture else 0)


def set_out(controller: Controller) -> Controller:
    """
    Activate at the start of the references, and set out along the paths at time 0.

    """
    q = controller.start_configuration()
    controller.activate(0.0, q, np.zeros_like(q))
    controller.start(0.0)
    return controller


def state_at(controller: Controller, t: float) -> State:
    """
    The state in which the joint reference is at path time t (s), a little off: 1e-3 rad, 1e-2 rad/s.

    """
    n = controller.arm.n
    off = np.cos(1.0 + np.arange(n))
    for channel in controller.channels.values():
        if channel.kind == "joints" and channel.path is not None:
            sample = channel.path.sample(t, 1.0, 0.0)
            return t, sample.q + 1e-3 * off, sample.v + 1e-2 * off[::-1]
    return t, controller.start_configuration() + 1e-3 * off, 1e-2 * off[::-1]


def path_times(controller: Controller, count: int) -> Array:
    """
    Path times (count,), s, spread over the path.

    """
    longest = controller.duration
    if math.isinf(longest):
        longest = max(c.path.file_duration for c in controller.channels.values() if c.path is not None)
    return np.linspace(0.0, longest, count)


def states_by_branches(controller: Controller, count: int) -> dict[int, list[State]]:
    """
    Look for states with one, two, three ... branches: on the path, and up to 0.3 rad beside it.

    Parameters
    ----------
    count : states to look at; every second one is beside the path.

    """
    rng = np.random.default_rng(0)
    found: dict[int, list[State]] = {}
    for i, time in enumerate(path_times(controller, count)):
        t, q, v = state_at(controller, float(time))
        if i % 2:
            q = q + rng.uniform(-0.3, 0.3, len(q))
        found.setdefault(controller.evaluate(t, q, v).branches, []).append((t, q, v))
    return dict(sorted(found.items()))


def spread(states: list[State], count: int) -> list[State]:
    """
    At most `count` states, evenly chosen.

    """
    chosen = np.unique(np.linspace(0, len(states) - 1, count).round().astype(int))
    return [states[i] for i in chosen]
