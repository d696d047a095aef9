# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Is an arm plausible? An unusable inertia is refused; light joints and too heavy arms get a warning.

"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pinocchio as pin

from prioritized_tracking.core.arm.checks import Checks
from prioritized_tracking.core.arm.urdf_elements import Array

if TYPE_CHECKING:
    from prioritized_tracking.core.arm.arm import Arm

SAMPLES = 64  # random configurations
LIGHT_JOINT = 0.02  # kg·m²: below, rotor inertia decides about stability (its absence gets a warning)
SINGULAR = 1e-10  # least eigenvalue of M scaled to unit diagonal


def plausibility(arm: Arm, checks: Checks) -> list[str]:
    """
    Note problems when M is unusable; return warnings about light joints and about gravity.

    """
    q = sample_configurations(arm.lower, arm.upper, SAMPLES)
    order = np.arange(arm.n) if arm.built.order is None else arm.built.order
    work = arm.model.createData()
    M = np.zeros((SAMPLES, arm.n, arm.n))
    g = np.zeros((SAMPLES, arm.n))
    for i in range(SAMPLES):
        M[i][np.ix_(order, order)] = pin.crba(arm.model, work, q[i, order], pin.Convention.WORLD)
        g[i, order] = pin.computeGeneralizedGravity(arm.model, work, q[i, order])
    if not (np.all(np.isfinite(M)) and np.all(np.isfinite(g))):
        checks.add(
            f"{arm.recipe.description.source} as a whole",
            "masses or sizes are beyond computing",
            remedy="Check the units of masses, lengths and inertias.",
        )
        return []
    if not _inertia_is_regular(arm, M, checks):
        return []
    return [
        *_massless_links(arm),
        *_light_joints(arm, M, checks.key),
        *_heavy_arm(arm, g),
        *_resting_payload(arm, checks.key),
    ]


def sample_configurations(lower: Array, upper: Array, count: int) -> Array:
    """
    Return `count` fixed random configurations within the limits, ±π where there are none.

    """
    low, high = np.where(np.isfinite(lower), lower, -np.pi), np.where(np.isfinite(upper), upper, np.pi)
    return low + (high - low) * np.random.default_rng(0).random((count, lower.size))


def _inertia_is_regular(arm: Arm, M: Array, checks: Checks) -> bool:
    """
    Refuse joints that move nothing, and an M that is singular.

    """
    weight = np.diagonal(M, axis1=1, axis2=2).min(axis=0)
    for name, value in zip(arm.joints, weight, strict=True):
        if value < 1e-12:
            checks.add(
                arm.recipe.description.joints[name].where,
                "the joint moves neither mass nor inertia",
                expected="a positive inertia about its axis",
                got=f"{value:g} kg·m²",
                remedy=f"Complete <inertial> of the links beyond it, or give {checks.key}.rotor_inertia.",
            )
    if np.any(weight < 1e-12):
        return False
    root = np.sqrt(np.diagonal(M, axis1=1, axis2=2))
    least, vectors = np.linalg.eigh(M / root[:, :, None] / root[:, None, :])
    worst = int(np.argmin(least[:, 0]))
    if least[worst, 0] > SINGULAR:
        return True
    involved = [name for name, x in zip(arm.joints, vectors[worst, :, 0], strict=True) if abs(x) > 0.1]
    checks.add(
        f"{arm.recipe.description.source} as a whole",
        f"the mass matrix is singular (joints {', '.join(involved)})",
        expected="positive definite",
        got=f"least eigenvalue {least[worst, 0]:.3g} of M scaled to unit diagonal",
        remedy=f"Complete <inertial> of the links these joints move, or give {checks.key}.rotor_inertia.",
    )
    return False


def _massless_links(arm: Arm) -> list[str]:
    """
    Warn about joints whose link, with all that is fixed to it, has no mass: <inertial> forgotten?

    """
    model = arm.model
    empty = {model.names[k] for k in range(1, model.njoints) if model.inertias[k].mass == 0.0}
    return [
        f"{arm.recipe.description.joints[name].where}: the link it moves has no mass: <inertial> forgotten?"
        for name in arm.joints
        if name in empty
    ]


def _light_joints(arm: Arm, M: Array, key: str) -> list[str]:
    """
    Warn about joints that feel little inertia and have no rotor inertia stated.

    """
    felt = (1.0 / np.diagonal(np.linalg.inv(M), axis1=1, axis2=2)).min(axis=0)
    light = [i for i in range(arm.n) if felt[i] < LIGHT_JOINT and arm.rotor_inertia[i] == 0.0]
    if not light:
        return []
    figures = ", ".join(f"{arm.joints[i]} {felt[i]:.2g}" for i in light)
    return [
        f"light joints without rotor inertia (kg·m², as little as): {figures}. Real drives add their rotors' "
        f"inertia times the gear ratio squared; without {key}.rotor_inertia gains must be small to be stable."
    ]


def _heavy_arm(arm: Arm, g: Array) -> list[str]:
    """
    Warn about joints that cannot carry the arm's own weight everywhere.

    """
    most = np.abs(g).max(axis=0)
    return [
        f"joint {name}: gravity needs up to {need:.3g} of {limit:.3g} N·m: the arm cannot carry its own "
        "weight everywhere within its limits"
        for name, need, limit in zip(arm.joints, most, arm.torque_limit, strict=True)
        if need > limit
    ]


def _resting_payload(arm: Arm, key: str) -> list[str]:
    """
    Warn about a payload on a link that never moves.

    """
    frames = [payload.frame for payload in arm.recipe.payloads]
    return [
        f"{key}.payload.frame: link '{frame}' does not move, its payload has no effect"
        for frame in frames
        if arm.frame_id(frame) in arm.built.ground
    ]
