# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The twelve sequences of Euler angles against SciPy and against printed tables.

Reference library: `scipy.spatial.transform.Rotation.from_euler` with upper-case (intrinsic) sequences.
Tables: J. Diebel, "Representing Attitude: Euler Angles, Unit Quaternions, and Rotation Vectors", 2006, turned
into base axes.

With ω = E φ̇, a chart returns the rows Eᵀ on ω and the rate EᵀE. Let s be the sine of the angle between the
first and the last axis (|sin β| for proper sequences, |cos β| for Tait-Bryan ones): an error of 1e-16 in an
element of R turns the first and the last angle by 1e-16/s, which is what the tolerances below allow, with a
factor for the handful of roundings.

"""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from prioritized_tracking.charts.base import ChartWork
from prioritized_tracking.charts.rotation import SEQUENCES, Euler

EPS = 1e-15
ALL = ["".join(axes) for axes in itertools.product("xyz", repeat=3) if axes[0] != axes[1] != axes[2]]


def proper(sequence: str) -> bool:
    """
    Whether the first axis comes again as the last.

    """
    return sequence[0] == sequence[2]


def centre(sequence: str) -> float:
    """
    Middle angle half way between the two singular ones, rad.

    """
    return 0.5 * np.pi if proper(sequence) else 0.0


def angle_triples(sequence: str, count: int = 200) -> np.ndarray:
    """
    Return (N, 3) random angles, middle ones in the open range SciPy and the chart both use.

    """
    rng = np.random.default_rng(SEQUENCES.index(sequence))
    middle = centre(sequence) + rng.uniform(-0.4999, 0.4999, count) * np.pi
    return np.stack([rng.uniform(-np.pi, np.pi, count), middle, rng.uniform(-np.pi, np.pi, count)], axis=1)


def sine(sequence: str, middle: float) -> float:
    """
    Sine of the angle between first and last axis.

    """
    return float(abs(np.sin(middle) if proper(sequence) else np.cos(middle)))


def chart_at(sequence: str, R: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
    """
    Return angles (3,), E (3, 3), rate (3, 3) and validity of the chart at an orientation.

    """
    work = ChartWork.allocate(3, 6)
    chart = Euler(sequence=sequence)
    validity = chart.evaluate(np.ascontiguousarray(R), np.zeros(3), work.x, work.rows, work.rate)
    assert not work.rows[:, :3].any()  # an orientation does not depend on where the frame is
    return work.x.copy(), work.rows[:, 3:].T.copy(), work.rate.copy(), validity


def rotation(sequence: str, angles: np.ndarray) -> np.ndarray:
    """
    SciPy's matrix of intrinsic rotations.

    """
    return Rotation.from_euler(sequence.upper(), angles).as_matrix()


def test_there_are_twelve():
    """
    Neighbouring axes differ: 3 · 2 · 2 sequences.

    """
    assert sorted(SEQUENCES) == ALL
    assert len(ALL) == 12


@pytest.mark.parametrize("sequence", ALL)
def test_angles_round_trip(sequence):
    """
    Source: SciPy, from angles to a matrix; the chart must give the same angles back.

    """
    for angles in angle_triples(sequence):
        x, _, _, _ = chart_at(sequence, rotation(sequence, angles))
        gap = np.abs((x - angles + np.pi) % (2.0 * np.pi) - np.pi)
        assert gap.max() < 4.0 * EPS / sine(sequence, angles[1]), (angles, x)


@pytest.mark.parametrize("sequence", ALL)
def test_axes_by_composition(sequence):
    """
    Source: SciPy; E's columns are the axes of the three rotations, each turned by those before it.

    """
    unit = {"x": np.eye(3)[0], "y": np.eye(3)[1], "z": np.eye(3)[2]}
    for angles in angle_triples(sequence, 50):
        first = Rotation.from_euler(sequence[0].upper(), angles[0])
        second = first * Rotation.from_euler(sequence[1].upper(), angles[1])
        axes = [unit[sequence[0]], first.apply(unit[sequence[1]]), second.apply(unit[sequence[2]])]
        _, E, rate, _ = chart_at(sequence, rotation(sequence, angles))
        tolerance = 8.0 * EPS / sine(sequence, angles[1])
        np.testing.assert_allclose(E, np.column_stack(axes), atol=tolerance, rtol=0.0)
        np.testing.assert_allclose(rate, E.T @ E, atol=tolerance, rtol=0.0)


@pytest.mark.parametrize("sequence", ALL)
def test_rates_by_finite_differences(sequence):
    """
    Source: SciPy, central difference of the matrix along φ̇: ω = vee(Ṙ Rᵀ) = E φ̇.

    The step h = 1e-5 leaves h²/6 of the third derivative, at most (√3)³ for |φ̇| = 1, and 1e-16/h of noise.

    """
    h = 1e-5
    rng = np.random.default_rng(1)
    for angles in angle_triples(sequence, 20):
        if sine(sequence, angles[1]) < 0.05:
            continue
        speed = rng.standard_normal(3)
        speed /= np.linalg.norm(speed)
        R = rotation(sequence, angles)
        slope = (rotation(sequence, angles + h * speed) - rotation(sequence, angles - h * speed)) / (2.0 * h)
        W = slope @ R.T
        omega = np.array([W[2, 1], W[0, 2], W[1, 0]])
        _, E, _, _ = chart_at(sequence, R)
        np.testing.assert_allclose(E @ speed, omega, atol=h**2 + 2e-11, rtol=0.0)


def zyz(f, t):
    """
    Diebel 2006, ZYZ: first angle f, middle t.

    """
    return [
        [0.0, -np.sin(f), np.cos(f) * np.sin(t)],
        [0.0, np.cos(f), np.sin(f) * np.sin(t)],
        [1.0, 0.0, np.cos(t)],
    ]


def xyz(a, b):
    """
    Diebel 2006, XYZ.

    """
    return [
        [1.0, 0.0, np.sin(b)],
        [0.0, np.cos(a), -np.sin(a) * np.cos(b)],
        [0.0, np.sin(a), np.cos(a) * np.cos(b)],
    ]


def zyx(f, t):
    """
    Diebel 2006, ZYX.

    """
    return [
        [0.0, -np.sin(f), np.cos(f) * np.cos(t)],
        [0.0, np.cos(f), np.sin(f) * np.cos(t)],
        [1.0, 0.0, -np.sin(t)],
    ]


@pytest.mark.parametrize(
    ("sequence", "table", "determinant"),
    [("zyz", zyz, lambda t: -np.sin(t)), ("xyz", xyz, np.cos), ("zyx", zyx, lambda t: -np.cos(t))],
)
def test_printed_tables(sequence, table, determinant):
    """
    Source: Diebel 2006, three of the twelve, with their determinants.

    """
    for angles in angle_triples(sequence, 50):
        _, E, _, _ = chart_at(sequence, rotation(sequence, angles))
        tolerance = 8.0 * EPS / sine(sequence, angles[1])
        np.testing.assert_allclose(E, table(angles[0], angles[1]), atol=tolerance, rtol=0.0)
        assert np.linalg.det(E) == pytest.approx(determinant(angles[1]), abs=tolerance)


@pytest.mark.parametrize("sequence", ALL)
def test_determinants_and_singular_values(sequence):
    """
    Closed forms for all twelve: |det E| = |sin β| or |cos β|; singular values {√(1 − c), 1, √(1 + c)} with
    c = |cos β| or |sin β|; the chart is whole from 0.5 on and gone at 0.2 of the smallest.

    √ doubles the digits lost where 1 − c is small: 1e-16 becomes 1e-8 at worst.

    """
    for angles in angle_triples(sequence):
        _, E, _, validity = chart_at(sequence, rotation(sequence, angles))
        c = abs(np.cos(angles[1]) if proper(sequence) else np.sin(angles[1]))
        s = sine(sequence, angles[1])
        assert abs(np.linalg.det(E)) == pytest.approx(s, abs=8.0 * EPS / s)
        values = np.linalg.svd(E, compute_uv=False)
        smallest = np.sqrt(1.0 - c)
        assert values[2] == pytest.approx(smallest, abs=8.0 * EPS / max(smallest, 1e-8) / s)
        np.testing.assert_allclose(values[:2], [np.sqrt(1.0 + c), 1.0], atol=8.0 * EPS / s, rtol=0.0)
        assert (validity == 1.0) == (smallest >= 0.5) or abs(smallest - 0.5) < 1e-4  # S is flat there
        assert (validity == 0.0) == (smallest <= 0.2) or abs(smallest - 0.2) < 1e-12


@pytest.mark.parametrize("sequence", ALL)
@pytest.mark.parametrize("end", [-1.0, 1.0])
@pytest.mark.parametrize("distance", [1e-2, 1e-5, 1e-8])
def test_close_to_the_singular_angle(sequence, end, distance):
    """
    Source: SciPy. First and last angle lose 1e-16/distance and so does what is put together from them; the
    middle angle and the length of the axes lose nothing.

    """
    rng = np.random.default_rng(2)
    for _ in range(50):
        first, last = rng.uniform(-np.pi, np.pi, 2)
        angles = np.array([first, centre(sequence) + end * (0.5 * np.pi - distance), last])
        R = rotation(sequence, angles)
        x, E, _, validity = chart_at(sequence, R)
        gap = np.abs((x - angles + np.pi) % (2.0 * np.pi) - np.pi)
        assert gap.max() < 4.0 * EPS / distance
        assert gap[1] < 4.0 * EPS  # the middle one comes from both sine and cosine
        np.testing.assert_allclose(rotation(sequence, x), R, atol=4.0 * EPS / distance, rtol=0.0)
        np.testing.assert_allclose(np.linalg.norm(E, axis=0), 1.0, atol=4.0 * EPS, rtol=0.0)
        assert validity == 0.0


@pytest.mark.parametrize("sequence", ALL)
@pytest.mark.parametrize("end", [-1.0, 1.0])
def test_at_the_singular_angle(sequence, end):
    """
    Exactly there, matrices without rounding: a quarter turn in the middle, or none, between two whole ones.

    Angles and axes stay finite and bounded, and the chart says that it has failed.

    """
    for quarters in itertools.product(range(4), repeat=2):
        middle = centre(sequence) + end * 0.5 * np.pi
        R = np.round(rotation(sequence, np.array([quarters[0] * np.pi / 2, middle, quarters[1] * np.pi / 2])))
        x, E, rate, validity = chart_at(sequence, R)
        assert np.isfinite(x).all()
        np.testing.assert_allclose(np.linalg.norm(E, axis=0), 1.0, atol=2.0 * EPS, rtol=0.0)
        assert abs(rate[0, 2]) == 1.0
        assert x[1] == pytest.approx(middle, abs=1e-15)
        assert validity == 0.0
