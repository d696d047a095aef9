# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Figures and verdict of a rehearsal, from signals written by hand so that every figure is known.

"""

import json
import math
from types import SimpleNamespace

import numpy as np
import pytest

from prioritized_tracking.errors import InputError
from prioritized_tracking.offline import table
from prioritized_tracking.offline.run import Event, GainCheck, Run, TaskFacts
from prioritized_tracking.offline.signals import Signals
from prioritized_tracking.offline.summary import json_ready, summarise, summarise_run, to_json

RATE = 10.0
JOINTS = ("a", "b")
COUNT = 20
SETTLE = 1.0


def report(error=(0.0, 0.0), share=2.0, inertia=3.0, validity=1.0):
    return SimpleNamespace(error=np.array(error), share=share, apparent_inertia=inertia, validity=validity)


def make_run(
    change=None, *, law="prioritized", ended="complete", tolerance=None, events=(), units=("rad", "rad")
):
    """
    Return a run of 2 s at 10 Hz in which nothing happens, but for what `change(k, cycle)` does to cycle k.

    """
    arm = SimpleNamespace(
        lower=np.array([-1.0, -np.inf]),
        upper=np.array([2.0, np.inf]),
        velocity_limit=np.array([3.0, 4.0]),
        torque_limit=np.array([50.0, 20.0]),
        joint_units=units,
    )
    signals = Signals(JOINTS, ("tool",), {"seam": 2}, COUNT)
    for k in range(COUNT):
        cycle = SimpleNamespace(
            q=np.zeros(2), v=np.zeros(2), torque=np.zeros(2), qdr=np.zeros(2), share_sum=2.0, branches=1,
            limited=False, seam=report(), errors={"tool": (0.0, 0.0)},
        )  # fmt: skip
        if change:
            change(k, cycle)
        state = SimpleNamespace(q=cycle.q, v=cycle.v, applied=cycle.torque)
        command = SimpleNamespace(
            torque=cycle.torque, joint_velocity_reference=cycle.qdr, share_sum=cycle.share_sum,
            branches=cycle.branches, limited=cycle.limited, tasks={"seam": cycle.seam},
        )  # fmt: skip
        signals.record(k / RATE, state, (cycle.q, cycle.v), command, cycle.errors)
    tasks = {"seam": TaskFacts(unit="m", handover=(10.0, 100.0), tolerance=tolerance)}
    return Run(
        law=law, arm=arm, described={"tool": frozenset({"m", "rad"})}, rate=RATE, seed=7,
        planned_s=COUNT / RATE, signals=signals, tasks=tasks,
        events=list(events), ended=ended, computing_s=0.5,
    )  # fmt: skip


def figures(change=None, **kwargs):
    return summarise_run(make_run(change, **kwargs), settle=SETTLE)


def test_a_quiet_run_passes_with_the_documented_keys():
    """
    The keys are those of the project's description of summary.json.

    """
    summary = summarise([make_run()], settle=SETTLE)
    assert summary["verdict"] == "pass"
    assert summary["reasons"] == []
    assert {
        "law",
        "duration_s",
        "rate_hz",
        "tool",
        "tasks",
        "share_sum",
        "torque",
        "joints",
        "events",
    } <= set(summary)
    assert set(summary["tool"]["tool"]) == {
        f"{kind}_error_{what}_{unit}{ending}"
        for kind, unit in (("position", "m"), ("orientation", "rad"))
        for what in ("max", "rms")
        for ending in ("", "_all")
    }
    assert {
        "error_max", "error_rms", "error_max_all", "error_rms_all", "unit", "share_min", "share_max",
        "apparent_inertia_max", "handover",
    } <= set(summary["tasks"]["seam"])  # fmt: skip
    assert set(summary["torque"]["a"]) == {
        "peak_nm", "peak_nm_all", "limit_nm", "largest_step_nm", "largest_step_nm_all",
    }  # fmt: skip
    assert set(summary["joints"]["a"]) == {"margin_rad", "speed_peak", "unit"}
    assert summary["duration_s"] == 2.0
    assert summary["rate_hz"] == RATE
    assert summary["seed"] == 7
    assert summary["compute_ratio"] == 4.0
    assert summary["share_sum"] == {"min": 2.0, "max": 2.0}
    assert "laws" not in summary


def test_text_is_valid_json_without_infinities():
    """
    Oracle: Python's parser told to refuse NaN and Infinity.

    """

    def change(_k, cycle):
        cycle.seam = report(inertia=math.inf)
        cycle.share_sum = None

    text = to_json(summarise([make_run(change)], settle=SETTLE))

    def refuse(word):
        raise AssertionError(word)

    summary = json.loads(text, parse_constant=refuse)
    assert summary["tasks"]["seam"]["apparent_inertia_max"] is None
    assert summary["share_sum"] == {"min": None, "max": None}
    assert summary["joints"]["b"]["margin_rad"] is None
    assert json_ready({"a": np.float64("nan"), 1: [np.int64(3), (np.bool_(True),)]}) == {
        "a": None,
        "1": [3, [True]],
    }


def test_errors_and_torque_count_after_settling_and_in_all():
    """
    Cycle 10 is at 1.0 s: the first that counts. A step across the edge of the window does not count.

    """

    def change(k, cycle):
        size = 8.0 if k < 10 else 2.0
        cycle.errors = {"tool": (size, 10 * size)}
        cycle.torque = np.array([size, 3.0 if k == 15 else 0.0])
        cycle.seam = report(error=(0.1 * size, -0.2 * size))

    result = figures(change)
    tool = result["tool"]["tool"]
    assert tool["position_error_max_m"] == 2.0
    assert tool["position_error_rms_m"] == pytest.approx(2.0)
    assert tool["position_error_max_m_all"] == 8.0
    assert tool["position_error_rms_m_all"] == pytest.approx(math.sqrt((64 + 4) / 2))
    assert tool["orientation_error_max_rad"] == 20.0
    assert tool["orientation_error_rms_rad_all"] == pytest.approx(10 * math.sqrt((64 + 4) / 2))
    assert result["torque"]["a"] == {
        "peak_nm": 2.0, "limit_nm": 50.0, "largest_step_nm": 0.0,
        "peak_nm_all": 8.0, "largest_step_nm_all": 6.0,
    }  # fmt: skip
    assert result["torque"]["b"]["largest_step_nm"] == 3.0
    seam = result["tasks"]["seam"]
    assert seam["error_max"] == pytest.approx(0.4)
    assert seam["error_rms"] == pytest.approx(0.4)
    assert seam["error_max_all"] == pytest.approx(1.6)


def test_parts_of_a_pose_that_no_task_is_about_are_absent():
    run = make_run(lambda _k, cycle: setattr(cycle, "errors", {"tool": (0.1, 2.0)}))
    run.described = {"tool": frozenset({"m"})}
    tool = summarise_run(run, settle=SETTLE)["tool"]["tool"]
    assert tool["position_error_max_m"] == 0.1
    assert tool["orientation_error_max_rad"] is None
    assert tool["orientation_error_rms_rad_all"] is None


def test_task_errors_count_only_where_the_chart_is_good_and_owns_a_share():
    def change(k, cycle):
        cycle.seam = report(error=(0.01, 0.0))
        if k == 12:
            cycle.seam = report(error=(5.0, 0.0), validity=0.999)
        if k == 13:
            cycle.seam = report(error=(5.0, 0.0), share=0.0, inertia=math.inf)

    result = figures(change, tolerance=0.02)
    assert result["tasks"]["seam"]["error_max"] == pytest.approx(0.01)
    assert result["tasks"]["seam"]["share_min"] == 0.0
    assert result["verdict"] == "pass"


def test_a_task_that_never_owns_anything_has_no_error():
    result = figures(
        lambda _k, cycle: setattr(cycle, "seam", report(share=0.0, error=(9.0, 9.0))), tolerance=0.1
    )
    assert result["tasks"]["seam"]["error_max"] is None
    assert result["tasks"]["seam"]["error_rms"] is None
    assert result["verdict"] == "pass"


@pytest.mark.parametrize(
    ("tolerance", "verdict"), [(0.03, "fail"), (0.05, "pass"), ([0.05, 0.01], "pass"), ([0.03, 0.05], "fail")]
)
def test_tolerance_is_judged_per_coordinate_after_settling(tolerance, verdict):
    def change(k, cycle):
        cycle.seam = report(error=(-0.04, 0.005) if k == 14 else (0.0, 0.0))
        if k < 10:
            cycle.seam = report(error=(1.0, 1.0))

    result = figures(change, tolerance=tolerance)
    assert result["verdict"] == verdict
    assert any("seam" in reason and "tolerance" in reason for reason in result["reasons"]) is (
        verdict == "fail"
    )


@pytest.mark.parametrize(
    ("field", "value", "verdict", "words"),
    [
        ("q", [1.999, 50.0], "pass", ()),
        ("q", [2.001, 0.0], "fail", ("joint a", "position limit", "0.001")),
        ("q", [-1.5, 0.0], "fail", ("joint a", "position limit", "0.5")),
        ("v", [0.0, 3.9], "pass", ()),
        ("v", [0.0, -4.1], "fail", ("joint b", "4.1 rad/s", "4 rad/s")),
        ("share_sum", 2.0 + 1e-9, "pass", ()),
        ("share_sum", 1.5, "fail", ("shares", "1.5 of 2")),
    ],
)
def test_each_criterion_fails_the_run_by_itself(field, value, verdict, words):
    """
    Judged over the whole run: cycle 3 is before settling.

    """

    def change(k, cycle):
        if k == 3:
            setattr(cycle, field, np.array(value) if isinstance(value, list) else value)

    result = figures(change)
    assert result["verdict"] == verdict
    assert len(result["reasons"]) == (verdict == "fail")
    assert all(word in result["reasons"][0] for word in words)


@pytest.mark.parametrize(("cycles", "verdict"), [((3,), "pass"), ((3, 5, 7), "pass"), ((3, 4), "fail")])
def test_a_torque_limit_may_be_active_for_a_tenth_of_a_second(cycles, verdict):
    """
    At 10 Hz 0.1 s is one cycle; breaks begin the count anew.

    """
    result = figures(lambda k, cycle: setattr(cycle, "limited", k in cycles))
    assert result["verdict"] == verdict


def test_the_first_law_decides_and_the_others_are_listed():
    def fast(_k, cycle):
        cycle.v = np.array([9.0, 0.0])

    good, bad = make_run(), make_run(fast, law="inverse_jacobian")
    summary = summarise([good, bad], settle=SETTLE)
    assert summary["verdict"] == "pass"
    assert summary["law"] == "prioritized"
    assert list(summary["laws"]) == ["prioritized", "inverse_jacobian"]
    assert summary["laws"]["inverse_jacobian"]["verdict"] == "fail"
    assert summary["laws"]["prioritized"]["tool"] == summary["tool"]
    assert summarise([bad, good], settle=SETTLE)["verdict"] == "fail"


def test_a_diverged_run_fails_and_says_why():
    event = Event(t=1.9, kind="diverged", text="joint a moves at 90 rad/s")
    result = figures(ended="diverged", events=[event])
    assert result["verdict"] == "fail"
    assert "90 rad/s" in result["reasons"][0]
    assert result["events"] == [{"t": 1.9, "kind": "diverged", "text": "joint a moves at 90 rad/s"}]


def test_an_interrupted_run_is_neither_passed_nor_failed():
    assert (
        summarise([make_run(), make_run(law="x", ended="interrupted")], settle=SETTLE)["verdict"]
        == "interrupted"
    )
    assert summarise([], settle=SETTLE)["verdict"] == "interrupted"


def test_a_run_that_ended_before_settling_has_no_settled_figures():
    result = summarise_run(make_run(ended="diverged"), settle=5.0)
    assert result["tool"]["tool"]["position_error_max_m"] is None
    assert result["tool"]["tool"]["position_error_max_m_all"] == 0.0
    assert result["torque"]["a"]["largest_step_nm"] is None
    assert "diverged" not in table.laws_table({"x": result}, width=80)


def test_stored_signals_are_those_recorded(tmp_path):
    def change(k, cycle):
        cycle.q, cycle.seam = np.array([k, -k]), report(error=(k, 2 * k), share=1.5)

    run = make_run(change)
    run.signals.save(tmp_path / "signals.npz")
    assert [path.name for path in tmp_path.iterdir()] == ["signals.npz"]
    with np.load(tmp_path / "signals.npz") as stored:
        assert set(stored) == {"joints", *run.signals.names}
        assert tuple(stored["joints"]) == JOINTS
        np.testing.assert_allclose(stored["t"], np.arange(COUNT) / RATE)
        np.testing.assert_array_equal(stored["q"][:, 1], -np.arange(COUNT))
        np.testing.assert_array_equal(stored["seam.error"], np.outer(np.arange(COUNT), [1, 2]))
        np.testing.assert_array_equal(stored["seam.share"], 1.5)


def test_a_law_without_task_reports_leaves_gaps_not_zeros():
    signals = Signals(JOINTS, ("tool",), {"seam": 2}, 3)
    command = SimpleNamespace(
        torque=np.zeros(2),
        joint_velocity_reference=None,
        share_sum=None,
        branches=None,
        limited=False,
        tasks={},
    )
    state = SimpleNamespace(q=np.ones(2), v=np.ones(2), applied=np.ones(2))
    signals.record(0.0, state, (state.q, state.v), command, {"tool": (1.0, 2.0)})
    assert signals["q"].shape == (1, 2), "only what was recorded"
    assert np.isnan(signals["seam.error"]).all()
    assert np.isnan(signals["joint_velocity_reference"]).all()
    assert np.isnan(signals["share_sum"]).all()
    np.testing.assert_array_equal(signals["tool.orientation_error"], [2.0])


def test_a_run_too_long_to_record_is_refused_before_it_starts():
    with pytest.raises(InputError, match="GiB"):
        Signals(JOINTS, (), {}, 10**9)


@pytest.mark.parametrize("width", [60, 80, 200])
def test_tables_keep_to_the_width_of_the_terminal(width):
    laws = {
        law: figures(law=law)
        for law in (
            "prioritized",
            "joint_impedance",
            "cartesian_impedance",
            "inverse_jacobian",
            "damped_inverse",
        )
    }
    text = table.laws_table(laws, width=width)
    assert max(len(line) for line in text.splitlines()) <= width
    assert all(law in text for law in laws)
    assert (text.count("tool position error max, m") > 1) is (width < 120), "blocks repeat the labels"
    assert not any(line.endswith(" ") for line in text.splitlines())


def test_tables_show_three_digits_and_a_dash_for_nothing():
    assert [table.number(x) for x in (1.23456e-5, 0.0, None, math.inf, math.nan)] == [
        "1.23e-05",
        "0",
        "-",
        "-",
        "-",
    ]
    text = table.tasks_table(figures(), width=200)
    assert "seam" in text
    assert "10 … 100" in text


def test_a_sliding_joint_is_measured_in_metres():
    def change(k, cycle):
        cycle.v = np.array([0.0, 5.0]) if k == 3 else np.zeros(2)

    summary = figures(change, units=("rad", "m"))
    assert summary["joints"]["a"]["unit"] == "rad"
    assert summary["joints"]["b"]["unit"] == "m"
    assert summary["reasons"] == ["joint b reached 5 m/s, its limit is 4 m/s"]
    text = table.laws_table({"prioritized": summary}, width=100)
    assert "nearest joint limit, rad" in text
    assert "nearest joint limit, m " in text


def test_gain_check_compares_the_fastest_decay_with_the_rate():
    """Half of 2 sin(π/(2(2d+1))) per period is allowed; d = 1 at 1 kHz: 500 1/s."""
    check = GainCheck(rate=1000.0, delay_cycles=1, error_rate=8.0)
    for fastest in (100.0, 242.0, 30.0):
        check.note(np.diag([7.0, fastest]))
    figures = check.figures()
    assert figures["velocity_error_decay_min_per_s"] == pytest.approx(7.0)
    assert figures["velocity_error_decay_max_per_s"] == pytest.approx(242.0)
    assert figures["allowed_per_s"] == pytest.approx(500.0)
    assert figures["share_of_allowed"] == pytest.approx(0.5)
