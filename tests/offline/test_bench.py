# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The bench: what it writes, how it fits and judges. Times themselves are not asserted: they are the machine's.

"""

from __future__ import annotations

import gc
import json
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from prioritized_tracking import cli
from prioritized_tracking.offline import bench_command
from prioritized_tracking.offline.bench import cases, chains, elsewhere, report, steady, step, timing
from prioritized_tracking.offline.bench.targets import TARGETS, judge

ROOT = Path(__file__).parents[2]


def run(capsys, *words):
    try:
        code = cli.main([str(word) for word in words])
    except SystemExit as stop:  # argparse
        code = stop.code
    captured = capsys.readouterr()
    assert "Traceback" not in captured.err
    return code, captured.out, captured.err


@pytest.fixture(scope="module")
def quick(tmp_path_factory):
    """
    A quick run on the planar arm: output and figures.

    """
    out = tmp_path_factory.mktemp("bench") / "made"
    words = ["bench", ROOT / "config/planar_stack.yaml", "--quick", "--out", out, "--set", "rate=500.0"]
    assert cli.main([str(word) for word in words]) == 0
    return out, json.loads((out / "bench.json").read_text(encoding="utf-8"))


def test_writes_figures_and_a_plot(quick):
    out, figures = quick
    assert sorted(path.name for path in out.iterdir()) == ["bench.json", "bench.png"]
    assert (out / "bench.png").read_bytes().startswith(b"\x89PNG")
    assert figures.keys() == {
        "machine", "mode", "reference", "stack", "growth", "steady", "interpreted", "start",
        "rehearsal", "batches", "seconds", "targets", "notes",
    }  # fmt: skip
    assert figures["machine"].keys() >= {"processor", "processors", "load_average", "versions"}


def test_the_reference_case_is_the_one_promised(quick):
    _, figures = quick
    case = figures["reference"]
    assert (case["joints"], case["tasks"], case["rows"]) == (7, 6, 20)
    assert {"1", "2"} <= case["branches"].keys()
    assert case["branches"]["1"]["over_one"] == 1.0
    assert case["parts_us"].keys() == {
        "references", "dynamics", "charts", "hierarchy", "twin", "law", "fixed", "command", "step",
    }  # fmt: skip
    assert case["ratios"].keys() == {
        "textbook_over_step",
        "step_over_pinocchio_terms",
        "step_over_cartesian_impedance",
    }
    times = {name: value["p50_us"] for name, value in case["compared_us"].items()}
    assert case["ratios"]["textbook_over_step"] == pytest.approx(times["textbook"] / times["step"])
    assert case["ratios"]["step_over_pinocchio_terms"] == pytest.approx(
        times["step"] / times["pinocchio_terms"]
    )
    assert (figures["stack"]["name"], figures["stack"]["joints"]) == ("planar_stack", 2)


def test_every_figure_is_there(quick):
    _, figures = quick
    assert figures["interpreted"]["compiled"] is False
    assert figures["rehearsal"].keys() == {"demo_stack", "planar_stack"}
    for of in ("joints", "rows_tool", "rows_links"):
        part = figures["growth"][of]
        assert len(part["kernel_us"]) == len(part["step_us"]) == 2
        assert part["kernel_exponent"] == pytest.approx(
            np.log(part["kernel_us"][1] / part["kernel_us"][0])
            / np.log(np.divide(*(part["joints"] if of == "joints" else part["rows"])[::-1]))
        ), "two points determine the exponent"
    assert figures["growth"]["rows_tool"]["rows"] == [6, 12]
    assert figures["start"].keys() >= {"python_s", "help_s", "argument_error_s", "import_s", "load_s"}
    assert figures["steady"]["cycles"] == bench_command.QUICK.cycles
    assert all(target["measured"] is not None for target in figures["targets"])


def test_prints_what_it_found(quick):
    _, figures = quick
    text = report.tables(figures, width=120)
    for part in (
        figures["machine"]["processor"],
        "textbook over step",
        "branches",
        "growth",
        "wanted",
        *(what for what, *_ in TARGETS),
    ):
        assert part.lower() in text.lower(), part


def test_says_so_without_matplotlib(monkeypatch, tmp_path):
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    monkeypatch.delitem(sys.modules, "prioritized_tracking.offline.bench.plot", raising=False)
    (note,) = bench_command._plot({}, tmp_path / "bench.png")
    assert "no plot" in note
    assert "[report]" in note


# ---- wrong input -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("words", "text"),
    [
        (["missing.yaml"], "does not exist"),
        (["--seconds", "0"], "above 0"),
        (["--seconds", "soon"], "seconds"),
        (["--set", "nonsense"], "key=value"),
        (["--set", "tasks.pen.dampin=3.0"], "damping"),
        (["--fast"], "unrecognized"),
    ],
)
def test_wrong_arguments_end_with_2(words, text, capsys, tmp_path):
    stack = [] if words[0] == "missing.yaml" else [ROOT / "config/planar_stack.yaml"]
    code, _, errors = run(capsys, "bench", *stack, *words, "--quick", "--out", tmp_path / "out")
    assert code == 2
    assert text in errors


def test_a_folder_with_other_files_is_refused(capsys, tmp_path):
    (tmp_path / "thesis.tex").touch()
    code, _, errors = run(capsys, "bench", "--quick", "--out", tmp_path)
    assert code == 2
    assert "holds other files" in errors
    assert [path.name for path in tmp_path.iterdir()] == ["thesis.tex"]


def test_a_process_that_fails_is_reported():
    with pytest.raises(Exception, match="failed in its process"):
        elsewhere.configuring("missing.yaml", {})


# ---- fits, percentiles, targets --------------------------------------------------------------------


@pytest.mark.parametrize("exponent", [0.0, 0.7, 1.0, 3.0])
def test_fit_of_a_power(exponent):
    """Exact for a power, whatever its factor."""
    x = np.array([6.0, 7.0, 14.0, 30.0])
    assert timing.fit_power(x, 4.2 * x**exponent) == pytest.approx(exponent, abs=1e-12)


def test_fit_of_a_line():
    """Exact for a line; a parabola deviates: x² on 0, 1, 2 is 1/3 off its best line, of 4 at most."""
    slope, start, deviation = timing.fit_line([2.0, 5.0, 20.0], [14.0, 20.0, 50.0])
    assert (slope, start) == (pytest.approx(2.0), pytest.approx(10.0))
    assert deviation == pytest.approx(0.0, abs=1e-12)
    *_, deviation = timing.fit_line([0.0, 1.0, 2.0], [0.0, 1.0, 4.0])
    assert deviation == pytest.approx((2.0 / 3.0) / 4.0)


def test_percentiles():
    """Of 0 … 100 µs: the median is 50, the 99th percentile 99."""
    times = timing.times_of(1000 * np.arange(101))
    assert (times.p50_us, times.p99_us, times.calls) == (50.0, 99.0, 101)
    assert times.figures()["p99_over_p50"] == pytest.approx(1.98)


def test_comparing_takes_turns():
    calls = []
    times = timing.compare({"a": lambda: calls.append("a"), "b": lambda: calls.append("b")}, 0.0)
    turn = "a" * timing.TURN + "b" * timing.TURN
    assert "".join(calls) == "ab" + turn + turn
    assert times["a"].calls == 2 * timing.TURN


def test_comparing_tells_slow_from_fast():
    """A sleep of 2 ms takes at least that long, by the clock's promise."""
    times = timing.compare({"slow": lambda: time.sleep(2e-3), "fast": lambda: None}, 0.0)
    assert times["slow"].p50_us >= 2000.0 > times["fast"].p50_us


def test_judging_targets():
    figures = {
        "reference": {"ratios": {"textbook_over_step": 19.9}, "branches": {"2": {"over_one": 1.6}}},
        "interpreted": None,
    }
    found = {target["what"]: target for target in judge(figures)}
    assert found["textbook form / cycle"]["met"] is False
    assert found["textbook form / cycle"]["wanted"] == ">= 20"
    assert found["cycle with two branches / with one"]["met"] is True
    assert found["textbook form / cycle, interpreted"] == {
        "what": "textbook form / cycle, interpreted",
        "wanted": ">= 4",
        "measured": None,
        "met": None,
    }


# ---- what is measured ------------------------------------------------------------------------------


def test_states_have_the_branches_they_are_listed_under():
    controller = step.under_way(cases.reference_source(), None)
    for count, states in cases.states_by_branches(controller, 300).items():
        for t, q, v in cases.spread(states, 2):
            assert controller.step(t, q, v).branches == count


@pytest.mark.parametrize(
    ("n", "tasks"), [(1, []), (6, chains.tool_tasks(6, 5)), (9, chains.link_tasks(9, 7))]
)
def test_chains_have_the_joints_and_one_branch(n, tasks, tmp_path):
    chain = chains.load_chain(tmp_path, n, tasks)
    assert chain.arm.n == n
    assert chain.arm.model.nv == n
    command = chain.step(0.1, chains.bent(n) + 0.01, np.full(n, 0.1))
    assert command.branches == 1
    assert command.share_sum == pytest.approx(n)
    if len(tasks) == 7:
        assert all(task.share == pytest.approx(1.0) for task in list(command.tasks.values())[:-1])


def test_nothing_grows_over_many_cycles():
    """
    With the garbage collector off, a cycle leaves no object behind that it would have to look at.

    """
    controller = step.under_way(cases.reference_source(), None)
    enabled = gc.isenabled()
    found = steady.steady(controller, 10000)
    assert gc.isenabled() == enabled
    assert gc.get_freeze_count() == 0
    assert found["objects"] <= 10
    # Python gives out memory in blocks of 16 bytes at least: not one a cycle, of the 1000 that are traced
    assert found["traced_bytes"] < 16 * 1000


def test_growth_is_seen():
    """
    A controller that keeps what it computed is found out.

    """
    controller = step.under_way(cases.Source(str(ROOT / "config/planar_stack.yaml"), {}), None)
    kept, honest = [], controller.step
    controller.step = lambda t, q, v: kept.append([honest(t, q, v)])
    found = steady.steady(controller, 500)
    assert found["objects"] >= 500
    assert found["traced_bytes"] > 50 * 100


def test_a_path_without_end_is_gone_through_once():
    controller = cases.Source(str(ROOT / "config/planar_stack.yaml"), {}).load()
    times = cases.path_times(controller, 11)
    assert (times[0], times[-1], len(times)) == (0.0, controller.duration, 11)
