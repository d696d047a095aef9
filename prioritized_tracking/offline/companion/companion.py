# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Companion of a pose path: the joint path that moves the tool along it, through singularities too.

Near a singularity the charts of the pose hand over to the posture. When the posture's reference
moves the tool along the same path the hand-over cannot be seen; that reference is computed here,
offline, from the whole path at once.

Steps: solve a few poses from many seeds and march from each along the path on a coarse grid
(`companion_start`); solve the whole path from the most promising marches (`companion_search`,
`companion_solver`); repeat for the best on a fine grid, split where the spline between the knots
leaves the path; report what remains (`companion_report`).

"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike

from prioritized_tracking.core.arm import Arm
from prioritized_tracking.core.references import PosePath
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.offline.companion.chain import Chain
from prioritized_tracking.offline.companion.grid import (
    grid,
    interpolate,
    knots,
    problem_on,
    split,
    targets,
    unknowns,
)
from prioritized_tracking.offline.companion.refusal import out_of_reach, problems, refuse
from prioritized_tracking.offline.companion.report import Companion, Peak, Survey, report, survey
from prioritized_tracking.offline.companion.search import STAGES, Solution, Task, candidates, follow
from prioritized_tracking.offline.companion.smoothness import IndexArray

__all__ = ["Companion", "Peak", "solve_companion"]

ProgressCallback = Callable[[float, str], None]

#: Errors between knots below which a segment is not split, m and rad: far below what a loop tracks.
_SEGMENT = (5e-8, 5e-7)
#: Most rounds of splitting; a segment becomes 1/64 of a step at the smallest.
_ROUNDS = 6
#: Seeds at each of three places of the path.
_SEEDS = 40
#: The coarse grid has a third of the knots.
_COARSE = 2.5


def solve_companion(
    arm: Arm,
    frame_id: int,
    base_id: int,
    path: PosePath,
    *,
    position: bool | str = True,
    rotation: bool = True,
    preferred: ArrayLike | None = None,
    start: ArrayLike | None = None,
    pace: float = 1.0,
    step: float = 0.02,
    tolerance: tuple[float, float] = (1e-5, 1e-4),
    where: str = "",
    progress: ProgressCallback | None = None,
) -> Companion:
    """
    Compute the joint path that moves a frame along a pose path.

    It has the ends of its path: at rest with it, periodic with it (joints without limits may advance
    by whole turns), ramped with it. Same inputs, same result.

    Parameters
    ----------
    arm, path
    frame_id, base_id : the frame that moves and the frame the path is given in.
    position : whether the position counts; "xy" etc.: only these axes of it.
    rotation : whether the orientation counts.
    preferred : (n,) rad, what a redundant arm is drawn to; None: the start, else mid-range.
    start : (n,) rad, where the joint path should start, as far as the path allows.
    pace : the path is run at this rate; for the checks of speed and torque only.
    step : largest distance of knots, s.
    tolerance : what counts as on the path, m and rad.
    where : place in the user's input, for messages.
    progress : called with the fraction done and what is being done.

    Raises
    ------
    InputError
        The path cannot be reached (where, how far), leaves the joint limits, or is faster than the
        joints (joint, time, and the pace that would fit).

    """
    rows = _rows(position, rotation)
    _check(arm, path, rows, preferred, start, where)
    chain = Chain(arm, frame_id, base_id)
    task = Task(
        arm=arm,
        chain=chain,
        path=path,
        rows=rows,
        rank=_rank(chain, rows, where),
        preferred=_preferred(arm, preferred, start),
        start=None if start is None else np.array(start, dtype=float),
        pace=pace,
        tolerance=tolerance,
    )
    return _solved(task, step, where, progress or (lambda fraction, text: None))


def _solved(task: Task, step: float, where: str, tell: ProgressCallback) -> Companion:
    """
    Search coarsely, refine, and judge.

    """
    seconds = task.path.file_duration
    step = min(max(step, seconds / 5000.0), seconds / 50.0)
    best = _searched(task, max(_COARSE * step, seconds / 4000.0), tell)
    seen = survey(task, best)
    if best.rank[0] == 0.0:
        best, seen = _refined(task, best, step, lambda fraction: tell(0.7 + 0.3 * fraction, "refining it"))
    refuse(problems(task, seen, where))
    tell(1.0, "done")
    return report(task, best, seen)


def _rows(position: bool | str, rotation: bool) -> IndexArray:
    """
    Indices of the pose components that count.

    """
    axes = "xyz" if position is True else position or ""
    return np.array(["xyz".index(axis) for axis in axes] + ([3, 4, 5] if rotation else []), dtype=np.int64)


def _rank(chain: Chain, rows: IndexArray, where: str) -> int:
    """
    Rank of the Jacobian rows that count, away from singularities.

    """
    q = np.random.default_rng(0).uniform(-2.0, 2.0, (20, chain.n))
    singular = np.linalg.svd(chain.motion(q)[2][:, rows], compute_uv=False)
    rank = int(np.median((singular > 1e-9).sum(axis=1)))
    if rank == 0:
        what = "no joint moves the frame relative to the base of its path"
        raise InputError(Problem(what=what, where=where))
    return rank


def _preferred(arm: Arm, preferred: ArrayLike | None, start: ArrayLike | None) -> Array:
    """
    Configuration redundancy is drawn to.

    """
    if preferred is not None:
        return np.array(preferred, dtype=float)
    if start is not None:
        return np.array(start, dtype=float)
    limited = np.isfinite(arm.lower) & np.isfinite(arm.upper)
    middle = np.zeros(arm.n)
    middle[limited] = 0.5 * (arm.lower[limited] + arm.upper[limited])
    return middle


def _check(
    arm: Arm,
    path: PosePath,
    rows: IndexArray,
    preferred: ArrayLike | None,
    start: ArrayLike | None,
    where: str,
) -> None:
    """
    Refuse what no solver could use.

    """
    found = []
    if len(rows) == 0:
        found.append(Problem(what="a companion needs position or rotation to follow", where=where))
    if not path.file_duration > 0.0:
        found.append(Problem(what="a companion needs a path that takes time", where=where, got="a hold"))
    for name, given in (("preferred", preferred), ("start", start)):
        values = np.zeros(arm.n) if given is None else np.asarray(given, dtype=float)
        if values.shape != (arm.n,) or not np.all(np.isfinite(values)):
            expected = f"{arm.n} finite joint positions, rad ({', '.join(arm.joints)})"
            what = f"bad {name} configuration"
            found.append(Problem(what=what, where=where, expected=expected, got=str(given)))
    if found:
        raise InputError(found)


def _searched(task: Task, step: float, tell: ProgressCallback) -> Solution:
    """
    The best solution on the coarse grid; looked for harder when the first one is no good.

    """
    text = "looking for a joint path"
    best = candidates(task, step, _SEEDS, lambda fraction: tell(0.4 * fraction, text))[0]
    if best.acceptable or out_of_reach(task, survey(task, best)):
        return best
    more = candidates(task, step, 3 * _SEEDS, lambda fraction: tell(0.4 + 0.3 * fraction, text))[0]
    return min(best, more, key=lambda solution: solution.rank)


def _refined(
    task: Task, rough: Solution, step: float, tick: Callable[[float], None]
) -> tuple[Solution, Survey]:
    """
    Solve again on a fine grid and split it where the spline between the knots leaves the path.

    """
    times = grid(task.path, step)
    best = _again(task, rough, times, STAGES[2:])
    seen = survey(task, best)
    for i in range(_ROUNDS):
        tick((i + 1) / (_ROUNDS + 1))
        bad = _bad_segments(seen)
        if not bad.any() or len(times) > 20_000:
            break
        times = split(times, bad)
        finer = _again(task, best, times, ())
        looked = survey(task, finer)
        if _worst(looked) > _worst(seen):
            break
        best, seen = finer, looked
    return best, seen


def _again(task: Task, rough: Solution, times: Array, stages: tuple[float, ...]) -> Solution:
    """
    Solve the whole path on another grid, starting from a solution.

    """
    ends, arm = rough.ends, task.arm
    target, _ = targets(task.path, times, task.rows)
    problem = problem_on(task.chain, target, times, ends, arm.lower, arm.upper, task.preferred, task.start)
    q = interpolate(rough.times, rough.q, ends).many(times)
    x, _, _ = follow(task, problem, unknowns(q, ends), stages)
    return replace(rough, times=times, q=knots(x, ends))


def _bad_segments(seen: Survey) -> Array:
    """
    Segments whose inside is off by more than the aim and than their knots.

    """
    bad = np.zeros((len(seen.times) - 1) // 4, dtype=bool)
    for values, aim in zip((seen.distance, seen.angle), _SEGMENT, strict=True):
        inside, ends = seen.segments(values)
        bad |= (inside > aim) & (inside > 2.0 * ends)
    return bad


def _worst(seen: Survey) -> float:
    """
    Largest error in units of the aim.

    """
    return float(max(seen.distance.max() / _SEGMENT[0], seen.angle.max() / _SEGMENT[1]))
