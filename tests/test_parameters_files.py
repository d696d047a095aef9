# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Files a stack file names, the file itself, and charts of other packages.

"""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any, ClassVar

import pytest

from prioritized_tracking.charts import registry
from prioritized_tracking.parameters import StackFile, read_stack, resolve
from prioritized_tracking.schema import Parameter
from tests.stack_example import STACK, changed, line_of, refused, write


@pytest.fixture
def stack(tmp_path: Path) -> StackFile:
    return read_stack(write(tmp_path))


class TestPaths:
    def test_relative_to_the_file(self, stack: StackFile) -> None:
        assert resolve(stack, "sub/weld.csv") == stack.path.parent / "sub/weld.csv"
        assert resolve(stack, "/abs/weld.csv") == Path("/abs/weld.csv")
        assert resolve(stack, "file:///abs/weld.csv") == Path("/abs/weld.csv")

    def test_relative_to_base_dir(self, tmp_path: Path) -> None:
        (tmp_path / "sub").mkdir()
        write(tmp_path / "sub")
        path = write(tmp_path)
        (tmp_path / "weld.csv").unlink()
        stack = read_stack(path, overrides={"base_dir": "sub"})
        assert resolve(stack, "weld.csv") == tmp_path / "sub" / "weld.csv"

    def test_package_of_a_ros_installation(
        self, stack: StackFile, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        share = tmp_path / "prefix" / "share" / "arm_description"
        share.mkdir(parents=True)
        monkeypatch.setenv("AMENT_PREFIX_PATH", f"/nowhere:{tmp_path / 'prefix'}")
        assert resolve(stack, "package://arm_description/urdf/arm.urdf") == share / "urdf/arm.urdf"

    def test_package_of_a_python_installation(
        self, stack: StackFile, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        share = tmp_path / "share" / "arm_description"
        share.mkdir(parents=True)
        monkeypatch.setattr(sys, "prefix", str(tmp_path))
        assert resolve(stack, "package://arm_description/arm.urdf") == share / "arm.urdf"

    def test_package_in_a_source_tree(self, tmp_path: Path) -> None:
        config = tmp_path / "src" / "cell" / "config"
        config.mkdir(parents=True)
        for name in ("cell", "arm_description"):
            (tmp_path / "src" / name).mkdir(exist_ok=True)
            (tmp_path / "src" / name / "package.xml").write_text("")
        stack = read_stack(write(config))
        assert resolve(stack, "package://arm_description/a.urdf") == tmp_path / "src/arm_description/a.urdf"
        assert resolve(stack, "package://cell/a.urdf") == tmp_path / "src/cell/a.urdf"

    def test_own_package(self, stack: StackFile) -> None:
        here = Path(__file__).resolve().parents[1]
        assert resolve(stack, "package://prioritized_tracking/config/a.urdf") == here / "config/a.urdf"

    @pytest.mark.parametrize(
        "value", ["package://no_such_package/a", "package:///a", "package://../a", "http://a/b"]
    )
    def test_what_cannot_be_resolved(self, tmp_path: Path, value: str) -> None:
        found = refused(write(tmp_path, changed(("arm.urdf", value))))
        assert found[0].where == "stack.yaml:9 robot.urdf"
        assert value in found[0].got


class TestFiles:
    def test_missing_file_names_its_neighbour(self, tmp_path: Path) -> None:
        (found,) = refused(write(tmp_path, changed(("weld.csv", "wield.csv"))))
        assert found.what == "no such file"
        assert found.where == f"stack.yaml:{line_of('weld.csv')} references.weld.file"
        assert found.remedy == "Did you mean 'weld.csv'?"

    @pytest.mark.parametrize("value", [".", "/dev/null", "arm.urdf/x", "x" * 5000])
    def test_what_is_no_file(self, tmp_path: Path, value: str) -> None:
        (found,) = refused(write(tmp_path, changed(("weld.csv", value))))
        assert "references.weld.file" in found.where

    def test_companion_to_be_computed_may_be_missing(self, tmp_path: Path) -> None:
        path = write(tmp_path, changed(("follows: weld", "follows: weld, file: elbow.csv")))
        assert [problem.what for problem in refused(path)] == ["no such file"]
        read_stack(path, new_companions=True)

    @pytest.mark.parametrize(
        ("content", "what"),
        [
            (STACK.encode("utf-16"), "UTF-16"),
            (b"\x7fELF\0\0\0", "binary"),
            (STACK.encode() + b"# \xe9\n", "UTF-8"),
            (STACK.encode() + b"#" * (1 << 20), "too large"),
        ],
    )
    def test_what_is_no_stack_file(self, tmp_path: Path, content: bytes, what: str) -> None:
        path = write(tmp_path)
        path.write_bytes(content)
        assert what in refused(path)[0].what

    def test_byte_order_mark_and_line_ends_of_windows(self, tmp_path: Path) -> None:
        path = write(tmp_path)
        path.write_bytes(b"\xef\xbb\xbf" + STACK.replace("\n", "\r\n").encode())
        assert read_stack(path).tree["rate"] == 1000.0

    @pytest.mark.parametrize("name", ["", "no.yaml", "a\0b", "x" * 5000, "/dev/zero", "/"])
    def test_paths_that_cannot_be_read(self, tmp_path: Path, name: str) -> None:
        assert len(refused(tmp_path / name)) == 1


class Ring:
    """
    A chart of another package.

    """

    kind: ClassVar[str] = "pose"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter(key="size", type="double", unit="m", required=True, help="Its size."),
    )
    coordinates = ("along", "across")

    def __init__(self, size: float) -> None:
        if size > 1.0:
            raise ValueError("size: expected at most 1 m")
        if size < 0.0:
            raise RuntimeError("size and something else")


class TestPlugIns:
    CHANGE = ("chart: cylinder\n", "chart: ring\n        size: 0.1\n")
    REST = (
        ("        point: [0.5, 0.0, 0.4]\n", ""),
        ("        axis: [0.0, 0.0, 1.0]\n", ""),
        ("        radius: 0.1\n", ""),
    )

    def path(self, folder: Path, *changes: tuple[str, str]) -> Path:
        return write(folder, changed(self.CHANGE, *self.REST, *changes))

    def test_its_keys_are_read(self, tmp_path: Path) -> None:
        stack = read_stack(self.path(tmp_path), charts={**registry(), "ring": Ring})
        assert stack.tree["tasks"]["seam_radius"]["size"] == 0.1

    def test_its_gains_have_its_length(self, tmp_path: Path) -> None:
        path = self.path(tmp_path, ("stiffness: 960.0", "stiffness: [1.0, 2.0, 3.0]"))
        (found,) = refused(path, charts={**registry(), "ring": Ring})
        assert found.expected == "one number, or 2, one per coordinate (along, across)"

    def test_its_refusals_are_reported(self, tmp_path: Path) -> None:
        charts = {**registry(), "ring": Ring}
        path = write(tmp_path, changed((self.CHANGE[0], self.CHANGE[1].replace("0.1", "2.0")), *self.REST))
        (found,) = refused(path, charts=charts)
        assert (found.what, found.expected, found.got) == ("refused by chart ring", "at most 1 m", "2.0")
        assert found.where.endswith("tasks.seam_radius.size")
        path = write(tmp_path, changed((self.CHANGE[0], self.CHANGE[1].replace("0.1", "-1.0")), *self.REST))
        (found,) = refused(path, charts=charts)
        assert found.what == "chart ring refuses its parameters: size and something else"

    @pytest.mark.parametrize(
        "broken", [object(), int, type("Chart", (), {"kind": "pose", "parameters": ["radius"]})]
    )
    def test_what_is_no_chart(self, tmp_path: Path, broken: Any) -> None:
        assert "is no chart" in refused(write(tmp_path), charts={**registry(), "x": broken})[0].what

    def test_what_cannot_be_loaded(self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        def broken() -> None:
            raise ImportError("no module named ring")

        monkeypatch.setattr("prioritized_tracking.charts.registry", broken)
        assert "no module named ring" in refused(write(tmp_path))[0].what
