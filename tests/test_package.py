# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The package as pip, colcon and a new user's shell see it.

"""

import importlib
import os
import re
import runpy
import subprocess
import sys
import xml.etree.ElementTree as ElementTree
from pathlib import Path
from types import SimpleNamespace

import pytest

from prioritized_tracking import charts

ROOT = Path(__file__).parents[1]
NAME = "prioritized_tracking"
SCRIPTS = ("launch/demo.sh", "tests/run.sh", ".ci/run")

# distribution on the package index -> rosdep key; a ROS package's key is its own name
ROSDEP_KEYS = {
    "matplotlib": "python3-matplotlib",
    "numpy": "python3-numpy",
    "pin": "pinocchio",
    "pyyaml": "python3-yaml",
    "scipy": "python3-scipy",
    "tqdm": "python3-tqdm",
}
# the system has it where ROS is installed, or does well without
NO_ROSDEP_KEY = {"numba", "rmw-fastrtps-cpp", "rosbags"}


@pytest.fixture(scope="module")
def setup_arguments():
    """
    What setup.py hands to setuptools, which itself need not be installed.

    """
    captured = {}
    stub = SimpleNamespace(
        setup=lambda **keywords: captured.update(keywords), find_packages=lambda **_: [NAME]
    )
    before, here = sys.modules.get("setuptools"), os.getcwd()
    sys.modules["setuptools"] = stub
    try:
        os.chdir(ROOT)
        runpy.run_path("setup.py")
    finally:
        os.chdir(here)
        sys.modules.pop("setuptools")
        if before is not None:
            sys.modules["setuptools"] = before
    return captured


@pytest.fixture(scope="module")
def manifest():
    return ElementTree.parse(ROOT / "package.xml").getroot()


def requirement(text: str) -> str:
    return re.split(r"[<>=!~]", text)[0].removeprefix("ros-jazzy-")


def test_package_xml_is_of_format_3_and_of_ament_python(manifest):
    assert manifest.get("format") == "3"
    assert manifest.findtext("export/build_type") == "ament_python"
    assert manifest.findtext("license") == "Apache-2.0"


def test_package_xml_and_setup_py_agree(manifest, setup_arguments):
    for tag in ("name", "version", "description"):
        assert manifest.findtext(tag) == setup_arguments[tag]
    extras = setup_arguments["extras_require"]
    wanted = {
        requirement(text)
        for text in [*setup_arguments["install_requires"], *extras["ros"], *extras["fast"], *extras["report"]]
    } - NO_ROSDEP_KEY
    keys = {ROSDEP_KEYS.get(item, item.replace("-", "_")) for item in wanted}
    assert {element.text for element in manifest.iter("exec_depend")} == keys


def test_every_folder_with_modules_is_a_package():
    """
    find_packages leaves out folders without __init__.py, and nothing says so.

    """
    folders = {path.parent for path in (ROOT / NAME).rglob("*.py")}
    assert len(folders) > 3
    assert all((folder / "__init__.py").is_file() for folder in folders)


def test_extras_and_no_tests_require(setup_arguments):
    assert set(setup_arguments["extras_require"]) == {"ros", "fast", "report", "test"}
    # with tests_require colcon finds no test and calls that a success
    assert "tests_require" not in setup_arguments


def test_data_files_exist_and_are_complete(setup_arguments):
    files = dict(setup_arguments["data_files"])
    assert all((ROOT / source).is_file() for sources in files.values() for source in sources)
    assert files[f"share/{NAME}"] == ["package.xml"]
    data = {
        f"config/{path.name}"
        for path in (ROOT / "config").iterdir()
        if path.suffix in (".csv", ".urdf", ".yaml")
    }
    assert set(files[f"share/{NAME}/config"]) == data
    assert len(data) >= 6
    (marker,) = files["share/ament_index/resource_index/packages"]
    assert Path(marker).name == NAME
    assert (ROOT / marker).read_bytes() == b""


def test_charts_are_registered_as_built_in(setup_arguments):
    found = {}
    for line in setup_arguments["entry_points"]["prioritized_tracking.charts"]:
        name, target = line.split(" = ")
        module, attribute = target.split(":")
        found[name] = getattr(importlib.import_module(module), attribute)
    assert found == charts.BUILT_IN


def test_the_console_script_exists(setup_arguments):
    (line,) = setup_arguments["entry_points"]["console_scripts"]
    name, target = line.split(" = ")
    module, attribute = target.split(":")
    assert name == "prioritized-tracking"
    assert callable(getattr(importlib.import_module(module), attribute))


def test_python_dash_m_runs_the_same_command():
    done = subprocess.run(
        [sys.executable, "-m", NAME, "--help"], cwd=ROOT, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0
    assert "rehearse" in done.stdout
    assert "companion" in done.stdout


@pytest.mark.parametrize("script", SCRIPTS)
def test_scripts_are_executable_and_parse(script):
    path = ROOT / script
    assert os.access(path, os.X_OK)
    subprocess.run(["bash", "-n", str(path)], check=True)


def test_ci_runs_what_the_readme_says():
    lines = (ROOT / ".ci/run").read_text(encoding="utf-8").splitlines()
    assert any(line.split(" ||")[0] == "./tests/run.sh" for line in lines)


def shell(command, folder, **variables):
    """
    Run a script of the repository with a PATH that holds only the tools of the system and `folder`.

    """
    environment = {"PATH": f"{folder}:/usr/bin:/bin", "HOME": str(folder), **variables}
    return subprocess.run(
        command, cwd=ROOT, env=environment, capture_output=True, text=True, check=False, timeout=60
    )


def executable(path: Path, text: str) -> Path:
    path.write_text(f"#!/bin/sh\n{text}\n")
    path.chmod(0o755)
    return path


@pytest.mark.parametrize("script", ["launch/demo.sh", "tests/run.sh"])
def test_too_old_a_python_is_said(script, tmp_path):
    old = executable(tmp_path / "old", 'case "$*" in *version_info*) exit 1;; esac; echo Python 3.8.0')
    done = shell(
        [f"./{script}"],
        tmp_path,
        PRIORITIZED_TRACKING_PYTHON=str(old),
        PRIORITIZED_TRACKING_VENV=str(tmp_path / "venv"),
    )
    assert done.returncode == 2
    assert "3.10 or newer" in done.stderr


def test_a_python_without_venv_is_said_with_the_remedy(tmp_path):
    bare = executable(
        tmp_path / "bare",
        'case "$*" in *version_info*) exit 0;; --version) echo Python 3.11.0; exit 0;; esac; exit 1',
    )
    done = shell(
        ["./tests/run.sh"],
        tmp_path,
        PRIORITIZED_TRACKING_PYTHON=str(bare),
        PRIORITIZED_TRACKING_VENV=str(tmp_path / "venv"),
    )
    assert done.returncode == 2
    assert "python3-venv" in done.stderr


def test_demo_explains_itself_without_setting_anything_up(tmp_path):
    done = shell(["./launch/demo.sh", "--help"], tmp_path, PRIORITIZED_TRACKING_VENV=str(tmp_path / "venv"))
    assert done.returncode == 0
    assert "--out DIR" in done.stdout
    assert not (tmp_path / "venv").exists()
