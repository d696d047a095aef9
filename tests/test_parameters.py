# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Reading a stack file: values, defaults, places, sections, overrides, paths.

"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from prioritized_tracking.charts import registry
from prioritized_tracking.errors import InputError
from prioritized_tracking.parameters import (
    StackFile,
    all_parameters,
    find_parameter,
    read_stack,
    stack_of_values,
)
from prioritized_tracking.parameters.stack_schema import STACK as SCHEMA
from prioritized_tracking.parameters.stack_tasks import REFERENCE, task_keys
from prioritized_tracking.schema import TYPES, Block, Parameter, Table
from tests.stack_example import STACK, line_of, read, refused, write


@pytest.fixture
def stack(tmp_path: Path) -> StackFile:
    return read_stack(write(tmp_path))


def test_values_have_the_types_of_the_schema(stack: StackFile) -> None:
    tree = stack.tree
    assert tree["rate"] == 1000.0
    assert tree["robot"]["joints"] == ("a1", "a2", "a3")
    assert tree["robot"]["locked"] == {"finger_joint": 0.02}
    assert tree["tasks"]["tool_xyz"]["stiffness"] == (160.0, 160.0, 80.0)
    stiffness = tree["tasks"]["tool_zyz"]["stiffness"]
    assert (stiffness, type(stiffness)) == (160.0, float)
    assert tree["plant"]["position_noise"] == 1e-5
    assert type(tree["plant"]["seed"]) is int


def test_defaults_are_filled_in(stack: StackFile) -> None:
    tree = stack.tree
    assert tree["tasks"]["posture"] == {
        "chart": "posture",
        "reference": "elbow",
        "stiffness": 320.0,
        "damping": 40.0,
        "tolerance": None,
    }
    assert tree["tasks"]["tool_zyz"]["base"] is None
    assert tree["tasks"]["tool_zyz"]["validity"] == (0.2, 0.5)
    assert tree["guard"]["torque_rate"] == 2000.0
    assert tree["plant"]["payload"]["com"] == (0.0, 0.0, 0.0)
    assert tree["references"]["elbow"]["pace"] == 1.0
    assert tree["autostart"] is False
    assert tree["use_sim_time"] is False


def test_blocks_left_out(tmp_path: Path) -> None:
    start, end = STACK.index("    guard:"), len(STACK)
    tree = read(tmp_path, (STACK[start:end], ""), ("      locked: {finger_joint: 0.02}\n", "")).tree
    assert tree["robot"]["locked"] is None
    assert tree["plant"]["payload"] is None
    assert tree["plant"]["friction"] is None
    assert tree["guard"]["claim_speed"] == 0.6
    assert tree["plant"]["delay"] == 0


def test_every_key_of_the_schema_is_in_the_tree(stack: StackFile) -> None:
    for key, _ in all_parameters(stack):
        value: Any = stack.tree
        for part in key.split("."):
            assert part in value, key
            value = value[part]


def test_where_gives_line_and_key(stack: StackFile) -> None:
    line = line_of("stiffness: [160.0")
    assert stack.where("tasks", "tool_xyz", "stiffness") == f"stack.yaml:{line} tasks.tool_xyz.stiffness"
    assert stack.where("tasks.tool_xyz.stiffness") == stack.where("tasks", "tool_xyz", "stiffness")
    block = line_of("tool_xyz:")
    assert stack.where("tasks.tool_xyz.base") == f"stack.yaml:{block} tasks.tool_xyz.base"
    assert stack.given("tasks.tool_xyz.stiffness")
    assert not stack.given("tasks.tool_xyz.base")
    assert stack.text == STACK


def test_defaults_that_depend_on_the_rate(tmp_path: Path) -> None:
    slow = read(
        tmp_path,
        ("rate: 1000.0", "rate: 50.0"),
        ("    telemetry_rate: 100.0\n", ""),
        ("state_timeout: 0.01, ", ""),
    )
    assert slow.tree["telemetry_rate"] == 50.0
    assert slow.tree["guard"]["state_timeout"] == 0.04
    fast = read(tmp_path, ("state_timeout: 0.01, ", ""))
    assert fast.tree["guard"]["state_timeout"] == 0.01


def test_dotted_keys_are_those_of_blocks(tmp_path: Path) -> None:
    nested = read(tmp_path).tree
    text = STACK.replace("    guard: {state_timeout: 0.01, ", "    guard.state_timeout: 0.01\n    guard: {")
    assert read_stack(write(tmp_path, text)).tree == nested


def test_names_of_locked_joints_may_have_dots(tmp_path: Path) -> None:
    stack = read(tmp_path, ("{finger_joint: 0.02}", "{left.finger.joint: 0.02, left.thumb: 1, wheel: -0.5}"))
    assert stack.tree["robot"]["locked"] == {"left.finger.joint": 0.02, "left.thumb": 1.0, "wheel": -0.5}
    assert stack.where("robot", "locked", "left.thumb") == "stack.yaml:11 robot.locked.left.thumb"


@pytest.mark.parametrize(
    "header",
    [
        "/**",
        "/*",
        "tracking_controller",
        "/tracking_controller",
        "/**/tracking_controller",
        "simulated_arm",
        "renamed",
    ],
)
def test_sections_for_us(tmp_path: Path, header: str) -> None:
    assert read_stack(write(tmp_path, STACK.replace("/**:", f"{header}:", 1))).tree["rate"] == 1000.0


def test_section_with_namespace(tmp_path: Path) -> None:
    inner = STACK.replace("/**:", "tracking_controller:", 1)
    text = "left_arm:\n" + "".join(f"  {line}\n" for line in inner.splitlines())
    assert read_stack(write(tmp_path, text)).tree["rate"] == 1000.0


def test_sections_are_merged_and_others_left_alone(tmp_path: Path) -> None:
    text = STACK.replace("    rate: 1000.0\n", "")
    text += "tracking_controller:\n  ros__parameters:\n    rate: 500.0\n"
    text += "camera:\n  ros__parameters:\n    rate: fast\n"
    assert read_stack(write(tmp_path, text)).tree["rate"] == 500.0


@pytest.mark.parametrize(
    ("text", "what"),
    [
        ("", "the file holds no parameters"),
        ("# only a comment\n", "the file holds no parameters"),
        ("/**: {}\n", "an empty block"),
        ("rate: 1000.0\n", "a value outside of ros__parameters"),
        ("[1, 2]\n", "a value outside of ros__parameters"),
        ("/**:\n  rate: 1000.0\n", "a value outside of ros__parameters"),
        ("/**:\n  ros__parameters: 3\n", "a value outside of ros__parameters"),
        ("ros__parameters:\n  rate: 1000.0\n", "no node name above it"),
        (
            "a:\n  ros__parameters:\n    x: 1\nb:\n  ros__parameters:\n    x: 1\n",
            "no section is meant for this node",
        ),
    ],
)
def test_files_without_a_section_for_us(tmp_path: Path, text: str, what: str) -> None:
    assert what in refused(write(tmp_path, text))[0].what


def test_misspelt_section_is_named(tmp_path: Path) -> None:
    text = STACK + "tracking_controler:\n  ros__parameters:\n    autostart: true\n"
    assert "Did you mean 'tracking_controller'?" in [p.remedy for p in refused(write(tmp_path, text))]


def test_keys_of_ros_are_left_to_ros(tmp_path: Path) -> None:
    keys = (
        "    start_type_description_service: false\n    qos_overrides:\n      /tf: {publisher: {depth: 10}}\n"
    )
    keys += "    qos_overrides./clock.subscription.depth: 1\n"
    assert "qos_overrides" not in read_stack(write(tmp_path, STACK + keys)).tree


def test_overrides_take_the_place_of_the_file(tmp_path: Path) -> None:
    path = write(tmp_path)
    overrides = {
        "law": "joint_impedance",
        "plant.seed": np.int64(7),
        "tasks.tool_xyz.damping": np.array([1.0, 2.0, 3.0]),
        "robot": {"friction": None, "gravity": [0, 0, -1.5], "urdf": tmp_path / "arm.urdf"},
        "guard": {"coast": 0.2},
    }
    tree = read_stack(path, overrides=overrides).tree
    assert tree["law"] == "joint_impedance"
    assert tree["plant"]["seed"] == 7
    assert tree["tasks"]["tool_xyz"]["damping"] == (1.0, 2.0, 3.0)
    assert tree["robot"]["friction"] is None
    assert tree["robot"]["gravity"] == (0.0, 0.0, -1.5)
    assert tree["guard"]["coast"] == 0.2
    assert tree["guard"]["claim_speed"] == 0.6


@pytest.mark.parametrize(
    ("overrides", "where", "what"),
    [
        ({"laws": "prioritized"}, "override laws", "unknown key"),
        ({"tasks.tool.damping": 1.0}, "override tasks.tool.chart", "missing"),
        ({"plant.seed": 1.5}, "override plant.seed", "wrong type"),
        ({"plant.seed": object()}, "override plant.seed", "a value of type object, which no parameter has"),
        ({"robot.gravity": [0.0, 0.0, float("inf")]}, "override robot.gravity", "not a finite number"),
        ({"robot.gravity": [0.0, 0.0, 10**400]}, "override robot.gravity", "not a finite number"),
        ({"robot.gravity": []}, "override robot.gravity", "an empty list, which ROS cannot type"),
        ({"robot.gravity": [[0.0]]}, "override robot.gravity", "a list in a list, or a block in a list"),
        ({"robot.urdf": "a\0b"}, "override robot.urdf", "a text of several lines or with control characters"),
        ({"": 1.0}, "override", "unknown key"),
        ({"rate": None}, "rate", "missing"),
        ({3: 1.0}, "", "override: a key must be a text"),
    ],
)
def test_overrides_are_checked(tmp_path: Path, overrides: Any, where: str, what: str) -> None:
    found = refused(write(tmp_path), overrides=overrides)
    assert any(where in problem.where and what in problem.what for problem in found), found


def test_values_of_a_node(tmp_path: Path) -> None:
    stack = read_stack(write(tmp_path))
    values = {key: value for key, value in flat(stack.tree) if stack.given(key)}
    again = stack_of_values(values, tmp_path)
    assert again.tree == stack.tree
    with pytest.raises(InputError) as caught:
        stack_of_values(values | {"robot.gravty": 1.0}, tmp_path)
    assert caught.value.problems[0].where == "parameter robot.gravty"
    assert caught.value.problems[0].remedy == "Did you mean 'gravity'?"


def flat(tree: dict[str, Any], prefix: str = "") -> Any:
    """
    Yield dotted keys and values of a nested dict.

    """
    for key, value in tree.items():
        if isinstance(value, dict):
            yield from flat(value, f"{prefix}{key}.")
        else:
            yield f"{prefix}{key}", value


def test_parameters_are_found_by_key(stack: StackFile) -> None:
    damping = find_parameter(stack, "tasks.posture.damping")
    assert damping is not None
    assert (damping.unit, damping.changeable) == ("1/s", True)
    sequence = find_parameter(stack, "tasks.tool_zyz.sequence")
    assert sequence is not None
    assert not sequence.changeable
    assert find_parameter(stack, "tasks.tool_zyz.radius") is None
    assert find_parameter(stack, "robot.locked.finger_joint") is not None


def test_what_may_change_while_running(stack: StackFile) -> None:
    last = {key.rsplit(".", 1)[-1] for key, parameter in all_parameters(stack) if parameter.changeable}
    assert last == {"law", "priority", "stiffness", "damping", "tolerance", "pace"}


def parameters_of(block: Block | Table) -> Any:
    """
    Yield all parameters of a schema.

    """
    if isinstance(block, Table):
        if isinstance(block.entry, Parameter):
            yield block.entry
        else:
            yield from parameters_of(block.entry)
        return
    yield from block.parameters
    for inner in block.blocks:
        yield from parameters_of(inner)


EVERY_PARAMETER = [
    *parameters_of(SCHEMA),
    *parameters_of(REFERENCE),
    *(p for kind in ("pose", "joints") for p in task_keys("any", kind)),
    *task_keys("posture", "joints"),
    *(p for cls in registry().values() for p in cls.parameters),
]


@pytest.mark.parametrize("parameter", EVERY_PARAMETER, ids=lambda parameter: parameter.key)
def test_every_parameter_is_described(parameter: Parameter) -> None:
    assert parameter.type in TYPES
    assert parameter.help.endswith(".")
    assert parameter.help[0].isupper() or parameter.help.split(":")[0] == parameter.choices[0]  # type: ignore[index]
    assert "\n" not in parameter.help
    default = parameter.default
    if parameter.choices is not None and default is not None:
        assert default in parameter.choices
    for number in default if isinstance(default, tuple) else (default,):
        if isinstance(number, float):
            assert parameter.low is None or number >= parameter.low
            assert parameter.high is None or number <= parameter.high


def test_a_wrong_schema_is_a_programming_error() -> None:
    with pytest.raises(ValueError, match="none of"):
        Parameter(key="a", type="float", help="A.")
    with pytest.raises(ValueError, match="no default"):
        Parameter(key="a", type="double", required=True, default=1.0, help="A.")
