# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Time along a path, in the two steps that lead from controller time to a place on a file's spline.

1. `Progress`: controller time t → path time s. Start, hold and pace act here.
2. `PathTime`: path time s → file time u, unrolled over all passes. Ramps at the first start and
   the last end and the number of passes act here.

Both maps are C², so a C² spline of u stays C² in t.

"""

from __future__ import annotations

import math
from dataclasses import dataclass


def ramp(x: float) -> tuple[float, float, float]:
    """
    Return distance, rate and slope of a unit ramp at x in [0, 1].

    The rate is the quintic smoothstep 10x³ − 15x⁴ + 6x⁵; the distance is its integral (½ at x = 1)
    and the slope its derivative.

    """
    x2 = x * x
    x3 = x2 * x
    distance = x2 * x2 * (2.5 + x * (x - 3.0))
    rate = x3 * (10.0 + x * (6.0 * x - 15.0))
    return distance, rate, 30.0 * x2 * (1.0 - x) ** 2


RAMP_SLOPE_MAX = 1.875
"""Largest slope of a unit ramp, at x = ½; turns a speed into the acceleration of its ramp."""


class PathTime:
    """
    Map from path time to file time over all passes, with a ramp at the first start and the last end.

    Parameters
    ----------
    span : float
        Length of the file, s; 0 for a path without motion.
    passes : int
        How often the file is run through; 0: endlessly.
    ramp_time : float
        Path time of each ramp, s; 0: none. At most the file time of all passes, so that two ramps
        (each covers half its duration of file time) fit.

    Attributes
    ----------
    duration : float
        Path time to the final end, s; infinite when endless.

    """

    __slots__ = ("duration", "passes", "ramp_time", "span", "total")

    def __init__(self, span: float, passes: int = 1, ramp_time: float = 0.0) -> None:
        self.span = span
        self.passes = passes
        self.total = span * passes if passes else math.inf
        self.ramp_time = ramp_time
        self.duration = self.total + ramp_time

    def at(self, s: float) -> tuple[float, float, float]:
        """
        Return file time and its first two derivatives with respect to path time.

        Parameters
        ----------
        s : float
            Path time, s; held at both ends outside [0, duration].

        Returns
        -------
        u, du, ddu : float
            File time since the first knot, unrolled over the passes (s, 1, 1/s).

        """
        if s <= 0.0:
            return 0.0, 0.0, 0.0
        left = self.duration - s
        if left <= 0.0:
            return self.total, 0.0, 0.0
        length = self.ramp_time
        if s < length:
            distance, rate, slope = ramp(s / length)
            return length * distance, rate, slope / length
        if left < length:
            distance, rate, slope = ramp(left / length)
            return self.total - length * distance, rate, -slope / length
        return s - 0.5 * length, 1.0, 0.0

    def inverse(self, u: float) -> float:
        """
        Return the path time at which file time u (s, unrolled over the passes) is reached.

        """
        if u <= 0.0:
            return 0.0
        if u >= self.total:
            return self.duration
        half = 0.5 * self.ramp_time
        if u < half:
            return self._inside_ramp(u)
        if self.total - u < half:
            return self.duration - self._inside_ramp(self.total - u)
        return u + half

    def _inside_ramp(self, covered: float) -> float:
        """
        Return the time into a ramp after which it has covered that much file time, by bisection.

        """
        wanted = covered / self.ramp_time
        low, high = 0.0, 1.0
        for _ in range(60):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if ramp(middle)[0] < wanted else (low, middle)
        return self.ramp_time * high

    def split(self, u: float) -> tuple[int, float]:
        """
        Return the pass (0 = first) and the file time within it for an unrolled file time.

        """
        if u < self.span:
            return 0, max(u, 0.0)
        if self.passes == 1 or self.span <= 0.0:
            return 0, self.span
        lap = int(u / self.span)
        if self.passes and lap >= self.passes:
            lap = self.passes - 1
        return lap, min(max(u - lap * self.span, 0.0), self.span)


@dataclass(frozen=True, slots=True)
class Progress:
    """
    Path time as a function of controller time; every change of rate makes a new one.

    The rate changes in phases of constant jerk (its second derivative), so path time is C² in
    controller time, whenever a change is asked for. The rate stays between the values it had and
    those it was asked for: the path never runs backwards, never faster than the fastest pace set.

    Attributes
    ----------
    t : float
        Controller time of the last change, s; `at` is not to be asked for earlier times.
    s : float
        Path time at t, s.
    rate : float
        Path time per controller time at t, 1 (0: held).
    acceleration : float
        Derivative of the rate at t, 1/s.
    target : float
        The rate after the change, 1.
    phases : tuple of (float, float)
        Duration (s) and jerk (1/s²) of each phase from t on.

    """

    t: float
    s: float
    rate: float = 0.0
    acceleration: float = 0.0
    target: float = 0.0
    phases: tuple[tuple[float, float], ...] = ()

    @staticmethod
    def at_rest(t: float, s: float = 0.0) -> Progress:
        """
        Return a progress that holds path time s from controller time t on.

        """
        return Progress(t, s)

    @property
    def settles_at(self) -> float:
        """
        Controller time from which on the rate is constant, s.

        """
        return self.t + sum(duration for duration, _ in self.phases)

    def at(self, t: float) -> tuple[float, float, float]:
        """
        Return path time (s), rate (1) and acceleration (1/s) at controller time t (s).

        Before the last change the state at that change is returned.

        """
        left = max(t - self.t, 0.0)
        s, rate, slope = self.s, self.rate, self.acceleration
        for duration, jerk in self.phases:
            dt = duration if left > duration else left
            s += dt * (rate + 0.5 * dt * (slope + jerk * dt / 3.0))
            rate += dt * (slope + 0.5 * jerk * dt)
            slope += jerk * dt
            left -= dt
            if left <= 0.0:
                return s, rate, slope
        return s + self.target * left, self.target, 0.0

    def toward(self, t: float, rate: float, over: float) -> Progress:
        """
        Return the progress that leaves this one at t and changes to another rate.

        A change in the middle of a faster one first lets the slope of that one run out.

        Parameters
        ----------
        t : float
            Controller time of the change, s.
        rate : float
            The new rate, 1; 0 brakes along the path and holds.
        over : float
            Time of the change, s, > 0; longer by at most what a faster change still needs.

        """
        s, now, slope = self.at(t)
        if t >= self.settles_at or slope == 0.0:
            return Progress(t, s, now, slope, rate, _symmetric(rate - now, 0.0, over))
        quickest = max(abs(jerk) for _, jerk in self.phases)
        phases = _symmetric(rate - now, slope, over)
        if max(abs(jerk) for _, jerk in phases) < quickest:
            run_out = abs(slope) / quickest
            resting = now + 0.5 * slope * run_out
            rest = (run_out, -math.copysign(quickest, slope))
            phases = (rest, *_symmetric(rate - resting, 0.0, over))
        return Progress(t, s, now, slope, rate, phases)


def _symmetric(change: float, slope: float, over: float) -> tuple[tuple[float, float], ...]:
    """
    Return two phases of opposite jerk that change a rate and bring its slope to 0 in a given time.

    With J the jerk, d = ±1 the sign of the first phase and p the slope between the phases, the
    change is d (2p² − slope²) / 2J and the time (2p − d slope) / J; solved for J > 0.

    """
    lead = 4.0 * change - 2.0 * slope * over
    sign = 1.0 if lead >= 0.0 else -1.0
    jerk = (abs(lead) + math.hypot(lead, 2.0 * over * slope)) / (2.0 * over * over)
    if jerk == 0.0:
        return ()
    second = 0.5 * (over + sign * slope / jerk)
    return (over - second, sign * jerk), (second, -sign * jerk)
