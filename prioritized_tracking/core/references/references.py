# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
References over path time: C² paths through the knots of a file, at rest at both ends, and holds.

"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from prioritized_tracking.core.references import splines
from prioritized_tracking.core.references.knots import (
    joint_faults,
    pose_faults,
    raise_faults,
    sign_continuous,
)
from prioritized_tracking.core.references.paths import (
    CLOSED_ANGULAR,
    CLOSED_LINEAR,
    REST_ANGULAR,
    TimedPath,
    as_array,
    check_follower,
    frozen,
    number_of_passes,
)
from prioritized_tracking.core.references.pose_curve import (
    PoseSample,
    check_norms,
    pose_at,
    pose_magnitudes,
)
from prioritized_tracking.core.references.splines import Cubic

__all__ = ["JointHold", "JointPath", "JointSample", "PoseHold", "PosePath", "PoseSample"]

Array: TypeAlias = NDArray[np.float64]


@dataclass(slots=True)
class JointSample:
    """
    A joint reference at one instant.

    Attributes
    ----------
    q, v, a : (n,) array
        Positions (rad, m), velocities and accelerations.

    """

    q: Array
    v: Array
    a: Array


class PoseHold:
    """
    A pose reference that stays.

    Parameters
    ----------
    R : (3, 3) array
        Orientation in base axes.
    p : (3,) array
        Position in the base, m.

    """

    duration = 0.0
    file_duration = 0.0
    closed = ramped = periodic = False
    messages: tuple[str, ...] = ()

    def __init__(self, R: ArrayLike, p: ArrayLike) -> None:
        self.knots = frozen(np.zeros(1))
        self._sample = PoseSample(
            frozen(R, (3, 3)), frozen(p, (3,)), frozen(np.zeros(6)), frozen(np.zeros(6))
        )

    def sample(self, s: float, rate: float = 1.0, acceleration: float = 0.0) -> PoseSample:
        """
        Return the pose, at rest; the same read-only arrays every time.

        """
        return self._sample


class JointHold:
    """
    A joint reference that stays.

    Parameters
    ----------
    q : (n,) array
        Joint positions, rad or m.

    """

    duration = 0.0
    file_duration = 0.0
    closed = ramped = periodic = False
    messages: tuple[str, ...] = ()

    def __init__(self, q: ArrayLike) -> None:
        self.knots = frozen(np.zeros(1))
        held = frozen(q)
        rest = frozen(np.zeros(held.shape))
        self._sample = JointSample(held, rest, rest)

    def sample(self, s: float, rate: float = 1.0, acceleration: float = 0.0) -> JointSample:
        """
        Return the joint positions, at rest; the same read-only arrays every time.

        """
        return self._sample


class PosePath(TimedPath):
    """
    A pose reference through knots: cubic in position and in the quaternion, which is then normalised.

    V and A are the exact derivatives of the normalised curve.

    Parameters
    ----------
    times : (N,) array
        Increasing, s; the first one is path time 0.
    positions : (N, 3) array
        Positions of the frame origin in the base, m.
    quaternions_xyzw : (N, 4) array
        Orientations in base axes, unit quaternions, scalar last, signs free.
    repeat : int
        Passes; 0: endless. Other than 1 for closed paths only.
    where : str
        Place in the user's input, for messages.

    Attributes
    ----------
    positions : (N, 3) array
        The knots, m.
    quaternions : (N, 4) array
        The knots, x y z w, of unit length and continuous sign.

    Raises
    ------
    InputError
        With every fault of the knots, or when an open path shall be repeated.

    """

    def __init__(
        self,
        times: ArrayLike,
        positions: ArrayLike,
        quaternions_xyzw: ArrayLike,
        *,
        repeat: int = 1,
        where: str = "",
    ) -> None:
        t = as_array("times", times, 0, where)
        p = as_array("positions", positions, 3, where, len(t))
        quaternions = as_array("quaternions_xyzw", quaternions_xyzw, 4, where, len(t))
        raise_faults(pose_faults(t, p, quaternions), where)
        self.knots, self.positions = frozen(t - t[0]), frozen(p)
        self.quaternions = q = frozen(sign_continuous(quaternions))
        gap, turn = float(np.linalg.norm(p[-1] - p[0])), _turn(q[0], q[-1])
        self.closed = gap <= CLOSED_LINEAR and turn <= CLOSED_ANGULAR
        passes = number_of_passes(repeat, self.closed, f"{gap:.3g} m and {turn:.3g} rad", where)
        over = 1.0 if q[0] @ q[-1] > 0.0 else -1.0  # -1: an odd number of turns in each pass
        signs = np.array([1.0] * 3 + [over] * 4)
        self._lay(np.hstack((self.positions, q)), passes, pose_magnitudes, signs)
        check_norms(self._spline, where)

    def sample(self, s: float, rate: float = 1.0, acceleration: float = 0.0) -> PoseSample:
        """
        Return pose, velocity and acceleration at path time s.

        Parameters
        ----------
        s : float
            Path time, s; held at both ends outside [0, duration].
        rate : float
            Derivative of s with respect to the time of V and A, 1.
        acceleration : float
            Derivative of the rate, 1/s.

        """
        u, du, ddu = self._time.at(s)
        if u > self._time.span:
            u = self._time.split(u)[1]
        return pose_at(self._spline, u, du * rate, ddu * rate * rate + du * acceleration)

    def sample_file(self, file_time: float) -> PoseSample:
        """
        Return pose, velocity and acceleration of the file itself, as if without ramps.

        Parameters
        ----------
        file_time : float
            Time since the first knot, s; held at both ends of one pass.

        """
        return pose_at(self._spline, min(max(file_time, 0.0), self._time.span), 1.0, 0.0)


class JointPath(TimedPath):
    """
    A joint reference through knots: cubic in every joint.

    Parameters
    ----------
    times : (N,) array
        Increasing, s; the first one is path time 0.
    q : (N, n) array
        Joint positions, rad or m.
    repeat : int
        Passes; 0: endless. Other than 1 for closed paths only. Not used with a leader.
    continuous : (n,) bool array, optional
        Joints without limits: on a periodic path they may advance by whole turns in each pass.
    leader : PosePath or JointPath, optional
        The path whose time this one takes: ramps, passes and kind of ends.
    names : sequence of str, optional
        Joint names, for messages.
    where : str
        Place in the user's input, for messages.

    Attributes
    ----------
    q : (N, n) array
        The knots.
    advance : (n,) array
        What each pass adds to the joints on a periodic path, whole turns, rad.

    Raises
    ------
    InputError
        With every fault of the knots; when an open path shall be repeated; when a follower does not
        last as long as its leader, or does not close although its leader is periodic.

    """

    def __init__(
        self,
        times: ArrayLike,
        q: ArrayLike,
        *,
        repeat: int = 1,
        continuous: ArrayLike | None = None,
        leader: PosePath | JointPath | None = None,
        names: Sequence[str] = (),
        where: str = "",
    ) -> None:
        t = as_array("times", times, 0, where)
        knots = as_array("q", q, -1, where, len(t))
        names = tuple(names) or tuple(f"joint {i}" for i in range(knots.shape[1]))
        raise_faults(joint_faults(t, knots, names), where)
        self.knots, self.q = frozen(t - t[0]), frozen(knots)
        self.advance, gaps = _advance(knots, continuous)
        apart = ", ".join(f"{names[i]} {gaps[i]:.3g}" for i in np.flatnonzero(gaps > CLOSED_ANGULAR))
        self.closed = not apart
        if leader is None:
            passes = number_of_passes(repeat, self.closed, apart, where)
            self._lay(self._flat(passes != 1), passes, joint_magnitudes)
        else:
            self._follow(leader, apart, where)
        advance = self.advance if self.periodic else 0.0 * self.advance
        self._steady: list[float] = (advance / self.knots[-1]).tolist()

    def _flat(self, periodic: bool) -> Array:
        """
        Return the knots, on a periodic path without the steady advance of each pass.

        """
        if not periodic:
            return self.q
        steady: Array = self.q - np.outer(self.knots / self.knots[-1], self.advance)
        return steady

    def _follow(self, leader: PosePath | JointPath, apart: str, where: str) -> None:
        """
        Take time and ends from a leader; set spline and messages.

        """
        check_follower(self.knots, leader, apart, where)
        self._time, self.periodic, self.messages = leader._time, leader.periodic, ()
        knots = self.knots = frozen(self.knots * (leader.file_duration / self.knots[-1]))
        if self.periodic:
            self._spline = splines.periodic(knots, self._flat(True))
            return
        self._spline = (splines.free if leader.ramped else splines.resting)(knots, self.q)
        needed = joint_magnitudes(splines.clamped(knots, self.q), knots[[0, -1]], 2)[1]
        if not leader.ramped and needed >= REST_ANGULAR:
            self.messages = (
                f"the joints do not rest at the ends although the path they follow does: they are brought to "
                f"rest within one row, with {needed:.3g} rad/s² or more",
            )

    def sample(self, s: float, rate: float = 1.0, acceleration: float = 0.0) -> JointSample:
        """
        Return joint positions, velocities and accelerations at path time s.

        Parameters
        ----------
        s : float
            Path time, s; held at both ends outside [0, duration].
        rate : float
            Derivative of s with respect to the time of v and a, 1.
        acceleration : float
            Derivative of the rate, 1/s.

        """
        u, du, ddu = self._time.at(s)
        lap = 0
        if u > self._time.span:
            lap, u = self._time.split(u)
        return self._at(u, lap, du * rate, ddu * rate * rate + du * acceleration)

    def sample_file(self, file_time: float) -> JointSample:
        """
        Return joint positions, velocities and accelerations of the file itself, as if without ramps.

        Parameters
        ----------
        file_time : float
            Time since the first knot, s; held at both ends of one pass.

        """
        return self._at(min(max(file_time, 0.0), self._time.span), 0, 1.0, 0.0)

    def _at(self, u: float, lap: int, du: float, ddu: float) -> JointSample:
        """
        Return the sample at u in a pass, du and ddu being u's own derivatives; plain floats as `pose_at`.

        """
        coefficients, h = self._spline.segment(u)
        q, v, a = [], [], []
        h3, twice = 3.0 * h, 2.0 * du * du
        elapsed = lap * self._time.span + u
        for c3, c2, c1, c0, steady in zip(*coefficients.tolist(), self._steady, strict=True):
            bend = h3 * c3
            slope = (bend + 2.0 * c2) * h + c1 + steady
            q.append(((h * c3 + c2) * h + c1) * h + c0 + steady * elapsed)
            v.append(slope * du)
            a.append((bend + c2) * twice + slope * ddu)
        return JointSample(np.array(q), np.array(v), np.array(a))


def joint_magnitudes(spline: Cubic, u: Array, derivative: int) -> tuple[float, float]:
    """
    Return 0 and the largest joint speed (1) or acceleration (2) at many places u.

    """
    return 0.0, float(np.max(np.abs(spline.many(u, derivative)), initial=0.0))


def _advance(q: Array, continuous: ArrayLike | None) -> tuple[Array, Array]:
    """
    Return the whole turns between first and last knot of continuous joints, and the gaps left.

    """
    apart = q[-1] - q[0]
    free = np.zeros(len(apart), dtype=bool) if continuous is None else np.asarray(continuous, dtype=bool)
    turns = np.where(free, 2.0 * math.pi * np.round(apart / (2.0 * math.pi)), 0.0)
    return frozen(turns), np.abs(apart - turns)


def _turn(a: Array, b: Array) -> float:
    """
    Return the angle between two unit quaternions of any sign, rad.

    """
    near, far = sorted((float(np.linalg.norm(b - a)), float(np.linalg.norm(b + a))))
    return 4.0 * math.atan2(near, far)
