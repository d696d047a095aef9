# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The command line as a user meets it: results, exit codes, and a clear message for every slip.

"""

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from prioritized_tracking import cli

ROOT = Path(__file__).parents[1]


@pytest.fixture
def folder(tmp_path):
    """
    A user's folder with the planar arm's files.

    """
    for name in ("planar_stack.yaml", "planar_arm.urdf", "reach_limit.csv", "reach_limit_companion.csv"):
        shutil.copy(ROOT / "config" / name, tmp_path)
    return tmp_path


@pytest.fixture
def command(folder, capsys):
    """
    Run the command line in this process; returns exit code, standard output and standard error.

    """

    def run(*words):
        try:
            code = cli.main([str(word).replace("STACK", str(folder / "planar_stack.yaml")) for word in words])
        except SystemExit as stop:  # argparse
            code = stop.code
        captured = capsys.readouterr()
        assert "Traceback" not in captured.err
        return code, captured.out, captured.err

    return run


def start(*words, **kwargs):
    """
    Start the command line as a process of its own.

    """
    return subprocess.Popen(
        [sys.executable, "-m", "prioritized_tracking", *map(str, words)],
        cwd=ROOT,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        **kwargs,
    )


def summary_of(out):
    return json.loads((out / "summary.json").read_text(encoding="utf-8"))


# ---- rehearse --------------------------------------------------------------------------------------


def test_rehearse_writes_its_results_and_says_pass(command, folder):
    out = folder / "made" / "on the way"
    code, text, errors = command("rehearse", "STACK", "--out", out, "--seconds", 0.3)
    assert code == 0, errors
    assert sorted(path.name for path in out.iterdir()) == [
        "signals_prioritized.npz",
        "stack.yaml",
        "summary.json",
    ]
    assert (out / "stack.yaml").read_bytes() == (folder / "planar_stack.yaml").read_bytes()
    summary = summary_of(out)
    assert summary["verdict"] == "pass"
    assert summary["law"] == "prioritized"
    assert summary["duration_s"] == pytest.approx(0.3)
    assert summary["settle_s"] == pytest.approx(0.15)
    assert list(summary["tasks"]) == ["pen", "posture"]
    assert summary["tool"]["pen"]["orientation_error_max_rad"] is None, (
        "no task is about the pen's orientation"
    )
    assert any("handover" in note for note in summary["notes"]), "computed bands are reported"
    assert text.rstrip().splitlines()[-1] == f"PASS  prioritized; results in {out}"
    assert "pen position error max, m" in text
    assert errors == "", "no progress bar where there is no terminal"
    with np.load(out / "signals_prioritized.npz") as stored:
        assert stored["q"].shape == (300, 2)
        assert tuple(stored["joints"]) == ("shoulder", "elbow")


def test_a_refused_run_leaves_a_folder_that_can_be_used(command, folder):
    """Refused at the start of the first law, when the stack is in the folder already; then repaired."""
    words = ("rehearse", "STACK", "--out", folder / "out", "--seconds", 0.02)
    code, _, errors = command(*words, "--set", "plant.start=[0.5, 0.5]")
    assert code == 2
    assert "starts away" in errors
    code, _, errors = command(*words)
    assert code == 0, errors


def test_a_note_is_said_once(command, folder):
    """Also a warning about the file, and what is said of a path (here: that it is ramped in time)."""
    path, stack = folder / "reach_limit.csv", folder / "planar_stack.yaml"
    header, *rows = path.read_text().splitlines()
    path.write_text("\n".join([header, *rows[60:-60]]))
    text = stack.read_text()
    stack.write_text(text[: text.index("      stretch: {")] + "      stretch: {kind: joints, source: hold}\n")
    changes = ("robot.velocity_cutoff=100.0", "guard.start_position=0.99", "guard.start_angle=3.1")
    words = [word for change in changes for word in ("--set", change)]
    code, text, errors = command("rehearse", "STACK", "--out", folder / "out", "--seconds", 0.02, *words)
    assert code in (0, 1), errors
    notes = summary_of(folder / "out")["notes"]
    assert any("velocity_cutoff" in note for note in notes)
    assert any("ramped" in note for note in notes)
    assert text.count("note: ") == len(notes) == len(set(notes))


def test_same_seed_same_numbers(command, folder):
    words = ("--seconds", 0.2, "--set", "plant.mass_error=0.1", "--set", "plant.position_noise=1e-5")
    summaries = []
    for name, seed in (("a", 3), ("b", 3), ("c", 4)):
        assert (
            command("rehearse", "STACK", "--out", folder / name, *words, "--set", f"plant.seed={seed}")[0]
            == 0
        )
        summaries.append(summary_of(folder / name) | {"compute_ratio": None})
    stored = [(folder / name / "signals_prioritized.npz").read_bytes() for name in "abc"]
    assert summaries[0] == summaries[1]
    assert stored[0] == stored[1]
    assert stored[0] != stored[2]
    assert summaries[0]["overrides"] == {
        "plant.mass_error": 0.1,
        "plant.position_noise": 1e-5,
        "plant.seed": 3,
    }


def test_several_laws_in_one_call(command, folder):
    out = folder / "out"
    words = (
        "--law",
        "joint_impedance",
        "prioritized",
        "--law",
        "inverse_jacobian",
        "prioritized",
        "--seconds",
        0.1,
    )
    code, text, _ = command("rehearse", "STACK", "--out", out, *words)
    assert code == 0
    summary = summary_of(out)
    assert summary["law"] == "joint_impedance"
    assert list(summary["laws"]) == ["joint_impedance", "prioritized", "inverse_jacobian"]
    assert summary["share_sum"] == {"min": None, "max": None}, "joint impedance has no shares"
    assert summary["laws"]["prioritized"]["share_sum"]["min"] == pytest.approx(2.0, abs=1e-9)
    assert len(list(out.glob("signals_*.npz"))) == 3
    assert all(law in text for law in summary["laws"])


def test_results_of_an_earlier_rehearsal_are_replaced(command, folder):
    out = folder / "out"
    assert command("rehearse", "STACK", "--out", out, "--law", "joint_impedance", "--seconds", 0.05)[0] == 0
    assert command("rehearse", "STACK", "--out", out, "--seconds", 0.05)[0] == 0
    assert [path.name for path in out.glob("signals_*")] == ["signals_prioritized.npz"]


def test_a_broken_tolerance_fails_with_exit_code_1(command, folder):
    code, text, _ = command(
        "rehearse", "STACK", "--out", folder / "out", "--seconds", 0.4, "--set", "tasks.pen.tolerance=1e-13"
    )
    assert code == 1
    assert "FAIL" in text
    assert "task pen" in text
    assert summary_of(folder / "out")["verdict"] == "fail"


def test_interruption_leaves_what_is_finished(folder):
    out = folder / "out"
    process = start(
        "rehearse", folder / "planar_stack.yaml", "--out", out, "--seconds", 900, "--law", "prioritized",
        "joint_impedance",
    )  # fmt: skip
    deadline = time.monotonic() + 60.0
    while not (out / "stack.yaml").exists() and time.monotonic() < deadline:
        time.sleep(0.05)
    time.sleep(1.0)
    process.send_signal(signal.SIGINT)
    text, errors = process.communicate(timeout=60)
    assert process.returncode == 130, errors
    assert "Traceback" not in errors
    assert "INTERRUPTED" in text
    summary = summary_of(out)
    assert summary["verdict"] == "interrupted"
    assert 0.0 < summary["duration_s"] < 900.0
    assert "not run: joint_impedance" in summary["notes"][-1]
    with np.load(out / "signals_prioritized.npz") as stored:
        assert len(stored["t"]) == round(summary["duration_s"] * 1000)


def test_a_reader_that_leaves_is_no_fault(folder):
    process = start("rehearse", folder / "planar_stack.yaml", "--out", folder / "out", "--seconds", 0.05)
    process.stdout.close()
    assert process.wait(timeout=60) == 141
    assert process.stderr.read() == ""
    process.stderr.close()


def test_names_the_terminal_cannot_show(folder):
    """
    A file name that is no text at all, and a terminal without the signs of our units.

    """
    stack = os.fsencode(folder / "planar_stack.yaml").replace(b"planar_stack", b"\xff\xfe")
    os.rename(folder / "planar_stack.yaml", stack)
    done = subprocess.run(
        [sys.executable, "-m", "prioritized_tracking", "rehearse", stack, "--seconds", "0.05"]
        + ["--out", os.fsencode(folder) + b"/out\xff"],
        cwd=ROOT,
        env=os.environ | {"PYTHONIOENCODING": "ascii"},
        capture_output=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    written = Path(os.fsdecode(os.fsencode(folder) + b"/out\xff"))
    assert summary_of(written)["stack"] == "\udcff\udcfe.yaml"


def test_a_terminal_shows_progress(folder):
    """
    Standard error is a pseudo-terminal here.

    """
    leader, follower = os.openpty()
    process = subprocess.Popen(
        [sys.executable, "-m", "prioritized_tracking", "rehearse", str(folder / "planar_stack.yaml")]
        + ["--out", str(folder / "out"), "--seconds", "0.3"],
        cwd=ROOT,
        stdout=subprocess.DEVNULL,
        stderr=follower,
    )
    assert process.wait(timeout=60) == 0
    os.close(follower)
    shown = os.read(leader, 1 << 16).decode()
    os.close(leader)
    assert "prioritized: 100%" in shown
    assert "cycles" in shown


# ---- companion -------------------------------------------------------------------------------------


def test_companion_writes_a_file_the_stack_accepts(command, folder):
    target = folder / "reach_limit_companion.csv"
    target.unlink()
    code, text, errors = command("companion", "STACK", "--out", target)
    assert code == 0, errors
    assert target.read_text(encoding="utf-8").splitlines()[0] == "t,shoulder,elbow"
    for words in ("distance from the path", "joint limit", "speed", "follows: drawing"):
        assert words in text
    assert command("rehearse", "STACK", "--out", folder / "out", "--seconds", 0.05)[0] == 0


def test_a_path_out_of_reach_is_said_with_where_and_how_far(command, folder):
    """
    The arm reaches 0.80 m; the path goes straight out to 1.00 m, 2 s after it began.

    """
    t = np.linspace(0.0, 4.0, 81)
    x = 0.7 + 0.3 * np.sin(np.pi * t / 4.0) ** 2
    rows = [f"{a:.6f},{b:.9f},0,0.1,0,0,0,1" for a, b in zip(t, x, strict=True)]
    (folder / "reach_limit.csv").write_text("\n".join(["t,x,y,z,qx,qy,qz,qw", *rows]) + "\n")
    code, _, errors = command("companion", "STACK", "--out", folder / "new.csv")
    assert code == 2
    assert "drawing" in errors
    assert "0.2" in errors, "how far: 1.005 - 0.80 m"
    assert not (folder / "new.csv").exists()


@pytest.mark.parametrize(
    ("out", "words"),
    [
        (".", "is a folder"),
        ("missing/file.csv", "no folder"),
        ("reach_limit.csv", "overwrite an input"),
        ("planar_stack.yaml", "overwrite an input"),
    ],
)
def test_companion_refuses_unsuitable_files(command, folder, out, words):
    before = (folder / "reach_limit.csv").read_bytes()
    code, _, errors = command("companion", "STACK", "--out", folder / out)
    assert code == 2
    assert words in errors
    assert (folder / "reach_limit.csv").read_bytes() == before


def test_companion_leaves_a_device_alone(command, folder):
    os.mkfifo(folder / "pipe")
    code, _, errors = command("companion", "STACK", "--out", folder / "pipe")
    assert code == 2
    assert "no regular file" in errors
    assert (folder / "pipe").is_fifo()


def test_companion_of_an_unknown_channel(command, folder):
    code, _, errors = command("companion", "STACK", "--out", folder / "new.csv", "--channel", "drawin")
    assert code == 2
    assert "'drawing'" in errors


# ---- bad input -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        ((), "VERB"),
        (("rehears",), "rehearse"),
        (("rehearse", "STACK"), "--out"),
        (("rehearse", "STACK", "--out", "OUT", "--seconds", "ten"), "seconds"),
        (("rehearse", "STACK", "--out", "OUT", "--seconds", "0"), "above 0"),
        (("rehearse", "STACK", "--out", "OUT", "--seconds", "nan"), "at least 0"),
        (("rehearse", "STACK", "--out", "OUT", "--settle", "-1"), "at least 0"),
        (("rehearse", "STACK", "--out", "OUT", "--law", "inverse_jacobain"), "'inverse_jacobian'"),
        (("rehearse", "STACK", "--out", "OUT", "--seconds", "1", "--settle", "1"), "--settle"),
        (("rehearse", "STACK", "--out", "OUT", "--settle", "17"), "16 s"),
        (("rehearse", "STACK", "--out", "OUT", "--seconds", "1e9"), "GiB"),
        (("rehearse", "STACK", "--out", "OUT", "--set", "plant.seed"), "key=value"),
        (("rehearse", "STACK", "--out", "OUT", "--set", "plant.sede=3"), "'seed'"),
        (("rehearse", "STACK", "--out", "OUT", "--set", "plant.seed=many"), "whole number"),
        (("rehearse", "STACK", "--out", "OUT", "--set", "plant.start=[0.0, 1]"), "mixed types"),
        (("rehearse", "STACK", "--out", "OUT", "--set", "plant.start=[0.0]"), "plant.start"),
        (("rehearse", "STACK", "--out", "OUT", "--set", "plant.start=[1.0, 1.0]"), "plant: the reference"),
        (("rehearse", "STACK", "--out", "OUT", "--set", "plant.payload={frame: pne, mass: 0.5}"), "'pen'"),
        (("rehearse", "STACK", "--out", "OUT", "--set", "plant.mass_error=1.5"), "plant.mass_error"),
        (("rehearse", "nowhere.yaml", "--out", "OUT"), "nowhere.yaml"),
        (("rehearse", "/", "--out", "OUT"), "folder"),
    ],
)
def test_bad_input_is_said_with_exit_code_2(command, folder, words, expected):
    code, _, errors = command(*(word.replace("OUT", str(folder / "out")) for word in words))
    assert code == 2
    assert expected in errors
    assert not (folder / "out" / "summary.json").exists()


def test_all_slips_are_reported_at_once(command, folder):
    text = (folder / "planar_stack.yaml").read_text(encoding="utf-8")
    (folder / "planar_stack.yaml").write_text(
        text.replace("damping: 150.0", "damping: -150.0").replace("rate:", "rat:")
    )
    code, _, errors = command("rehearse", "STACK", "--out", folder / "out")
    assert code == 2
    assert errors.startswith("prioritized-tracking: error: ")
    assert "rat" in errors
    assert "tasks.pen.damping" in errors
    (folder / "taken").write_text("")
    code, _, errors = command("rehearse", "STACK", "--out", folder / "taken", "--law", "x", "--set", "y")
    assert errors.count("got:") >= 1
    assert all(word in errors for word in ("3 problems", "no law 'x'", "is a file", "key=value"))


@pytest.mark.parametrize("case", ["file", "below a file", "other files", "not writable", "broken link"])
def test_unsuitable_results_folders(command, folder, case):
    out = {
        "file": folder / "planar_arm.urdf",
        "below a file": folder / "planar_arm.urdf" / "out",
        "other files": folder,
        "not writable": Path("/proc/prioritized_tracking"),
        "broken link": folder / "link",
    }[case]
    (folder / "link").symlink_to(folder / "nowhere" / "at all")
    before = sorted(path.name for path in folder.iterdir())
    code, _, errors = command("rehearse", "STACK", "--out", out, "--seconds", 0.05)
    assert code == 2
    assert str(out) in errors
    assert sorted(path.name for path in folder.iterdir()) == before


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no device that is always full")
def test_a_full_disk_is_an_error_in_one_line(folder):
    with open("/dev/full", "w") as full:
        done = subprocess.run(
            [sys.executable, "-m", "prioritized_tracking", "rehearse", str(folder / "planar_stack.yaml"),
             "--out", str(folder / "out"), "--seconds", "0.05"],
            cwd=ROOT, stdout=full, stderr=subprocess.PIPE, text=True, check=False,
        )  # fmt: skip
    assert done.returncode == 2
    assert done.stderr == "prioritized-tracking: error: No space left on device\n"


# ---- help ------------------------------------------------------------------------------------------


def test_help_is_quick_and_complete():
    """
    None of the numerical libraries may be imported for it.

    """
    code = (
        "import sys; from prioritized_tracking import cli\n"
        "try: cli.main(['--help'])\nexcept SystemExit as stop: assert stop.code == 0\n"
        "heavy = {'numpy', 'scipy', 'pinocchio', 'yaml', 'tqdm'} & set(sys.modules)\n"
        "assert not heavy, heavy"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    for words in ("rehearse", "companion", "0 pass", "130 interrupted"):
        assert words in done.stdout


@pytest.mark.parametrize("verb", ["rehearse", "companion"])
def test_every_option_has_a_line_of_help(command, verb):
    code, text, _ = command(verb, "--help")
    assert code == 0
    options = {
        "rehearse": ("--out", "--law", "--seconds", "--settle", "--set"),
        "companion": ("--out", "--channel"),
    }
    assert all(option in text for option in options[verb])


def test_known_laws_are_those_of_the_package():
    from prioritized_tracking.core.laws import LAWS

    assert set(cli.LAWS) == set(LAWS)


def test_environment_of_numerical_libraries_is_left_to_the_user(command, monkeypatch, folder):
    monkeypatch.setenv("OMP_NUM_THREADS", "3")
    monkeypatch.delenv("OPENBLAS_NUM_THREADS", raising=False)
    command("rehearse", "nowhere.yaml", "--out", folder / "out")
    assert os.environ["OMP_NUM_THREADS"] == "3"
    assert os.environ.pop("OPENBLAS_NUM_THREADS") == "1"
