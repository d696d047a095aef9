# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Checks of the figures an arm is built from: vectors, payload, friction, gravity.

Everything is validated here, once; the rest of the package trusts an `Arm`.

"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from prioritized_tracking.core.arm.model import Payload
from prioritized_tracking.core.arm.urdf import Description
from prioritized_tracking.core.arm.urdf_elements import Array
from prioritized_tracking.errors import InputError, Problem, nearest

MOST_GRAVITY = 100.0  # m/s²: beyond, the figure is a mistake
_DOWN = np.array([0.0, 0.0, -9.81])


@dataclass(kw_only=True)
class Checks:
    """
    Collects problems and warnings over several checks.

    Attributes
    ----------
    key : str
        Prefix of the key paths, e.g. ``robot``.
    joints : tuple of str
        Controlled joints, once they are known.

    """

    key: str
    joints: tuple[str, ...] = ()
    problems: list[Problem] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)

    def add(self, where: str, what: str, *, expected: str = "", got: str = "", remedy: str = "") -> None:
        """
        Note one problem; `where` is a key below the prefix, or (with a blank in it) a place in the URDF.

        """
        place = where if " " in where else f"{self.key}.{where}"
        self.problems.append(Problem(what=what, where=place, expected=expected, got=got, remedy=remedy))

    def raise_problems(self) -> None:
        """
        Raise InputError if there are problems.

        """
        if self.problems:
            raise InputError(self.problems)

    def vector(
        self,
        where: str,
        value: object,
        default: Array,
        *,
        unit: str,
        low: float = -np.inf,
        exclusive: bool = False,
        each: str = "joint",
    ) -> Array:
        """
        Return as many finite numbers as `default` has, at least (or above) `low`; None or faulty: `default`.

        """
        if value is None:
            return default
        bound = "" if low == -np.inf else f", {'above' if exclusive else 'at least'} {low:g}"
        count = f"{default.size} finite numbers" if default.ndim else "one finite number"
        expected = f"{count} in {unit}{bound}" + (f", one per {each}" if default.ndim else "")
        if each == "joint" and len(self.joints) == default.size:
            expected += f" ({', '.join(self.joints)})"
        values = numbers(value)
        if values is None or values.shape != default.shape:
            got = shown(value if values is None or values.ndim != 1 else values.tolist())
            self.add(where, "not a list of that many numbers", expected=expected, got=got)
            return default
        fits = np.isfinite(values) & ((values > low) if exclusive else (values >= low))
        if not np.all(fits):
            self.add(where, "a number is out of range", expected=expected, got=shown(value))
            return default
        values.setflags(write=False)
        return values

    def gravity(self, value: object) -> Array:
        """
        Return the gravity vector, m/s².

        """
        pull = self.vector("gravity", value, _DOWN, unit="m/s²", each="root axis")
        if np.linalg.norm(pull) > MOST_GRAVITY:
            self.add("gravity", "gravity is absurd", expected="about 9.81 m/s² in all, or 0", got=shown(pull))
        return pull

    def mass_scale(
        self, value: object, frames: tuple[str, ...], before: Mapping[str, float]
    ) -> dict[str, float]:
        """
        Return the factors per link, times those that were there before.

        """
        if isinstance(value, Mapping):
            for name in set(value) - set(frames):
                hint = nearest(str(name), frames).strip()
                self.add("mass_scale", f"the arm has no link '{shown(name)}'", remedy=hint)
            value = [value.get(name, 1.0) for name in frames]
        ones = np.ones(len(frames))
        factors = self.vector("mass_scale", value, ones, low=0.0, exclusive=True, unit="1", each="link")
        return {name: before.get(name, 1.0) * float(f) for name, f in zip(frames, factors, strict=True)}

    def payload(self, value: object, description: Description) -> tuple[Payload, ...]:
        """
        Return the payload; none for None, or mass zero.

        """
        if value is None:
            return ()
        before = len(self.problems)
        entries = self.mapping("payload", value, ("frame", "mass", "com", "inertia"))
        frame = entries.get("frame")
        if not isinstance(frame, str) or frame not in description.links:
            hint = nearest(str(frame), description.links).strip()
            self.add(
                "payload.frame", "no such link", expected="a link of the URDF", got=shown(frame), remedy=hint
            )
        zero = np.zeros(3)
        mass = self.vector("payload.mass", entries.get("mass"), np.zeros(()), low=0.0, unit="kg")
        com = self.vector("payload.com", entries.get("com"), zero, unit="m", each="axis")
        own = self.vector("payload.inertia", entries.get("inertia"), zero, low=0.0, unit="kg·m²", each="axis")
        if 2.0 * own.max() > own.sum() * (1.0 + 1e-9):
            self.add(
                "payload.inertia",
                "the moments break the triangle rule",
                expected="none larger than the sum of the other two",
                got=shown(own),
                remedy="Give the moments about the payload's own centre of mass, along its frame's axes.",
            )
        if len(self.problems) == before and mass == 0.0 and own.max() > 0.0:
            self.add("payload.mass", "inertia without mass", expected="a mass above 0 kg", got="0")
        if len(self.problems) > before or mass == 0.0:
            return ()
        return (Payload(frame=str(frame), mass=float(mass), com=com, inertia=own),)

    def friction(self, value: object, n: int, default: tuple[Array, Array]) -> tuple[Array, Array]:
        """
        Return viscous and Coulomb friction; None: the default, absent parts: zero.

        """
        if value is None:
            return default
        entries = self.mapping("friction", value, ("viscous", "coulomb"))
        zero = np.zeros(n)
        viscous = self.vector("friction.viscous", entries.get("viscous"), zero, low=0.0, unit="N·m·s/rad")
        coulomb = self.vector("friction.coulomb", entries.get("coulomb"), zero, low=0.0, unit="N·m")
        return viscous, coulomb

    def mapping(self, where: str, value: object, keys: tuple[str, ...]) -> dict[str, object]:
        """
        Return the known entries of a mapping; anything else is a problem.

        """
        if not isinstance(value, Mapping):
            self.add(where, "not a mapping", expected=f"the keys {', '.join(keys)}", got=shown(value))
            return {}
        for name in value:
            if name not in keys:
                hint = nearest(str(name), keys).strip()
                self.add(f"{where}.{shown(name)}", "unknown key", expected=", ".join(keys), remedy=hint)
        return {key: value[key] for key in keys if key in value}


def numbers(value: object) -> Array | None:
    """
    Return a float array of plain numbers (no text, no truth values), else None.

    """
    try:
        array = np.asarray(value)
        return array.astype(float) if array.dtype.kind in "iuf" else None
    except (ValueError, TypeError, OverflowError):  # ragged lists
        return None


def shown(value: object) -> str:
    """
    Return a value as short text for a message.

    """
    text = str(value.tolist()) if isinstance(value, np.ndarray) else str(value)
    return text if len(text) <= 120 else text[:117] + "…"
