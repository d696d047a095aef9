# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Why a path has no companion: out of reach, beyond joint limits, faster than the joints.

"""

from __future__ import annotations

import numpy as np

from prioritized_tracking.core.rotation import Array
from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.offline.companion.grid import targets
from prioritized_tracking.offline.companion.report import Survey
from prioritized_tracking.offline.companion.search import Task
from prioritized_tracking.offline.companion.start import Box, approach, at_knots


def problems(task: Task, seen: Survey, where: str) -> list[Problem]:
    """
    Everything that makes a solution useless: out of reach, beyond limits, too fast.

    """
    if _excess(task, seen).max() > 1.0:
        return [_not_followed(task, seen, where)]
    return [*_beyond_limits(task, seen, where), *_too_fast(task, seen, where)]


def out_of_reach(task: Task, seen: Survey) -> bool:
    """
    Whether the arm cannot take the pose at which a solution is worst.

    """
    excess = _excess(task, seen)
    if excess.max() <= 1.0:
        return False
    gap, _ = _nearest(task, float(seen.times[np.argmax(excess)]), seen.q)
    return task.excess(gap) > 1.0


def _excess(task: Task, seen: Survey) -> Array:
    """
    Error in units of the tolerance, (K,).

    """
    excess: Array = np.maximum(seen.distance / task.tolerance[0], seen.angle / task.tolerance[1])
    return excess


def _not_followed(task: Task, seen: Survey, where: str) -> Problem:
    """
    Say where the arm cannot follow, and how far it stays away.

    """
    excess = _excess(task, seen)
    k = int(np.argmax(excess))
    gap, q = _nearest(task, float(seen.times[k]), seen.q)
    if task.excess(gap) <= 1.0:
        return _not_continuous(task, seen, excess, where)
    target, _ = targets(task.path, seen.times[k : k + 1], task.rows)
    room = np.minimum(q - task.arm.lower, task.arm.upper - q)
    limits = [name for name, left in zip(task.arm.joints, room, strict=True) if left < 1e-6]
    distance, angle = task.off(gap)
    moved = gap[0, : task.position_rows]
    return Problem(
        what=f"the arm cannot reach the path {_interval(seen, excess)}",
        where=where,
        expected=(f"position {_numbers(target.p[0])} m" if task.position_rows else "the orientation")
        + f" at t = {seen.times[k]:.6g} s, within {_off(task, *task.tolerance)}",
        got=f"it comes no nearer than {_off(task, float(distance[0]), float(angle[0]))}"
        + (f" (off by {_numbers(moved)} m)" if len(moved) == 3 else "")
        + (f", with {', '.join(limits)} at the limit" if limits else ""),
        remedy="Move or turn the path towards the arm, or follow another frame.",
    )


def _not_continuous(task: Task, seen: Survey, excess: Array, where: str) -> Problem:
    """
    Say where the joint path breaks though the poses are within reach.

    """
    closed = " closed" if task.path.periodic else ""
    again = "set repeat: 1, or write as many passes into the file as bring the joints back" if closed else ""
    k = int(np.argmax(excess))
    return Problem(
        what=f"no{closed} joint path inside the limits was found that follows the path"
        f" {_interval(seen, excess)}, though the pose there is within reach",
        where=where,
        expected=f"off by at most {_off(task, *task.tolerance)}",
        got=f"{_off(task, float(seen.distance[k]), float(seen.angle[k]))} off",
        remedy=f"Begin from another configuration, change the path{', ' if again else ''}{again}.",
    )


def _interval(seen: Survey, excess: Array) -> str:
    """
    Where the error is beyond the tolerance, as text.

    """
    times, worst = seen.times[excess > 1.0], seen.times[np.argmax(excess)]
    return f"between t = {times[0]:.6g} s and {times[-1]:.6g} s, worst at t = {worst:.6g} s"


def _nearest(task: Task, time: float, near: Array) -> tuple[Array, Array]:
    """
    Smallest pose error (1, m) at one pose over many seeds inside the limits, and where (n,).

    """
    target, _ = targets(task.path, np.array([time]), task.rows)
    box = Box(lower=task.arm.lower, upper=task.arm.upper, preferred=task.preferred)
    some = near[:: max(1, len(near) // 40)]
    seeds = np.vstack((some, box.sample(100, np.random.default_rng(1))))
    error = at_knots(task.chain, target, np.array([0]))
    q, total = approach(error, box.clip(seeds), box, iterations=200)
    best = int(np.argmin(total))
    return error(q[best : best + 1])[0], q[best]


def _beyond_limits(task: Task, seen: Survey, where: str) -> list[Problem]:
    """
    Joints that leave their limits.

    """
    found = []
    for i, name in enumerate(task.arm.joints):
        low, high = task.arm.lower[i], task.arm.upper[i]
        over = np.maximum(seen.q[:, i] - high, low - seen.q[:, i])
        k = int(np.argmax(over))
        if over[k] > 0.0:
            gap, _ = _nearest(task, float(seen.times[k]), seen.q)
            distance, angle = (float(x[0]) for x in task.off(gap))
            inside = f"inside the limits it comes no nearer to that pose than {_off(task, distance, angle)}"
            found.append(
                Problem(
                    what=f"the path takes joint '{name}' beyond its limit, "
                    f"farthest at t = {seen.times[k]:.6g} s",
                    where=where,
                    expected=f"{low:.6g} … {high:.6g} rad",
                    got=f"{seen.q[k, i]:.6g} rad" + ("; " + inside if task.excess(gap) > 1.0 else ""),
                    remedy="Move the path, or prefer another configuration.",
                )
            )
    return found


def _too_fast(task: Task, seen: Survey, where: str) -> list[Problem]:
    """
    Joints that would have to turn faster than they can, and the pace that would fit.

    """
    speed = np.abs(seen.v) * task.pace
    ratio = speed / task.arm.velocity_limit
    fits = task.pace / float(ratio.max()) if ratio.max() > 0.0 else np.inf
    found = []
    for i in np.flatnonzero(ratio.max(axis=0) > 1.0):
        k = int(np.argmax(ratio[:, i]))
        found.append(
            Problem(
                what=f"the path is faster than joint '{task.arm.joints[i]}' at t = {seen.times[k]:.6g} s",
                where=where,
                expected=f"at most {task.arm.velocity_limit[i]:.4g} rad/s",
                got=f"{speed[k, i]:.4g} rad/s at pace {task.pace:g}",
                remedy=f"A pace of {_floor(fits):g} fits all joints"
                + ("." if fits >= 0.01 else "; the slowest allowed is 0.01: go through there another way."),
            )
        )
    return found


def _floor(value: float) -> float:
    """
    Round down to two digits.

    """
    digit = 10.0 ** (np.floor(np.log10(value)) - 1.0)
    return float(np.floor(value / digit + 1e-9) * digit)


def _numbers(values: Array) -> str:
    """
    Numbers as text.

    """
    return " ".join(f"{value:.4g}" for value in np.round(values, 7) + 0.0)


def _off(task: Task, distance: float, angle: float) -> str:
    """
    Distance and angle as text, those that count.

    """
    parts = [f"{distance:.3g} m"] if task.position_rows else []
    parts += [f"{angle:.3g} rad"] if task.position_rows < len(task.rows) else []
    return " and ".join(parts)


def refuse(found: list[Problem]) -> None:
    """
    Raise InputError when there are problems.

    """
    if found:
        raise InputError(found)
