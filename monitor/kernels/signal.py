"""Is a sample credible? Checks on the numbers of one message before any physics.

A bad sample never enters the ledger. None of the checks fires on a robot that merely stands still: a frozen
position counts only while the joint's own velocity says it moves.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.jit import inlined

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

OK, NON_FINITE, OUT_OF_RANGE, CLOCK, JUMP, FROZEN, CONTRADICTION, BASE_POSE = 0, 1, 2, 3, 4, 5, 6, 7


@inlined
def range_fault(
    q: Floats, qd: Floats, tau: Floats, tau_cmd: Floats,
    q_min: Floats, q_max: Floats, qd_max: Floats, tau_max: Floats,
) -> tuple[int, int]:  # fmt: skip
    """Return (fault, joint) of the first value that is not finite or outside its range, else (OK, -1)."""
    for i in range(q.shape[0]):
        measured = math.isfinite(q[i]) and math.isfinite(qd[i]) and math.isfinite(tau[i])
        if not measured or math.isinf(tau_cmd[i]):  # NaN where it was not sent
            return NON_FINITE, i
        if q[i] < q_min[i] or q[i] > q_max[i] or abs(qd[i]) > qd_max[i] or abs(tau[i]) > tau_max[i]:
            return OUT_OF_RANGE, i
    return OK, -1


@inlined
def base_fault(p: Floats, quat: Floats, v: Floats, w: Floats, position_max: float, speed_max: float) -> int:
    """Return BASE_POSE when the base state is not finite, not a rotation, absurdly far or fast, else OK."""
    norm2 = 0.0
    for i in range(4):
        norm2 += quat[i] * quat[i]
    # Written so that a NaN anywhere fails the comparison.
    if not abs(norm2 - 1.0) < 0.01:
        return BASE_POSE
    for i in range(3):
        if not (abs(p[i]) < position_max and abs(v[i]) < speed_max and abs(w[i]) < speed_max):
            return BASE_POSE
    return OK


@inlined
def base_motion_fault(
    p: Floats, quat: Floats, v: Floats, w: Floats, dt_ns: int,
    p_last: Floats, quat_last: Floats, v_last: Floats, w_last: Floats,
    jump: float, frozen_speed: float, frozen_ns: int, still_ns: int,
) -> tuple[int, int]:  # fmt: skip
    """Return (fault, still_ns): BASE_POSE when the base pose jumps or freezes against its own velocity.

    A step of position [m] or attitude [rad] may differ by `jump` from what v (world) and w (body) explain.
    still_ns is carried on: the time the pose has stood while a speed beyond frozen_speed is reported.
    """
    half = 0.5e-9 * dt_ns
    # Vector part of conj(quat_last) quat is half the turn in body axes; the sign makes it the short one.
    a, b, c, d = quat_last[0], -quat_last[1], -quat_last[2], -quat_last[3]
    real = a * quat[0] - b * quat[1] - c * quat[2] - d * quat[3]
    k = 2.0 if real >= 0.0 else -2.0
    turn0 = k * (a * quat[1] + b * quat[0] + c * quat[3] - d * quat[2])
    turn1 = k * (a * quat[2] + c * quat[0] + d * quat[1] - b * quat[3])
    turn2 = k * (a * quat[3] + d * quat[0] + b * quat[2] - c * quat[1])
    miss = max(abs(turn0 - half * (w[0] + w_last[0])), abs(turn1 - half * (w[1] + w_last[1])))
    miss = max(miss, abs(turn2 - half * (w[2] + w_last[2])))
    stands, moves = turn0 == 0.0 and turn1 == 0.0 and turn2 == 0.0, False
    for i in range(3):
        miss = max(miss, abs(p[i] - p_last[i] - half * (v[i] + v_last[i])))
        stands = stands and p[i] == p_last[i]
        moves = moves or abs(v[i]) > frozen_speed or abs(w[i]) > frozen_speed
    still_ns = still_ns + dt_ns if stands and moves else 0
    return (BASE_POSE if miss > jump or still_ns > frozen_ns else OK), still_ns


@inlined
def motion_fault(
    q: Floats, qd: Floats, dt_ns: int, q_last: Floats, qd_last: Floats,
    jump: Floats, drift_max: Floats, drift_s: float, frozen_velocity: Floats, frozen_ns: int,
    still_ns: Ints, drift: Floats,
) -> tuple[int, int]:  # fmt: skip
    """Return (fault, joint) of a position that jumps, freezes or contradicts its velocity, else (OK, -1).

    still_ns (m) and drift (m) are carried from sample to sample: the time a position has stood while its
    velocity says it moves, and the leaky integral of the difference between Δq and velocity times Δt.
    """
    dt = dt_ns * 1e-9
    keep = math.exp(-dt / drift_s)
    fault, joint = OK, -1
    for i in range(q.shape[0]):
        step = q[i] - q_last[i]
        miss = step - 0.5 * dt * (qd[i] + qd_last[i])
        drift[i] = keep * drift[i] + miss
        still_ns[i] = still_ns[i] + dt_ns if step == 0.0 and abs(qd[i]) > frozen_velocity[i] else 0
        if fault == OK:
            if abs(miss) > jump[i]:
                fault, joint = JUMP, i
            elif still_ns[i] > frozen_ns:
                fault, joint = FROZEN, i
            elif abs(drift[i]) > drift_max[i]:
                fault, joint = CONTRADICTION, i
    return fault, joint
