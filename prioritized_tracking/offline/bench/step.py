# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
One cycle: its parts, what it is compared with, and what branches cost.

"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeAlias

import numpy as np
import pinocchio as pin

from prioritized_tracking.core.arm import Arm, dynamics, inertia
from prioritized_tracking.core.command import limit_torque
from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.core.kernel import TWIN_STEP, reference_velocity
from prioritized_tracking.errors import InputError
from prioritized_tracking.offline.bench.cases import State, set_out, spread
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
        (damping, feed-forward, feedback), `command` (limits, telemetry); `step` is the whole.

    """
    times = {name: t.p50_us for name, t in compare(_parts(controller, state), seconds).items()}
    kernel, twin_kernel = times.pop("kernel"), times.pop("twin kernel")
    twin = times.pop("twin terms") + twin_kernel
    order = ("references", "dynamics", "charts", "hierarchy")
    found = {name: times[name] for name in order}
    found |= {"twin": twin, "law": max(0.0, kernel - times["hierarchy"] - twin_kernel)}
    return found | {"command": times["command"], "step": times["step"]}


def _parts(controller: Controller, state: State) -> Functions:
    """
    The parts of `Controller.step` as functions, in its order; it is taken apart here, private or not.

    """
    t, q, v = state
    here, there, law = controller._here, controller._there, controller.law
    samples = controller._references.at(t)
    layout, gains, branches = law.layout, controller.stack.gains, law._branches  # type: ignore[attr-defined]
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
        "hierarchy": lambda: reference_velocity(layout, gains, here.room, here.room, branches, False),
        "twin terms": twin_terms,
        "twin kernel": lambda: reference_velocity(layout, gains, there.room, here.room, branches, True),
        "kernel": lambda: law.torque(here, there, v, 1.0),
        "command": command,
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
