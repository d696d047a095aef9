# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
One cycle: its parts, what it is compared with, and what branches cost.

"""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
import pinocchio as pin

from prioritized_tracking.core.arm import Arm, dynamics, inertia
from prioritized_tracking.core.command import limit_torque
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.core.kernel import TWIN_STEP, reference_velocity
from prioritized_tracking.errors import InputError
from prioritized_tracking.offline.bench.cases import Array, State, set_out, spread, state_at
from prioritized_tracking.offline.bench.chains import load_chain
from prioritized_tracking.offline.bench.timing import Times, compare
from prioritized_tracking.offline.textbook_step import TextbookController

Functions: TypeAlias = dict[str, Callable[[], object]]

#: States in which one number of branches is timed: a branch costs more the earlier in the list it forks.
_STATES = 4


def parts_us(controller: Controller, state: State, seconds: float) -> dict[str, float]:
    """
    Median time of each part of one cycle in one state, µs.

    Returns
    -------
    dict
        `references`, `dynamics` (M, C, g), `charts` (poses, Jacobians and charts), `hierarchy` (claims,
        Cholesky factor, tasks, blended velocity), `twin` (all of these again, a moment later), `law`
        (damping, feed-forward, feedback), `fixed` (what these three take with one joint and no chart: handing
        arrays to compiled code, calls of LAPACK), `command` (limits, telemetry); `step` is the whole.

    """
    with tempfile.TemporaryDirectory() as folder:
        least = load_chain(Path(folder), 1, [])
    least.step(0.0, *state_at(least, 0.0)[1:])
    functions = _parts(controller, state) | {f"least {k}": f for k, f in _kernel_parts(least).items()}
    times = {name: each.p50_us for name, each in compare(functions, seconds).items()}
    fixed, part_fixed = times["least kernel"], times["least hierarchy"]
    hierarchy = times["hierarchy"] - part_fixed
    twin = times["twin hierarchy"] - part_fixed
    return {
        "references": times["references"],
        "dynamics": times["dynamics"],
        "charts": times["charts"],
        "hierarchy": hierarchy,
        "twin": times["twin terms"] + twin,
        "law": max(0.0, times["kernel"] - fixed - hierarchy - twin),
        "fixed": fixed,
        "command": times["command"],
        "step": times["step"],
    }


def _parts(controller: Controller, state: State) -> Functions:
    """
    The parts of `Controller.step` as functions, in its order; it is taken apart here, private or not.

    """
    t, q, v = state
    here, there, law = controller._here, controller._there, controller.law
    samples = controller._references.at(t)
    twin, limit = q + TWIN_STEP * v, controller._torque_limit

    def twin_terms() -> None:
        inertia(controller.arm, there.data, twin)
        there.follow(here, twin, TWIN_STEP)

    def command() -> None:
        outcome = law.outcome
        controller._command(*limit_torque(outcome.feed_forward, outcome.feedback, limit))

    return {
        "step": lambda: controller.step(t, q, v),
        "references": lambda: controller._references.at(t),
        "dynamics": lambda: dynamics(controller.arm, here.data, q, v),
        "charts": lambda: here.update(q, samples),
        "twin terms": twin_terms,
        **_kernel_parts(controller, v),
        "command": command,
    }


def _kernel_parts(controller: Controller, v: Array | None = None) -> Functions:
    """
    The compiled parts, at the controller's last state.

    """
    here, there, law = controller._here, controller._there, controller.law
    gains, branches = controller.stack.gains, law._branches  # type: ignore[attr-defined]
    speed = np.zeros(controller.arm.n) if v is None else v
    layout = law.layout
    return {
        "hierarchy": lambda: reference_velocity(layout, gains, here.room, here.room, branches, False),
        "twin hierarchy": lambda: reference_velocity(layout, gains, there.room, here.room, branches, True),
        "kernel": lambda: law.torque(here, there, speed, 1.0),
    }


def pinocchio_terms(arm: Arm, state: State, frame: str) -> Callable[[], object]:
    """
    The bare terms of one state: M, C, g, and the pose and Jacobian of one frame.

    """
    model, (_, q, v) = arm.built.model, state
    data = model.createData()
    if arm.built.order is not None:
        q, v = q[arm.built.order], v[arm.built.order]
    number = model.getFrameId(frame) if model.existFrame(frame) else model.nframes - 1

    def terms() -> None:
        pin.computeCoriolisMatrix(model, data, q, v)
        pin.computeGeneralizedGravity(model, data, q)
        pin.crba(model, data, q, pin.Convention.WORLD)
        pin.updateFramePlacement(model, data, number)
        pin.getFrameJacobian(model, data, number, pin.ReferenceFrame.LOCAL_WORLD_ALIGNED)

    return terms


def comparisons(
    controller: Controller, impedance: Controller | None, state: State, seconds: float
) -> tuple[dict[str, Times], list[str]]:
    """
    One cycle against the textbook form, the bare Pinocchio terms and Cartesian impedance, in one state.

    Parameters
    ----------
    controller, impedance : the same stack under both laws, both under way; None: it has no tool.
    seconds : how long in all.

    Returns
    -------
    times : of `step`, `textbook`, `pinocchio_terms` and `cartesian_impedance`, as far as there are any.
    notes : what is not compared, and why.

    """
    t, q, v = state
    notes = []
    frame = next(iter(controller.tools), controller.arm.frames[-1])
    functions: Functions = {
        "step": lambda: controller.step(t, q, v),
        "pinocchio_terms": pinocchio_terms(controller.arm, state, frame),
    }
    if impedance is not None:
        functions["cartesian_impedance"] = lambda: impedance.step(t, q, v)
    try:
        book = TextbookController(controller)
        functions["textbook"] = lambda: book.evaluate(t, q, v)
    except InputError as error:
        notes.append(f"not compared with the textbook form: {error.problems[0].what}")
    return compare(functions, seconds), notes


def branch_costs(controller: Controller, found: dict[int, list[State]], seconds: float) -> dict[str, Any]:
    """
    Time of a cycle by the number of branches, and its ratio to that with one.

    Parameters
    ----------
    found : states by their number of branches.
    seconds : how long in all.

    Returns
    -------
    dict
        For each number: median over its states of the median time (`p50_us`), `over_one`, `states` timed.

    """
    functions: Functions = {}
    for count, states in found.items():
        for i, (t, q, v) in enumerate(spread(states, _STATES)):
            functions[f"{count} {i}"] = lambda t=t, q=q, v=v: controller.step(t, q, v)  # type: ignore[misc]
    times = compare(functions, seconds)
    costs: dict[str, Any] = {}
    for count in found:
        of_count = [each.p50_us for name, each in times.items() if name.split()[0] == str(count)]
        costs[str(count)] = {"p50_us": float(np.median(of_count)), "states": len(of_count)}
    one = costs.get("1", {}).get("p50_us")
    for each in costs.values():
        each["over_one"] = each["p50_us"] / one if one else None
    return costs


def under_way(source: Any, progress: Any, law: str | None = None) -> Controller:
    """
    A controller of a `cases.Source` that has set out along its paths.

    """
    return set_out(source.load(law=law, progress=progress))
