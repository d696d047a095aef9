# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
A checked description and its settings to a Pinocchio model, joint by joint.

Built directly rather than through Pinocchio's own URDF parser: joints come out in command order wherever
the tree allows it, locked joints cost nothing, and nothing is written to the terminal.

"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pinocchio as pin

from prioritized_tracking.core.arm.urdf import Description, walk
from prioritized_tracking.core.arm.urdf_elements import Array, Joint


@dataclass(frozen=True, kw_only=True, eq=False)
class Payload:
    """
    A rigid body carried by a link.

    Attributes
    ----------
    frame : str
        The link it is fixed to.
    mass : float
        kg.
    com : (3,) ndarray
        Centre of mass in that link, m.
    inertia : (3,) ndarray
        Principal moments about the centre of mass along the link's axes, kg·m².

    """

    frame: str
    mass: float
    com: Array
    inertia: Array


@dataclass(frozen=True, eq=False)
class Recipe:
    """
    Everything a model is built from.

    Attributes
    ----------
    description : Description
    joints : tuple of str
        Controlled joints in command order.
    locked : dict
        Position of every other moving joint, rad or m.
    gravity : (3,) ndarray
        m/s², root axes.
    rotor_inertia : (n,) ndarray
        Reflected to the joint, kg·m², command order.
    payloads : tuple of Payload
    mass_scale : dict
        Factor on mass and inertia by link; absent: 1.

    """

    description: Description
    joints: tuple[str, ...]
    locked: dict[str, float]
    gravity: Array
    rotor_inertia: Array
    payloads: tuple[Payload, ...] = ()
    mass_scale: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True, kw_only=True, eq=False)
class Built:
    """
    A model and how its numbering relates to ours.

    Attributes
    ----------
    model : pinocchio.Model
        Moves exactly the controlled joints.
    order : (n,) ndarray of int or None
        Command index of each of the model's degrees of freedom; None: the same order.
    frame_ids : dict
        Pinocchio frame of every link.
    ground : dict
        Pose (pinocchio.SE3) of the links that never move, by frame.
    at_root : frozenset of int
        Frames that coincide with the root link.

    """

    model: Any
    order: Any
    frame_ids: dict[str, int]
    ground: dict[int, Any]
    at_root: frozenset[int]


def build_model(recipe: Recipe) -> Built:
    """
    Walk the tree from the root, adding a Pinocchio joint at every controlled joint.

    """
    description = recipe.description
    model = pin.Model()
    model.name = description.name
    model.gravity = pin.Motion(recipe.gravity, np.zeros(3))
    rank = _ranks(recipe)
    frame_ids: dict[str, int] = {}
    waiting: list[tuple[str, int, Any, int, Joint | None]] = [
        (description.root, 0, pin.SE3.Identity(), 0, None)
    ]
    while waiting:
        link, support, placement, above, joint = waiting.pop()
        if joint is not None:
            placement = placement * pin.SE3(joint.rotation, joint.translation)
            if (
                joint.name in recipe.joints
            ):  # added when its turn comes: subtrees must be numbered in one piece
                support = model.addJoint(support, _joint_model(joint), placement, joint.name)
                placement = pin.SE3.Identity()
            else:
                placement = placement * _displacement(joint, recipe.locked.get(joint.name, 0.0))
        frame = model.addBodyFrame(link, support, placement, above)
        frame_ids[link] = frame
        _append_bodies(model, recipe, link, support, placement)
        # the branch with the earliest command index last: it is taken from the stack next
        for name in sorted(description.children[link], key=lambda name: -rank[name]):
            below = description.joints[name]
            waiting.append((below.child, support, placement, frame, below))
    found = [recipe.joints.index(name) for name in list(model.names)[1:]]
    model.armature = recipe.rotor_inertia[found]
    same = found == list(range(len(found)))
    ground = {i: model.frames[i].placement for i in frame_ids.values() if not model.frames[i].parentJoint}
    at_root = frozenset(i for i, pose in ground.items() if np.array_equal(pose.homogeneous, np.eye(4)))
    order = None if same else np.array(found)
    return Built(model=model, order=order, frame_ids=frame_ids, ground=ground, at_root=at_root)


def _ranks(recipe: Recipe) -> dict[str, int]:
    """
    Return for every joint the earliest command index in the branch that starts with it.

    """
    description = recipe.description
    rank: dict[str, int] = {}
    last = len(recipe.joints)
    order = walk(description)
    for name in reversed(order):  # children come after their parents
        joint = description.joints[name]
        own = recipe.joints.index(name) if name in recipe.joints else last
        below = (rank[child] for child in description.children[joint.child])
        rank[name] = min(own, *below, last)
    return rank


def _append_bodies(model: Any, recipe: Recipe, link: str, support: int, placement: Any) -> None:
    """
    Add the link's own inertia and the payloads it carries to the joint that moves it.

    """
    if support == 0:  # welded to the ground: no say in the motion, whatever its figures
        return
    body = recipe.description.links[link]
    factor = recipe.mass_scale.get(link, 1.0)
    if body.mass > 0.0 or np.any(body.inertia):
        own = _rigid_body(factor * body.mass, body.com, factor * body.inertia)
        model.appendBodyToJoint(support, own, placement)
    for payload in recipe.payloads:
        if payload.frame == link and payload.mass > 0.0:
            carried = _rigid_body(payload.mass, payload.com, np.diag(payload.inertia))
            model.appendBodyToJoint(support, carried, placement)


def _rigid_body(mass: float, com: Array, inertia: Array) -> Any:
    """
    Return a Pinocchio inertia; its constructor would refuse moments that rounding put below zero.

    """
    result = pin.Inertia.Zero()
    result.mass, result.lever, result.inertia = mass, com, inertia
    return result


def _joint_model(joint: Joint) -> Any:
    """
    Return the Pinocchio joint; one whose position is the plain angle, also for continuous joints.

    """
    along = np.flatnonzero(joint.axis == 1.0)
    straight = along.size == 1 and np.count_nonzero(joint.axis) == 1
    if joint.kind == "prismatic":
        plain: tuple[Any, ...] = (pin.JointModelPX, pin.JointModelPY, pin.JointModelPZ)
        return plain[along[0]]() if straight else pin.JointModelPrismaticUnaligned(joint.axis)
    plain = (pin.JointModelRX, pin.JointModelRY, pin.JointModelRZ)
    return plain[along[0]]() if straight else pin.JointModelRevoluteUnaligned(joint.axis)


def _displacement(joint: Joint, position: float) -> Any:
    """
    Return the pose of a held joint's child relative to position zero.

    """
    if joint.kind == "prismatic":
        return pin.SE3(np.eye(3), joint.axis * position)
    return pin.SE3(pin.exp3(joint.axis * position), np.zeros(3))
