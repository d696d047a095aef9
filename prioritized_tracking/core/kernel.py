# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The kernel: from evaluated charts to torque, in one call of compiled code.

"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from prioritized_tracking.compiled import compiled
from prioritized_tracking.core.arm.motion import friction
from prioritized_tracking.core.branches import Branches, Gains, blend, branches_of
from prioritized_tracking.core.claims import Layout, Room, Sizes, form_claims, room_of
from prioritized_tracking.core.hierarchy import hierarchy
from prioritized_tracking.core.rotation import Array

#: Step of the finite-difference twin (s): q̇_r has 1e-15 relative noise, so q̈_r has about 1e-9.
TWIN_STEP = 1e-6


class Terms(NamedTuple):
    """
    Terms of the equation of motion in one state.

    M, C, g : (n, n), (n, n) and (n,) inertia, Coriolis matrix and gravity torque.
    viscous, coulomb : (n,) joint friction, N·m·s/rad and N·m.

    """

    M: Array
    C: Array
    g: Array
    viscous: Array
    coulomb: Array


class Outcome(NamedTuple):
    """
    What a law computes, before any limit.

    feed_forward : (n,) what the motion needs: M q̈_r + C q̇_r + g + f(q̇_r), N·m.
    feedback : (n,) the rest: −L D Lᵀ s + push and the like, N·m.
    report : (2, r + 1) share and apparent inertia of each task, posture last; NaN where the law
        has no shares.
    D : (n, n) feedback in whitened coordinates, 1/s.
    push : (n,) steady push in whitened coordinates.

    """

    feed_forward: Array
    feedback: Array
    report: Array
    D: Array
    push: Array


def allocate_outcome(n: int, r: int) -> Outcome:
    """
    Outcome for r chart tasks, with no shares yet.

    """
    return Outcome(np.zeros(n), np.zeros(n), np.full((2, r + 1), np.nan), np.zeros((n, n)), np.zeros(n))


@compiled
def prioritized_torque(
    layout: Layout,
    gains: Gains,
    sizes: Sizes,
    buffer_here: Array,
    buffer_there: Array,
    branch_buffer: Array,
    terms: Terms,
    v: Array,
    push_scale: float,
    feedback_floor: float,
    outcome: Outcome,
) -> tuple[int, bool]:
    """
    τ = M q̈_r + C q̇_r + g + f(q̇_r) − L D Lᵀ s + push with s = q̇ − q̇_r.

    Parameters
    ----------
    layout, gains : the stack.
    sizes : of the buffers.
    buffer_here, buffer_there : charts evaluated at the state, and at its twin ``TWIN_STEP`` later.
    branch_buffer : see `branches.branch_buffer`.
    terms : of the arm at the state.
    v : (n,) measured joint velocity, rad/s.
    push_scale : 0 … 1, ramp of the steady push.
    feedback_floor : added to D, 1/s.
    outcome : filled.

    Returns
    -------
    count, pruned : see ``reference_velocity``; with count 0 the torque is zero and means nothing.

    """
    here, there = room_of(buffer_here, sizes), room_of(buffer_there, sizes)
    branches = branches_of(branch_buffer, sizes.n, sizes.r)
    count, pruned = 0, False
    for twin in (False, True):
        found, many = reference_velocity(layout, gains, there if twin else here, here, branches, twin)
        if found == 0:
            count = 0
            break
        if not twin:
            count, pruned = found, many
            blend(branches, count, feedback_floor, outcome.report, outcome.D, outcome.push)
    acceleration = (there.velocity - here.velocity) / TWIN_STEP
    outcome.feed_forward[:] = inverse_dynamics(terms, here.velocity, acceleration)
    L = here.claims.L
    outcome.feedback[:] = L @ (push_scale * outcome.push - outcome.D @ ((v - here.velocity) @ L))
    if not math.isfinite(outcome.feed_forward.sum() + outcome.feedback.sum()):
        count = 0
    return count, pruned


@compiled
def inverse_dynamics(terms: Terms, velocity: Array, acceleration: Array) -> Array:
    """
    M q̈_r + C q̇_r + g + f(q̇_r); friction with q̇_r, because with q̇ it over-compensates and chatters.

    """
    torque: Array = terms.M @ acceleration + terms.C @ velocity + terms.g
    torque += friction(velocity, terms.viscous, terms.coulomb)
    return torque


@compiled
def reference_velocity(
    layout: Layout, gains: Gains, room: Room, nominal: Room, branches: Branches, twin: bool
) -> tuple[int, bool]:
    """
    From evaluated charts to the reference velocity q̇_r = L⁻ᵀ Σ w u.

    Parameters
    ----------
    layout, gains : the stack.
    room : the evaluated charts; its ``velocity`` is filled.
    nominal, twin : see ``form_claims``; a twin also leaves out feedback and push.
    branches : room, see ``allocate_branches``; filled.

    Returns
    -------
    count : how many branches are in use; 0: the inertia matrix is not positive definite, or a
        number is not finite. The velocity is zero then.
    pruned : whether more than ``MOST_BRANCHES`` were met on the way.

    """
    count, pruned = 0, False
    if prepare(layout, room, nominal, twin):
        count, pruned = hierarchy(gains, room.claims, branches, not twin)
    room.velocity[:] = 0.0
    if count > 0:
        velocity = (branches.weight[:count] @ branches.u[:count]) @ room.claims.L_inverse
        if math.isfinite(velocity.sum()):
            room.velocity[:] = velocity
        else:
            count = 0
    return count, pruned


@compiled
def prepare(layout: Layout, room: Room, nominal: Room, twin: bool) -> bool:
    """
    Form the claims, and factorise the inertia matrix M = L Lᵀ.

    Returns
    -------
    bool
        False if that failed: M is not positive definite, or not finite.

    """
    form_claims(layout, room, nominal, twin)
    claims = room.claims
    done = False
    try:
        claims.L[:] = np.linalg.cholesky(room.M)
        claims.L_inverse[:] = np.linalg.inv(claims.L)
        done = True
    except Exception:  # not positive definite; compiled code can tell no classes apart
        claims.L[:] = 0.0
    # a sum is finite if all its terms are; one that overflows is as useless as one that is not finite
    return done and math.isfinite(claims.L_inverse.sum() + claims.nu.sum())
