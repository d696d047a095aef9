# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The arm: a fixed-base mechanism with n controlled joints, M(q) q̈ + C(q, q̇) q̇ + g(q) + f(q̇) = τ.

An `Arm` is immutable; `ArmData` holds preallocated results and belongs to one caller. C comes from
Christoffel symbols, so Ṁ − 2C is skew-symmetric (Spong, Hutchinson & Vidyasagar); M includes the rotors'
reflected inertia. All vectors are in command order, also where Pinocchio numbers the joints otherwise.

"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np

from prioritized_tracking.core.arm.checks import Checks
from prioritized_tracking.core.arm.joints import actuator_limit, position_limits, select_joints
from prioritized_tracking.core.arm.model import Built, Recipe, build_model
from prioritized_tracking.core.arm.motion import ArmData
from prioritized_tracking.core.arm.plausibility import plausibility
from prioritized_tracking.core.arm.urdf import read_description
from prioritized_tracking.core.arm.urdf_elements import Array
from prioritized_tracking.errors import InputError, Problem, nearest

GRAVITY = (0.0, 0.0, -9.81)


@dataclass(frozen=True, kw_only=True, eq=False)
class Arm:
    """
    Immutable model of an arm; made by `build_arm`.

    Attributes
    ----------
    joints : tuple of str
        Controlled joints in command order; n of them.
    lower, upper : (n,) ndarray
        Position limits, rad (m for prismatic joints); infinite where there are none.
    continuous : (n,) ndarray of bool
        Joints that turn without end; their position is the plain angle in rad.
    velocity_limit, torque_limit : (n,) ndarray
        rad/s and N·m (m/s and N), positive and finite.
    rotor_inertia : (n,) ndarray
        Reflected to the joint, kg·m².
    viscous, coulomb : (n,) ndarray
        Friction, N·m·s/rad and N·m.
    gravity : (3,) ndarray
        m/s², axes of the root link.
    frames : tuple of str
        Every link, in the order of the URDF.
    root : str
        The link fixed to the ground.
    warnings : tuple of str
        What looks implausible though it was accepted.
    recipe, built :
        What the model was made of, and the model itself.

    """

    joints: tuple[str, ...]
    lower: Array
    upper: Array
    continuous: Any
    velocity_limit: Array
    torque_limit: Array
    viscous: Array
    coulomb: Array
    frames: tuple[str, ...]
    root: str
    recipe: Recipe
    built: Built
    warnings: tuple[str, ...] = ()

    @property
    def n(self) -> int:
        """
        Number of controlled joints.

        """
        return len(self.joints)

    @cached_property
    def frictionless(self) -> bool:
        """
        Whether no joint has any friction.

        """
        return not (self.viscous.any() or self.coulomb.any())

    @property
    def model(self) -> Any:
        """
        The Pinocchio model; its own joint order (see `Built.order`).

        """
        return self.built.model

    @property
    def gravity(self) -> Array:
        """
        Gravity, m/s², axes of the root link.

        """
        return self.recipe.gravity

    @property
    def joint_units(self) -> tuple[str, ...]:
        """
        Unit of each joint's position: rad, or m where it slides.

        """
        known = self.recipe.description.joints
        return tuple("m" if known[name].kind == "prismatic" else "rad" for name in self.joints)

    @property
    def rotor_inertia(self) -> Array:
        """
        Rotor inertia reflected to the joints, kg·m².

        """
        return self.recipe.rotor_inertia

    def data(self) -> ArmData:
        """
        Return fresh work data for this arm.

        """
        return ArmData(self)

    def frame_id(self, name: str) -> int:
        """
        Return the number of a link for `frame_motion`.

        Raises
        ------
        InputError
            There is no such link.

        """
        found = self.built.frame_ids.get(name)
        if found is None:
            raise InputError(
                Problem(
                    what=f"the arm has no link '{name}'",
                    expected="a link of the URDF",
                    remedy=nearest(str(name), self.frames).strip()
                    or f"It has: {', '.join(self.frames[:40])}.",
                )
            )
        return found

    def with_changes(
        self,
        *,
        mass_scale: Mapping[str, float] | Sequence[float] | None = None,
        payload: Mapping[str, object] | None = None,
        friction: Mapping[str, object] | None = None,
        rotor_inertia: Sequence[float] | Array | None = None,
        gravity: Sequence[float] | Array | None = None,
        key: str = "plant",
    ) -> Arm:
        """
        Return a similar arm, e.g. a plant that differs from the controller's model.

        Parameters
        ----------
        mass_scale : mapping or (len(frames),) sequence, optional
            Positive factors on mass and inertia per link.
        payload : mapping, optional
            frame, mass, com, inertia as for `build_arm`; carried *besides* what the arm carries already.
        friction, rotor_inertia, gravity : optional
            Replace the arm's own.
        key : str
            Prefix of the key paths in messages.

        Raises
        ------
        InputError
            With every problem found.

        """
        checks = Checks(key=key, joints=self.joints)
        recipe = self.recipe
        scale = checks.mass_scale(mass_scale, self.frames, recipe.mass_scale)
        carried = checks.payload(payload, recipe.description)
        viscous, coulomb = checks.friction(friction, self.n, (self.viscous, self.coulomb))
        rotor = checks.vector("rotor_inertia", rotor_inertia, recipe.rotor_inertia, low=0.0, unit="kg·m²")
        pull = checks.gravity(recipe.gravity if gravity is None else gravity)
        checks.raise_problems()
        changed = replace(
            recipe, mass_scale=scale, payloads=recipe.payloads + carried, rotor_inertia=rotor, gravity=pull
        )
        return replace(self, recipe=changed, built=build_model(changed), viscous=viscous, coulomb=coulomb)


def build_arm(
    urdf_text: str,
    *,
    joints: Sequence[str] | None = None,
    locked: Mapping[str, float] | None = None,
    gravity: Sequence[float] | Array = GRAVITY,
    rotor_inertia: Sequence[float] | Array | None = None,
    payload: Mapping[str, object] | None = None,
    friction: Mapping[str, object] | None = None,
    torque_limit: Sequence[float] | Array | None = None,
    velocity_limit: Sequence[float] | Array | None = None,
    source: str = "<urdf>",
    key: str = "robot",
) -> Arm:
    """
    Build an arm from the text of a URDF; meshes are not needed.

    Parameters
    ----------
    urdf_text : str
        The description itself.
    joints : list or tuple of str, optional
        Controlled joints in command order; None: all moving joints that are not locked, root to tip.
    locked : mapping, optional
        Position (rad, m) of every other moving joint. A mimic joint whose leader is locked follows it.
    gravity : (3,)
        m/s², axes of the root link.
    rotor_inertia : (n,), optional
        Reflected to the joint, kg·m²; None: none.
    payload : mapping, optional
        frame (a link), mass (kg), com (3, m, that link's axes), inertia (3, kg·m², about the com).
    friction : mapping, optional
        viscous (n, N·m·s/rad) and coulomb (n, N·m); None: none. The URDF's `<dynamics>` is not used.
    torque_limit, velocity_limit : (n,), optional
        N·m and rad/s; None: effort and velocity of the URDF.
    source, key : str
        What to call the URDF, and the prefix of the key paths, in messages.

    Raises
    ------
    InputError
        With every problem found.

    """
    checks = Checks(key=key)
    description = read_description(urdf_text, source, checks.problems)
    pull = checks.gravity(gravity)
    if description is None:
        raise InputError(checks.problems)
    chosen, held, n = select_joints(checks, description, joints, locked)
    checks.joints = chosen
    rotor = checks.vector("rotor_inertia", rotor_inertia, np.zeros(n), low=0.0, unit="kg·m²")
    carried = checks.payload(payload, description)
    recipe = Recipe(description, chosen, held, pull, rotor, carried)
    return _finished(checks, recipe, n, friction, torque_limit, velocity_limit)


def _finished(
    checks: Checks, recipe: Recipe, n: int, friction: object, torque_limit: object, velocity_limit: object
) -> Arm:
    """
    Check limits and friction, build the model, and judge whether it is plausible.

    """
    description, chosen = recipe.description, recipe.joints
    lower, upper, continuous = position_limits(checks, description, chosen)
    torque = actuator_limit(checks, "torque_limit", torque_limit, description, chosen, n)
    velocity = actuator_limit(checks, "velocity_limit", velocity_limit, description, chosen, n)
    viscous, coulomb = checks.friction(friction, n, (np.zeros(n), np.zeros(n)))
    checks.raise_problems()
    arm = Arm(
        joints=chosen,
        lower=lower,
        upper=upper,
        continuous=continuous,
        velocity_limit=velocity,
        torque_limit=torque,
        viscous=viscous,
        coulomb=coulomb,
        frames=tuple(description.links),
        root=description.root,
        recipe=recipe,
        built=build_model(recipe),
    )
    findings = plausibility(arm, checks)
    checks.raise_problems()
    return replace(arm, warnings=(*description.warnings, *checks.warnings, *findings))
