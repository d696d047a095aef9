# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Rehearsal: the closed loop of a controller and the simulated arm, at the rate of the stack, one law after
another.

Every law starts from the same state, meets the same disturbances (same seed) and follows the same references.

"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping, Sequence
from contextlib import AbstractContextManager, nullcontext
from dataclasses import replace
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from prioritized_tracking.core.sampling import error_rate
from prioritized_tracking.core.velocity import filtered_velocity
from prioritized_tracking.errors import InputError, Problem
from prioritized_tracking.offline.plant import (
    Plant,
    PlantState,
    advance,
    build_plant,
    diverged,
    initial_state,
    measure,
)
from prioritized_tracking.offline.run import Event, GainCheck, Run, TaskFacts
from prioritized_tracking.offline.signals import Signals

Array = NDArray[np.float64]

SETTLE_S = 2.0
"""s, default of `settle`: the slowest of the usual gains (k_p = 8 1/s) has then decayed to e^-16."""

TAIL_S = 1.0
"""s, how long a run goes on after the path has ended, to see the arm hold still."""

HOLD_S = 5.0
"""s, length of a run whose references only hold."""

MOST_EVENTS = 1000
"""Events kept of one run; a law that trips in every cycle is not worth a million lines."""

_METER_CYCLES = 100
_GAIN_CYCLES = 20  # feedback changes with the pose, which takes far longer; its eigenvalues cost 10 µs


class Controller(Protocol):
    """
    What a rehearsal needs of a controller: the part of the Python interface it uses.

    """

    joints: tuple[str, ...]
    rate: float
    duration: float
    arm: Any
    stack_file: Any
    stack: Any
    law: Any
    tools: Mapping[str, Any]
    described: Mapping[str, frozenset[str]]
    channels: Mapping[str, Any]

    def activate(self, t: float, q: Array, v: Array) -> Any: ...
    def start(self, t: float) -> Any: ...
    def step(self, t: float, q: Array, v: Array) -> Any: ...
    def start_configuration(self) -> Array: ...
    def pose_errors(self, q: Array) -> Mapping[str, tuple[float, float]]: ...


class Meter(Protocol):
    """
    A progress display.

    """

    def update(self, cycles: int, /) -> Any: ...


MeterFactory = Callable[[str, int], AbstractContextManager[Meter]]
"""Takes a law and the number of its cycles, gives a context manager of a `Meter`."""


def rehearse(
    load: Callable[[str | None], Controller],
    laws: Sequence[str] = (),
    *,
    seconds: float | None = None,
    meter: MeterFactory | None = None,
    finished: Callable[[Run], None] | None = None,
) -> list[Run]:
    """
    Run one or several laws in closed loop on the simulated arm.

    Parameters
    ----------
    load : callable
        Returns a fresh controller for a law; None: the law of the stack file.
    laws : sequence of str
        In this order; empty: the law of the stack file alone.
    seconds : float or None
        Length of each run, s; None: the references once, see `default_seconds`.
    meter : callable or None
        Progress display.
    finished : callable or None
        Called with each run as it ends.

    Returns
    -------
    list of Run
        One for each law. After an interruption (Ctrl-C) the last one has ended early and says so, the laws
        after it are missing.

    Raises
    ------
    InputError
        A stack that does not load, or a start the controller refuses.

    """
    runs: list[Run] = []
    for law in laws or (None,):
        run = run_law(load(law), law=law, seconds=seconds, meter=meter)
        runs.append(run)
        if finished is not None:
            finished(run)
        if run.ended == "interrupted":
            break
    return runs


def run_law(
    controller: Controller,
    *,
    law: str | None = None,
    seconds: float | None = None,
    meter: MeterFactory | None = None,
) -> Run:
    """
    Run one controller in closed loop; see `rehearse`.

    """
    tree = controller.stack_file.tree
    name = law or str(tree["law"])
    seconds = default_seconds(controller) if seconds is None else seconds
    cycles = max(round(seconds * controller.rate), 1)
    plant = build_plant(
        controller.arm,
        tree.get("plant") or {},
        rate=controller.rate,
        driver_gravity=bool(tree["robot"].get("gravity_by_driver")),
    )
    state = initial_state(plant, _start(controller, tree))
    run = _new_run(controller, name, plant, cycles)
    started = time.perf_counter()
    try:
        # A law that goes astray computes with huge numbers on its way; that is judged, not warned about.
        with (meter or _no_meter)(name, cycles) as display, np.errstate(all="ignore"):
            _loop(controller, plant, state, run, cycles, display)
    except KeyboardInterrupt:
        run.ended = "interrupted"
        _note(run, run.signals.count / run.rate, "interrupted", "stopped by the user")
    run.computing_s = time.perf_counter() - started
    return run


def default_seconds(controller: Controller) -> float:
    """
    Return how long to run: the path and `TAIL_S`; an endless path twice; `HOLD_S` where nothing moves.

    """
    duration = float(controller.duration)
    if math.isinf(duration):
        moving = [channel for channel in controller.channels.values() if channel.path is not None]
        longest: float = max(
            channel.path.file_duration / controller.channels[channel.leader].pace for channel in moving
        )
        return 2.0 * longest
    return duration + TAIL_S if duration > 0.0 else HOLD_S


def _loop(
    controller: Controller, plant: Plant, state: PlantState, run: Run, cycles: int, display: Meter
) -> None:
    """
    Run the cycles; ends early when the arm or the law has diverged.

    """
    data, sensors = plant.data(), _Sensors(plant, controller.stack_file.tree["robot"])
    signals, rate = run.signals, run.rate
    for cycle in range(cycles):
        t = cycle / rate
        measured = sensors.read(state, cycle)
        if cycle == 0:
            _activate(controller, measured)
        command = _step(controller, t, measured, run)
        if command is None:
            return
        signals.record(t, state, measured, command, controller.pose_errors(state.q))
        if run.gains is not None and cycle % _GAIN_CYCLES == 0:
            run.gains.note(controller.law.D)
        if command.events:
            _note_all(run, t, command.events)
        state = advance(plant, data, state, command.torque, cycle)
        if diverged(plant, state):
            run.ended = "diverged"
            _note(run, t, "diverged", _divergence(plant, state))
            return
        if cycle % _METER_CYCLES == _METER_CYCLES - 1:
            display.update(_METER_CYCLES)
    display.update(cycles % _METER_CYCLES)


def _activate(controller: Controller, measured: tuple[Array, Array]) -> None:
    """
    Activate and set out; what the controller refuses is the doing of the plant block.

    """
    try:
        controller.activate(0.0, *measured)
    except InputError as error:
        place = controller.stack_file.where("plant")
        raise InputError(
            replace(problem, where=problem.where or place) for problem in error.problems
        ) from error
    controller.start(0.0)


class _Sensors:
    """
    What the controller is given: measured velocities, or those computed from positions (`robot.velocity`).

    """

    def __init__(self, plant: Plant, robot: Mapping[str, Any]) -> None:
        self._plant = plant
        self._cutoff = float(robot["velocity_cutoff"]) if robot.get("velocity") == "from_position" else None
        self._last: tuple[Array, Array] | None = None

    def read(self, state: PlantState, cycle: int) -> tuple[Array, Array]:
        """
        Return positions (n,) rad and velocities (n,) rad/s of this cycle.

        """
        q, v = measure(self._plant, state, cycle)
        if self._cutoff is None:
            return q, v
        q_before, v = self._last or (q, np.zeros(q.size))
        v = filtered_velocity(v, q_before, q, period=self._plant.period, cutoff=self._cutoff)
        self._last = q, v
        return self._last


def _step(controller: Controller, t: float, measured: tuple[Array, Array], run: Run) -> Any:
    """
    Return the command of one cycle, or None where the law has no answer: its arithmetic failed or gave no
    numbers.

    """
    try:
        command = controller.step(t, *measured)
    except (ArithmeticError, np.linalg.LinAlgError) as error:
        run.ended = "diverged"
        _note(run, t, "diverged", f"the law has no answer here: {error}")
        return None
    if not math.isfinite(float(np.sum(command.torque))):
        run.ended = "diverged"
        _note(run, t, "diverged", "the law's torque is not a number")
        return None
    return command


def _new_run(controller: Controller, law: str, plant: Plant, cycles: int) -> Run:
    stack = controller.stack
    tasks = {
        task.name: TaskFacts(unit=task.unit, handover=tuple(task.handover), tolerance=task.tolerance)
        for task in stack.tasks
    }
    sizes = {task.name: task.m for task in stack.tasks}
    if posture := stack.posture:
        tasks[posture.name] = TaskFacts(unit=posture.unit, handover=None, tolerance=posture.tolerance)
        sizes[posture.name] = controller.arm.n
    return Run(
        law=law,
        arm=controller.arm,
        rate=controller.rate,
        seed=plant.seed,
        planned_s=cycles / controller.rate,
        signals=Signals(tuple(controller.joints), tuple(controller.tools), sizes, cycles),
        tasks=tasks,
        described=dict(controller.described),
        gains=_gain_check(controller),
    )


def _gain_check(controller: Controller) -> GainCheck | None:
    """
    Return the check of a law whose feedback can be compared with the control rate.

    """
    law = getattr(controller, "law", None)
    if law is None or not law.has_shares:
        return None
    delay = int(controller.stack_file.tree["robot"]["delay_cycles"])
    return GainCheck(rate=controller.rate, delay_cycles=delay, error_rate=error_rate(controller.stack))


def _start(controller: Controller, tree: Mapping[str, Any]) -> Array:
    """
    Return where the arm starts, (n,) rad: `plant.start`, or where the references start.

    """
    start = (tree.get("plant") or {}).get("start")
    if start is None:
        return np.array(controller.start_configuration(), dtype=float)
    q = np.array(start, dtype=float)
    if q.shape != (controller.arm.n,):
        raise InputError(
            Problem(
                what="the start of the simulated arm has the wrong length",
                where=controller.stack_file.where("plant", "start"),
                expected=f"{controller.arm.n} angles, rad: {', '.join(controller.joints)}",
                got=f"{q.size}",
            )
        )
    return q


def _divergence(plant: Plant, state: PlantState) -> str:
    if not state.finite:
        return "the arm's state is not a number"
    ratio = np.abs(state.v) / plant.arm.velocity_limit
    worst = int(np.argmax(ratio))
    name, speed = plant.arm.joints[worst], abs(state.v[worst])
    return f"joint {name} moves at {speed:.3g} rad/s, {ratio[worst]:.3g} times its limit; the run is lost"


def _note_all(run: Run, t: float, events: Sequence[str]) -> None:
    for text in events:
        _note(run, t, "guard", text)


def _note(run: Run, t: float, kind: str, text: str) -> None:
    """
    Keep an event; the end of a run is kept even when the list is full.

    """
    if len(run.events) < MOST_EVENTS or run.ended != "complete":
        run.events.append(Event(t=t, kind=kind, text=text))


class _NoMeter:
    def update(self, cycles: int, /) -> None:
        """
        Show nothing.

        """


def _no_meter(_law: str, _cycles: int) -> AbstractContextManager[Meter]:
    return nullcontext(_NoMeter())
