# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Numbers to compare between compiled and interpreted functions: ``python -m tests.compiled_cases FILE``.

"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
from scipy.spatial.transform import Rotation

import prioritized_tracking as pt
from prioritized_tracking import compiled
from prioritized_tracking.charts import registry
from prioritized_tracking.charts.base import ChartWork
from prioritized_tracking.core import branches, claims, hierarchy, kernel
from prioritized_tracking.core.command import limit_torque
from prioritized_tracking.core.rotation import advance_pose, rotation_log
from prioritized_tracking.core.smooth import fade, saturation, smoothstep, wrap
from prioritized_tracking.errors import InputError

CONFIG = Path(__file__).parents[1] / "config"

CHARTS = {
    "position": {"axes": "xz"},
    "rotation_vector": {},
    "euler": {"sequence": "zyz"},
    "plane": {"normal": [0.0, 3.0, 4.0]},
    "cylinder": {"axis": [1.0, 2.0, -0.5], "radius": 0.4},
    "cylindrical": {"axis": [1.0, 2.0, -0.5]},
}


def small_functions():
    """Switches and rotations on both sides of each switch."""
    grid = np.concatenate([np.linspace(-0.5, 1.5, 101), [0.0, 0.8, 1.0, 1.2, 1e-16]])
    angles = [0.0, 1e-9, 2.9e-8, 3.1e-8, 0.5, 2.999999, 3.0000001, np.pi - 1e-9, np.pi]
    logs = []
    for angle in angles:
        r = angle * np.array([0.6, -0.48, 0.64])
        out = np.zeros(3)
        R, R_h, p_h, V_h = Rotation.from_rotvec(r).as_matrix(), np.zeros((3, 3)), np.zeros(3), np.zeros(6)
        advance_pose(R, r, np.arange(6.0), np.ones(6), 1e-6, R_h, p_h, V_h)
        logs.append([rotation_log(R, out), *out, *R_h.ravel(), *p_h, *V_h])
    switches = [[smoothstep(z), saturation(abs(z)), fade(z, 0.9, 0.1), wrap(7.0 * z)] for z in grid]
    return {"switches": np.array(switches), "rotations": np.array(logs)}


def charts():
    """Every chart at random poses, on its axis and at its singular orientations."""
    rng, found = np.random.default_rng(0), {}
    poses = [(R, rng.uniform(-1, 1, 3)) for R in Rotation.random(40, random_state=rng).as_matrix()]
    poses += [(np.eye(3), np.zeros(3)), (np.eye(3), np.array([1.0, 2.0, -0.5]))]
    poses += [(Rotation.from_rotvec([np.pi, 0, 0]).as_matrix(), np.ones(3))]
    for name, parameters in CHARTS.items():
        chart = registry()[name](**parameters)
        rows = []
        for (R, p), (R_d, p_d) in zip(poses, reversed(poses), strict=True):
            work = ChartWork.allocate(len(chart.coordinates), 6)
            c = chart.track(R, p, R_d, p_d, rng.normal(size=6), work)
            arrays = (work.x, work.x_d, work.x_dot_d, work.rows, work.rows_d, work.rate, work.rate_d)
            rows.append(np.concatenate([[c], *(a.ravel() for a in arrays)]))
        found[f"chart {name}"] = np.array(rows)
    return found


def hierarchies():
    """Random stacks around their bands, eigenvalue crossings, rows of zeros, more branches than are kept."""
    rng, n, found = np.random.default_rng(1), 6, []
    for case in range(60):
        Q, _ = np.linalg.qr(rng.normal(size=(n, n)))
        M = Q @ np.diag(np.exp(rng.uniform(-3, 1.6, n))) @ Q.T
        L = np.linalg.cholesky(0.5 * (M + M.T))
        sizes = (1, 2, 3, 3, 4) if case < 30 else (1, 1, 1, 1, 1, 1)
        J = rng.normal(size=(sum(sizes), n)) * np.exp(rng.uniform(-4, 0, (sum(sizes), 1)))
        if case % 5 == 1:  # two equal eigenvalues inside a band
            J[1:3] = 0.1 * Q[:, :2].T @ L.T
        if case % 5 == 2:
            J[:] = 0.0
        if case % 5 == 3:
            J[3:6] *= 1e-9
        r = len(sizes)
        gains = branches.Gains(
            first_row=np.cumsum([0, *sizes]),
            damping=rng.uniform(1, 100, sum(sizes)),
            force=rng.normal(size=sum(sizes)),
            band=np.tile([2.0, 2000.0], (r, 1)),
            has_posture=True,
            posture_damping=40.0,
            claim_speed=rng.uniform(0.3, 2.0, n),
        )
        wanted = claims.allocate_claims(n, sum(sizes), r)
        wanted.L[:], wanted.L_inverse[:] = L, np.linalg.inv(L)
        wanted.J[:], wanted.nu[:] = J, rng.normal(size=sum(sizes))
        wanted.validity[:] = rng.uniform(0.1, 1.0, r)
        wanted.posture[:], wanted.posture_feed_forward[:] = rng.normal(size=(2, n))
        room = branches.allocate_branches(n, r, max(sizes))
        count, pruned = hierarchy.hierarchy(gains, wanted, room, True)
        outcome = kernel.allocate_outcome(n, r)
        branches.blend(room, count, 0.0, outcome.report, outcome.D, outcome.push)
        u = room.weight[:count] @ room.u[:count]
        found.append(
            np.concatenate([u, outcome.D.ravel(), outcome.push, outcome.report.ravel(), [count, pruned]])
        ) if case < 30 else found.append(np.resize([*u, count, pruned], found[0].shape))
    return {"hierarchies": np.array(found)}


def whole_cycles():
    """Torque and telemetry of the demo stacks: random states, singular states, a faded stack."""
    found, rng = {}, np.random.default_rng(2)
    for name in ("demo_stack", "planar_stack"):
        control = pt.load(CONFIG / f"{name}.yaml")
        joints = next(c.path for c in control.channels.values() if c.kind == "joints")
        rows = []
        for k in range(60):
            t = rng.uniform(0.0, control.duration)
            sample = joints.sample(t)
            near = k % 3 != 0
            q = (
                sample.q + 1e-2 * rng.normal(size=len(sample.q)) * (k % 3)
                if near
                else rng.uniform(-2, 2, len(sample.q))
            )
            if k == 1:
                q = np.zeros_like(q)  # stretched: exactly singular
            command = control.evaluate(t, q, sample.v + 0.1 * rng.normal(size=len(q)))
            reports = [
                x for r in command.tasks.values() for x in (*r.error, r.share, r.apparent_inertia, r.validity)
            ]
            rows.append([*command.torque, *command.joint_velocity_reference, *reports, command.branches])
        found[name] = np.array(rows)
    return found


def refused():
    """What has no solution: numbers that are not finite, an inertia that is not positive definite."""
    control = pt.load(CONFIG / "demo_stack.yaml")
    q, answers = control.start_configuration(), []
    for bad in (np.nan, np.inf, 1e200):
        try:
            control.evaluate(1.0, np.where(np.arange(7) == 2, bad, q), 0 * q)
            answers.append(0.0)
        except InputError:
            answers.append(1.0)
    room, gains = control.room, control.stack.gains
    rooms = branches.allocate_branches(7, len(control.stack.tasks), 3)
    layout = control.stack.layout(control.arm)
    for spoil in ("zero inertia", "negative inertia", "nan inertia", "nan velocity", "none"):
        control.evaluate(1.0, q, 0 * q)
        if spoil == "zero inertia":
            room.M[:] = 0.0
        elif spoil == "negative inertia":
            room.M[2, 2] = -1.0
        elif spoil == "nan inertia":
            room.M[3, 3] = np.nan
        elif spoil == "nan velocity":
            room.V[0, 1] = np.nan
        count, _ = kernel.reference_velocity(layout, gains, room, room, rooms, False)
        answers += [float(count), *room.velocity]
    limits = np.array([1.0, 2.0])
    torques = [
        limit_torque(np.array(a), np.array(b), limits)[0]
        for a, b in (([0.5, 5], [9, -9]), ([0.1, 0], [0.2, 0]))
    ]
    return {"refused": np.array(answers), "limits": np.array(torques)}


def results():
    """All of it."""
    return {**small_functions(), **charts(), **hierarchies(), **whole_cycles(), **refused()}


if __name__ == "__main__":
    np.savez(sys.argv[1], compiled=compiled.is_compiled(), **results())
