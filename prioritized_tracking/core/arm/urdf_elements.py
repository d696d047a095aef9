# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The elements of a URDF: text to XML (nothing unsafe, nothing huge), XML to links and joints.

"""

from __future__ import annotations

import math
import re
import sys
import xml.etree.ElementTree as ElementTree
from dataclasses import dataclass, field
from typing import NoReturn
from xml.parsers import expat

import numpy as np
import numpy.typing as npt

from prioritized_tracking.errors import Problem, nearest

Array = npt.NDArray[np.float64]

MAX_TEXT = 8_000_000  # characters; the largest humanoid descriptions stay below one million
MAX_DEPTH = 50  # nested elements; a URDF needs about six
KINDS = ("revolute", "continuous", "prismatic", "fixed", "floating", "planar")
MOST = 1e9  # in SI units: a body or offset beyond is a mistake
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")


@dataclass(frozen=True, kw_only=True, eq=False)
class Link:
    """
    One rigid body.

    Attributes
    ----------
    name, where : str
        `where` is the place in the text, e.g. ``arm.urdf:12 link 'tool'``.
    mass : float
        kg; 0 for a mere frame.
    com : (3,) ndarray
        Centre of mass, m, link axes.
    inertia : (3, 3) ndarray
        About the centre of mass, kg·m², link axes.

    """

    name: str
    where: str
    mass: float = 0.0
    com: Array = field(default_factory=lambda: np.zeros(3))
    inertia: Array = field(default_factory=lambda: np.zeros((3, 3)))


@dataclass(frozen=True, kw_only=True, eq=False)
class Joint:
    """
    One joint; its axes and origin are the child link's at position zero.

    Attributes
    ----------
    name, where : str
    kind : str
        One of `KINDS`.
    parent, child : str
        Names of links.
    rotation, translation : (3, 3) and (3,) ndarray
        Pose of the joint in the parent link, m.
    axis : (3,) ndarray
        Unit vector, joint axes.
    lower, upper : float or None
        rad or m; None: not stated.
    effort, velocity : float or None
        N·m or N, rad/s or m/s; None: not stated.
    mimic : (leader, multiplier, offset) or None

    """

    name: str
    where: str
    kind: str
    parent: str
    child: str
    rotation: Array
    translation: Array
    axis: Array
    lower: float | None = None
    upper: float | None = None
    effort: float | None = None
    velocity: float | None = None
    mimic: tuple[str, float, float] | None = None


# ---- text to elements ------------------------------------------------------------------------------


class _Refused(Exception):
    """
    The text is no acceptable XML; carries what, expected and remedy.

    """


def parse(
    text: object, source: str, problems: list[Problem]
) -> tuple[ElementTree.Element, dict[ElementTree.Element, int]] | None:
    """
    Return the root element and the line of every element, or None with a problem added.

    """
    try:
        if not isinstance(text, str):
            raise _Refused(f"the URDF must be text, not {type(text).__name__}", "the text of a URDF")
        if len(text) > MAX_TEXT:
            raise _Refused(f"the URDF has {len(text)} characters", f"at most {MAX_TEXT}")
        if not text.strip():
            raise _Refused("the URDF is empty", "an XML document with the root element <robot>")
        root, lines = _elements(text)
        _check_root(root)
    except _Refused as refusal:
        what, expected, remedy = (*refusal.args, "", "")[:3]
        problems.append(Problem(what=what, where=source, expected=expected, remedy=remedy))
        return None
    except (expat.ExpatError, ValueError) as error:
        remedy = "Give the text of a URDF file; meshes, folders and binary files are none."
        if isinstance(text, str) and "xacro:" in text:
            remedy = "This looks like a xacro file: run `xacro FILE > arm.urdf` first."
        problems.append(Problem(what=f"the URDF is not readable XML ({error})", where=source, remedy=remedy))
        return None
    return root, lines


def _elements(text: str) -> tuple[ElementTree.Element, dict[ElementTree.Element, int]]:
    """
    Parse with expat: no document type (so no entities to expand), bounded depth, lines kept.

    """
    builder = ElementTree.TreeBuilder()
    lines: dict[ElementTree.Element, int] = {}
    depth = 0
    parser = expat.ParserCreate(encoding="utf-8")  # text is decoded: a declared encoding is overridden

    def start(tag: str, attributes: dict[str, str]) -> None:
        nonlocal depth
        depth += 1
        if depth > MAX_DEPTH:
            raise _Refused(f"elements nested deeper than {MAX_DEPTH}", "a URDF")
        lines[builder.start(tag, attributes)] = parser.CurrentLineNumber

    def end(tag: str) -> None:
        nonlocal depth
        depth -= 1
        builder.end(tag)

    def doctype(*_: object) -> NoReturn:
        raise _Refused(
            "the URDF declares a document type", "plain XML", "Remove <!DOCTYPE …> with its entities."
        )

    parser.StartElementHandler = start
    parser.EndElementHandler = end
    parser.StartDoctypeDeclHandler = doctype
    parser.Parse(text.encode("utf-8"), True)
    return builder.close(), lines


def _check_root(root: ElementTree.Element) -> None:
    """
    Refuse other XML documents, and xacro, which only looks like a URDF.

    """
    if root.tag != "robot":
        raise _Refused(f"the root element is <{root.tag[:80]}>", "<robot>", "Give the robot's URDF.")
    macros = sorted({element.tag for element in root.iter() if element.tag.startswith("xacro:")})
    if macros:
        raise _Refused(
            f"the text holds xacro elements (<{macros[0]}>)",
            "plain URDF",
            "Run `xacro FILE > arm.urdf` first.",
        )


# ---- elements to links and joints ------------------------------------------------------------------


@dataclass(kw_only=True)
class Reader:
    """
    Reads elements, collecting problems and warnings with their places.

    """

    source: str
    lines: dict[ElementTree.Element, int]
    problems: list[Problem]
    warnings: list[str] = field(default_factory=list)

    def add(self, where: str, what: str, *, expected: str = "", got: str = "", remedy: str = "") -> None:
        """
        Note one problem.

        """
        problem = Problem(what=what, where=where, expected=expected, got=got[:120], remedy=remedy)
        self.problems.append(problem)

    def place(self, element: ElementTree.Element, name: str) -> str:
        """
        Return e.g. ``arm.urdf:12 joint 'a1'``.

        """
        return f"{self.source}:{self.lines[element]} {element.tag} '{name[:80]}'"

    def numbers(
        self,
        element: ElementTree.Element | None,
        key: str,
        where: str,
        default: tuple[float, ...],
        most: float = MOST,
    ) -> Array:
        """
        Return the numbers of an attribute, as many as `default` has; faulty ones become `default`.

        """
        raw = None if element is None else element.get(key)
        if element is None or raw is None:
            return np.array(default)
        words = raw.split()
        good = len(words) == len(default) and all(_NUMBER.fullmatch(word) for word in words)
        values = np.array([float(word) for word in words] if good else default)
        if not good or not np.all(np.abs(values) <= most):
            count = "one number" if len(default) == 1 else f"{len(default)} numbers"
            expected = f"{count} of at most {most:g}"
            self.add(where, f"<{element.tag}> {key} is unusable", expected=expected, got=repr(raw))
            return np.array(default)
        return values

    def number(
        self, element: ElementTree.Element | None, key: str, where: str, default: float = 0.0
    ) -> float:
        """
        Return the one number of an attribute.

        """
        return float(self.numbers(element, key, where, (default,))[0])

    def optional(self, element: ElementTree.Element | None, key: str, where: str) -> float | None:
        """
        Return the one number of an attribute, None where it is not stated.

        """
        if element is None or element.get(key) is None:
            return None
        return float(self.numbers(element, key, where, (0.0,), most=sys.float_info.max)[0])

    def only(self, element: ElementTree.Element, tag: str, where: str) -> ElementTree.Element | None:
        """
        Return the child element of that tag; several are a problem.

        """
        found = element.findall(tag)
        if len(found) > 1:
            self.add(where, f"{len(found)} elements <{tag}>", expected="at most one")
        return found[0] if found else None

    def pose(self, element: ElementTree.Element | None, where: str) -> tuple[Array, Array]:
        """
        Return rotation and translation of an `<origin>`.

        """
        rpy = self.numbers(element, "rpy", where, (0.0, 0.0, 0.0))
        return rotation_from_rpy(rpy), self.numbers(element, "xyz", where, (0.0, 0.0, 0.0))

    def link(self, element: ElementTree.Element) -> Link:
        """
        Read one link with its inertia.

        """
        name = element.get("name", "")
        where = self.place(element, name)
        inertial = self.only(element, "inertial", where)
        if inertial is None:
            return Link(name=name, where=where)
        mass_element, inertia_element = (self.only(inertial, tag, where) for tag in ("mass", "inertia"))
        if mass_element is None or mass_element.get("value") is None:
            self.add(where, "<inertial> without mass", expected='<mass value="…"/> in kg')
        mass = self.number(mass_element, "value", where)
        if mass > 0.0 and inertia_element is None:
            self.add(where, "<inertial> without <inertia>", expected="six numbers in kg·m²")
        rotation, com = self.pose(self.only(inertial, "origin", where), where)
        keys = ("ixx", "ixy", "ixz", "iyy", "iyz", "izz")
        xx, xy, xz, yy, yz, zz = (self.number(inertia_element, key, where) for key in keys)
        own = np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])
        return Link(name=name, where=where, mass=mass, com=com, inertia=rotation @ own @ rotation.T)

    def joint(self, element: ElementTree.Element) -> Joint | None:
        """
        Read one joint; None when kind, parent or child are missing.

        """
        name = element.get("name", "")
        where = self.place(element, name)
        kind = element.get("type", "")
        if kind not in KINDS:
            self.add(
                where,
                f"unknown joint type '{kind[:80]}'",
                expected=", ".join(KINDS),
                remedy=nearest(kind, KINDS).strip(),
            )
        ends = [self.only(element, tag, where) for tag in ("parent", "child")]
        parent, child = ("" if end is None else end.get("link", "") for end in ends)
        for tag, link in (("parent", parent), ("child", child)):
            if not link:
                self.add(where, f"no {tag} link", expected=f'<{tag} link="…"/>')
        if kind not in KINDS or not parent or not child:
            return None
        rotation, translation = self.pose(self.only(element, "origin", where), where)
        limit = self.only(element, "limit", where)
        return Joint(
            name=name,
            where=where,
            kind=kind,
            parent=parent,
            child=child,
            rotation=rotation,
            translation=translation,
            axis=self.axis(element, kind, where),
            lower=self.optional(limit, "lower", where),
            upper=self.optional(limit, "upper", where),
            effort=self.optional(limit, "effort", where),
            velocity=self.optional(limit, "velocity", where),
            mimic=self.mimic(element, where),
        )

    def axis(self, element: ElementTree.Element, kind: str, where: str) -> Array:
        """
        Return the unit axis; the format's default is x.

        """
        axis = self.numbers(self.only(element, "axis", where), "xyz", where, (1.0, 0.0, 0.0))
        scale = float(np.abs(axis).max())
        if scale == 0.0:
            if kind != "fixed":
                self.add(where, "the joint axis is zero", expected="a direction", got="0 0 0")
            return np.array([1.0, 0.0, 0.0])
        axis = axis / scale
        return axis / math.sqrt(float(axis @ axis))

    def mimic(self, element: ElementTree.Element, where: str) -> tuple[str, float, float] | None:
        """
        Return leader, multiplier and offset.

        """
        found = self.only(element, "mimic", where)
        if found is None:
            return None
        leader = found.get("joint", "")
        return leader, self.number(found, "multiplier", where, 1.0), self.number(found, "offset", where)


def rotation_from_rpy(rpy: Array) -> Array:
    """
    Return the rotation of fixed-axis roll, pitch, yaw (rad): Rz(yaw) Ry(pitch) Rx(roll).

    """
    (sr, sp, sy), (cr, cp, cy) = np.sin(rpy), np.cos(rpy)
    return np.array(
        [
            [cy * cp, cy * sp * sr - sy * cr, cy * sp * cr + sy * sr],
            [sy * cp, sy * sp * sr + cy * cr, sy * sp * cr - cy * sr],
            [-sp, cp * sr, cp * cr],
        ]
    )
