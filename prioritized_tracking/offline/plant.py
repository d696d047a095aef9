# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The simulated arm: full rigid-body dynamics between two commands, as a motor drive would apply them.

A command is held for one control period (zero-order hold), after the delay and the torque limits of the
drive. What the arm really is may differ from what the controller believes: link masses, a payload, friction,
sensor and torque noise, a start away from the reference. `Plant` never changes; a `PlantState` goes in and a
new one comes out, the number of the cycle is an argument, and every random number is a function of the seed
and that number. So the same seed gives the same numbers, bit for bit.

"""

from __future__ import annotations

import functools
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from prioritized_tracking.core.arm import Arm, ArmData, forward_dynamics, inertia, inverse_dynamics
from prioritized_tracking.core.arm.motion import FRICTION_SPEED
from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.offline.integrator import STAGES, Rates, integrate

Array = NDArray[np.float64]

TOLERANCE = 1e-9
"""Error of one integration step, rad and rad/s: over 10 s of steps it stays below the sensors of any arm."""

MOST_STIFF = 500.0
"""Largest (decay rate of the friction) x (control period); beyond, the friction given is absurd for its
inertia."""

DIVERGED_SPEED = 10.0
"""Joint speed over its limit from which on a run is lost."""

_CHUNK = 1024
_START, _MASS, _NOISE = 0, 1, 2


@dataclass(frozen=True, kw_only=True)
class PlantState:
    """
    What the plant remembers between two cycles.

    Attributes
    ----------
    q, v : (n,) array
        True joint positions (rad) and velocities (rad/s).
    pending : tuple of (n,) array
        Torque commands (N·m) under way, oldest first, one per cycle of delay.
    applied : (n,) array
        Torque (N·m) the motors held during the cycle that led here.
    step : float
        Integration step to try next, s.

    """

    q: Array
    v: Array
    pending: tuple[Array, ...]
    applied: Array
    step: float

    @property
    def finite(self) -> bool:
        """
        Whether position and velocity are numbers.

        """
        return math.isfinite(float(self.q @ self.q + self.v @ self.v))


@dataclass(frozen=True, kw_only=True)
class Plant:
    """
    An arm as it really is, and its drive. Build it with `build_plant`.

    Attributes
    ----------
    arm : Arm
        The true arm: its masses, payload and friction.
    model : Arm
        The arm the controller and a gravity-compensating driver believe in.
    period : float
        Control period, s.
    delay : int
        Cycles from a state to the torque computed from it.
    driver_gravity : bool
        The driver adds the model's gravity torque to each command.
    position_noise, velocity_noise, torque_noise : float
        Standard deviations: rad, rad/s, N·m.
    start_offset : float
        Largest random displacement of each joint at the start, rad.
    seed : int
        Decides every random number.

    """

    arm: Arm
    model: Arm
    period: float
    delay: int = 0
    driver_gravity: bool = False
    position_noise: float = 0.0
    velocity_noise: float = 0.0
    torque_noise: float = 0.0
    start_offset: float = 0.0
    seed: int = 0

    def data(self) -> PlantData:
        """
        Return scratch for `advance`; carries nothing from one call to the next.

        """
        return PlantData(
            true=self.arm.data(), model=self.model.data(), stages=np.zeros((STAGES, 2 * self.arm.n))
        )


@dataclass(frozen=True, kw_only=True)
class PlantData:
    """
    Scratch of the true arm, of the model and of the integrator.

    """

    true: ArmData
    model: ArmData
    stages: Array


def build_plant(arm: Arm, block: Mapping[str, Any], *, rate: float, driver_gravity: bool = False) -> Plant:
    """
    Return the plant of a stack file.

    Parameters
    ----------
    arm : Arm
        The controller's model.
    block : mapping
        The `plant` block, keys as in the stack file; a missing or None value means no deviation from the
        model. `mass_error` e scales mass and inertia of each link by 1 + e·U(-1, 1); `payload` is carried in
        addition to the model's; `friction` replaces the model's, and left out the model's own friction acts.
    rate : float
        Control rate, Hz.
    driver_gravity : bool
        The driver adds the model's gravity torque by itself.

    Raises
    ------
    InputError
        A payload frame the arm lacks, friction of wrong length, or friction too stiff to be simulated.

    """
    seed = int(block.get("seed") or 0)
    true_arm = arm.with_changes(**_changes(arm, block, seed))
    _check_stiffness(true_arm, 1.0 / rate)
    return Plant(
        arm=true_arm,
        model=arm,
        period=1.0 / rate,
        delay=int(block.get("delay") or 0),
        driver_gravity=driver_gravity,
        position_noise=float(block.get("position_noise") or 0.0),
        velocity_noise=float(block.get("velocity_noise") or 0.0),
        torque_noise=float(block.get("torque_noise") or 0.0),
        start_offset=float(block.get("start_offset") or 0.0),
        seed=seed,
    )


def initial_state(plant: Plant, q: Array) -> PlantState:
    """
    Return the arm at rest near `q` (n,), rad, held by its driver.

    Each joint is displaced by U(-1, 1) times `start_offset`, and kept inside its limits. Until the first
    delayed command arrives the motors hold the arm against its true weight, as a driver does before it is
    taken over.

    """
    random = _generator(plant.seed, _START)
    offset = plant.start_offset * random.uniform(-1.0, 1.0, plant.arm.n)
    q = np.array(q, dtype=float)
    if plant.start_offset > 0.0:
        q = np.clip(q + offset, plant.arm.lower, plant.arm.upper)
    zero = np.zeros(plant.arm.n)
    holding = np.array(inverse_dynamics(plant.arm, plant.arm.data(), q, zero, zero))
    return PlantState(q=q, v=zero, pending=(holding,) * plant.delay, applied=holding, step=plant.period)


def measure(plant: Plant, state: PlantState, cycle: int) -> tuple[Array, Array]:
    """
    Return what the sensors report at the start of cycle number `cycle`: positions (n,) rad, velocities (n,)
    rad/s.

    """
    if plant.position_noise == 0.0 and plant.velocity_noise == 0.0:
        return state.q.copy(), state.v.copy()
    noise = _noise(plant, cycle)
    return state.q + plant.position_noise * noise[0], state.v + plant.velocity_noise * noise[1]


def advance(plant: Plant, data: PlantData, state: PlantState, torque: Array, cycle: int) -> PlantState:
    """
    Return the state one control period later.

    Parameters
    ----------
    plant : Plant
    data : PlantData
        Scratch, from `plant.data()`.
    state : PlantState
        At the start of the cycle.
    torque : (n,) array
        Command computed from that state, N·m; without gravity if the driver adds it.
    cycle : int
        Number of the cycle, for the torque noise.

    """
    queue = (*state.pending, np.array(torque, dtype=float))
    applied = _motor_torque(plant, data.model, state, queue[0], cycle)
    y, step = integrate(
        _rates(plant.arm, data.true, applied),
        np.concatenate([state.q, state.v]),
        plant.period,
        step=state.step,
        tolerance=TOLERANCE,
        work=data.stages,
    )
    n = plant.arm.n
    return PlantState(q=y[:n], v=y[n:], pending=queue[1:], applied=applied, step=step)


def diverged(plant: Plant, state: PlantState) -> bool:
    """
    Whether the run is lost: a state that is no number, or ten times a joint's speed limit.

    """
    return not state.finite or bool((np.abs(state.v) > DIVERGED_SPEED * plant.arm.velocity_limit).any())


def friction_rate(arm: Arm, data: ArmData, q: Array) -> float:
    """
    Return the fastest decay rate friction can cause at `q`, 1/s.

    It is the largest eigenvalue of M⁻¹ F, with F = diag(viscous + coulomb / 0.02 rad/s) the slope of the
    friction at rest, its steepest place.

    """
    slope = np.sqrt(arm.viscous + arm.coulomb / FRICTION_SPEED)
    if not slope.any():
        return 0.0
    inertia(arm, data, q)
    scaled = slope[:, None] * np.linalg.inv(data.M) * slope[None, :]
    return float(np.linalg.eigvalsh(scaled)[-1])


def _changes(arm: Arm, block: Mapping[str, Any], seed: int) -> dict[str, Any]:
    """
    Return the keywords of `Arm.with_changes` for the plant block.

    """
    changes: dict[str, Any] = {}
    if error := float(block.get("mass_error") or 0.0):
        scatter = _generator(seed, _MASS).uniform(-1.0, 1.0, len(arm.frames))
        changes["mass_scale"] = 1.0 + error * scatter
    for key in ("payload", "friction"):
        if given := block.get(key):
            changes[key] = given
    return changes


def _check_stiffness(arm: Arm, period: float) -> None:
    """
    Refuse friction that would take hundreds of integration steps per period, by a fixed sample of positions.

    """
    data = arm.data()
    random = np.random.default_rng(0)
    lower, upper = np.maximum(arm.lower, -2 * np.pi), np.minimum(arm.upper, 2 * np.pi)
    fastest = max(friction_rate(arm, data, random.uniform(lower, upper)) for _ in range(32))
    if fastest * period > MOST_STIFF:
        raise InputError(
            Problem(
                what="the friction of the simulated arm is too stiff for the inertia it acts on",
                where="plant.friction",
                expected=f"decay rates up to {MOST_STIFF / period:.3g} 1/s",
                got=f"{fastest:.3g} 1/s; at rest Coulomb friction is coulomb / {FRICTION_SPEED} N·m·s/rad",
                remedy="Give robot.rotor_inertia, which light joints need anyway, or less friction.",
            )
        )


def _rates(arm: Arm, data: ArmData, torque: Array) -> Rates:
    """
    Return the function that fills the rates of (q, q̇) under a constant torque.

    """
    n = arm.n

    def fill(y: Array, out: Array) -> None:
        out[:n] = y[n:]
        out[n:] = forward_dynamics(arm, data, y[:n], y[n:], torque)

    return fill


def _motor_torque(plant: Plant, data: ArmData, state: PlantState, command: Array, cycle: int) -> Array:
    """
    Return what the motors hold: the command, the driver's gravity if it adds one, clipped, plus torque noise.

    """
    if plant.driver_gravity:
        zero = np.zeros(plant.arm.n)
        command = command + inverse_dynamics(plant.model, data, state.q, zero, zero)
    limit = plant.model.torque_limit
    held: Array = np.minimum(np.maximum(command, -limit), limit)
    if plant.torque_noise:
        held = held + plant.torque_noise * _noise(plant, cycle)[2]
    return held


def _noise(plant: Plant, cycle: int) -> Array:
    """
    Return (3, n) standard normal numbers of a cycle: position, velocity, torque.

    """
    chunk, place = divmod(cycle, _CHUNK)
    numbers: Array = _noise_chunk(plant.seed, plant.arm.n, chunk)[place]
    return numbers


@functools.lru_cache(maxsize=8)
def _noise_chunk(seed: int, n: int, chunk: int) -> Array:
    numbers = _generator(seed, _NOISE, chunk).standard_normal((_CHUNK, 3, n))
    numbers.setflags(write=False)
    return numbers


def _generator(seed: int, *stream: int) -> np.random.Generator:
    """
    Return a generator of its own for each purpose, so that one setting does not shift another's numbers.

    """
    return np.random.default_rng(np.random.SeedSequence(seed, spawn_key=stream))
