# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Reference files: what is written is read back; every fault is refused, naming line and column.

"""

from __future__ import annotations

import os
import time

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from prioritized_tracking.core.references import JointPath, PosePath
from prioritized_tracking.errors import InputError
from prioritized_tracking.files import (
    read_joints_csv,
    read_pose_csv,
    read_text,
    whole_file,
    write_joints_csv,
    write_pose_csv,
    write_text,
)

POSE = "t,x,y,z,qx,qy,qz,qw\n0,0.5,0,0.3,0,0,0,1\n1,0.5,0.1,0.3,0,0.6,0,0.8\n2,0.5,0.2,0.3,0,0,0,1\n"
JOINTS = "t,a1,a2\n0,0.1,0.2\n1,0.3,0.1\n2,0.1,0.2\n"


@pytest.fixture(name="save")
def _save(tmp_path):
    """
    Return a function that writes text or bytes and returns the path.

    """

    def save(content):
        path = tmp_path / "path.csv"
        path.write_bytes(content.encode() if isinstance(content, str) else content)
        return path

    return save


def problems(read, *arguments):
    """
    Return the problems of a call that must be refused; each must name what and where.

    """
    with pytest.raises(InputError) as error:
        read(*arguments)
    found = error.value.problems
    assert all(problem.what and problem.where for problem in found)
    assert len(found) <= 11
    return found


def pose_problem(path):
    """
    Return the only problem of a pose file.

    """
    (found,) = problems(read_pose_csv, path)
    return found


def joints_problem(path, joints=("a1", "a2")):
    """
    Return the only problem of a joints file.

    """
    (found,) = problems(read_joints_csv, path, joints)
    return found


def test_pose_file_comes_back_bit_by_bit(tmp_path):
    rng = np.random.default_rng(0)
    times = np.cumsum(rng.uniform(0.1, 1.0, 20))
    turns = Rotation.from_rotvec(np.cumsum(rng.uniform(-0.3, 0.3, (20, 3)), axis=0)).as_quat()
    positions = rng.normal(size=(20, 3)) * 1e-3
    path = tmp_path / "a.csv"
    write_pose_csv(path, times, positions, turns)
    for got, expected in zip(read_pose_csv(path), (times, positions, turns), strict=True):
        assert np.array_equal(got, expected)
    PosePath(*read_pose_csv(path))
    assert list(tmp_path.iterdir()) == [path]


def test_joints_file_comes_back_bit_by_bit(tmp_path):
    rng = np.random.default_rng(0)
    times, q = np.arange(10) / 3.0, rng.uniform(-0.7, 0.7, (10, 3))
    path = tmp_path / "a.csv"
    write_joints_csv(path, times, ("b", 'with "quotes", and comma', "a"), q)
    got_times, got = read_joints_csv(path, ("a", "b", 'with "quotes", and comma'))
    assert np.array_equal(got_times, times)
    assert np.array_equal(got, q[:, [2, 0, 1]])
    JointPath(got_times, got)


def test_columns_are_matched_by_name_in_any_order(save):
    """
    Scalar first in the header is scalar first in the rows, not a fault.

    """
    path = save("t,qw,qx,qy,qz,x,y,z\n0,1,0,0,0,0.5,0,0.3\n1,0.8,0,0.6,0,0.5,0.1,0.3\n")
    times, positions, quaternions = read_pose_csv(path)
    assert times.tolist() == [0.0, 1.0]
    assert positions.tolist() == [[0.5, 0.0, 0.3], [0.5, 0.1, 0.3]]
    assert quaternions.tolist() == [[0.0, 0.0, 0.0, 1.0], [0.0, 0.6, 0.0, 0.8]]


TOLERATED = {
    "byte order mark": b"\xef\xbb\xbf" + POSE.encode(),
    "windows lines": POSE.replace("\n", "\r\n"),
    "old mac lines": POSE.replace("\n", "\r"),
    "no last newline": POSE.rstrip(),
    "blank lines": POSE.replace("\n", "\n\n") + " , ,\n\n",
    "spaces": POSE.replace(",", " , "),
    "header as a comment": "# " + POSE,
    "quoted cells": POSE.replace("0.5", '"0.5"').replace("qx", '"qx"'),
    "exponents": POSE.replace("0.1", "1e-1").replace("0.2", "2.E-1"),
}


@pytest.mark.parametrize("content", TOLERATED.values(), ids=TOLERATED)
def test_harmless_variants_are_read(save, content):
    times, positions, quaternions = read_pose_csv(save(content))
    assert times.tolist() == [0.0, 1.0, 2.0]
    assert positions[:, 1].tolist() == [0.0, 0.1, 0.2]
    assert quaternions[1].tolist() == [0.0, 0.6, 0.0, 0.8]


# content, where it must point, words of the message
POSE_FAULTS = {
    "empty": ("", "path.csv", "the file is empty"),
    "blank": ("\n \n", "path.csv", "the file is empty"),
    "header only": ("t,x,y,z,qx,qy,qz,qw\n", "path.csv", "at least two knots"),
    "one row": (POSE[: POSE.index("\n1,")], "path.csv", "at least two knots"),
    "no header": (POSE[POSE.index("\n") + 1 :], "path.csv:1", "no header"),
    "semicolons": (POSE.replace(",", ";"), "path.csv:1", "semicolons"),
    "decimal commas, semicolons": (POSE.replace(",", ";").replace(".", ","), "path.csv:1", "points in num"),
    "tabs": (POSE.replace(",", "\t"), "path.csv:1", "tabs"),
    "spaces": (POSE.replace(",", " "), "path.csv:1", "spaces"),
    "missing column": (POSE.replace(",qw", "", 1), "path.csv:1 qw", "column 'qw' is missing"),
    "doubled column": (POSE.replace("t,x", "t,x,x", 1), "path.csv:1 x", "more than once"),
    "unknown column": (POSE.replace("qw", "qw,force", 1), "path.csv:1 force", "unknown column 'force'"),
    "nameless column": (POSE.replace("qw", "qw,", 1), "path.csv:1", "without a name"),
    "other file": (JOINTS, "path.csv:1", "none of the columns expected"),
    "ragged": (POSE.replace("0.1,0.3", "0.1"), "path.csv:3", "another number of cells"),
    "decimal commas": (POSE.replace("0.1,0.3,0,0.6,0,0.8", "0,1" + ",0,3" * 6), ":3", "decimal commas"),
    "quoted decimal commas": (POSE.replace("0.1", '"0,1"'), "path.csv:3 y", "decimal comma"),
    "word": (POSE.replace("0.1", "left"), "path.csv:3 y", "'left'"),
    "underscore": (POSE.replace("0.1", "0_1"), "path.csv:3 y", "'0_1'"),
    "empty cell": (POSE.replace("0.1", ""), "path.csv:3 y", "an empty cell"),
    "nan": (POSE.replace("0.1", "nan"), "path.csv:3 y", "not a finite number"),
    "infinite": (POSE.replace("0.1", "-inf"), "path.csv:3 y", "not a finite number"),
    "overflow": (POSE.replace("0.1", "1e999"), "path.csv:3 y", "not a finite number"),
    "too large": (POSE.replace("0.1", "-1e200"), "path.csv:3 y", "too large"),
    "times too close": (POSE.replace("\n2,", "\n1.0000001,"), "path.csv:4 t", "in seconds"),
    "same time": (POSE.replace("\n2,", "\n1,"), "path.csv:4 t", "does not increase"),
    "time going back": (POSE.replace("\n2,", "\n0.5,"), "path.csv:4 t", "more than 1 s"),
    "not a unit quaternion": (POSE.replace("0.8", "0.802"), "path.csv:3 qx,qy,qz,qw", "norm 1.0016"),
    "zero quaternion": (POSE.replace("0.6,0,0.8", "0,0,0"), "path.csv:3 qx,qy,qz,qw", "norm 0"),
    "millimetres": (POSE.replace("0.1,", "100,"), "path.csv:3 y", "Millimetres?"),
    "open quote": (POSE.replace("0.1", '"0.1'), "path.csv:", "not readable as CSV"),
    "UTF-16": (POSE.encode("utf-16"), "path.csv", "UTF-16"),
    "UTF-16 without mark": (POSE.encode("utf-16-le"), "path.csv", "UTF-16"),
    "UTF-16 big-endian": (POSE.encode("utf-16-be"), "path.csv", "UTF-16"),
    "UTF-32": (POSE.encode("utf-32"), "path.csv", "UTF-32"),
    "latin-1": (POSE.replace("x,", "\u00e4,", 1).encode("latin-1"), "path.csv:1", "not UTF-8"),
    "latin-1 later": (POSE.encode() + b"\xb0", "path.csv:5", "not UTF-8"),
    "spreadsheet": (b"PK\x03\x04" + bytes(200), "path.csv", "spreadsheet"),
    "binary": (POSE.encode() + bytes([7, 0, 0, 1]), "path.csv:5", "binary"),
    "noise": (bytes(range(256)) * 20, "path.csv", "not UTF-8"),
    "huge cell": (POSE.replace("0.1", "1" * 200_000), "path.csv:3", "not readable as CSV"),
}


@pytest.mark.parametrize(("content", "place", "words"), POSE_FAULTS.values(), ids=POSE_FAULTS)
def test_pose_file_faults(save, content, place, words):
    problem = pose_problem(save(content))
    assert place in problem.where
    assert words in str(problem)


def test_step_above_ninety_degrees(save):
    turn = Rotation.from_euler("Z", [[0.0], [91.0], [100.0]], degrees=True).as_quat()
    rows = "\n".join(f"{i},0,0,0,{','.join(map(repr, q.tolist()))}" for i, q in enumerate(turn))
    problem = pose_problem(save(f"t,x,y,z,qx,qy,qz,qw\n{rows}\n"))
    assert "path.csv:3 qx,qy,qz,qw" in problem.where
    assert problem.got == "91.0 deg"
    allowed = rows.replace(repr(turn[1].tolist())[1:-1].replace(" ", ""), "0,0,0.70710678,0.70710678")
    read_pose_csv(save(f"t,x,y,z,qx,qy,qz,qw\n{allowed}\n"))


def swinging():
    """
    Return orientations whose scalar part changes sign, written with it kept positive.

    """
    turn = Rotation.from_euler("XYZ", np.c_[np.linspace(2.0, 4.2, 30), np.full(30, 0.3), np.full(30, 0.1)])
    quaternions = turn.as_quat(canonical=True)
    assert np.any(np.einsum("ij,ij->i", quaternions[1:], quaternions[:-1]) < 0.0)
    return quaternions


def test_scalar_first_rows_under_a_scalar_last_header(tmp_path):
    times, zeros, quaternions = np.arange(30.0), np.zeros((30, 3)), swinging()
    path = tmp_path / "path.csv"
    write_pose_csv(path, times, zeros, quaternions)
    read_pose_csv(path)
    write_pose_csv(path, times, zeros, np.roll(quaternions, 1, axis=1))
    assert "scalar first" in pose_problem(path).what


@pytest.mark.parametrize(
    ("names", "remedy"),
    [
        ("q0,q1,q2,q3", "qw,qx,qy,qz"),
        ("w,i,j,k", "scalar part qw"),
        ("roll,pitch,yaw,n", "unit quaternion"),
    ],
)
def test_other_names_of_orientation_get_a_hint(save, names, remedy):
    found = problems(read_pose_csv, save(POSE.replace("qx,qy,qz,qw", names)))
    missing = [problem for problem in found if "missing" in problem.what]
    assert [problem.where.split()[-1] for problem in missing] == ["qx", "qy", "qz", "qw"]
    assert all(remedy in problem.remedy for problem in missing)


@pytest.mark.parametrize(("name", "known"), [("time", "t"), ("QX", "qx"), ("qx_", "qx")])
def test_misspelt_columns_get_the_nearest_name(save, name, known):
    found = problems(read_pose_csv, save(POSE.replace(known, name, 1)))
    assert any(problem.remedy == f"Did you mean '{known}'?" for problem in found)


def test_all_faults_come_in_one_message(save):
    rows = [
        "t,x,y,z,qx,qy,qz,qw",
        "0,0,0,0,0,0,0,1",
        "1,0,nan,0,0,0,0,1.1",
        "1,0,0,0,0,0,0",
        "3,0,0,a,0,0,0,1",
        "2,0,0,0,0,0,0,1",
    ]
    found = problems(read_pose_csv, save("\n".join(rows)), "stack.yaml:9 references.weld.file")
    assert [problem.where.split("path.csv")[1] for problem in found] == [
        f"{place} (stack.yaml:9 references.weld.file)"
        for place in (":3 y", ":4", ":5 z", ":6 t", ":3 qx,qy,qz,qw")
    ]


def test_one_mistake_on_every_row_does_not_hide_the_others(save):
    rows = [f"{i % 7},nan,0,0,0,0,0,2" for i in range(500)]
    found = problems(read_pose_csv, save("t,x,y,z,qx,qy,qz,qw\n" + "\n".join(rows)))
    text = " ".join(problem.what for problem in found)
    assert "not a finite number: 497 more places" in text
    assert "does not increase" in text
    assert "not listed" in found[-1].what


JOINT_FAULTS = {
    "missing joint": (JOINTS.replace(",a2", ""), ":1 a2", "'a2' is missing"),
    "joint not controlled": (JOINTS.replace("a2\n", "a2,hand\n"), ":1 hand", "unknown column 'hand'"),
    "doubled joint": (JOINTS.replace("a2\n", "a2,a2\n"), ":1 a2", "more than once"),
    "pose file": (POSE, ":1", "none of the columns expected"),
    "degrees": (JOINTS.replace("0.3", "30"), ":3 a1", "Degrees?"),
    "large step": (JOINTS.replace("0.3", "1.8").replace("2,0.1", "2,1.1"), ":3 a1", "at most 90 deg"),
    "nan": (JOINTS.replace("0.3", "NaN"), ":3 a1", "not a finite number"),
    "same time": (JOINTS.replace("\n2,", "\n1,"), ":4 t", "does not increase"),
    "one row": ("t,a1,a2\n0,0.1,0.2\n", "", "at least two knots"),
}


@pytest.mark.parametrize(("content", "place", "words"), JOINT_FAULTS.values(), ids=JOINT_FAULTS)
def test_joints_file_faults(save, content, place, words):
    problem = joints_problem(save(content))
    assert f"path.csv{place}" in problem.where
    assert words in str(problem)


def test_wrapped_angle_gets_a_hint(save):
    found = problems(read_joints_csv, save("t,a1\n0,3.1\n1,-3.1\n2,-3.0\n"), ["a1"])
    assert "without wrapping" in found[0].remedy


def test_misspelt_joint_gets_the_nearest_name(save):
    found = problems(read_joints_csv, save(JOINTS.replace("a2", "joint_a2")), ["a1", "joint_b2"])
    assert any("Did you mean 'joint_b2'?" in problem.remedy for problem in found)


def test_missing_file_names_its_neighbour(tmp_path):
    (tmp_path / "weld.csv").write_text(POSE)
    problem = pose_problem(tmp_path / "wled.csv")
    assert "does not exist" in problem.what
    assert problem.remedy == "Did you mean 'weld.csv'?"
    assert "does not exist" in pose_problem(tmp_path / "nowhere" / "a.csv").what


def test_folder_device_and_pipe_are_refused(tmp_path):
    assert "folder" in pose_problem(tmp_path).what
    assert "not a regular file" in pose_problem("/dev/zero").what
    os.mkfifo(tmp_path / "pipe")
    assert "not a regular file" in pose_problem(tmp_path / "pipe").what


def test_names_no_file_can_have_are_refused():
    assert "cannot be read" in pose_problem("a\0b").what
    assert "cannot be read" in pose_problem("a" * 5000).what


@pytest.mark.skipif(os.geteuid() == 0, reason="the superuser may read and write everything")
def test_permissions(save, tmp_path):
    path = save(POSE)
    path.chmod(0)
    assert "cannot be read" in pose_problem(path).what
    tmp_path.chmod(0o500)
    assert "cannot be written" in problems(write_pose_csv, tmp_path / "b", [0], [[0] * 3], [[0] * 4])[0].what


def test_too_large_a_file_is_refused(save):
    path = save(POSE)
    size = len(POSE)
    assert read_text(path, size) == POSE
    assert "too large" in problems(read_text, path, size - 1)[0].what


@pytest.mark.parametrize("target", ["nowhere/a.csv", "folder", "."])
def test_files_that_cannot_be_written(tmp_path, target):
    (tmp_path / "folder").mkdir()
    problem = problems(write_joints_csv, tmp_path / target, [0.0], ("a",), [[0.0]])[0]
    assert "cannot be written" in problem.what
    assert list(tmp_path.iterdir()) == [tmp_path / "folder"]


def test_what_is_no_regular_file_is_left_alone(tmp_path):
    """A file moved over a device (here a pipe; as the superuser also /dev/null) would take its place."""
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    problem = problems(write_joints_csv, pipe, [0.0], ("a",), [[0.0]])[0]
    assert "cannot be written" in problem.what
    assert pipe.is_fifo()
    assert list(tmp_path.iterdir()) == [pipe]


def test_writing_replaces_the_whole_file(tmp_path):
    path = tmp_path / "a.txt"
    write_text(path, "long text\n" * 100)
    write_text(path, "r\u00f6hre\r\n")
    assert path.read_bytes() == "r\u00f6hre\r\n".encode()
    assert list(tmp_path.iterdir()) == [path]


def test_two_processes_may_write_one_file(tmp_path, monkeypatch):
    """As two rehearsals that compute the same companion: each moves its own draft, whole, into place."""
    path = tmp_path / "a.txt"
    with whole_file(path) as mine:
        mine.write(b"mine, begun first, ")
        with monkeypatch.context() as other:
            other.setattr("os.getpid", lambda: -1)
            write_text(path, "theirs")
        assert path.read_text() == "theirs"
        mine.write(b"ended last")
    assert path.read_text() == "mine, begun first, ended last"
    assert list(tmp_path.iterdir()) == [path]


def test_long_files_load_in_seconds(tmp_path):
    count = 100_000
    times = np.arange(count) * 1e-3
    turn = Rotation.from_euler("XYZ", np.c_[times, 0.3 * np.sin(times), 0.1 * times]).as_quat()
    path = tmp_path / "long.csv"
    write_pose_csv(path, times, np.c_[np.cos(times), np.sin(times), 0 * times], turn)
    begin = time.perf_counter()
    loaded = PosePath(*read_pose_csv(path))
    assert time.perf_counter() - begin < 10.0  # 0.8 s on one slow core; a loaded machine is no failure
    assert len(loaded.knots) == count
