# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Between good and bad: mimic joints, what is accepted with a warning, and input of any kind at all.

"""

from __future__ import annotations

import contextlib
import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from prioritized_tracking.core.arm import build_arm
from prioritized_tracking.errors import InputError
from tests.arms import body, data_arm, joint, planar_arm, planar_urdf

GOOD = planar_urdf()
MASSLESS = re.sub(r'(<link name="link2">)<inertial>.*?</inertial>', r"\1", GOOD, flags=re.DOTALL)


# ---- mimic joints ----------------------------------------------------------------------------------


def gripper(more="", **settings):
    """
    Return a planar arm with two sliding fingers, the second mimics the first (×−1 + 0.01 m).

    """
    slide = '<limit lower="-0.1" upper="0.1" effort="9" velocity="1"/>'
    fingers = "".join(body(f"finger{i}", 0.1, (0, 0, 0), (1e-4, 1e-4, 1e-4)) for i in (1, 2))
    fingers += joint("slide1", "tip", "finger1", kind="prismatic", axis=(0, 1, 0), limit=slide)
    mimic = '<mimic joint="slide1" multiplier="-1" offset="0.01"/>'
    fingers += joint("slide2", "tip", "finger2", kind="prismatic", axis=(0, 1, 0), limit=slide, more=mimic)
    return build_arm(GOOD.replace("</robot>", fingers + more + "</robot>"), source="arm.urdf", **settings)


def test_mimic_joint_follows_its_locked_leader():
    """
    multiplier · position + offset, through a chain of followers too.

    """
    assert gripper(locked={"slide1": 0.03}).recipe.locked == {"slide1": 0.03, "slide2": -0.03 + 0.01}
    third = body("f3", 0.1, (0, 0, 0), (1e-4, 1e-4, 1e-4))
    third += joint("turn3", "finger2", "f3", more='<mimic joint="slide2" multiplier="10"/>')
    assert gripper(third, locked={"slide1": 0.03}).recipe.locked["turn3"] == pytest.approx(-0.2)
    assert gripper(locked={"slide1": 0.03, "slide2": 0.0}).recipe.locked["slide2"] == 0.0


def test_mimic_joint_of_a_moving_leader_is_refused_with_a_remedy():
    """
    The position can be pasted; both ways out are named.

    """
    with pytest.raises(InputError) as caught:
        gripper()
    (found,) = caught.value.problems
    assert "slide2" in found.where
    assert "robot.locked: {slide2: 0}" in found.remedy
    assert "lock 'slide1'" in found.remedy
    assert gripper(locked={"slide2": 0.0}).joints == ("j1", "j2", "slide1")


def test_mimic_joint_cannot_be_controlled():
    """
    Nor can one that follows nothing, or itself.

    """
    with pytest.raises(InputError, match="cannot be controlled by itself"):
        gripper(joints=["j1", "j2", "slide2"], locked={"slide1": 0.0})
    none = "no moving joint"
    for leader, what in (("nobody", none), ("loner", "which moves"), ("tip_joint", none)):
        more = body("f3", 0.1, (0, 0, 0), (1e-4, 1e-4, 1e-4))
        more += joint("loner", "tip", "f3", more=f'<mimic joint="{leader}"/>')
        with pytest.raises(InputError, match=what):
            gripper(more, locked={"slide1": 0.0})


# ---- what is accepted, perhaps with a warning --------------------------------------------------------


def test_meshes_and_extensions_are_passed_over():
    """
    Missing meshes, transmissions, simulator extensions and comments do no harm.

    """
    mesh = '<visual><geometry><mesh filename="package://nowhere/missing.dae"/></geometry></visual>'
    more = '<!-- <!DOCTYPE --><transmission/><gazebo reference="x"/><material name="m"/></robot>'
    text = GOOD.replace("<inertial>", mesh + "<inertial>").replace("</robot>", more)
    declared = '<?xml version="1.0" encoding="utf-16"?>' + text  # the text is decoded already
    assert build_arm(declared).joints == ("j1", "j2")


def test_huge_limits_are_none():
    """
    Limits beyond 1000 rad are a way to write "unlimited".

    """
    arm = planar_arm(limit=1e16)
    assert np.all(np.isinf(arm.lower))
    assert not arm.continuous.any()


@pytest.mark.parametrize(
    ("arm", "words"),
    [
        (lambda: data_arm("panda"), ["light joints without rotor inertia", "panda_joint7 0.005"]),
        (lambda: data_arm("talos_left_arm"), ["arm_left_2_joint: gravity needs up to 27 of 22.3"]),
        (lambda: planar_arm(effort=1.0), ["j1: gravity needs up to", "cannot carry"]),
        (lambda: planar_arm(payload={"frame": "base", "mass": 1.0}), ["payload.frame: link 'base' does"]),
        (
            lambda: build_arm(MASSLESS, rotor_inertia=[0.1, 0.1]),
            ["<urdf>:", "joint 'j2': the link it moves has no mass"],
        ),
        (lambda: planar_arm(locked={"j2": 3.1}), ["robot.locked.j2: held at 3.1, outside its limits -3 … 3"]),
        (
            lambda: build_arm(planar_urdf().replace('ixx="0.041666666666666664"', 'ixx="0.01"')),
            ["link 'link1'", "break the triangle rule"],
        ),
    ],
)
def test_warnings_have_figures(arm, words):
    """
    Accepted, but said. Talos: largest gravity torque 1.2 times the effort limit, computed with MuJoCo too.

    """
    text = "\n".join(arm().warnings)
    for word in words:
        assert word in text


def test_no_warnings_for_a_plausible_arm():
    """
    Nothing is said for nothing.

    """
    assert planar_arm().warnings == ()
    assert not [w for w in data_arm("panda", rotor_inertia=[0.1] * 7).warnings if "light" in w]


def test_faults_of_bodies_that_never_move_do_no_harm():
    """
    A wrong inertia on a link welded to the ground has no say in the motion.

    """
    wrong = body("post", 1.0, (0, 0, 0), (-1.0, 1.0, 1.0)) + joint("p", "base", "post", kind="fixed")
    arm = build_arm(GOOD.replace("</robot>", wrong + "</robot>"))
    assert arm.warnings == planar_arm().warnings


# ---- anything at all -------------------------------------------------------------------------------

MARKUP = st.sampled_from([*'"<>/0-e &é\x00', "nan", "1e300", "<link/>", "base"])
KEYS = st.sampled_from(
    ["joints", "locked", "gravity", "rotor_inertia", "payload", "friction", "torque_limit"]
)
WORDS = st.sampled_from(["j1", "j2", "tip", "mass", ""])


@settings(max_examples=300)
@given(place=st.integers(0, len(GOOD) - 1), length=st.integers(0, 40), piece=st.lists(MARKUP, max_size=4))
def test_damaged_text_is_read_or_refused(place, length, piece):
    """
    A damaged description gives an arm or an InputError, never anything else.

    """
    damaged = GOOD[:place] + "".join(piece) + GOOD[place + length :]
    with contextlib.suppress(InputError):
        assert build_arm(damaged).n >= 1


@settings(max_examples=200)
@given(
    st.dictionaries(
        KEYS,
        st.recursive(
            st.none() | st.booleans() | st.floats() | st.integers() | WORDS,
            lambda inner: (
                st.lists(inner, max_size=3)
                | st.dictionaries(
                    st.sampled_from(["j1", "frame", "mass", "com", "viscous"]), inner, max_size=3
                )
            ),
            max_leaves=6,
        ),
    )
)
def test_odd_settings_are_taken_or_refused(values):
    """
    So are settings of any type.

    """
    with contextlib.suppress(InputError):
        assert build_arm(GOOD, **values).n >= 1
