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
    q: Floats, qd: Floats, tau: Floats, q_min: Floats, q_max: Floats, qd_max: Floats, tau_max: Floats
) -> tuple[int, int]:
    """Return (fault, joint) of the first value that is not finite or outside its range, else (OK, -1)."""
    for i in range(q.shape[0]):
        if not (math.isfinite(q[i]) and math.isfinite(qd[i]) and math.isfinite(tau[i])):
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
