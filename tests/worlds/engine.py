"""The physics engine (`mujoco`) driven from compiled code: whole stretches of a session in one call.

The loop calls the engine's own C functions; nothing of its physics is replaced. Around them, at every
physics step: the drives (feed-forward, position and velocity feedback, torque limit), their faults,
prescribed forces, and joint friction. Friction is the engine's dry friction, a constraint that really sticks,
or a law of the velocity with a dip,
`coulomb (1 + dip exp(-(v / dip_velocity)^2)) tanh(v / v0) + viscous v`, given to the engine as an applied
torque, with its slope as damping so that the integration stays implicit.

Every kernel lives in this file: numba's cache keeps stale code when a callee in another file changes.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import NamedTuple

import llvmlite.binding
import mujoco
import numba
import numpy as np
from numba import types
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

PERIOD_S = 1e-3
SUBSTEPS = 4
STEP_S = PERIOD_S / SUBSTEPS

# Columns of a fault table; the share of a fault swells over `RAMP` and fades likewise before `END` + `RAMP`.
KIND, JOINT, START, RAMP, END, SIZE, AUX, PHASE = range(8)
LOSS, COULOMB, VISCOUS, OFFSET, RIPPLE, OPEN, OPEN_SAID, STUCK, READING = range(9)
# Columns of a push table: start, duration, rise [s], body, force (3) in world axes, point (3) in link axes.
PUSH_WIDTH = 10
# Columns of a friction table.
F_COULOMB, F_VISCOUS, F_DIP, F_DIP_VELOCITY, F_V0 = range(5)
# One contact sensor per link: found, force (3), torque (3), position (3) of the net contact, world axes.
TOUCH_WIDTH = 10

(_LIBRARY,) = Path(mujoco.__file__).parent.glob("libmujoco*")
llvmlite.binding.load_library_permanently(str(_LIBRARY))

_pointer = types.uintp
_step1 = types.ExternalFunction("mj_step1", types.void(_pointer, _pointer))
_step2 = types.ExternalFunction("mj_step2", types.void(_pointer, _pointer))
_inverse = types.ExternalFunction("mj_inverse", types.void(_pointer, _pointer))
_apply_force = types.ExternalFunction(
    "mj_applyFT", types.void(_pointer, _pointer, _pointer, _pointer, _pointer, types.int32, _pointer)
)


class Engine(NamedTuple):
    """Addresses of model and data, views of their arrays; `motor` and `link` are indices of coordinates."""

    model: int
    data: int
    qpos: Floats
    qvel: Floats
    qacc: Floats
    applied: Floats
    constraint: Floats
    xpos: Floats
    xmat: Floats
    sensors: Floats
    damping: Floats
    frictionloss: Floats
    motor: Ints
    link: Ints
    touching: Ints  # body of each contact sensor; empty where there is nothing to touch


class Drive(NamedTuple):
    """The drives: gains [Nm/rad], [Nm s/rad], torque limit [Nm], largest following error [rad]."""

    stiffness: Floats
    damping: Floats
    peak: Floats
    stop_rad: float


class Wanted(NamedTuple):
    """What the drives are told, one row per sample and one more: position, velocity, feed-forward torque."""

    q: Floats
    qd: Floats
    ahead: Floats


class Rows(NamedTuple):
    """One row per sample, state and torques of one instant; written by `advance`.

    `q`, `qd` motor side as the sensors see them (offsets of the reading included, noise not); `cmd` command
    of the drive, `tau` what the drive believes to give; `outside` torque of contacts, `lost` lost or added in
    the drive; `friction` without the part that a fault added; `link_q`, `link_qd`, `link_qdd`, `motor_qdd`
    the exact motion; `force` (3) sum of the contact forces, `point` (3) of the largest in axes of its `body`.
    """

    q: Floats
    qd: Floats
    cmd: Floats
    tau: Floats
    outside: Floats
    lost: Floats
    friction: Floats
    link_q: Floats
    link_qd: Floats
    link_qdd: Floats
    motor_qdd: Floats
    force: Floats
    point: Floats
    body: Ints


def empty_rows(samples: int, n: int) -> Rows:
    """Return room for so many samples."""
    wide = [np.zeros((samples, n)) for _ in range(11)]
    return Rows(*wide, np.zeros((samples, 3)), np.zeros((samples, 3)), np.full(samples, -1, dtype=np.int64))


def engine_of(model: mujoco.MjModel, data: mujoco.MjData, motor: Ints, link: Ints, touching: Ints) -> Engine:
    """Return the views that the kernels work on; model and data must outlive them."""
    return Engine(
        model._address,
        data._address,
        data.qpos,
        data.qvel,
        data.qacc,
        data.qfrc_applied,
        data.qfrc_constraint,
        data.xpos,
        data.xmat,
        data.sensordata,
        model.dof_damping,
        model.dof_frictionloss,
        motor,
        link,
        touching,
    )


_compiled = numba.njit(cache=True, nogil=True, error_model="numpy")


@_compiled
def trapezoid(t: float, start: float, rise: float, end: float) -> tuple[float, float]:
    """Return the share at time t and its rate [1/s]: sin² flanks that begin at `start` and at `end`."""
    if t < start or t >= end + rise:
        return 0.0, 0.0
    if t < start + rise:
        x, sign = (t - start) / rise, 1.0
    elif t > end:
        x, sign = (end + rise - t) / rise, -1.0
    else:
        return 1.0, 0.0
    s = math.sin(0.5 * math.pi * x)
    return s * s, sign * 0.5 * math.pi * math.sin(math.pi * x) / rise


@_compiled
def feed_forward(model: int, data: int, qpos, qvel, qacc, inverse, q, qd, qdd, out) -> None:  # type: ignore[no-untyped-def]
    """Fill out (K,n) with the engine's inverse dynamics of the rows of q, qd, qdd."""
    for k in range(q.shape[0]):
        qpos[:], qvel[:], qacc[:] = q[k], qd[k], qdd[k]
        _inverse(model, data)
        out[k] = inverse


@_compiled
def _law(v: float, f: Floats) -> tuple[float, float]:
    """Return the friction torque at velocity v and the damping that keeps its integration stable."""
    u, w = math.tanh(v / f[F_V0]), v / f[F_DIP_VELOCITY]
    level = f[F_COULOMB] * (1.0 + f[F_DIP] * math.exp(-w * w))
    return -level * u - f[F_VISCOUS] * v, level * (1.0 - u * u) / f[F_V0] + f[F_VISCOUS]


@_compiled
def advance(  # type: ignore[no-untyped-def]
    e, drive, wanted, friction, by_engine, faults, pushes, begin, samples, rows
) -> int:
    """Advance by so many samples from the sample `begin` of the session; return how many were done.

    It ends early where a joint is further than `drive.stop_rad` from where it should be (a protective stop).
    Row 0 of `wanted` and of `rows` belongs to sample `begin`.
    """
    n, nv = e.motor.shape[0], e.qvel.shape[0]
    pressed, felt, zero, point, force = np.zeros(nv), np.zeros(nv), np.zeros(3), np.zeros(3), np.zeros(3)
    cmd, believed, torque, slowed = np.zeros(n), np.zeros(n), np.zeros(n), np.zeros(n)
    added_coulomb, added_viscous = np.zeros(n), np.zeros(n)
    shift, shift_rate = np.zeros(n), np.zeros(n)
    for step in range(samples * SUBSTEPS):
        k, part = step // SUBSTEPS, (step % SUBSTEPS) / SUBSTEPS
        t = (begin + k + part) * PERIOD_S
        added_coulomb[:], added_viscous[:], shift[:], shift_rate[:] = 0.0, 0.0, 0.0, 0.0
        for f in faults:
            share, rate = trapezoid(t, f[START], f[RAMP], f[END])
            i, kind = int(f[JOINT]), int(f[KIND])
            if kind in (COULOMB, STUCK):
                added_coulomb[i] += share * f[SIZE]
            elif kind == VISCOUS:
                added_viscous[i] += share * f[SIZE]
            elif kind == READING:
                shift[i] += share * f[SIZE]
                shift_rate[i] += rate * f[SIZE]
        for i in range(n):
            a, v = e.motor[i], e.qvel[e.motor[i]]
            # The engine takes in damping and dry friction in its first half step.
            if by_engine:
                e.frictionloss[a] = friction[i, F_COULOMB] + added_coulomb[i]
                e.damping[a] = friction[i, F_VISCOUS] + added_viscous[i]
            else:
                slowed[i], e.damping[a] = _law(v, friction[i])
                e.damping[a] += added_viscous[i]
                e.frictionloss[a] = added_coulomb[i]
        _step1(e.model, e.data)

        for i in range(n):
            a = e.motor[i]
            q_wanted = (1.0 - part) * wanted.q[k, i] + part * wanted.q[k + 1, i]
            qd_wanted = (1.0 - part) * wanted.qd[k, i] + part * wanted.qd[k + 1, i]
            ahead = (1.0 - part) * wanted.ahead[k, i] + part * wanted.ahead[k + 1, i]
            away = q_wanted - e.qpos[a] - shift[i]
            if abs(away) > drive.stop_rad:
                return k
            asked = ahead + drive.stiffness[i] * away
            asked += drive.damping[i] * (qd_wanted - e.qvel[a] - shift_rate[i])
            cmd[i] = min(max(asked, -drive.peak[i]), drive.peak[i])
            believed[i], torque[i] = cmd[i], cmd[i]
        for f in faults:
            share, _ = trapezoid(t, f[START], f[RAMP], f[END])
            if share == 0.0:
                continue
            i, kind = int(f[JOINT]), int(f[KIND])
            if kind == LOSS:
                torque[i] -= share * f[SIZE] * cmd[i]
            elif kind == OFFSET:
                torque[i] += share * f[SIZE]
            elif kind == RIPPLE:
                torque[i] += share * f[SIZE] * math.sin(f[AUX] * e.qpos[e.motor[i]] + f[PHASE])
            elif kind in (OPEN, OPEN_SAID):
                torque[i] -= share * cmd[i]
                if kind == OPEN_SAID:
                    believed[i] -= share * cmd[i]

        pressed[:], felt[:], force[:] = 0.0, 0.0, 0.0
        touched = -1
        for p in pushes:
            share, _ = trapezoid(t, p[0], p[2], p[0] + p[1] - p[2])
            if share > 0.0:
                body = int(p[3])
                for r in range(3):
                    point[r] = e.xpos[body, r]
                    for c in range(3):
                        point[r] += e.xmat[body, 3 * r + c] * p[7 + c]
                push = share * p[4:7]
                _apply_force(
                    e.model, e.data, push.ctypes.data, zero.ctypes.data, point.ctypes.data, body,
                    pressed.ctypes.data,
                )  # fmt: skip
                force += push
                touched = body
        e.applied[:] = pressed
        for i in range(n):
            a = e.motor[i]
            e.applied[a] += torque[i]
            if not by_engine:
                e.applied[a] += slowed[i] + (e.damping[a] - added_viscous[i]) * e.qvel[a]

        keep = step % SUBSTEPS == 0
        if keep:
            for i in range(n):
                a, b = e.motor[i], e.link[i]
                rows.q[k, i], rows.qd[k, i] = e.qpos[a] + shift[i], e.qvel[a] + shift_rate[i]
                rows.cmd[k, i], rows.tau[k, i] = cmd[i], believed[i]
                rows.link_q[k, i], rows.link_qd[k, i] = e.qpos[b], e.qvel[b]
                rows.friction[k, i] = -friction[i, F_VISCOUS] * e.qvel[a] if by_engine else slowed[i]
                rows.lost[k, i] = torque[i] - believed[i] - added_viscous[i] * e.qvel[a]
        _step2(e.model, e.data)
        if not keep:
            continue
        largest = 0.0
        for s in range(e.touching.shape[0]):
            sensed = e.sensors[s * TOUCH_WIDTH : (s + 1) * TOUCH_WIDTH]
            if sensed[0] > 0.0:
                push, moment, place = sensed[1:4].copy(), sensed[4:7].copy(), sensed[7:10].copy()
                _apply_force(
                    e.model, e.data, push.ctypes.data, moment.ctypes.data, place.ctypes.data, e.touching[s],
                    felt.ctypes.data,
                )  # fmt: skip
                force += push
                size = math.sqrt((push * push).sum())
                if size >= largest:
                    largest, touched = size, e.touching[s]
                    point[:] = place
        rows.force[k], rows.body[k], rows.point[k] = force, touched, 0.0
        if touched >= 0:
            for c in range(3):
                for r in range(3):
                    rows.point[k, c] += e.xmat[touched, 3 * r + c] * (point[r] - e.xpos[touched, r])
        for i in range(n):
            a, b = e.motor[i], e.link[i]
            rows.link_qdd[k, i], rows.motor_qdd[k, i] = e.qacc[b], e.qacc[a]
            # What of the engine's constraint torque is no contact is dry friction, normal and added.
            dry = e.constraint[a] - felt[a]
            normal = friction[i, F_COULOMB] if by_engine else 0.0
            share = normal / (normal + added_coulomb[i]) if normal > 0.0 else 0.0
            rows.friction[k, i] += share * dry
            rows.lost[k, i] += (1.0 - share) * dry
            rows.outside[k, i] = pressed[b] + felt[b]
    return samples
