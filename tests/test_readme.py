# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What the README says is true: its commands and examples run as they stand, its tables are complete.

"""

import json
import re
import shlex
import shutil
from pathlib import Path

import numpy as np
import pytest

from prioritized_tracking import charts
from prioritized_tracking.cli import main
from tests.test_house import parameters

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
PATH_EXAMPLE, CHART_EXAMPLE, API_EXAMPLE = re.findall(r"```python\n(.*?)```", README, re.DOTALL)
(STACK_EXAMPLE,) = re.findall(r"```yaml\n(.*?)```", README, re.DOTALL)
COMMANDS = re.findall(r"^    prioritized-tracking (.*?)(?: +#.*)?$", README, re.MULTILINE)


def default_text(parameter):
    """
    A default as in the stack file.

    """
    if parameter.required:
        return "required"
    if parameter.default is None:
        return ""
    if isinstance(parameter.default, tuple):
        return f"[{', '.join(str(item) for item in parameter.default)}]"
    return str(parameter.default).lower() if isinstance(parameter.default, bool) else str(parameter.default)


def key_table():
    """
    The README's table of keys, from the schema; print it to renew the README.

    """
    lines = ["| key | unit | default | meaning |", "|---|---|---|---|"]
    for path, parameter in parameters():
        choices = f" One of {', '.join(parameter.choices)}." if parameter.choices else ""
        key, _, chart = path.replace("*", "NAME").partition(" ")
        key = f"`{key}` {chart}".strip()
        lines.append(f"| {key} | {parameter.unit} | {default_text(parameter)} | {parameter.help}{choices} |")
    return "\n".join(lines)


def test_the_table_of_keys_is_complete_and_true():
    assert key_table() in README


def test_the_table_of_charts_is_complete():
    table = README.split("## Charts")[1].split("###")[0]
    found = re.findall(r"^\| `(\w+)`", table, re.MULTILINE)
    assert sorted(found) == sorted(charts.BUILT_IN)
    for name, chart in charts.BUILT_IN.items():
        (line,) = re.findall(rf"^\| `{name}` .*$", table, re.MULTILINE)
        assert all(f"`{parameter.key}`" in line for parameter in chart.parameters)


def test_every_file_named_exists():
    for name in re.findall(r"`((?:config|launch|tests)/[\w./]+)`", README):
        assert (ROOT / name).exists(), name


def test_the_example_arm_goes_the_whole_way(tmp_path, monkeypatch, capsys):
    """
    Path, stack, companion, rehearsals of "Your own arm", with the demo's arm; the bench; all shortened.

    """
    monkeypatch.chdir(tmp_path)
    shutil.copy(ROOT / "config/seven_axis_arm.urdf", "my_arm.urdf")
    exec(compile(PATH_EXAMPLE, "README.md", "exec"), {})
    Path("stack.yaml").write_text(STACK_EXAMPLE, encoding="utf-8")
    verbs = []
    for command in COMMANDS:
        arguments = shlex.split(command)
        verbs.append(arguments[0])
        if arguments[0] == "rehearse":
            arguments += ["--seconds", "0.05"]
        if arguments[0] == "bench":
            arguments += ["--quick"]
        assert main(arguments) == 0, capsys.readouterr().err
    assert verbs == ["companion", "rehearse", "rehearse", "bench"]
    summary = json.loads(Path("results/summary.json").read_text(encoding="utf-8"))
    table = README.split("### Reading the results")[1].split("## How it works")[0]
    table, signals = table.split("Signals by name")
    named = set(re.findall(r"`([a-z_]+)(?:\.[A-Z]+)?`", table)) - {
        "fail",
        "pass",
        "null",
        "tolerance",
        "settle_s",
    }
    task, tool = summary["tasks"]["tip"], summary["tool"]["probe"]
    joint = next(iter(summary["joints"].values()))
    assert named - summary.keys() - task.keys() - tool.keys() - joint.keys() == {"_all"}
    with np.load("results/signals_prioritized.npz") as stored:
        kinds = {
            re.sub("^probe", "FRAME", re.sub(r"^(tip|tool_zyz|tool_xyz|posture)\.", "TASK.", n))
            for n in stored
        }
    assert set(re.findall(r"`([A-Za-z_.]+)`", signals)) == kinds
    assert Path("results/signals_cartesian_impedance.npz").is_file()
    assert Path("results/stack.yaml").is_file()


def test_the_python_example_runs(monkeypatch):
    monkeypatch.chdir(ROOT)
    names = {}
    exec(compile(API_EXAMPLE, "README.md", "exec"), names)
    assert names["command"].torque.shape == (2,)
    assert names["controller"].joints == ("shoulder", "elbow")


def test_the_chart_example_is_a_chart():
    """
    rows · V = ẋ by central differences, and a validity that is 0 in the middle and 1 outside.

    """
    names = {"__name__": "example"}
    exec(compile(CHART_EXAMPLE, "README.md", "exec"), names)
    sphere = names["Sphere"](center=(0.1, 0.2, 0.3), radius=0.5)

    def at(p):
        x, rows, rate = np.zeros(1), np.zeros((1, 6)), np.eye(1)
        return sphere.evaluate(np.eye(3), p, x, rows, rate), x, rows

    p, v, h = np.array([0.6, -0.1, 0.4]), np.array([0.3, 0.5, -0.2]), 1e-6
    validity, _, rows = at(p)
    slope = (at(p + h * v)[1] - at(p - h * v)[1]) / (2.0 * h)
    # differences are good to eps/h = 2e-10 and h² = 1e-12
    np.testing.assert_allclose(rows[:, :3] @ v, slope, atol=1e-9)
    assert validity == pytest.approx(1.0)
    assert at(np.array([0.1, 0.2, 0.35]))[0] == 0.0
    for parameter in sphere.parameters:
        assert parameter.help
