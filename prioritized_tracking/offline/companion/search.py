# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Search for the joint path: which of the ways an arm can follow a path is worth being refined.

"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from prioritized_tracking.core.arm import Arm
from prioritized_tracking.core.references import PosePath
from prioritized_tracking.core.rotation import Array
from prioritized_tracking.offline.companion.chain import Chain
from prioritized_tracking.offline.companion.grid import (
    grid,
    interpolate,
    knots,
    problem_on,
    targets,
    unknowns,
)
from prioritized_tracking.offline.companion.smoothness import Ends, IndexArray
from prioritized_tracking.offline.companion.solver import PathProblem, Target, Weights, nearest_correction
from prioritized_tracking.offline.companion.start import Box, distinct, first_poses, march

#: Smoothness of the stages, coarse to fine: the last one bends the path by less than the polish mends.
STAGES = (1e-4, 1e-6, 1e-8, 1e-10)
#: Pull towards the preferred configuration, barrier at the limits, both times the smoothness.
_PULL, _BARRIER = 0.1, 100.0
#: Third derivative in the metric of the polish: corrections faster than about 5 Hz are dear.
_METRIC = 1e-4
#: Where the polish stops, as a fraction of the tolerance.
_ENOUGH = 0.01
#: A path that is off by less than this fraction of the tolerance is not followed more closely when
#: that would multiply the effort by more than the factor.
_GOOD, _DEAR = 0.1, 3.0
#: Seeds per march, and marches worth a whole-path solution.
_PER_MARCH, _PROMISING = 5, 6


@dataclass(frozen=True, kw_only=True)
class Task:
    """
    What a companion is asked for.

    Attributes
    ----------
    arm, chain, path
    rows : pose components that count, indices into (x, y, z, rotation x, y, z).
    rank : how many of them the arm can move independently where it is regular.
    preferred : (n,) rad, what redundancy is drawn to.
    start : (n,) rad or None, where the path should start.
    pace : the path is run at this rate.
    tolerance : (m, rad) a companion may be off its path.

    """

    arm: Arm
    chain: Chain
    path: PosePath
    rows: IndexArray
    rank: int
    preferred: Array
    start: Array | None
    pace: float
    tolerance: tuple[float, float]

    @property
    def position_rows(self) -> int:
        """
        How many of the rows are positions; they come first.

        """
        return int(np.count_nonzero(self.rows < 3))

    def off(self, e: Array) -> tuple[Array, Array]:
        """
        Distance (m) and angle (rad) of pose errors (N, m).

        """
        k = self.position_rows
        return np.linalg.norm(e[:, :k], axis=1), np.linalg.norm(e[:, k:], axis=1)

    def excess(self, e: Array) -> float:
        """
        Largest pose error in units of the tolerance.

        """
        distance, angle = self.off(e)
        return float(max(distance.max() / self.tolerance[0], angle.max() / self.tolerance[1]))


@dataclass(frozen=True, kw_only=True)
class Solution:
    """
    A joint path on a grid.

    Attributes
    ----------
    times : (N,) s
    q : (N, n) rad
    ends : Ends
    rank : what it is judged by, less is better.

    """

    times: Array
    q: Array
    ends: Ends
    rank: tuple[float, ...]

    @property
    def acceptable(self) -> bool:
        """
        Whether path, limits and speeds are kept as far as the grid can tell.

        """
        return not any(self.rank[:3])


def weights(smooth: float) -> Weights:
    """
    Weights of a stage: limits before smoothness before the preferred configuration, pose first.

    """
    return Weights(smooth=smooth, barrier=_BARRIER * smooth, pull=_PULL * smooth)


def follow(
    task: Task, problem: PathProblem, x: Array, stages: tuple[float, ...] = STAGES
) -> tuple[Array, float, float]:
    """
    Follow the path ever more closely, stage by stage, as long as that is not too dear.

    The last stage minimises the pose error alone, then knot by knot what the arm can correct without
    effort. It ends well inside the tolerance: what is then left near a singularity is of the size of
    the path's own rounding, and following that would shake the arm. For the same reason a path that
    passes a singularity narrowly is left by a part of the tolerance when that saves most of the effort.

    Returns
    -------
    x : (count, n) rad
    excess : its largest error in units of the tolerance.
    effort : its cost beside the pose error.

    """
    unit = weights(1.0)
    best: tuple[Array, float, float] | None = None
    for stage in (*stages, 0.0):
        x = _polish(task, problem, x) if stage == 0.0 else problem.minimise(x, weights(stage), iterations=40)
        excess, effort = task.excess(problem.error(x)[0]), problem.secondary(x, unit)
        if best is not None and best[1] < _GOOD and effort > _DEAR * best[2]:
            return best
        best = x, excess, effort
    assert best is not None
    return best


def _polish(task: Task, problem: PathProblem, x: Array) -> Array:
    """
    Minimise the pose error alone, corrections being smooth; then correct knot by knot.

    """
    bare = Weights(smooth=0.0, barrier=0.0, pull=0.0)
    enough = (_ENOUGH * task.tolerance[0], _ENOUGH * task.tolerance[1])
    x = problem.minimise(x, bare, iterations=60, metric=_METRIC, enough=enough)
    return nearest_correction(problem.error, x)


def candidates(task: Task, step: float, seeds: int, tick: Callable[[float], None]) -> list[Solution]:
    """
    Solve the path on a coarse grid from many sides.

    Parameters
    ----------
    step : float
        Distance of the knots, s.
    seeds : int
        Joint positions to start from, at each of three places of the path.
    tick : called with the fraction done.

    Returns
    -------
    list of Solution
        At least one, the best first.

    """
    times = grid(task.path, step)
    target, _ = targets(task.path, times, task.rows)
    marches = _marches(task, target, seeds, lambda fraction: tick(0.5 * fraction))
    found = []
    for i, q in enumerate(marches):
        found.append(_solve(task, target, times, q))
        tick(0.5 + 0.5 * (i + 1) / len(marches))
    return sorted(found, key=lambda solution: solution.rank)


def ends_of(task: Task, q: Array) -> Ends:
    """
    Ends of a companion, as its leader has them.

    """
    if not task.path.periodic:
        return Ends(rest=not task.path.ramped, winding=None)
    turns = np.round((q[-1] - q[0]) / (2.0 * np.pi))
    return Ends(rest=False, winding=np.where(task.arm.continuous, 2.0 * np.pi * turns, 0.0))


def _marches(task: Task, target: Target, count: int, tick: Callable[[float], None]) -> Array:
    """
    The most promising marches, (few, N, n).

    """
    arm = task.arm
    # joints that can turn more than once are brought into their limits afterwards, as whole turns
    roomy = arm.upper - arm.lower >= 2.0 * np.pi
    lower, upper = np.where(roomy, -np.inf, arm.lower), np.where(roomy, np.inf, arm.upper)
    box = Box(lower=lower, upper=upper, preferred=task.preferred)
    given = [task.preferred] if task.start is None else [task.start, task.preferred]
    seeds = np.vstack((*given, box.sample(count, np.random.default_rng(count))))
    anchors: list[Array] = []
    first: list[IndexArray] = []
    N = len(target.p)
    for k in (0, N // 2, N - 1):
        near = task.start if task.start is not None and k == 0 else task.preferred
        solutions = first_poses(task.chain, target, k, seeds, box)
        order = np.argsort(np.abs(solutions - near).max(axis=1), kind="stable")[: count // _PER_MARCH]
        anchors.append(solutions[order])
        first.append(np.full(len(order), k))
    q, worst = march(task.chain, target, np.concatenate(first), np.vstack(anchors), box, tick)
    q = np.array([_turned(task, path) for path in q])
    return _promising(task, q, worst, max(_PROMISING, count // _PER_MARCH // 2))


def _turned(task: Task, q: Array) -> Array:
    """
    Shift joints by whole turns: inside the limits, then near to where the path should start.

    """
    arm = task.arm
    shifts = 2.0 * np.pi * np.arange(-2, 3)
    near = task.preferred if task.start is None else task.start
    shifted = q[:, :, None] + shifts
    beyond = np.maximum(shifted - arm.upper[:, None], arm.lower[:, None] - shifted).max(axis=0)
    away = np.abs(shifted[0] - near[:, None])
    best = np.argmin(np.maximum(beyond, 0.0) * 1e3 + away, axis=1)
    moved: Array = q + np.where(arm.upper - arm.lower >= 2.0 * np.pi, shifts[best], 0.0)
    return moved


def _promising(task: Task, q: Array, worst: Array, count: int) -> Array:
    """
    Some different marches: exact, inside limits, slow ones first.

    """
    arm = task.arm
    beyond = np.maximum(np.maximum(q - arm.upper, arm.lower - q).max(axis=(1, 2)), 0.0)
    fastest = np.abs(np.diff(q, axis=1)).max(axis=(1, 2))
    rough = np.square(np.diff(q, n=2, axis=1)).sum(axis=(1, 2))
    away = np.zeros(len(q)) if task.start is None else np.abs(q[:, 0] - task.start).max(axis=1)
    score = np.log10(np.maximum(worst, 1e-3)) + 3.0 * beyond + 2.0 * fastest + rough + away
    return distinct(q[np.argsort(score, kind="stable")], 0.05)[:count]


def _solve(task: Task, target: Target, times: Array, q: Array) -> Solution:
    """
    Solve the whole path from one march and judge the result.

    """
    ends = ends_of(task, q)
    if ends.winding is not None:
        q = q - np.outer(times / times[-1], q[-1] - q[0] - ends.winding)
    arm = task.arm
    problem = problem_on(task.chain, target, times, ends, arm.lower, arm.upper, task.preferred, task.start)
    x, excess, effort = follow(task, problem, unknowns(q, ends))
    q = knots(x, ends)
    return Solution(times=times, q=q, ends=ends, rank=_rank(task, times, q, ends, excess, effort))


def _rank(task: Task, times: Array, q: Array, ends: Ends, excess: float, effort: float) -> tuple[float, ...]:
    """
    Judge a joint path: reach, limits, speed, start; among equals smoothness and room.

    """
    arm = task.arm
    beyond = max(0.0, float(np.maximum(q - arm.upper, arm.lower - q).max()))
    speed = np.abs(interpolate(times, q, ends).many(times, 1)) * task.pace / arm.velocity_limit
    away = 0.0 if task.start is None else float(np.abs(q[0] - task.start).max())
    return (
        max(0.0, float(np.log10(max(excess, 1e-9) / 10.0))),  # the coarse grid may still be off
        beyond,
        max(0.0, float(speed.max()) - 1.0),
        0.0 if away < 0.05 else away,
        # of equals, such as mirrored ones, the same one on every machine
        float(np.round(np.log10(effort + 1e-12), 1)),
        float(np.round(np.abs(q[0] - task.preferred).max(), 3)),
        *(-np.round(q[0], 3)).tolist(),
    )
