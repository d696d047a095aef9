# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
URDF text to a checked kinematic tree with inertias: no meshes, no other libraries, no logs.

Only `<link>` (with `<inertial>`) and `<joint>` are read; visuals, collisions, transmissions and
simulator extensions are passed over, so missing meshes do no harm. Units are those of the format
(http://wiki.ros.org/urdf/XML): m, rad, kg, kg·m², N, N·m.

"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, replace

import numpy as np

from prioritized_tracking.core.arm.urdf_elements import Joint, Link, Reader, parse
from prioritized_tracking.errors import Problem, nearest

MAX_LINKS = 5000  # the largest humanoid descriptions have some hundred


@dataclass(frozen=True, kw_only=True, eq=False)
class Description:
    """
    A kinematic tree: every link is reached from `root` exactly once.

    Attributes
    ----------
    name, source, root : str
    links, joints : dict
        By name, in the order of the text.
    children : dict
        Names of the joints leaving a link, by link.
    warnings : tuple of str

    """

    name: str
    source: str
    root: str
    links: dict[str, Link]
    joints: dict[str, Joint]
    children: dict[str, tuple[str, ...]]
    warnings: tuple[str, ...] = ()


def read_description(text: object, source: str, problems: list[Problem]) -> Description | None:
    """
    Read a URDF; every fault found is appended to `problems`.

    Parameters
    ----------
    text : str
        The URDF itself, not a file name.
    source : str
        What to call it in messages.
    problems : list of Problem
        Extended in place.

    Returns
    -------
    Description or None
        None when the tree itself is unusable; with faulty numbers the tree is still returned so that
        the remaining input can be checked in the same go (the caller refuses it).

    """
    parsed = parse(text, source, problems)
    if parsed is None:
        return None
    root, lines = parsed
    reader = Reader(source=source, lines=lines, problems=problems)
    links = [reader.link(element) for element in root.findall("link")]
    joints = [reader.joint(element) for element in root.findall("joint")]
    if not 0 < len(links) <= MAX_LINKS:
        remedy = "Check that this is the robot's own description."
        what = f"the URDF has {len(links) or 'no'} links"
        reader.add(source, what, expected=f"1 to {MAX_LINKS}", remedy=remedy)
        return None
    known = [joint for joint in joints if joint is not None]
    if not _tree_is_sound(links, known, reader, complete=len(known) == len(joints)):
        return None
    description = Description(
        name=root.get("name", ""),
        source=source,
        root=next(iter({link.name for link in links} - {joint.child for joint in known})),
        links={link.name: link for link in links},
        joints={joint.name: joint for joint in known},
        children=_children(links, known),
    )
    return replace(description, warnings=tuple(_check_inertias(description, reader)))


def _children(links: list[Link], joints: list[Joint]) -> dict[str, tuple[str, ...]]:
    """
    Return the names of the joints leaving each link.

    """
    leaving: dict[str, list[str]] = {link.name: [] for link in links}
    for joint in joints:
        leaving[joint.parent].append(joint.name)
    return {name: tuple(names) for name, names in leaving.items()}


def walk(description: Description) -> list[str]:
    """
    Return every joint, depth first from the root, branches in the order of the text.

    """
    order: list[str] = []
    waiting = list(reversed(description.children[description.root]))
    while waiting:
        name = waiting.pop()
        order.append(name)
        waiting.extend(reversed(description.children[description.joints[name].child]))
    return order


# ---- the tree --------------------------------------------------------------------------------------


def _tree_is_sound(links: list[Link], joints: list[Joint], reader: Reader, *, complete: bool) -> bool:
    """
    Check names and connections; True when every link hangs on one root exactly once.

    `complete` is False when joints could not be read: loose links are no news then.

    """
    before = len(reader.problems)
    _check_names(links, joints, reader)
    names = {link.name for link in links}
    for joint in joints:
        for tag, link in (("parent", joint.parent), ("child", joint.child)):
            if link not in names:
                reader.add(
                    joint.where,
                    f"{tag} link '{link[:80]}' does not exist",
                    expected="the name of a <link>",
                    remedy=nearest(link, names).strip(),
                )
    for child, count in Counter(joint.child for joint in joints).items():
        if count > 1:
            hung = ", ".join(joint.name for joint in joints if joint.child == child)
            reader.add(
                reader.source,
                f"link '{child}' is the child of {count} joints ({hung})",
                expected="a tree: one joint above each link",
                remedy="Closed loops are not covered: cut the loop, or fix its passive joints.",
            )
    if complete and len(reader.problems) == before:
        _check_reach(links, joints, reader)
    return complete and len(reader.problems) == before


def _check_names(links: list[Link], joints: list[Joint], reader: Reader) -> None:
    """
    Every link and joint has a name, and no two the same.

    """
    for things in (links, joints):
        count = Counter(thing.name for thing in things)
        for thing in things:
            if not thing.name:
                reader.add(thing.where, "no name", expected='name="…"')
            elif count[thing.name] > 1:
                reader.add(
                    thing.where, f"the name is used {count[thing.name]} times", expected="distinct names"
                )


def _check_reach(links: list[Link], joints: list[Joint], reader: Reader) -> None:
    """
    One root, and everything reachable from it.

    """
    children = {joint.child for joint in joints}
    roots = [link.name for link in links if link.name not in children]
    if len(roots) > 1:
        shown = ", ".join(roots[:8])
        reader.add(
            reader.source,
            f"{len(roots)} links have no joint above them ({shown})",
            expected="one root link",
            remedy="Join them with fixed joints, or remove the loose ones.",
        )
        return
    below: dict[str, list[str]] = {link.name: [] for link in links}
    for joint in joints:
        below[joint.parent].append(joint.child)
    reached, waiting = set(roots), list(roots)
    while waiting:
        fresh = below[waiting.pop()]
        reached.update(fresh)
        waiting.extend(fresh)
    lost = [link.name for link in links if link.name not in reached]
    if lost:
        reader.add(
            reader.source,
            f"the joints form a closed loop through {', '.join(lost[:8])}",
            expected="a tree",
            remedy="Cut the loop: every link is the child of one joint at most.",
        )


# ---- the bodies ------------------------------------------------------------------------------------


def _check_inertias(description: Description, reader: Reader) -> list[str]:
    """
    Refuse moving bodies that cannot be; return warnings about the triangle rule.

    What is welded to the ground has no say in the motion: its faults do no harm.

    """
    warnings: list[str] = []
    moving: set[str] = set()
    for name in walk(description):
        joint = description.joints[name]
        if joint.kind == "fixed" and joint.parent not in moving:
            continue
        moving.add(joint.child)
        link = description.links[joint.child]
        moments = np.linalg.eigvalsh(link.inertia)
        slack = 1e-6 * float(np.abs(moments).max())  # six printed digits
        figures = ", ".join(f"{moment:.4g}" for moment in moments)
        if link.mass < 0.0:
            reader.add(link.where, "the mass is negative", expected="at least 0 kg", got=f"{link.mass:g} kg")
        if moments[0] < -slack:
            reader.add(
                link.where,
                "the inertia is not positive",
                expected="principal moments of at least 0 kg·m²",
                got=figures,
                remedy="Check the signs of ixy, ixz, iyz and the units.",
            )
        elif moments[0] + moments[1] < moments[2] - slack:
            warnings.append(
                f"{link.where}: moments {figures} kg·m² break the triangle rule; no real body has them"
            )
    return warnings
