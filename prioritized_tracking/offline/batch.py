# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Many states at once: for audits and sweeps, in one process or on all cores.

"""

from __future__ import annotations

import multiprocessing
import os
from collections.abc import Callable
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from prioritized_tracking.core.cycle import Controller
from prioritized_tracking.errors import InputError, Problem

Array: TypeAlias = NDArray[np.float64]
States: TypeAlias = dict[str, Array]

#: States a process works on at a time: some tenths of a second, short enough for progress bars.
_CHUNK = 4000

# What a child process works with: inherited from its parent, set before it is forked.
_work: dict[str, Any] = {}


def evaluate_states(
    controller: Controller, times: ArrayLike, q: ArrayLike, v: ArrayLike | None = None, *, torque: bool = True
) -> States:
    """
    Evaluate the bare law at many states, one after another.

    Parameters
    ----------
    controller : with its law; without torque it must be one that has shares.
    times : (S,) path times, s.
    q : (S, n) joint positions, rad.
    v : (S, n) joint velocities, rad/s; None: standing still. They count in the torque only.
    torque : False leaves out the torque, and with it half of the work.

    Returns
    -------
    dict of arrays
        ``solved`` (S,) 1 where the state has a solution, 0 where all else is NaN;
        ``velocity`` (S, n) q̇_r, rad/s; ``share`` and ``apparent_inertia`` (S, r + 1) of each task,
        posture last; ``validity`` (S, r); ``error`` (S, m) of all chart tasks, one behind the other;
        ``D`` (S, n, n) feedback in whitened coordinates, 1/s; ``branches`` (S,);
        ``torque`` (S, n) before any limit, N·m, if asked for.

    """
    t, positions, velocities = _states(controller, times, q, v)
    found = _allocate(controller, len(t), torque)
    if not (torque or controller.law.has_shares):
        controller.survey(0.0, controller.start_configuration())  # says why not
    law, report = controller.law, controller.law.outcome.report
    for k in range(len(t)):
        try:
            if torque:
                found["torque"][k] = controller.evaluate(t[k], positions[k], velocities[k]).torque
                room = controller.room
            else:
                room = controller.survey(t[k], positions[k])[0].room
        except InputError:
            found["solved"][k] = 0.0
            continue
        found["velocity"][k] = law.velocity
        found["share"][k], found["apparent_inertia"][k] = report
        found["validity"][k] = room.claims.validity
        found["error"][k] = room.error
        found["D"][k] = law.D
        found["branches"][k] = law.branches
    return found


def evaluate_in_processes(
    controller: Controller,
    times: ArrayLike,
    q: ArrayLike,
    v: ArrayLike | None = None,
    *,
    torque: bool = True,
    processes: int | None = None,
    progress: Callable[[float], None] | None = None,
) -> States:
    """
    As `evaluate_states`, spread over processes; the same numbers, in the same order.

    Parameters
    ----------
    processes : None: as many as this process may use cores.
    progress : called with the fraction done.

    """
    t, positions, velocities = _states(controller, times, q, v)
    count = processes or len(os.sched_getaffinity(0))
    starts = range(0, len(t), _CHUNK)
    if count == 1 or len(starts) <= 1:
        return evaluate_states(controller, t, positions, velocities, torque=torque)
    _work.update(controller=controller, t=t, q=positions, v=velocities, torque=torque)
    try:
        # fork: children inherit the controller as it is, compiled code included
        with multiprocessing.get_context("fork").Pool(count) as pool:
            parts = []
            for part in pool.imap(_chunk, starts):
                parts.append(part)
                if progress is not None:
                    progress(len(parts) / len(starts))
    finally:
        _work.clear()
    return {key: np.concatenate([part[key] for part in parts]) for key in parts[0]}


def _chunk(start: int) -> States:
    """
    Evaluate one chunk in a child process.

    """
    rows = slice(start, start + _CHUNK)
    return evaluate_states(
        _work["controller"], _work["t"][rows], _work["q"][rows], _work["v"][rows], torque=_work["torque"]
    )


def _allocate(controller: Controller, count: int, torque: bool) -> States:
    """
    Arrays for the results, NaN until they are known.

    """
    n, r, m = controller.arm.n, len(controller.stack.tasks), controller.stack.first_row[-1]
    shapes: dict[str, tuple[int, ...]] = {
        "velocity": (n,),
        "share": (r + 1,),
        "apparent_inertia": (r + 1,),
        "validity": (r,),
        "error": (m,),
        "D": (n, n),
        "branches": (),
        **({"torque": (n,)} if torque else {}),
    }
    return {"solved": np.ones(count)} | {
        key: np.full((count, *shape), np.nan) for key, shape in shapes.items()
    }


def _states(
    controller: Controller, times: ArrayLike, q: ArrayLike, v: ArrayLike | None
) -> tuple[Array, Array, Array]:
    """
    Times, positions and velocities as arrays of matching shape.

    """
    t, positions = np.asarray(times, dtype=np.float64), np.asarray(q, dtype=np.float64)
    velocities = np.zeros_like(positions) if v is None else np.asarray(v, dtype=np.float64)
    shape = (len(t) if t.ndim == 1 else -1, controller.arm.n)
    if positions.shape != shape or velocities.shape != shape:
        raise InputError(
            Problem(
                what="times, positions and velocities do not belong together",
                expected=f"shapes (S,), (S, {controller.arm.n}) and (S, {controller.arm.n})",
                got=f"{t.shape}, {positions.shape} and {velocities.shape}",
            )
        )
    return t, np.ascontiguousarray(positions), np.ascontiguousarray(velocities)
