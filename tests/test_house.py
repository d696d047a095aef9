# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The rules of the house: what stands where, what imports what, how long things are, what is documented.

"""

import ast
import statistics
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest

from prioritized_tracking import charts
from prioritized_tracking.parameters.stack_schema import STACK
from prioritized_tracking.parameters.stack_tasks import TASK_KEYS, task_keys
from prioritized_tracking.schema import Block, Parameter, Table

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "prioritized_tracking"
MODULES = sorted(PACKAGE.rglob("*.py"))
PURE = sorted([*(PACKAGE / "core").rglob("*.py"), *(PACKAGE / "charts").rglob("*.py")])
SOURCES = sorted(
    [ROOT / "setup.py", *MODULES, *(ROOT / "tests").rglob("*.py"), *(ROOT / "config").rglob("*.py")]
)

IN_THE_ROOT = {
    "DEVELOPERS.md",
    "LICENSE",
    "README.md",
    "config",
    "launch",
    "package.xml",
    "prioritized_tracking",
    "setup.py",
    "tests",
}
NOT_IN_CORE = {
    "rclpy",
    "launch",
    "time",
    "datetime",
    "threading",
    "asyncio",
    "socket",
    "subprocess",
    "os",
    "pathlib",
    "shutil",
    "tempfile",
    "yaml",
    "tqdm",
    "random",
}
LONGEST_FUNCTION, MEDIAN_FUNCTION, LONGEST_MODULE = 60, 10, 400
HEADER = "# Copyright 2026 The prioritized_tracking contributors\n# SPDX-License-Identifier: Apache-2.0\n"


def name(path: Path) -> str:
    return path.relative_to(ROOT).as_posix()


def functions(path: Path) -> Iterator[ast.FunctionDef | ast.AsyncFunctionDef]:
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            yield node


def lines(node: ast.FunctionDef | ast.AsyncFunctionDef) -> int:
    return (node.end_lineno or node.lineno) - node.lineno + 1


def test_root_holds_only_what_belongs_there():
    listed = subprocess.run(
        ["git", "ls-files", "--cached", "--others", "--exclude-standard"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )
    if listed.returncode:
        pytest.skip("not a git working tree: what is ours and what is left behind cannot be told apart")
    found = {line.split("/")[0] for line in listed.stdout.splitlines()}
    assert {entry for entry in found if not entry.startswith(".")} <= IN_THE_ROOT


@pytest.mark.parametrize("path", SOURCES, ids=name)
def test_every_source_has_the_licence_header(path):
    assert not path.stat().st_size or path.read_text(encoding="utf-8").startswith(HEADER)


@pytest.mark.parametrize(
    "path", [*ROOT.glob("launch/*.sh"), ROOT / "tests/run.sh", ROOT / ".ci/run"], ids=name
)
def test_every_script_has_the_licence_header(path):
    assert HEADER in path.read_text(encoding="utf-8")


@pytest.mark.parametrize("path", PURE, ids=name)
def test_core_and_charts_know_neither_ros_nor_files_nor_clocks(path):
    imported = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            imported |= {alias.name.split(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and not node.level and node.module:
            imported.add(node.module.split(".")[0])
        elif isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
            assert node.func.id not in ("open", "print", "input"), f"line {node.lineno}"
    assert not imported & NOT_IN_CORE


@pytest.mark.parametrize("path", MODULES, ids=name)
def test_functions_and_modules_are_short(path):
    count = len(path.read_text(encoding="utf-8").splitlines())
    assert count <= LONGEST_MODULE
    too_long = [
        f"{node.name}: {lines(node)} lines" for node in functions(path) if lines(node) > LONGEST_FUNCTION
    ]
    assert too_long == []


def code_lines(node: ast.FunctionDef | ast.AsyncFunctionDef) -> int:
    """
    Lines of the body, without the docstring.

    """
    body = node.body[1:] if ast.get_docstring(node) is not None else node.body
    return (body[-1].end_lineno or 0) - body[0].lineno + 1 if body else 0


def test_the_median_function_is_short():
    median = statistics.median(code_lines(node) for path in MODULES for node in functions(path))
    assert median <= MEDIAN_FUNCTION


@pytest.mark.parametrize("path", MODULES, ids=name)
def test_type_hints_and_docstrings(path):
    """
    Every function has type hints; everything public has a docstring, with the summary on its second line.

    """
    tree = ast.parse(path.read_text(encoding="utf-8"))
    assert ast.get_docstring(tree) or not tree.body, "the module"
    for function in functions(path):
        assert function.returns is not None, f"{function.name}:{function.lineno} has no return type"
    for node in public(tree):
        text = ast.get_docstring(node, clean=False)
        assert text, f"{node.name}:{node.lineno} has no docstring"
        assert text.startswith("\n"), f"{node.name}:{node.lineno} summary on the second line"
        assert text.rstrip(" ").endswith("\n\n"), f"{node.name}:{node.lineno} blank line at its end"


def public(tree: ast.Module | ast.ClassDef) -> Iterator[ast.ClassDef | ast.FunctionDef]:
    """
    Public classes and functions, and those in public classes; a Protocol describes other people's methods.

    """
    for node in tree.body:
        if isinstance(node, ast.ClassDef | ast.FunctionDef) and not node.name.startswith("_"):
            yield node
            if isinstance(node, ast.ClassDef) and "Protocol" not in {
                ast.unparse(base) for base in node.bases
            }:
                yield from public(node)


def parameters() -> Iterator[tuple[str, Parameter]]:
    """
    Every key of the stack file with its path, those of the charts included.

    """

    def inside(block: Block, path: str) -> Iterator[tuple[str, Parameter]]:
        for parameter in block.parameters:
            yield f"{path}{parameter.key}", parameter
        for child in block.blocks:
            if isinstance(child, Block):
                yield from inside(child, f"{path}{child.key}.")
            elif isinstance(child, Table) and isinstance(child.entry, Block):
                yield from inside(child.entry, f"{path}{child.key}.*.")
            elif isinstance(child, Table):
                yield f"{path}{child.key}.*", child.entry

    yield from inside(STACK, "")
    for parameter in TASK_KEYS:
        yield f"tasks.*.{parameter.key}", parameter
    for parameter in task_keys("posture", "joints"):
        if parameter not in TASK_KEYS:
            yield f"tasks.*.{parameter.key} (posture)", parameter
    for chart, class_ in charts.BUILT_IN.items():
        for parameter in class_.parameters:
            yield f"tasks.*.{parameter.key} ({chart})", parameter


DIMENSIONLESS = {
    "guard.claim_speed",
    "references.*.pace",
    "plant.mass_error",
    "tasks.*.validity (euler)",
    "tasks.*.normal (plane)",
    "tasks.*.axis (cylinder)",
    "tasks.*.axis (cylindrical)",
}


@pytest.mark.parametrize(("path", "parameter"), [pytest.param(*item, id=item[0]) for item in parameters()])
def test_every_parameter_says_what_it_means(path, parameter):
    assert parameter.help.endswith("."), "help is a sentence"
    if parameter.type.startswith("double"):
        assert (path in DIMENSIONLESS) == (parameter.unit == ""), "a number has a unit, or is listed"


def test_parameters_cover_the_whole_file():
    """
    The walk above reaches every block; a few keys of each kind stand for all.

    """
    found = {path for path, _ in parameters()}
    assert found >= {
        "rate",
        "robot.urdf",
        "robot.locked.*",
        "robot.payload.mass",
        "references.*.file",
        "guard.claim_speed",
        "plant.friction.coulomb",
        "tasks.*.handover",
        "tasks.*.damping (posture)",
        "tasks.*.sequence (euler)",
    }
