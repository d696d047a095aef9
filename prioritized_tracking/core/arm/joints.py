# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Which joints an arm controls, where the others are held, and the limits of the controlled ones.

"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from prioritized_tracking.core.arm.checks import Checks, numbers, shown
from prioritized_tracking.core.arm.urdf import Description, walk
from prioritized_tracking.core.arm.urdf_elements import Array, Joint
from prioritized_tracking.errors import nearest

MAX_JOINTS = 100  # matrices grow with the square, the hierarchy with the cube
UNLIMITED = 1000.0  # rad or m: stated limits beyond it are a way to write "none"


def select_joints(
    checks: Checks, description: Description, joints: object, locked: object
) -> tuple[tuple[str, ...], dict[str, float], int]:
    """
    Return the controlled joints in command order, the position of every other moving joint, and n.

    n counts the names as given, faulty ones too: what joint vectors have to match.

    Parameters
    ----------
    joints : list or tuple of str, or None
        None: all moving joints that are neither locked nor mimic, root to tip.
    locked : mapping or None
        Position by name, rad or m.

    """
    choice = _Choice(checks=checks, description=description)
    choice.refuse_free_joints()
    choice.lock(locked)
    choice.control(joints)
    choice.hold_mimics()
    choice.account_for_all(listed=joints is not None)
    given = len(joints) if isinstance(joints, list | tuple) else 0
    return tuple(choice.chosen), choice.held, given or len(choice.chosen)


@dataclass(kw_only=True)
class _Choice:
    """
    The choice in the making: `chosen` and `held` fill step by step.

    """

    checks: Checks
    description: Description
    chosen: list[str] = field(default_factory=list)
    held: dict[str, float] = field(default_factory=dict)
    list_is_sound: bool = True

    def __post_init__(self) -> None:
        """
        List the joints that can move, root to tip.

        """
        joints = self.description.joints
        self.moving = [name for name in walk(self.description) if joints[name].kind != "fixed"]

    def refuse_free_joints(self) -> None:
        """
        Refuse joints with more than one degree of freedom.

        """
        for name in self.moving:
            joint = self.description.joints[name]
            if joint.kind in ("floating", "planar"):
                self.checks.add(
                    joint.where,
                    f"{joint.kind} joints are not covered",
                    expected="revolute, continuous, prismatic or fixed",
                    remedy='Write type="fixed" where the arm stands on it.',
                )

    def lock(self, locked: object) -> None:
        """
        Check names and positions of the locked joints.

        """
        if locked is None:
            return
        if not isinstance(locked, Mapping):
            expected = "joint names with positions in rad or m"
            self.checks.add("locked", "not a mapping", expected=expected, got=shown(locked))
            return
        for name, value in locked.items():
            where = f"locked.{shown(name)}"
            if not self._can_move(name, where):
                continue
            position = numbers(value)
            if position is None or position.ndim or not np.isfinite(position):
                expected = "one finite number in rad or m"
                self.checks.add(where, "no usable position", expected=expected, got=shown(value))
                position = np.zeros(())
            self.held[name] = float(position)
            self._warn_outside(self.description.joints[name], float(position))

    def _can_move(self, name: object, where: str) -> bool:
        """
        Return whether that is a joint that can move; note a problem if not.

        """
        if isinstance(name, str) and name in self.moving:
            return True
        if isinstance(name, str) and name in self.description.joints:
            what, remedy = f"joint '{name}' is fixed", "Leave it out."
        else:
            what = f"the URDF has no joint '{shown(name)}'"
            remedy = nearest(str(name), self.moving).strip() or f"It has: {', '.join(self.moving[:40])}."
        self.checks.add(where, what, expected="a joint of the URDF that moves", remedy=remedy)
        return False

    def _warn_outside(self, joint: Joint, position: float) -> None:
        """
        Warn when a joint is held outside its limits.

        """
        lower, upper = joint.lower or 0.0, joint.upper or 0.0
        if joint.kind != "continuous" and lower < upper and not lower <= position <= upper:
            self.checks.warnings.append(
                f"{self.checks.key}.locked.{joint.name}: held at {position:g}, outside its limits "
                f"{lower:g} … {upper:g}"
            )

    def control(self, joints: object) -> None:
        """
        Check the list of controlled joints, or make it.

        """
        before = len(self.checks.problems)
        free = [name for name in self.moving if name not in self.held]
        if joints is None:
            self.chosen = [name for name in free if self.description.joints[name].mimic is None]
            if not self.chosen:
                self.checks.add("joints", "no joint is left to control", expected="a joint that moves")
        elif not isinstance(joints, list | tuple) or not joints:
            self.checks.add(
                "joints", "not a list of joint names", expected="a name or more", got=shown(joints)
            )
            self.chosen = free
        else:
            for name in joints:
                if self._can_move(name, "joints") and self._may_be_controlled(name):
                    self.chosen.append(name)
        if len(self.chosen) > MAX_JOINTS:
            what = f"{len(self.chosen)} joints to control"
            self.checks.add("joints", what, expected=f"at most {MAX_JOINTS}", remedy="Lock the others.")
        self.list_is_sound = len(self.checks.problems) == before

    def _may_be_controlled(self, name: str) -> bool:
        """
        Return whether that moving joint can be controlled; note a problem if not.

        """
        leader = self.description.joints[name].mimic
        key = self.checks.key
        if name in self.chosen:
            self.checks.add("joints", f"joint '{name}' is named twice")
        elif name in self.held:
            remedy = f"Take it out of {key}.joints or out of {key}.locked."
            self.checks.add("joints", f"joint '{name}' is both controlled and locked", remedy=remedy)
        elif leader is not None:
            what = f"joint '{name}' follows '{leader[0]}' (mimic) and cannot be controlled by itself"
            self.checks.add("joints", what, remedy=f"Lock both: {key}.locked.")
        else:
            return True
        return False

    def hold_mimics(self) -> None:
        """
        Hold mimic joints whose leaders are held where these put them; refuse the others.

        """
        followers = [name for name in self.moving if self.description.joints[name].mimic]
        for _ in followers:  # as often as the longest chain of followers can be
            for name in followers:
                leader, multiplier, offset = self.description.joints[name].mimic or ("", 0.0, 0.0)
                if name not in self.held and leader in self.held:
                    self.held[name] = multiplier * self.held[leader] + offset
        for name in followers:
            if name not in self.held:
                self._refuse_follower(self.description.joints[name])

    def _refuse_follower(self, joint: Joint) -> None:
        """
        Say that a mimic joint without a locked leader is not covered.

        """
        leader = (joint.mimic or ("",))[0]
        here = _inside(joint)
        known = leader in self.moving
        self.checks.add(
            joint.where,
            f"it follows '{leader[:80]}' (mimic), "
            + ("which moves" if known else "which is no moving joint"),
            expected="a leader that is locked: coupled joints are not covered",
            remedy=f"Lock it, {self.checks.key}.locked: {{{joint.name}: {here:g}}}"
            + (f", or lock '{leader}': then it follows." if known else "."),
        )
        self.held[joint.name] = here

    def account_for_all(self, *, listed: bool) -> None:
        """
        Refuse moving joints that are neither controlled nor locked.

        """
        loose = [name for name in self.moving if name not in self.chosen and name not in self.held]
        if not listed or not loose or not self.list_is_sound:
            return
        places = ", ".join(f"{name}: {_inside(self.description.joints[name]):g}" for name in loose)
        self.checks.add(
            "locked",
            f"neither controlled nor locked: {', '.join(loose)}",
            expected="a position for every moving joint that is not controlled",
            remedy=f"Write {self.checks.key}.locked: {{{places}}} with the positions they are held at.",
        )


def _inside(joint: Joint) -> float:
    """
    Return zero, or the position within the limits that is closest to it.

    """
    if joint.kind == "continuous" or joint.lower is None or joint.upper is None:
        return 0.0
    return min(max(0.0, joint.lower), max(joint.lower, joint.upper))


def position_limits(
    checks: Checks, description: Description, chosen: tuple[str, ...]
) -> tuple[Array, Array, Any]:
    """
    Return lower, upper (infinite where there are none) and which joints are continuous.

    """
    joints = [description.joints[name] for name in chosen]
    continuous = np.array([joint.kind == "continuous" for joint in joints], dtype=bool)
    ends = np.array([(joint.lower or 0.0, joint.upper or 0.0) for joint in joints]).reshape(-1, 2).T
    lower = np.where(continuous | (ends[0] < -UNLIMITED), -np.inf, ends[0])
    upper = np.where(continuous | (ends[1] > UNLIMITED), np.inf, ends[1])
    for joint, low, high in zip(joints, lower, upper, strict=True):
        if not low < high:
            checks.add(
                joint.where,
                "no room between the position limits",
                expected="lower below upper",
                got=f"lower {low:g}, upper {high:g}",
                remedy='State <limit lower="…" upper="…"/>, make it type="continuous", or lock the joint.',
            )
    for array in (lower, upper, continuous):
        array.setflags(write=False)
    return lower, upper, continuous


def actuator_limit(
    checks: Checks, which: str, value: object, description: Description, chosen: tuple[str, ...], n: int
) -> Array:
    """
    Return torque or velocity limits: the parameter, else the URDF's.

    Parameters
    ----------
    which : str
        ``torque_limit`` (N·m, N) or ``velocity_limit`` (rad/s, m/s).

    """
    attribute, *units = {
        "torque_limit": ("effort", "N·m", "N"),
        "velocity_limit": ("velocity", "rad/s", "m/s"),
    }[which]
    limits = np.ones(n)
    if value is not None:
        return checks.vector(which, value, limits, low=0.0, exclusive=True, unit=units[0])
    for i, name in enumerate(chosen):
        joint = description.joints[name]
        stated = joint.effort if attribute == "effort" else joint.velocity
        if stated is None or stated <= 0.0:
            checks.add(
                joint.where,
                f"no usable {attribute} limit",
                expected=f"above 0 {units[joint.kind == 'prismatic']}",
                got="none" if stated is None else f"{stated:g}",
                remedy=f'Give {checks.key}.{which} for all joints, or state <limit {attribute}="…"/>.',
            )
        else:
            limits[i] = stated
    limits.setflags(write=False)
    return limits
