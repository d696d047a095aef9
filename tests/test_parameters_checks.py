# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
# ruff: noqa: E501 - one case a line
"""
What a stack file is refused for: one change of a good file each, and what is then said.

"""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.stack_example import line_of, problems, read

Change = tuple[str, str]

WELD = "{kind: pose, base: base_link, source: file, file: weld.csv, repeat: 1, pace: 1.0, start: service}"
ELBOW = "{kind: joints, source: companion, follows: weld}"
POSTURE = "posture: {chart: posture, reference: elbow}"
PRIORITY = "[seam_radius, tool_zyz, tool_xyz, wrist, posture]"
GUARD = "guard: {"

# (change, key of the problem, what it says, what its other lines say)
ONE_FAULT: list[tuple[Change, str, str, str]] = [
    # keys
    (("    rate: 1000.0", "    rat: 1000.0"), "rat", "unknown key", "Did you mean 'rate'?"),
    (("on_silence", "on_silance"), "robot.on_silance", "unknown key", "Did you mean 'on_silence'?"),
    (("law: prioritized", "state_timeout: 0.01"), "state_timeout", "unknown key", "It belongs to guard."),
    (("tolerance: 0.02", "radius_m: 0.02"), "tasks.seam_radius.radius_m", "unknown key", "Did you mean 'radius'?"),
    (("    rate: 1000.0\n", ""), "rate", "missing", "at least 50 and at most 4000 (Hz)"),
    (("        frame: tool\n        base", "        base"), "tasks.seam_radius.frame", "missing", "a text"),
    (("        radius: 0.1\n", ""), "tasks.seam_radius.radius", "missing", "a number"),
    (("        damping: 120.0\n", ""), "tasks.seam_radius.damping", "missing", "N·s/m"),
    (("        chart: cylinder\n", ""), "tasks.seam_radius.chart", "missing", "a text"),
    ((POSTURE, "posture: 3"), "tasks.posture", "wrong type", "a block of keys"),
    (("guard: {state_timeout: 0.01, coast", "guard: {coast: 0.1, coast"), "guard.coast", "key given twice", "first at"),
    (("{finger_joint: 0.02}", "{}"), "robot.locked", "an empty block", "Leave the key out"),
    (("{finger_joint: 0.02}", "0.02"), "robot.locked", "wrong type", "a block of keys"),
    (("{finger_joint: 0.02}", "{finger_joint: open}"), "robot.locked.finger_joint", "wrong type", "a number"),
    (("frame: tool, mass: 0.2, com", "mass: 0.2, com"), "robot.payload.frame", "missing", "a text"),
    # types
    (("rate: 1000.0", "rate: fast"), "rate", "wrong type", "the text 'fast'"),
    (("rate: 1000.0", "rate: '1000.0'"), "rate", "wrong type", "Write 1000.0: no quotes"),
    (("rate: 1000.0", "rate: 1_000"), "rate", "wrong type", "Write 1000: no quotes"),
    (("rate: 1000.0", "rate: 1e400"), "rate", "wrong type", "beyond the range of a double"),
    (("rate: 1000.0", "rate: [1000.0]"), "rate", "wrong type", "the list [1000.0]"),
    (("rate: 1000.0", "rate: true"), "rate", "wrong type", "the truth value true"),
    (("law: prioritized", "law: 1"), "law", "wrong type", "in quotes"),
    (("law: prioritized", "autostart: 1"), "autostart", "wrong type", "true or false, without quotes"),
    (("delay_cycles: 1", "delay_cycles: 1.0"), "robot.delay_cycles", "wrong type", "without a decimal point"),
    (("[a1, a2, a3]", "a1"), "robot.joints", "wrong type", "Write it as a list, ['a1']."),
    (("[a1, a2, a3]", "[1, 2, 3]"), "robot.joints", "wrong type", "texts in quotes"),
    (("{viscous: [0.5, 0.5, 0.2], coulomb: [0.0", "{viscous: 0.5, coulomb: [0.0"), "robot.friction.viscous", "wrong type", "[0.5]"),
    (("frame: tool, mass: 0.2", "frame: on, mass: 0.2"), "robot.payload.frame", "wrong type", "in quotes"),
    (("law: prioritized", "law: priority"), "law", "unknown choice", "Did you mean 'prioritized'?"),
    (("urdf: \"arm.urdf\"", "urdf: ''"), "robot.urdf", "an empty text", "Leave the key out"),
    # numbers
    (("mass: 0.2", "mass: .nan"), "robot.payload.mass", "not a finite number", "nan"),
    (("mass: 0.2", "mass: -0.2"), "robot.payload.mass", "out of range", "at least 0"),
    (("[0.0, 0.0, -9.81]", "[0.0, 0.0, -.inf]"), "robot.gravity", "not a finite number", "-inf (value 3 of 3)"),
    (("[0.0, 0.0, -9.81]", "[0.0, -9.81]"), "robot.gravity", "wrong length", "of length 3"),
    (("damping: 120.0", "damping: -120.0"), "tasks.seam_radius.damping", "out of range", "greater than 0"),
    (("damping: 120.0", "damping: 0.0"), "tasks.seam_radius.damping", "out of range", "greater than 0"),
    (("damping: [20.0, 20.0, 10.0]", "damping: [20.0, 0.0, 10.0]"), "tasks.tool_xyz.damping", "out of range", "0.0 (value 2 of 3)"),
    (("stiffness: 960.0", "stiffness: -1.0"), "tasks.seam_radius.stiffness", "out of range", "at least 0"),
    (("stiffness: [160.0, 160.0, 80.0]", "stiffness: [160.0, 160.0]"), "tasks.tool_xyz.stiffness", "wrong length", "one number, or 3"),
    (("force: 0.0", "force: [1.0, 2.0]"), "tasks.seam_radius.force", "wrong length", "one number, or 1"),
    (("tolerance: 0.02", "tolerance: 0.0"), "tasks.seam_radius.tolerance", "out of range", "greater than 0"),
    (("[60.0, 600.0]", "[600.0, 60.0]"), "tasks.seam_radius.handover", "the band does not rise", "[600, 60]"),
    (("[60.0, 600.0]", "[60.0, 60.0]"), "tasks.seam_radius.handover", "the band does not rise", "[60, 60]"),
    (("[60.0, 600.0]", "[0.0, 60.0]"), "tasks.seam_radius.handover", "out of range", "greater than 0"),
    (("[60.0, 600.0]", "[60.0, 1.0e17]"), "tasks.seam_radius.handover", "out of range", "less than 1000000000"),
    (("[60.0, 600.0]", "[60.0]"), "tasks.seam_radius.handover", "wrong length", "of length 2"),
    (("rate: 1000.0", "rate: 0.0"), "rate", "out of range", "at least 50"),
    (("pace: 1.0", "pace: 0.001"), "references.weld.pace", "out of range", "at least 0.01"),
    (("pace: 1.0", "pace: 1.5"), "references.weld.pace", "out of range", "at most 1"),
    (("repeat: 1", "repeat: -1"), "references.weld.repeat", "out of range", "at least 0"),
    (("mass_error: 0.05", "mass_error: 5.0"), "plant.mass_error", "out of range", "at most 0.5"),
    (("inertia: [0.001, 0.001, 0.001]", "inertia: [0.001, 0.001, 0.003]"), "robot.payload.inertia", "no body has this inertia", ""),
    # joints
    (("rotor_inertia: [0.1, 0.1, 0.05]", "rotor_inertia: [0.1, 0.1]"), "robot.rotor_inertia", "wrong length", "3 numbers"),
    (("start: [0.0, 0.7, 1.2]", "start: [0.0, 0.7]"), "plant.start", "wrong length", "3 numbers"),
    (("torque_limit: [80.0, 80.0, 40.0]", "torque_limit: [80.0, 0.0, 40.0]"), "robot.torque_limit", "out of range", "(value 2 of 3)"),
    (("[a1, a2, a3]", "[a1, a2, a2]"), "robot.joints", "named twice", "'a2'"),
    (("finger_joint", "a2"), "robot.locked.a2", "both locked and controlled", ""),
    # priority
    ((PRIORITY, "[seam_radius, tool_zyz, tool_xyz, wrists, wrist, posture]"), "priority", "undefined task", "Did you mean 'wrist'?"),
    ((PRIORITY, "[seam_radius, tool_zyz, wrist, posture]"), "tasks.tool_xyz", "task is not used", "Put it into priority"),
    ((PRIORITY, "[seam_radius, tool_zyz, tool_xyz, wrist, wrist, posture]"), "priority", "named twice", "'wrist'"),
    ((PRIORITY, "[seam_radius, tool_zyz, posture, tool_xyz, wrist]"), "priority", "posture 'posture' is not last", "followed by wrist"),
    (("    priority: " + PRIORITY + "\n", ""), "priority", "missing", "a list of texts"),
    # charts
    (("chart: cylinder", "chart: cilinder"), "tasks.seam_radius.chart", "unknown chart", "Did you mean 'cylinder'?"),
    (("axis: [0.0, 0.0, 1.0]", "axis: [0.0, 0.0, 0.0]"), "tasks.seam_radius.axis", "refused by chart cylinder", "three numbers that are not all zero"),
    ((POSTURE, POSTURE[:-1] + ", frame: tool}"), "tasks.posture.frame", "has no meaning with chart posture", "Remove"),
    ((POSTURE, POSTURE[:-1] + ", handover: [1.0, 2.0]}"), "tasks.posture.handover", "has no meaning with chart posture", ""),
    ((POSTURE, POSTURE[:-1] + ", damping: [40.0, 40.0, 40.0]}"), "tasks.posture.damping", "wrong type", "a number"),
    (("[a3], reference: elbow, stiffness: 20.0", "[a3], reference: elbow, stiffness: [20.0, 20.0]"), "tasks.wrist.stiffness", "wrong length", "(a3)"),
    # channels
    (("reference: weld\n        stiffness: 960.0", "reference: wled\n        stiffness: 960.0"), "tasks.seam_radius.reference", "undefined channel", "Did you mean 'weld'?"),
    (("[a3], reference: elbow", "[a3], reference: weld"), "tasks.wrist.reference", "chart joints needs a channel of kind joints", "of kind pose"),
    (("reference: weld\n        stiffness: 960.0", "reference: elbow\n        stiffness: 960.0"), "tasks.seam_radius.reference", "chart cylinder needs a channel of kind pose", ""),
    (("base: base_link\n", "base: table\n"), "tasks.seam_radius.base", "task and reference have different bases", "'table', and 'base_link'"),
    ((f"weld: {WELD}", f"weld: {WELD}\n      spare: {{kind: pose, source: hold}}"), "references.spare", "channel is not used", "Use it"),
    (("sequence: zyz, frame: tool", "sequence: zyz, frame: wrist_link"), "tasks.tool_zyz.frame", "channel 'weld' moves two frames", "'tool' and 'wrist_link'"),
    (("kind: pose,", "kind: joint,"), "references.weld.kind", "unknown choice", "Did you mean 'joints'?"),
    ((WELD, WELD[:-1] + ", follows: elbow}"), "references.weld.follows", "a pose channel follows nobody", "Only a joints"),
    ((ELBOW, "{kind: joints, source: companion}"), "references.elbow.follows", "missing", "the pose channel"),
    ((ELBOW, "{kind: joints, source: companion, follows: wield}"), "references.elbow.follows", "undefined channel", "Did you mean 'weld'?"),
    ((ELBOW, ELBOW[:-1] + ", pace: 0.5}"), "references.elbow.pace", "has no meaning where a channel follows another", "that of 'weld'"),
    ((ELBOW, ELBOW[:-1] + ", base: base_link}"), "references.elbow.base", "a joints channel has no base", ""),
    ((ELBOW, "{kind: joints, source: hold, repeat: 2}"), "references.elbow.repeat", "has no meaning with source: hold", ""),
    ((ELBOW, "{kind: joints, source: topic, file: weld.csv}"), "references.elbow.file", "has no meaning with source: topic", ""),
    ((ELBOW, "{kind: joints, source: file}"), "references.elbow.file", "missing", "CSV"),
    ((ELBOW, "{kind: joints, source: file, file: weld.csv, follows: elbow}"), "references.elbow.follows", "channels follow each other", "elbow → elbow"),
    ((WELD, "{kind: pose, base: base_link, source: companion}"), "references.weld.source", "a companion is a joint path", ""),
    ((WELD, "{kind: pose, base: base_link, source: hold}"), "references.elbow.follows", "'weld' is held at one place", "source: hold here too"),
    # names
    (("      wrist: {chart", "      2wrist: {chart"), "tasks.2wrist", "not a ROS name", "first a letter"),
    # rates
    (("telemetry_rate: 100.0", "telemetry_rate: 2000.0"), "telemetry_rate", "faster than the control rate", "at most 1000 Hz"),
    (("state_timeout: 0.01", "state_timeout: 0.0005"), "guard.state_timeout", "out of range", "at least one control period"),
    (("delay_cycles: 1", "velocity: from_position"), "robot.velocity_cutoff", "missing", "Hz"),
    (("delay_cycles: 1", "velocity_cutoff: 500.0"), "robot.velocity_cutoff", "out of range", "500 Hz"),
    (("law: prioritized", "use_sim_time: true"), "use_sim_time", "the fixed-rate loop runs by the steady clock", "cycle: state"),
    (("law: prioritized", "use_sim_time: 1"), "use_sim_time", "wrong type", "true or false"),
    (("delay_cycles: 1", "enable_topic: 'e stop'"), "robot.enable_topic", "not a ROS topic name", "'e stop'"),
    # files
    (("arm.urdf", "arn.urdf"), "robot.urdf", "no such file", "Did you mean 'arm.urdf'?"),
    (("law: prioritized", "base_dir: nowhere"), "base_dir", "no such folder", "nowhere"),
]  # fmt: skip


@pytest.mark.parametrize(("change", "key", "what", "details"), ONE_FAULT, ids=lambda x: None)
def test_one_fault_gives_one_problem(
    tmp_path: Path, change: Change, key: str, what: str, details: str
) -> None:
    found = [problem for problem in problems(tmp_path, change) if what in problem.what]
    assert len(found) == 1, problems(tmp_path, change)
    (problem,) = found
    assert problem.where.partition(" ")[2] == key
    assert problem.where.startswith("stack.yaml:") or "." not in key
    assert details in "\n".join((problem.what, problem.expected, problem.got, problem.remedy))
    assert problem.expected or problem.got or problem.remedy


CONSEQUENCES = {
    "unknown key",
    "missing",
    "undefined task",
    "task is not used: it is not in priority",
    "no such file",
}


@pytest.mark.parametrize(("change", "key", "what", "details"), ONE_FAULT, ids=lambda x: None)
def test_a_fault_is_not_said_twice(tmp_path: Path, change: Change, key: str, what: str, details: str) -> None:
    del details
    # A misspelt key is also a missing one, a misspelt task an undefined one, and base_dir moves all files.
    others = [
        p.what for p in problems(tmp_path, change) if not (what in p.what and p.where.endswith(f" {key}"))
    ]
    assert set(others) <= CONSEQUENCES | {
        "channel is not used: no task has it as reference and no channel follows it"
    }
    assert len(others) <= 2


def test_the_example_is_good(tmp_path: Path) -> None:
    assert problems(tmp_path) == ()


def test_all_problems_come_at_once_in_the_order_of_lines(tmp_path: Path) -> None:
    changes = [
        ("rate: 1000.0", "rate: 10.0"),
        ("mass: 0.2", "mass: -1.0"),
        (PRIORITY, "[seam_radius, tool_zyz, posture]"),
        ("damping: 120.0", "dampng: 120.0"),
        ("chart: posture", "chart: postur"),
        ("pace: 1.0", "pace: 2.0"),
        ("seed: 0", "seed: ~"),
    ]
    found = problems(tmp_path, *changes)
    lines = [int(problem.where.partition(":")[2].partition(" ")[0]) for problem in found]
    assert lines == sorted(lines)
    said = [(problem.where.partition(" ")[2], problem.what.partition(":")[0]) for problem in found]
    assert said == [
        ("rate", "out of range"),
        ("robot.payload.mass", "out of range"),
        ("tasks.seam_radius.damping", "missing"),
        ("tasks.seam_radius.dampng", "unknown key"),
        ("tasks.tool_xyz", "task is not used"),
        ("tasks.wrist", "task is not used"),
        ("tasks.posture.chart", "unknown chart"),
        ("references.weld.pace", "out of range"),
        ("plant.seed", "no value"),
    ]
    assert found[0].where == f"stack.yaml:{line_of('rate: 1000.0')} rate"


def test_a_second_posture_is_refused(tmp_path: Path) -> None:
    second = "\n      rest: {chart: posture, reference: elbow}"
    found = problems(tmp_path, (POSTURE, POSTURE + second), (PRIORITY, PRIORITY[:-1] + ", rest]"))
    assert [problem.what for problem in found] == ["posture 'posture' is not last"]


def test_one_pose_drives_one_frame(tmp_path: Path) -> None:
    spare = "\n      spare: {kind: pose, source: hold}"
    changes = [
        (f"weld: {WELD}", f"weld: {WELD}{spare}"),
        ("zyz, frame: tool, reference: weld", "zyz, frame: tool, reference: spare"),
    ]
    (problem,) = problems(tmp_path, *changes)
    assert problem.what == "frame 'tool' has two channels"
    assert problem.got == "'weld' and 'spare'"
    assert problem.where.endswith(" tasks.tool_zyz.reference")
    other = ("zyz, frame: tool, reference: weld", "zyz, frame: flange, reference: spare")
    assert problems(tmp_path, changes[0], other) == ()


def test_a_circle_of_channels_is_said_once(tmp_path: Path) -> None:
    a = "{kind: joints, source: file, file: weld.csv, follows: other}"
    b = "\n      other: {kind: joints, source: file, file: weld.csv, follows: elbow}"
    found = problems(tmp_path, (ELBOW, a + b))
    assert [problem.got for problem in found] == ["elbow → other → elbow"]


ALLOWED: list[list[Change]] = [
    [(PRIORITY, "[seam_radius, tool_zyz, tool_xyz, wrist]"), (f"      {POSTURE}\n", "")],
    [(PRIORITY, "[tool_xyz, wrist, seam_radius, tool_zyz, posture]")],
    [("rate: 1000.0", "rate: 1000")],
    [("[0.0, 0.0, -9.81]", "[0, 0, -10]")],
    [("stiffness: 960.0", "stiffness: 0.0")],
    [("stiffness: 960.0", "stiffness: [960.0]")],
    [("repeat: 1", "repeat: 0")],
    [("base: base_link\n", "base: base_link  # same\n")],
    [("        base: base_link\n", "")],
    [("inertia: [0.001, 0.001, 0.001]", "inertia: [0.001, 0.001, 0.002]")],
    [(ELBOW, "{kind: joints, source: hold}")],
    [(ELBOW, "{kind: joints, source: topic}")],
    [(ELBOW, "{kind: joints, source: file, file: weld.csv, start: activation, pace: 0.5}")],
    [(ELBOW, "{kind: joints, source: file, file: weld.csv, follows: weld}")],
    [(WELD, "{kind: pose, base: base_link, source: topic}")],
    [("delay_cycles: 1", "enable_topic: '~/enable'")],
    [("cycle: clock", "cycle: state"), ("law: prioritized", "use_sim_time: true")],
    [("delay_cycles: 1", "velocity: from_position\n      velocity_cutoff: 50.0")],
    [("rate: 1000.0", "rate: 50.0"), ("telemetry_rate: 100.0", "telemetry_rate: 50.0"), ("state_timeout: 0.01", "state_timeout: 0.02")],
]  # fmt: skip


@pytest.mark.parametrize("changes", ALLOWED)
def test_what_is_allowed(tmp_path: Path, changes: list[Change]) -> None:
    assert problems(tmp_path, *changes) == ()


def test_what_has_no_effect_is_a_warning(tmp_path: Path) -> None:
    assert read(tmp_path).warnings == ()
    (warning,) = read(tmp_path, ("delay_cycles: 1", "velocity_cutoff: 50.0")).warnings
    assert "velocity_cutoff" in warning
