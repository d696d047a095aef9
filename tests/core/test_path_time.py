# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Time along a path: the ramp, the map to file time, and progress under start, hold and pace.

Oracles: finite differences, numerical quadrature, the bounds stated in the docstrings.

"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from prioritized_tracking.core.references.path_time import RAMP_SLOPE_MAX, PathTime, Progress, ramp

H = 1e-5
"""Step of central differences; their error is H²/6 times the third derivative, plus 1e-16/H."""


def slope(function, x, h=H):
    """
    Return the central difference of a function.

    """
    return (function(x + h) - function(x - h)) / (2.0 * h)


def test_ramp_starts_and_ends_at_rest_and_covers_half_its_time():
    assert ramp(0.0) == (0.0, 0.0, 0.0)
    assert ramp(1.0) == pytest.approx((0.5, 1.0, 0.0), abs=1e-15)


@pytest.mark.parametrize("x", np.linspace(0.01, 0.99, 15))
def test_ramp_rate_and_slope_are_derivatives(x):
    # third derivative of the distance and of the rate at most 60: error 60 H²/6 = 1e-9
    assert slope(lambda y: ramp(y)[0], x) == pytest.approx(ramp(x)[1], abs=2e-9)
    assert slope(lambda y: ramp(y)[1], x) == pytest.approx(ramp(x)[2], abs=2e-9)
    assert ramp(x)[0] == pytest.approx(quad(lambda y: ramp(y)[1], 0.0, x)[0], abs=1e-14)


def test_steepest_slope_of_the_ramp_is_the_stated_one():
    slopes = [ramp(x)[2] for x in np.linspace(0.0, 1.0, 1001)]
    assert max(slopes) == pytest.approx(RAMP_SLOPE_MAX, abs=1e-12)


TIMES = {
    "plain": PathTime(4.0),
    "ramped": PathTime(4.0, 1, 0.7),
    "only ramps": PathTime(0.4, 1, 0.4),
    "three passes": PathTime(4.0, 3, 5.5),
    "endless": PathTime(4.0, 0, 0.7),
}


@pytest.fixture(params=TIMES, name="path_time")
def _path_time(request):
    return TIMES[request.param]


def last(path_time):
    """
    Return the path time to look at last: the end, or 10 s of an endless path.

    """
    return min(path_time.duration, 10.0)


def test_path_time_derivatives_agree_with_differences(path_time):
    for s in np.linspace(0.0, last(path_time), 97)[1:-1] + 1e-3 * math.pi:
        if s + H > last(path_time):
            continue
        _, du, ddu = path_time.at(s)
        # third derivative at most 5.8 / (ramp time)² = 36: error 36 H²/6 < 1e-9; rounding 1e-15/H
        assert slope(lambda x: path_time.at(x)[0], s) == pytest.approx(du, abs=2e-9)
        assert slope(lambda x: path_time.at(x)[1], s) == pytest.approx(ddu, abs=2e-8)


def test_path_time_is_continuous_with_two_derivatives_across_every_ramp_end(path_time):
    length, end = path_time.ramp_time, path_time.duration
    places = [0.0, end, length, end - length] if length else []
    for s in (s for s in places if math.isfinite(s)):
        before, after = np.array(path_time.at(s - 1e-7)), np.array(path_time.at(s + 1e-7))
        # value, rate and slope change by at most 2e-7 times 1, 1.875/0.4 and 5.8/0.4²
        assert np.all(np.abs(after - before) <= np.array([2.1e-7, 1e-6, 8e-6]))


def test_path_time_is_at_rest_and_held_outside_when_ramped():
    path_time = TIMES["three passes"]
    assert path_time.at(-1.0) == path_time.at(0.0) == (0.0, 0.0, 0.0)
    assert path_time.at(path_time.duration) == path_time.at(99.0) == (12.0, 0.0, 0.0)
    assert path_time.duration == pytest.approx(12.0 + 5.5)  # each ramp costs half its time


def test_inverse_of_path_time(path_time):
    for s in np.linspace(0.0, last(path_time), 41):
        u = path_time.at(s)[0]
        assert path_time.at(path_time.inverse(u))[0] == pytest.approx(u, abs=1e-12)
    assert path_time.inverse(-1.0) == 0.0
    assert path_time.inverse(path_time.total) == path_time.duration


def test_split_into_passes():
    path_time = TIMES["three passes"]
    assert path_time.split(-1.0) == (0, 0.0)
    assert path_time.split(3.0) == (0, 3.0)
    assert path_time.split(4.0) == (1, 0.0)  # the start of the next pass, as the end of the first
    assert path_time.split(11.0) == (2, 3.0)
    assert path_time.split(12.0) == (2, 4.0)  # the last end stays in the last pass
    assert TIMES["plain"].split(4.0) == (0, 4.0)
    assert TIMES["endless"].split(4000.0) == (1000, 0.0)


def test_progress_at_rest_stays():
    progress = Progress.at_rest(3.0, 1.25)
    assert progress.at(3.0) == progress.at(1e6) == progress.at(0.0) == (1.25, 0.0, 0.0)


def test_progress_from_a_settled_rate_takes_exactly_the_time_asked_for():
    progress = Progress.at_rest(1.0).toward(1.0, 0.8, 0.5)
    assert progress.settles_at == pytest.approx(1.5, abs=1e-15)
    assert progress.at(1.5) == pytest.approx((0.2, 0.8, 0.0), abs=1e-14)  # symmetric: half the way
    assert progress.at(3.5) == pytest.approx((0.2 + 1.6, 0.8, 0.0), abs=1e-14)


def test_progress_toward_the_rate_it_has_changes_nothing():
    progress = Progress.at_rest(0.0).toward(0.0, 1.0, 0.5).toward(2.0, 1.0, 0.5)
    assert progress.phases == ()
    assert progress.at(3.0) == pytest.approx((2.75, 1.0, 0.0), abs=1e-14)


def test_hold_in_the_middle_of_a_start_brakes_at_once_and_ends_in_time():
    progress = Progress.at_rest(0.0).toward(0.0, 1.0, 1.0).toward(0.5, 0.0, 1.0)
    assert progress.at(0.5)[1:] == pytest.approx((0.5, 2.0), abs=1e-14)
    assert progress.phases[0][1] < 0.0
    assert progress.settles_at == pytest.approx(1.5, abs=1e-14)
    held = progress.at(1.5)
    assert held[1:] == pytest.approx((0.0, 0.0), abs=1e-14)
    assert progress.at(9.0)[0] == pytest.approx(held[0], abs=1e-14)


def test_a_slow_start_in_the_middle_of_a_quick_hold_is_slow():
    quick = Progress.at_rest(0.0).toward(0.0, 1.0, 0.5).toward(1.0, 0.0, 0.5)
    slow = quick.toward(1.25, 1.0, 5.0)
    assert slow.settles_at == pytest.approx(1.25 + 0.25 + 5.0, abs=1e-12)  # quick had 0.25 s to go


changes = st.lists(
    st.tuples(
        st.floats(0.0, 2.0),  # wait
        st.one_of(st.just(0.0), st.just(1.0), st.floats(0.01, 1.0)),  # rate
        st.floats(0.05, 5.0),  # over
    ),
    min_size=1,
    max_size=6,
)


@settings(max_examples=150, deadline=None, derandomize=True)
@given(changes)
def test_progress_is_smooth_and_stays_between_the_rates_asked_for(steps):
    t, progress, asked = 0.0, Progress.at_rest(0.0), 0.0
    for wait, rate, over in steps:
        t += wait
        following = progress.toward(t, rate, over)
        assert following.at(t) == pytest.approx(progress.at(t), abs=1e-12)  # C² at the change
        longest = over + max(progress.settles_at - t, 0.0)
        assert following.settles_at - t <= longest * (1.0 + 1e-9) + 1e-12
        progress, asked = following, max(asked, rate)
        times = np.linspace(t, progress.settles_at + 0.1, 60)
        s, rates, slopes = np.array([progress.at(x) for x in times]).T
        assert np.all(rates >= -1e-9)
        assert np.all(rates <= asked + 1e-9)
        assert np.all(np.diff(s) >= -1e-12)
        check_constant_jerk(progress, times, s, rates, slopes)
        assert progress.at(progress.settles_at + 1.0)[1:] == (rate, 0.0)


def check_constant_jerk(progress, times, s, rates, slopes):
    """
    Check that neighbouring samples agree as pieces of bounded jerk do.

    Integrating over dt with jerk at most J: the slope changes by at most J dt, the rate differs
    from the trapezoid of the slope by at most J dt²/4, path time from Simpson-free Taylor by J dt³/6.

    """
    dt = times[1] - times[0]
    jerk = max((abs(jerk) for _, jerk in progress.phases), default=0.0)
    assert np.all(np.abs(np.diff(slopes)) <= jerk * dt * (1 + 1e-9) + 1e-9)
    assert np.all(np.abs(np.diff(rates) - dt * (slopes[1:] + slopes[:-1]) / 2) <= jerk * dt**2 / 4 + 1e-9)
    taylor = dt * rates[:-1] + dt**2 / 2 * slopes[:-1]
    assert np.all(np.abs(np.diff(s) - taylor) <= jerk * dt**3 / 6 * (1 + 1e-9) + 1e-9)
