# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What is wrong with an arm's description or settings is said once, with its place and a remedy.

"""

from __future__ import annotations

import numpy as np
import pytest

from prioritized_tracking.core.arm import build_arm
from prioritized_tracking.core.arm.urdf_elements import MAX_TEXT
from prioritized_tracking.errors import InputError
from tests.arms import body, data_urdf, joint, planar_arm, planar_urdf

GOOD = planar_urdf()
BOMB = (
    '<?xml version="1.0"?><!DOCTYPE robot [<!ENTITY a "aaaaaaaaaa">'
    + "".join(f'<!ENTITY {b} "{f"&{a};" * 10}">' for a, b in zip("abcdefgh", "bcdefghi", strict=True))
    + ']><robot name="&i;"/>'
)
LOOP = '<link name="x"/><link name="y"/>' + joint("a", "x", "y") + joint("b", "y", "x")


def problems(text, **settings):
    """
    Return the problems that `build_arm` finds.

    """
    with pytest.raises(InputError) as caught:
        build_arm(text, source="arm.urdf", **settings)
    return caught.value.problems


def changed(old, new, text=GOOD):
    """
    Return the text with one change; the old text must be there.

    """
    assert old in text
    return text.replace(old, new, 1)


TEXTS = [
    # ---- no URDF at all
    ("", "is empty", "arm.urdf"),
    ("   \n", "is empty", "arm.urdf"),
    (None, "must be text, not NoneType", "arm.urdf"),
    (b"<robot/>", "must be text, not bytes", "arm.urdf"),
    ("solid mesh\nfacet normal 0 0 1", "not readable XML", "arm.urdf"),
    ("/opt/robots/arm.urdf", "not readable XML", "arm.urdf"),
    ("\x00\x01\x02", "not readable XML", "arm.urdf"),
    ("\ud800", "not readable XML", "arm.urdf"),
    ("<robot>", "not readable XML", "arm.urdf"),
    ('<robot name="a" name="b"/>', "not readable XML", "arm.urdf"),
    ("<robot>&a;</robot>", "not readable XML", "arm.urdf"),
    ("<mujoco/>", "root element is <mujoco>", "arm.urdf"),
    ("<robot/>", "no links", "arm.urdf"),
    ("<robot>" + '<link name="a"/>' * 10_000 + "</robot>", "10000 links", "arm.urdf"),
    (planar_urdf([0.1] * 101), "101 joints to control", "robot.joints"),
    ('<robot xmlns:xacro="http://x"><xacro:macro/></robot>', "xacro elements", "arm.urdf"),
    (BOMB, "document type", "arm.urdf"),
    ('<!DOCTYPE robot SYSTEM "file:///etc/passwd"><robot/>', "document type", "arm.urdf"),
    ("<robot>" + "<a>" * 100_000 + "</a>" * 100_000 + "</robot>", "nested deeper than 50", "arm.urdf"),
    ("<robot>" + " " * MAX_TEXT + "</robot>", "characters", "arm.urdf"),
    # ---- names and connections
    (changed('link name="link2"', 'link name="link1"'), "used 2 times", "link 'link1'"),
    (changed('joint name="j2"', 'joint name="j1"'), "used 2 times", "joint 'j1'"),
    (changed('link name="link2"', 'link name=""'), "no name", "link ''"),
    (changed('<link name="link2">', "<link>"), "no name", "link ''"),
    (changed('parent link="link1"', 'parent link="linkl"'), "link 'linkl' does not exist", "joint 'j2'"),
    (changed('child link="tip"', 'child link="top"'), "child link 'top' does not exist", "joint 'tip_joint'"),
    (changed('<parent link="link1"/>', ""), "no parent link", "joint 'j2'"),
    (changed('<child link="tip"/>', "<child/>"), "no child link", "joint 'tip_joint'"),
    (changed('<parent link="link1"/>', '<parent link="link1"/>' * 2), "2 elements <parent>", "joint 'j2'"),
    (changed('child link="tip"', 'child link="link1"'), "child of 2 joints (j1, tip_joint)", "arm.urdf"),
    (changed("</robot>", '<link name="loose"/></robot>'), "2 links have no joint above them", "arm.urdf"),
    (changed("</robot>", joint("back", "tip", "base") + "</robot>"), "closed loop", "arm.urdf"),
    (changed("</robot>", LOOP + "</robot>"), "closed loop through x, y", "arm.urdf"),
    (changed('child link="link2"', 'child link="link1"'), "2 joints", "arm.urdf"),
    (changed('type="revolute"', 'type="revolut"'), "unknown joint type 'revolut'", "joint 'j1'"),
    (changed(' type="revolute"', ""), "unknown joint type ''", "joint 'j1'"),
    (changed('type="fixed"', 'type="planar"'), "planar joints are not covered", "joint 'tip_joint'"),
    (changed('type="revolute"', 'type="floating"'), "floating joints are not covered", "joint 'j1'"),
    # ---- numbers
    (changed('mass value="1.0"', 'mass value="one"'), "<mass> value is unusable", "link 'link1'"),
    (changed('mass value="1.0"', 'mass value="nan"'), "<mass> value is unusable", "link 'link1'"),
    (changed('mass value="1.0"', 'mass value="1e999"'), "<mass> value is unusable", "link 'link1'"),
    (changed('mass value="1.0"', 'mass value="1_0"'), "<mass> value is unusable", "link 'link1'"),
    (changed('mass value="1.0"', 'mass value="1,0"'), "<mass> value is unusable", "link 'link1'"),
    (changed('mass value="1.0"', 'mass value="1e12"'), "<mass> value is unusable", "link 'link1'"),
    (changed('mass value="1.0"', 'mass value="-1.0"'), "mass is negative", "link 'link1'"),
    (changed('<mass value="1.0"/>', ""), "without mass", "link 'link1'"),
    (changed('ixy="0"', 'ixy="${ixy}"'), "<inertia> ixy is unusable", "link 'link1'"),
    (changed('ixy="0"', 'ixy="5"'), "inertia is not positive", "link 'link1'"),
    (changed('<inertia ', '<inertial '), "without <inertia>", "link 'link1'"),
    (changed('xyz="0.5 0.0 0.0"', 'xyz="0.5 0.0"'), "<origin> xyz is unusable", "link 'link1'"),
    (changed('rpy="0.0 0.0 0.0"', 'rpy="0 inf 0"'), "<origin> rpy is unusable", "joint 'j1'"),
    (changed('axis xyz="0.0 0.0 1.0"', 'axis xyz="0 0 0"'), "axis is zero", "joint 'j1'"),
    (changed('axis xyz="0.0 0.0 1.0"', 'axis xyz="z"'), "<axis> xyz is unusable", "joint 'j1'"),
    # ---- limits
    (changed('lower="-3.0"', 'lower="3.0"'), "no room between the position limits", "joint 'j1'"),
    (changed('lower="-3.0" upper="3.0"', ""), "no room between the position limits", "joint 'j1'"),
    (changed('lower="-3.0"', 'lower="-inf"'), "<limit> lower is unusable", "joint 'j1'"),
    (changed('effort="200.0"', 'effort="0"'), "no usable effort limit", "joint 'j1'"),
    (changed('effort="200.0"', ""), "no usable effort limit", "joint 'j1'"),
    (changed('velocity="5.0"', 'velocity="-5.0"'), "no usable velocity limit", "joint 'j1'"),
    (changed('velocity="5.0"', 'velocity="fast"'), "<limit> velocity is unusable", "joint 'j1'"),
    # ---- dynamics
    ('<robot name="a"><link name="a"/></robot>', "no joint is left to control", "robot.joints"),
    ('<robot name="a"><link name="a"/><link name="b"/>' + joint("j", "a", "b") + "</robot>",
     "moves neither mass nor inertia", "joint 'j'"),
    ('<robot name="a"><link name="a"/><link name="b"/>' + body("c", 1.0, (0.5, 0, 0), (0.1, 0.1, 0.1))
     + joint("i", "a", "b") + joint("j", "b", "c") + "</robot>", "singular (joints i, j)", "arm.urdf"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "what", "where"), TEXTS, ids=[f"{i}-{t[1]}" for i, t in enumerate(TEXTS)])
def test_bad_descriptions(text, what, where):
    """
    The fault is named, with the place and (where one helps) a remedy.

    """
    found = problems(text)
    assert [p for p in found if what in p.what and where in p.where], [str(p) for p in found]


CARRIED = {"frame": "tip", "mass": 1.0}
SETTINGS = [
    ({"joints": ["j1", "J3"], "locked": {"j2": 0}}, "no joint 'J3'", "robot.joints"),
    ({"joints": ["j1", "j1", "j2"]}, "named twice", "robot.joints"),
    ({"joints": ["j1", "j2", "tip_joint"]}, "'tip_joint' is fixed", "robot.joints"),
    ({"joints": "j1"}, "not a list of joint names", "robot.joints"),
    ({"joints": []}, "not a list of joint names", "robot.joints"),
    ({"joints": [1, None]}, "no joint '1'", "robot.joints"),
    ({"joints": ["j1"]}, "neither controlled nor locked: j2", "robot.locked"),
    ({"joints": ["j1", "j2"], "locked": {"j2": 0.0}}, "both controlled and locked", "robot.joints"),
    ({"locked": {"j1": 0.0, "j2": 0.0}}, "no joint is left", "robot.joints"),
    ({"locked": {"j3": 0.0}}, "no joint 'j3'", "robot.locked.j3"),
    ({"locked": {"tip_joint": 0.0}}, "is fixed", "robot.locked.tip_joint"),
    ({"locked": {"j2": "half"}}, "no usable position", "robot.locked.j2"),
    ({"locked": {"j2": True}}, "no usable position", "robot.locked.j2"),
    ({"locked": {"j2": float("nan")}}, "no usable position", "robot.locked.j2"),
    ({"locked": {"j2": [0.0]}}, "no usable position", "robot.locked.j2"),
    ({"locked": ["j2"]}, "not a mapping", "robot.locked"),
    ({"gravity": [0.0, -9.81]}, "not a list of that many numbers", "robot.gravity"),
    ({"gravity": [0.0, 0.0, -9810.0]}, "absurd", "robot.gravity"),
    ({"gravity": "down"}, "not a list of that many numbers", "robot.gravity"),
    ({"gravity": [0.0, np.nan, 0.0]}, "out of range", "robot.gravity"),
    ({"rotor_inertia": [0.1, -0.1]}, "out of range", "robot.rotor_inertia"),
    ({"rotor_inertia": [0.1]}, "not a list of that many numbers", "robot.rotor_inertia"),
    ({"rotor_inertia": [[0.1], [0.1, 0.2]]}, "not a list of that many numbers", "robot.rotor_inertia"),
    ({"torque_limit": [0.0, 1.0]}, "out of range", "robot.torque_limit"),
    ({"torque_limit": [np.inf, 1.0]}, "out of range", "robot.torque_limit"),
    ({"velocity_limit": 3.0}, "not a list of that many numbers", "robot.velocity_limit"),
    ({"velocity_limit": [10**400, 1]}, "not a list of that many numbers", "robot.velocity_limit"),
    ({"friction": {"viscous": [1.0, 1.0], "columb": [1.0, 1.0]}}, "unknown key", "robot.friction.columb"),
    ({"friction": {"viscous": [1.0, -1.0]}}, "out of range", "robot.friction.viscous"),
    ({"friction": [1.0, 1.0]}, "not a mapping", "robot.friction"),
    ({"payload": {**CARRIED, "frame": "tipp"}}, "no such link", "robot.payload.frame"),
    ({"payload": {"mass": 1.0}}, "no such link", "robot.payload.frame"),
    ({"payload": {**CARRIED, "mass": -1.0}}, "out of range", "robot.payload.mass"),
    ({"payload": {**CARRIED, "mass": "1 kg"}}, "not a list of that many", "robot.payload.mass"),
    ({"payload": {**CARRIED, "com": [0.0]}}, "not a list of that many", "robot.payload.com"),
    ({"payload": {**CARRIED, "inertia": [0.1, 0.1, 0.3]}}, "triangle rule", "robot.payload.inertia"),
    ({"payload": {**CARRIED, "inertia": [0.1, 0.1, -0.1]}}, "out of range", "robot.payload.inertia"),
    ({"payload": {"frame": "tip", "inertia": [0.1, 0.1, 0.1]}}, "inertia without mass", "robot.payload.mass"),
    ({"payload": {**CARRIED, "weight": 1.0}}, "unknown key", "robot.payload.weight"),
    ({"payload": 1.0}, "not a mapping", "robot.payload"),
    ({"payload": {**CARRIED, "mass": 1e308}}, "beyond computing", "arm.urdf"),
]


@pytest.mark.parametrize(("settings", "what", "where"), SETTINGS, ids=[f"{s[2]}-{s[1]}" for s in SETTINGS])
def test_bad_settings(settings, what, where):
    """
    The fault is named with its key path.

    """
    found = problems(GOOD, **settings)
    assert [p for p in found if what in p.what and p.where.startswith(where)], [str(p) for p in found]
    assert len(found) == 1 or settings.keys() & {"joints", "payload"}  # one fault, one problem


def test_a_list_of_wrong_length_comes_with_the_joints_it_is_for():
    with pytest.raises(InputError) as caught:
        planar_arm(rotor_inertia=[0.1, 0.2, 0.3])
    (problem,) = caught.value.problems
    assert problem.expected == "2 finite numbers in kg·m², at least 0, one per joint (j1, j2)"
    assert problem.got == "[0.1, 0.2, 0.3]"


def test_all_problems_come_at_once():
    """
    Faults of the URDF's figures and of every setting in one message.

    """
    text = changed('mass value="1.0"', 'mass value="x"')
    wrong = {"gravity": [1], "friction": 1, "rotor_inertia": [-1, 0], "payload": {"frame": "x"}}
    found = problems(text, joints=["j1"], **wrong)
    places = " ".join(p.where for p in found)
    for place in ("link 'link1'", "gravity", "friction", "rotor_inertia", "locked", "payload.frame"):
        assert place in places


def test_a_misspelt_joint_does_not_spoil_the_lengths():
    """
    Joint vectors are held against the list as given, so no second problem follows from the first.

    """
    found = problems(GOOD, joints=["j1", "j22"], rotor_inertia=[0.1, 0.1], torque_limit=[1.0, 1.0])
    assert [p.where for p in found] == ["robot.joints"]
    assert "Did you mean 'j2'?" in found[0].remedy


def test_the_remedy_lists_every_loose_joint_within_its_limits():
    """
    The text can be pasted.

    """
    text = changed('lower="-3.0" upper="3.0"', 'lower="0.5" upper="3.0"')
    (found,) = problems(text, joints=["j2"])
    assert "robot.locked: {j1: 0.5}" in found.remedy
    assert build_arm(text, joints=["j2"], locked={"j1": 0.5}).joints == ("j2",)


def test_places_carry_line_numbers():
    """
    Source name and line of the element.

    """
    text = changed('velocity="5.0"', 'velocity="0"', GOOD.replace("><", ">\n<"))
    line = text[: text.index('<joint name="j1"')].count("\n") + 1
    (found,) = problems(text)
    assert found.where == f"arm.urdf:{line} joint 'j1'"
    assert "robot.velocity_limit" in found.remedy


def test_prefix_of_the_keys():
    """
    The caller names the block.

    """
    (found,) = problems(GOOD, gravity=1.0, key="arms.left")
    assert found.where == "arms.left.gravity"


def test_unknown_frame():
    """
    With the nearest name.

    """
    with pytest.raises(InputError, match="Did you mean 'tip'"):
        planar_arm().frame_id("tpi")


@pytest.mark.parametrize(
    ("change", "where"),
    [
        ({"mass_scale": [1.0]}, "plant.mass_scale"),
        ({"mass_scale": {"lnk1": 2.0}}, "plant.mass_scale"),
        ({"mass_scale": {"link1": 0.0}}, "plant.mass_scale"),
        ({"payload": {"frame": "x"}}, "plant.payload.frame"),
        ({"friction": {"viscous": [1.0]}}, "plant.friction.viscous"),
        ({"rotor_inertia": [1.0, np.nan]}, "plant.rotor_inertia"),
        ({"gravity": [1.0]}, "plant.gravity"),
    ],
)
def test_bad_changes(change, where):
    """
    A plant's settings are checked like the arm's.

    """
    with pytest.raises(InputError) as caught:
        planar_arm().with_changes(**change)
    assert [p.where for p in caught.value.problems] == [where]


@pytest.mark.parametrize("name", ["panda", "ur5"])
def test_truncated_files_are_refused(name):
    """
    A download that broke off.

    """
    text = data_urdf(name)
    for part in range(1, 10):
        assert "not readable XML" in problems(text[: len(text) * part // 10])[0].what
