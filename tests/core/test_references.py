# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
References: C², exact at the knots, at rest at both ends, V and A the derivatives of the pose.

Oracles: finite differences, closed-form motions, SciPy's Rotation and RotationSpline.

"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.interpolate import CubicSpline
from scipy.spatial.transform import Rotation, RotationSpline

from prioritized_tracking.core.references import JointHold, JointPath, PoseHold, PosePath
from prioritized_tracking.core.references.path_time import Progress
from prioritized_tracking.errors import InputError


def assert_close(value, expected, tolerance):
    """
    Check arrays or numbers to an absolute tolerance.

    """
    assert np.max(np.abs(np.asarray(value) - expected)) <= tolerance


def smooth(x):
    """
    Return the quintic smoothstep: from 0 to 1 with rest at both ends.

    """
    return x**3 * (10.0 - 15.0 * x + 6.0 * x**2)


def tilting(angle):
    """
    Return positions and quaternions of a tool going round while it tilts, angle (N,) in rad.

    """
    positions = np.c_[0.5 + 0.1 * np.cos(angle), 0.1 * np.sin(angle), 0.3 + 0.02 * np.sin(2.0 * angle)]
    tilts = np.c_[angle, 0.6 * np.sin(angle), 0.3 * np.cos(angle)]
    return positions, Rotation.from_euler("ZYX", tilts).as_quat()


def resting_path(count=41, **options):
    times = np.linspace(0.0, 5.0, count)
    return PosePath(times, *tilting(4.0 * smooth(times / 5.0)), **options)


def moving_path(count=41, **options):
    times = np.linspace(2.0, 7.0, count)  # the first time need not be 0
    return PosePath(times, *tilting(0.8 * (times - 2.0)), **options)


def round_path(count=61, **options):
    """
    One turn about z in each pass: the quaternion comes back with the opposite sign.

    """
    times = np.linspace(0.0, 6.0, count)
    return PosePath(times, *tilting(2.0 * math.pi * times / 6.0), **options)


def rocking_path(count=61, **options):
    """
    Closed without a turn: the quaternion comes back with its own sign.

    """
    times = np.linspace(0.0, 6.0, count)
    positions, _ = tilting(2.0 * math.pi * times / 6.0)
    tilts = np.c_[np.sin(times * math.pi / 3.0), 0.4 * np.cos(times * math.pi / 3.0)]
    return PosePath(times, positions, Rotation.from_euler("XY", tilts).as_quat(), **options)


PATHS = {
    "at rest": resting_path(),
    "ramped": moving_path(),
    "two knots": PosePath([0, 2], [[0, 0, 0], [1, 0, 0]], [[0, 0, 0, 1], [0, 0.6, 0, 0.8]]),
    "two knots at rest": PosePath([0, 60], [[0, 0, 0], [1, 0, 0]], [[0, 0, 0, 1], [0, 0.1, 0, 0.99**0.5]]),
    "three knots": PosePath([0, 1, 3], np.eye(3), [[0, 0, 0, 1], [0, 0.1, 0, 0.99**0.5], [0, 0, 0, -1]]),
    "tiny turn": PosePath(
        np.linspace(0, 4, 21),
        np.zeros((21, 3)),
        Rotation.from_rotvec(np.outer(smooth(np.linspace(0, 1, 21)), [1e-6, 0, 2e-6])).as_quat(),
    ),
    "closed once": round_path(),
    "twice round": round_path(repeat=2),
    "endless": round_path(repeat=0),
    "three times rocking": rocking_path(repeat=3),
}


@pytest.fixture(params=PATHS, name="path")
def _path(request):
    return PATHS[request.param]


def last(path):
    """
    Return the path time to look at last: the end, or three passes of an endless path.

    """
    return min(path.duration, 3.0 * path.file_duration)


def places(path):
    """
    Return the path times where two pieces of the path meet, the ends included.

    """
    laps = path.passes or 3
    found = [path.path_time(u, lap) for lap in range(laps) for u in path._spline.breaks]
    if path.ramped:
        found += [path.ramp_time, path.duration - path.ramp_time]
    return sorted(s for s in set(found) if s <= last(path) and math.isfinite(s))


def turned(after, before):
    """
    Return the rotation vector from one orientation to another, in base axes.

    """
    return Rotation.from_matrix(after @ before.T).as_rotvec()


def check_derivatives(sample, s, h=1e-5):
    """
    Check V and A of ``sample(s)`` against central differences of pose and V.

    Their error is h²/6 times the next two derivatives: for the paths here at most 1e2 and 1e3 (SI),
    so 2e-9 and 2e-8, plus rounding 1e-15/h = 1e-10 (rotation vectors from matrices: 1e-10 too).

    """
    before, here, after = sample(s - h), sample(s), sample(s + h)
    assert_close(here.V[:3], (after.p - before.p) / (2 * h), 5e-9)
    assert_close(here.V[3:], turned(after.R, before.R) / (2 * h), 5e-9)
    assert_close(here.A, (after.V - before.V) / (2 * h), 5e-8)


def test_velocity_and_acceleration_are_the_derivatives_of_the_pose(path):
    meetings = np.array(places(path))
    for s in 0.5 * (meetings[1:] + meetings[:-1]):
        check_derivatives(path.sample, s)


def test_both_sides_of_every_meeting_agree(path):
    """
    C²: across 2e-9 s pose and V change as V and A say, and A by no more than the jerk (< 1e3) allows.

    The parabola of pose and V over 2e-9 s is below rounding: of s, 2e-15 s, times V < 20 and A < 200.

    """
    h = 1e-9
    for s in places(path):
        before, here, after = path.sample(s - h), path.sample(s), path.sample(s + h)
        assert_close(after.p - before.p, 2 * h * here.V[:3], 1e-13)
        assert_close(turned(after.R, before.R), 2 * h * here.V[3:], 1e-13)
        assert_close(after.V - before.V, 2 * h * here.A, 1e-12)
        assert np.max(np.abs(after.A - before.A)) < 2 * h * 1e3


def test_knots_are_met_exactly(path):
    laps = path.passes or 3
    for lap in range(laps):
        for u, p, q in zip(path.knots, path.positions, path.quaternions, strict=True):
            sample = path.sample(path.path_time(u, lap))
            # path_time of a knot inside a ramp comes from a bisection: a few 1e-15 s
            assert_close(sample.p, p, 1e-13)
            assert_close(sample.R, Rotation.from_quat(q).as_matrix(), 1e-13)


def test_ends_are_at_rest_and_held(path):
    for s in (-1.0, 0.0, path.duration, path.duration + 1.0):
        if math.isinf(s):
            continue
        sample = path.sample(s, 1.0, 0.5)
        end = 0 if s <= 0.0 else -1
        assert_close(sample.p, path.positions[end], 1e-14)
        assert not np.any(sample.V)
        assert not np.any(sample.A)


def test_ends_are_reached_at_rest(path):
    """
    Just inside the ends V and A are what rest allows: jerk (< 1e3) times 1e-7 s, and half its square.

    """
    for s in (1e-7, path.duration - 1e-7):
        if math.isfinite(s):
            sample = path.sample(s)
            assert np.max(np.abs(sample.V)) < 1e-11
            assert np.max(np.abs(sample.A)) < 1e-4


def test_rotation_matrices_are_rotations(path):
    for s in np.linspace(0.0, last(path), 53):
        R = path.sample(s).R
        assert_close(R.T @ R, np.eye(3), 1e-14)
        assert_close(np.linalg.det(R), 1.0, 1e-14)


@pytest.mark.parametrize("rate", [0.0, 0.3, 1.0])
@pytest.mark.parametrize("acceleration", [-0.7, 0.0, 2.0])
def test_chain_rule(path, rate, acceleration):
    for s in np.linspace(0.0, last(path), 13)[1:-1] + 1e-3:
        moving = lambda dt, s=s: path.sample(  # noqa: E731
            s + rate * dt + 0.5 * acceleration * dt * dt, rate + acceleration * dt, acceleration
        )
        check_derivatives(moving, 0.0)


def test_resting_file_is_not_ramped_and_says_nothing():
    path = resting_path()
    assert not path.ramped
    assert path.messages == ()
    assert path.duration == path.file_duration == 5.0


def test_moving_file_is_ramped_says_so_and_keeps_its_geometry():
    path = moving_path()
    assert path.ramped
    assert len(path.messages) == 1
    assert "ramped" in path.messages[0]
    assert path.duration == pytest.approx(5.0 + path.ramp_time)
    # between the ramps: the closed-form circle at its constant speed; not-a-knot error about h⁴ω⁴/50
    middle = path.sample(0.5 * path.duration)
    angle = 0.8 * 2.5
    assert_close(middle.p[:2], [0.5 + 0.1 * math.cos(angle), 0.1 * math.sin(angle)], 1e-7)
    assert_close(np.linalg.norm(middle.V[:2]), 0.08, 1e-5)


@pytest.mark.parametrize("speed", [0.1, 0.4])
def test_ramps_add_no_more_than_a_moderate_acceleration(speed):
    """
    A line at 0.1 m/s: at most 0.5 m/s² in its ramps, where stopping within one row would take 49 m/s².

    """
    times = np.arange(0.0, 4.0, 0.007)
    line = np.outer(speed * times, [1.0, 0.0, 0.0])
    path = PosePath(times, line, np.tile([0, 0, 0, 1.0], (len(times), 1)))
    stopping = CubicSpline(times, line, bc_type="clamped")(0.0, 2)
    assert stopping[0] > 400.0 * speed
    fastest = max(abs(path.sample(s).A[0]) for s in np.linspace(0.0, path.duration, 2001))
    assert 0.3 < fastest <= 0.5 + 1e-9


def test_ramps_of_a_turn_add_no_more_than_a_moderate_acceleration():
    times = np.arange(0.0, 4.0, 0.01)
    turn = Rotation.from_euler("Z", times[:, None]).as_quat()  # 1 rad/s: a ramp of 0.94 s
    path = PosePath(times, np.zeros((len(times), 3)), turn)
    joints = JointPath(times, times[:, None])
    for accelerations in (
        [path.sample(s).A[5] for s in np.linspace(0.0, path.duration, 2001)],
        [joints.sample(s).a[0] for s in np.linspace(0.0, joints.duration, 2001)],
    ):
        assert 1.9 < max(accelerations) <= 2.0 + 1e-4


def test_a_path_too_short_for_its_ramps_is_all_ramp():
    path = PosePath([0.0, 0.1], [[0, 0, 0], [0.1, 0, 0]], [[0, 0, 0, 1]] * 2)
    assert path.ramp_time == path.file_duration == 0.1
    assert path.duration == 0.2


def test_sample_of_the_file_leaves_the_ramps_out():
    path, resting = moving_path(), resting_path()
    for u in (0.0, 0.05, 2.5, 5.0):
        sample, ramped = path.sample_file(u), path.sample(path.path_time(u))
        assert_close(sample.p, ramped.p, 1e-13)
        assert np.linalg.norm(sample.V[:2]) == pytest.approx(0.08, rel=1e-2)
        assert_close(resting.sample_file(u).A, resting.sample(u).A, 1e-12)
    for outside, end in ((-1.0, 0.0), (9.0, 5.0)):
        assert np.array_equal(path.sample_file(outside).p, path.sample_file(end).p)
    joints = JOINT_PATHS["ramped"]
    assert_close(joints.sample_file(1.0).v, [math.cos(1.0), 0.6, -2.0 * math.sin(2.0)], 1e-3)
    assert np.array_equal(joints.sample_file(3.0).q, joints.sample_file(2.0).q)


@pytest.mark.parametrize(("distance", "ramped"), [(0.0099 / 6, False), (0.0101 / 6, True)])
def test_threshold_of_rest_linear(distance, ramped):
    """
    A clamped cubic over 1 s and a distance d starts with 6 d m/s² (closed form).

    """
    path = PosePath([0, 1], [[0, 0, 0], [0, distance, 0]], [[0, 0, 0, 1]] * 2)
    assert path.ramped is ramped


@pytest.mark.parametrize(("angle", "ramped"), [(0.0499 / 6, False), (0.0501 / 6, True)])
def test_threshold_of_rest_angular(angle, ramped):
    """
    Near the identity the quaternion is half the angle: 6 θ rad/s² up to θ²/24 = 3e-6 of it.

    """
    turn = Rotation.from_rotvec([[0, 0, 0], [0, angle, 0]]).as_quat()
    assert PosePath([0, 1], np.zeros((2, 3)), turn).ramped is ramped
    assert JointPath([0, 1], [[0.0], [angle]]).ramped is ramped


def test_resting_spline_differs_from_the_clamped_one_by_what_the_threshold_allows():
    """
    Bringing an end acceleration a to 0 moves the curve by less than a h²/8 with knots h apart.

    """
    path = resting_path(21)
    reference = CubicSpline(path.knots, path.positions, bc_type="clamped")
    times = np.linspace(0.0, 5.0, 1001)
    apart = np.max([np.abs(path.sample(s).p - reference(s)) for s in times])
    assert apart < 0.01 * 0.25**2 / 8.0


def test_interpolation_converges_to_the_closed_form_motion():
    """
    Outside: SciPy's RotationSpline and the closed form.

    A smooth motion through dense knots: any C² cubic has second derivatives right to h²/8 times the
    fourth, here h = 0.0125 s and < 60 rad/s⁴, RotationSpline's likewise; its rates are in body axes.

    """
    path = resting_path(401)
    spline = RotationSpline(path.knots, Rotation.from_quat(path.quaternions))
    for s in np.linspace(0.5, 4.5, 17):
        sample, R = path.sample(s), spline(s).as_matrix()
        assert_close(sample.R, R, 1e-7)
        assert_close(sample.V[3:], R @ spline(s, 1), 1e-4)
        assert_close(sample.A[3:], R @ spline(s, 2), 2e-2)
        x = s / 5.0
        rate, bend = 4.0 / 5.0 * 30.0 * (x * (1 - x)) ** 2, 4.0 / 25.0 * 60.0 * x * (1 - x) * (1 - 2 * x)
        angle = 4.0 * smooth(x)
        assert_close(sample.V[1], 0.1 * math.cos(angle) * rate, 1e-5)
        expected = 0.1 * (math.cos(angle) * bend - math.sin(angle) * rate**2)
        assert_close(sample.A[1], expected, 2e-3)


@pytest.mark.parametrize("size", [1e-9, 1e-5, 1e-4, 3e-4, 1e-2])
def test_slow_turns_are_as_accurate_as_fast_ones(size):
    """
    Closed form: a turn about one axis by size·(1 − cos t)/2; relative errors of a cubic in h = 0.05.

    Both sides of 2e-4 rad per segment, where series expansions of rotation vectors switch.

    """
    times = np.arange(0.0, 2.0 * math.pi, 0.05)
    axis = np.array([2.0, 3.0, 6.0]) / 7.0
    turn = Rotation.from_rotvec(np.outer(size * (1.0 - np.cos(times)) / 2.0, axis)).as_quat()
    path = PosePath(times, np.zeros((len(times), 3)), turn)
    for u in (1.02, 2.51, 3.33):
        sample = path.sample_file(u)
        # error h³/24·f⁗ and h²/8·f⁗ of a cubic (de Boor), plus rounding 1e-16/h and 1e-16/h²
        assert_close(sample.V[3:], axis * size * math.sin(u) / 2.0, 1e-5 * size + 1e-14)
        assert_close(sample.A[3:], axis * size * math.cos(u) / 2.0, 4e-4 * size + 1e-12)


def test_signs_of_quaternions_do_not_matter():
    times = np.linspace(0.0, 5.0, 41)
    positions, quaternions = tilting(4.0 * smooth(times / 5.0))
    flips = np.where(np.random.default_rng(4).random(41) < 0.5, -1.0, 1.0)[:, None]
    plain, flipped = PosePath(times, positions, quaternions), PosePath(times, positions, flips * quaternions)
    for s in np.linspace(0.0, 5.0, 23):
        a, b = plain.sample(s), flipped.sample(s)
        assert np.array_equal(a.R, b.R)
        assert np.array_equal(a.A, b.A)


def test_lengths_of_quaternions_within_tolerance_do_not_matter():
    times = np.linspace(0.0, 5.0, 41)
    positions, quaternions = tilting(4.0 * smooth(times / 5.0))
    lengths = 1.0 + 9e-4 * np.sin(np.arange(41.0))[:, None]
    a, b = (PosePath(times, positions, scale * quaternions).sample(2.2) for scale in (1.0, lengths))
    assert_close(b.A, a.A, 1e-12)


@pytest.mark.parametrize("make", [round_path, rocking_path])
def test_periodic_path_runs_through_without_stopping_and_repeats_itself(make):
    path = make(repeat=3)
    assert path.closed
    assert path.periodic
    assert path.passes == 3
    assert path.messages == ()
    assert path.duration == pytest.approx(18.0 + path.ramp_time)
    begin = path.path_time(0.0, 1)
    assert np.linalg.norm(path.sample(begin).V) > 0.1
    assert [path.lap(begin + dt) for dt in (-1e-6, 1e-6)] == [0, 1]
    assert path.lap(path.duration) == 2
    for u in (2.5, 3.7):
        first, second = (path.sample(path.path_time(u, lap)) for lap in (0, 1))
        assert_close(second.p, first.p, 1e-13)
        assert_close(second.R, first.R, 1e-13)
        assert_close(second.A, first.A, 1e-10)


def test_periodic_path_treats_the_wrap_like_any_other_place():
    """
    A circle at constant speed: the speed at the wrap is as even as in the middle (h⁴/… of a cubic).

    """
    times = np.linspace(0.0, 6.0, 61)
    angle = 2.0 * math.pi * times / 6.0
    circle = np.c_[np.cos(angle), np.sin(angle), 0.0 * angle]
    path = PosePath(times, circle, Rotation.from_euler("Z", angle[:, None]).as_quat(), repeat=0)
    begin = path.path_time(0.0, 2)
    speeds = [np.linalg.norm(path.sample(begin + dt).V[:3]) for dt in np.linspace(-0.2, 0.2, 41)]
    rates = [path.sample(begin + dt).V[5] for dt in np.linspace(-0.2, 0.2, 41)]
    # velocity error of a periodic cubic at most h³/24 times the fourth derivative (de Boor)
    assert np.ptp(speeds) < 2 * 0.1**3 / 24 * (math.pi / 3) ** 4
    assert_close(rates, [math.pi / 3.0] * 41, 2 * 0.1**3 / 24)


def test_ends_that_differ_by_the_digits_of_a_file_are_closed():
    times = np.linspace(0.0, 6.0, 61)
    positions, quaternions = tilting(2.0 * math.pi * times / 6.0)
    positions[-1, 0] += 9e-7
    path = PosePath(times, positions, quaternions, repeat=2)
    assert path.closed
    test_both_sides_of_every_meeting_agree(path)
    positions[-1, 0] += 2e-7
    assert not PosePath(times, positions, quaternions).closed


def test_endless_path_keeps_its_digits():
    path = round_path(repeat=0)
    assert math.isinf(path.duration)
    early, late = (path.sample(path.path_time(1.3, lap)) for lap in (1, 100_000))
    assert_close(late.p, early.p, 1e-9)  # 6e5 s carry 1e-10 s


@pytest.mark.parametrize("repeat", [0, 2])
def test_open_path_is_not_repeated(repeat):
    with pytest.raises(InputError, match="open path cannot be repeated"):
        moving_path(repeat=repeat)
    with pytest.raises(InputError, match="open path cannot be repeated"):
        JointPath([0, 1], [[0.0], [1.0]], repeat=repeat)


@pytest.mark.parametrize("repeat", [-1, True, 1.5, "2", None])
def test_repeat_is_a_number_of_passes(repeat):
    with pytest.raises(InputError, match="number of passes"):
        round_path(repeat=repeat)


def test_time_of_progress_and_path_together_stays_smooth():
    """
    Start, half the pace, hold in the middle, go on: pose, V, A against differences in controller time.

    """
    path = moving_path()
    progress = Progress.at_rest(0.0)
    changes = [(0.0, 1.0, 0.5), (1.0, 0.5, 0.3), (2.0, 0.0, 0.5), (2.2, 1.0, 0.5), (3.0, 0.0, 0.4)]
    changes += [(5.0, 1.0, 0.5)]
    for (t, rate, over), until in zip(changes, [*(c[0] for c in changes[1:]), 9.0], strict=True):
        before = path.sample(*progress.at(t))
        progress = progress.toward(t, rate, over)
        assert_close(path.sample(*progress.at(t)).A, before.A, 1e-9)
        for x in np.linspace(t, until, 12)[1:-1]:
            check_derivatives(lambda y, now=progress: path.sample(*now.at(y)), x + 1e-4)
    held = path.sample(*progress.at(50.0))
    assert_close(held.p, path.positions[-1], 1e-14)
    assert not np.any(held.A)


def test_hold_in_mid_path_is_at_rest():
    path = moving_path()
    progress = Progress.at_rest(0.0).toward(0.0, 1.0, 0.5).toward(2.0, 0.0, 0.5)
    first, second = path.sample(*progress.at(3.0)), path.sample(*progress.at(4.0))
    assert np.array_equal(first.p, second.p)
    assert not np.any(first.V)
    assert not np.any(first.A)


def test_holds():
    pose = PoseHold(np.eye(3), [1.0, 2.0, 3.0])
    sample = pose.sample(12.0, 1.0, 1.0)
    assert np.array_equal(sample.p, [1.0, 2.0, 3.0])
    assert np.array_equal(sample.R, np.eye(3))
    assert not np.any(sample.V)
    assert not np.any(sample.A)
    joints = JointHold([0.1, 0.2]).sample(-3.0)
    assert np.array_equal(joints.q, [0.1, 0.2])
    assert not np.any(joints.v)
    assert not np.any(joints.a)
    for hold in (pose, JointHold([0.0])):
        assert (hold.duration, hold.closed, hold.ramped, hold.messages) == (0.0, False, False, ())
    with pytest.raises(ValueError, match="read-only"):
        sample.p[0] = 0.0
    with pytest.raises(InputError, match="shape"):
        PoseHold(np.eye(4), np.zeros(3))


# --- joints ---------------------------------------------------------------------------------------


def joint_motion(times):
    return np.c_[np.sin(times), 0.3 * times**2, np.cos(2.0 * times)]


def turning_joints(count=61, **options):
    times = np.linspace(0.0, 6.0, count)
    phase = 2.0 * math.pi * times / 6.0
    return JointPath(times, np.c_[phase, np.sin(phase), -2.0 * phase + 0.2 * np.cos(phase)], **options)


CONTINUOUS = [True, False, True]
JOINT_PATHS = {
    "at rest": JointPath(np.linspace(0, 4, 31), np.outer(smooth(np.linspace(0, 1, 31)), [1.0, -2.0])),
    "ramped": JointPath(np.linspace(0, 2, 31), joint_motion(np.linspace(0, 2, 31))),
    "two knots": JointPath([0, 1], [[0.0, 1.0], [1.0, 0.0]]),
    "three times, with advance": turning_joints(repeat=3, continuous=CONTINUOUS),
    "endless, with advance": turning_joints(repeat=0, continuous=CONTINUOUS),
    "follower, ramped": JointPath(
        np.linspace(0, 5, 31), joint_motion(np.linspace(0, 2, 31)), leader=moving_path()
    ),
    "follower, periodic": turning_joints(leader=round_path(repeat=2), continuous=CONTINUOUS),
    "follower, at rest": JointPath(
        np.linspace(0, 5, 31), np.outer(smooth(np.linspace(0, 1, 31)), [1.0, -2.0]), leader=resting_path()
    ),
}


@pytest.fixture(params=JOINT_PATHS, name="joints")
def _joints(request):
    return JOINT_PATHS[request.param]


def test_joint_derivatives_agree_with_differences(joints):
    h = 1e-5
    meetings = np.array(places(joints))
    for s in 0.5 * (meetings[1:] + meetings[:-1]):
        rate, acceleration = 0.7, -0.4
        before, here, after = (
            joints.sample(s + rate * dt + acceleration * dt**2 / 2, rate + acceleration * dt, acceleration)
            for dt in (-h, 0.0, h)
        )
        # error h²/6 times the third and fourth derivative (< 1e2, 1e3), rounding 1e-14/h (q to 40 rad)
        assert_close(here.v, (after.q - before.q) / (2 * h), 5e-9)
        assert_close(here.a, (after.v - before.v) / (2 * h), 5e-8)


def test_joints_on_both_sides_of_every_meeting_agree(joints):
    h = 1e-9  # as for poses
    for s in places(joints):
        before, here, after = joints.sample(s - h), joints.sample(s), joints.sample(s + h)
        assert_close(after.q - before.q, 2 * h * here.v, 1e-13)
        assert_close(after.v - before.v, 2 * h * here.a, 1e-12)
        assert np.max(np.abs(after.a - before.a)) < 2 * h * 1e3


def test_joint_knots_are_met_exactly(joints):
    for lap in range(joints.passes or 3):
        for u, q in zip(joints.knots, joints.q, strict=True):
            sample = joints.sample(joints.path_time(u, lap))
            assert_close(sample.q, q + lap * joints.advance, 1e-12)


def test_joint_ends_are_at_rest_and_held(joints):
    for s in (-1.0, 0.0, joints.duration, joints.duration + 1.0):
        if math.isfinite(s):
            sample = joints.sample(s, 1.0, 0.5)
            assert not np.any(sample.v)
            assert not np.any(sample.a)
    for s in (1e-7, joints.duration - 1e-7):
        if math.isfinite(s):
            assert np.max(np.abs(joints.sample(s).v)) < 1e-11
            assert np.max(np.abs(joints.sample(s).a)) < 1e-4


def test_continuous_joints_advance_by_whole_turns():
    joints = turning_joints(repeat=0, continuous=CONTINUOUS)
    assert_close(joints.advance, [2.0 * math.pi, 0.0, -4.0 * math.pi], 1e-15)
    first, later = (joints.sample(joints.path_time(3.3, lap)) for lap in (1, 4))
    assert_close(later.q - first.q, 3.0 * joints.advance, 1e-10)
    assert_close(later.v, first.v, 1e-10)


def test_joints_with_limits_do_not_advance():
    with pytest.raises(InputError, match=r"joint 0 6\.28"):
        turning_joints(repeat=2, continuous=[False, False, True])
    with pytest.raises(InputError, match=r"elbow 6\.28"):
        turning_joints(leader=round_path(repeat=2), names=("elbow", "b", "c"))


def test_follower_takes_the_time_of_its_leader():
    leader = moving_path()
    follower = JointPath([0.0, 2.0, 5.0], [[0.0], [1.0], [1.2]], leader=leader)
    assert follower.ramped
    assert follower.ramp_time == leader.ramp_time
    assert follower.duration == leader.duration
    for u in (0.0, 2.0, 5.0):
        s = leader.path_time(u)
        index = [0.0, 2.0, 5.0].index(u)
        assert_close(follower.sample(s).q, follower.q[index], 1e-13)
    periodic = turning_joints(leader=round_path(repeat=3), continuous=CONTINUOUS)
    assert periodic.periodic
    assert periodic.passes == 3


def test_follower_of_a_ramped_leader_keeps_its_end_velocities():
    follower = JointPath([0.0, 2.0, 5.0], [[0.0], [0.2], [0.5]], leader=moving_path())
    for u in (0.0, 3.3, 5.0):
        assert_close(follower.sample_file(u).v, 0.1, 1e-14)


def test_follower_that_lasts_as_long_but_for_digits_is_stretched():
    follower = JointPath([0.0, 2.0, 5.000004], [[0.0], [0.2], [0.5]], leader=moving_path())
    assert follower.knots[-1] == 5.0
    assert_close(follower.sample(1e9).q, 0.5, 1e-14)


def test_follower_of_a_resting_leader_is_brought_to_rest_and_says_so():
    leader = resting_path()
    follower = JointPath([0.0, 2.0, 5.0], [[0.0], [1.0], [1.2]], leader=leader)
    assert not follower.ramped
    assert len(follower.messages) == 1
    assert "do not rest" in follower.messages[0]


def test_follower_that_lasts_otherwise_is_refused():
    with pytest.raises(InputError, match="does not last as long"):
        JointPath([0.0, 4.0], [[0.0], [1.0]], leader=moving_path())
    with pytest.raises(InputError, match="no path"):
        JointPath([0.0, 4.0], [[0.0], [1.0]], leader=PoseHold(np.eye(3), np.zeros(3)))


# --- faults ---------------------------------------------------------------------------------------


def refused(times, positions, quaternions):
    """
    Return the problems of a pose path that must be refused.

    """
    with pytest.raises(InputError) as error:
        PosePath(times, positions, quaternions, where="here")
    return error.value.problems


def test_every_fault_of_the_knots_is_named():
    turn = [[0, 0, 0, 1], [0, 0, 0, 1.002], [0, 0, 0, 1], [0, 0.8, 0, 0.6], [0, 0.8, 0, 0.6]]
    problems = refused([0, 1, 1, 2, 3], [[0, 0, 0]] * 4 + [[0, math.nan, 0]], turn)
    assert [problem.where for problem in problems] == [
        "here knot 4 y",
        "here knot 2 t",
        "here knot 1 qx,qy,qz,qw",
        "here knot 3 qx,qy,qz,qw",
    ]
    assert "106.3 deg" in problems[3].got


def test_a_fault_on_every_knot_is_listed_in_short():
    problems = refused(np.zeros(1000), np.zeros((1000, 3)), np.full((1000, 4), 0.6))
    assert len(problems) == 8  # two kinds: three examples and a count
    assert "996 more" in problems[3].what


@pytest.mark.parametrize("value", [1e13, -1e308, math.inf, math.nan])
def test_numbers_that_cannot_be_used_are_refused_without_a_warning(value):
    turn = np.tile([0, 0, 0, 1.0], (3, 1))
    for row, column in ((0, 0), (1, 3)):
        spoiled = turn.copy()
        spoiled[row, column] = value
        assert f"knot {row}" in refused([0, 1, 2], np.zeros((3, 3)), spoiled)[0].where
    assert "knot 1 t" in refused([0, value, 2], np.zeros((3, 3)), turn)[0].where
    assert "knot 2 z" in refused([0, 1, 2], [[0, 0, 0], [0, 0, 0], [0, 0, value]], turn)[0].where
    with pytest.raises(InputError, match="knot 1 joint 0"):
        JointPath([0, 1, 2], [[0.0], [value], [0.0]])


def test_knots_closer_than_a_microsecond_are_refused():
    problems = refused([0, 1, 1 + 5e-7], np.zeros((3, 3)), np.tile([0, 0, 0, 1.0], (3, 1)))
    assert "hardly increases" in problems[0].what


@pytest.mark.parametrize("times", [[], [0.0]])
def test_a_path_needs_two_knots(times):
    count = len(times)
    problems = refused(times, np.zeros((count, 3)), np.tile([0, 0, 0, 1.0], (count, 1)))
    assert "at least two knots" in problems[0].what


def test_shapes_are_checked():
    bad = [([0, 1], np.zeros((3, 3))), ([0, 1], np.zeros((2, 2))), ([[0, 1]], np.zeros((1, 3)))]
    for times, positions in bad:
        assert "wrong shape" in refused(times, positions, np.tile([0, 0, 0, 1.0], (2, 1)))[0].what
    with pytest.raises(InputError, match="wrong shape"):
        JointPath([0, 1], [0.0, 1.0])
    with pytest.raises(InputError, match="numbers"):
        JointPath([0, 1], [["a"], ["b"]])


def test_uneven_times_that_throw_the_orientation_out_are_refused():
    turn = Rotation.from_euler("Z", [[0], [80], [81], [82]], degrees=True).as_quat()
    problems = refused([0, 1e-3, 10, 10.001], np.zeros((4, 3)), turn)
    assert "swings out" in problems[0].what


@given(st.integers(0, 2**32 - 1), st.integers(2, 12))
def test_random_paths(seed, count):
    """
    Random uneven knots: exact, smooth and at rest, whatever they are.

    """
    rng = np.random.default_rng(seed)
    times = np.cumsum(rng.uniform(0.5, 1.0, count))
    turns = Rotation.identity()
    quaternions = []
    for step in Rotation.from_rotvec(rng.uniform(-0.7, 0.7, (count, 3))):
        turns = step * turns
        quaternions.append(turns.as_quat())
    path = PosePath(times, rng.normal(size=(count, 3)), quaternions)
    test_knots_are_met_exactly(path)
    test_both_sides_of_every_meeting_agree(path)
    test_ends_are_at_rest_and_held(path)
    test_velocity_and_acceleration_are_the_derivatives_of_the_pose(path)


def test_joints_agree_with_scipy_at_any_place():
    rng = np.random.default_rng(1)
    times = np.concatenate(([0.0], np.cumsum(rng.uniform(0.1, 1.0, 9))))
    values = rng.normal(size=(10, 3))
    path, reference = JointPath(times, values), CubicSpline(times, values)  # moving: not-a-knot ends
    for u in [*rng.uniform(0.0, times[-1], 20), 0.0, times[3], times[-1]]:
        sample = path.sample_file(u)
        for order, value in enumerate((sample.q, sample.v, sample.a)):
            assert_close(value, reference(u, order), 1e-11)
