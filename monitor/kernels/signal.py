"""Is a sample credible? Checks on the numbers of one message before any physics.

A bad sample never enters the ledger. None of the checks fires on a robot that merely stands still; which of
them are asked when is in flow/credible.py.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.jit import inlined

Floats = NDArray[np.float64]

OK, NON_FINITE, OUT_OF_RANGE, BASE_POSE = 0, 1, 2, 7

NOISY = 6.0  # score from which on a reading is too noisy
SUSPECT = 3.5  # score that no blow reaches: the reading may turn out too noisy
ROUGH = 1000  # samples over which the roughness of a torque is learnt
LIVELY = 1000  # noisy samples after which an exact repetition means something
_RELIEF = 0.2
_REPETITION = 10


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
def bend(step: float, step_last: float, dt_ns: int, dt_last_ns: int) -> float:
    """Return by how much a step Δq leaves the last one going on: acceleration times Δt², or a jump, or noise.

    A robot's clock may truly be uneven, or only its stamps: of both readings the smaller one counts.
    """
    even, stamped = step - step_last, step - step_last * dt_ns / dt_last_ns
    if even * stamped <= 0.0:
        return 0.0
    return even if abs(even) < abs(stamped) else stamped


@inlined
def differenced(
    qd: float, step: float, step_last: float, dt_ns: int, period_ns: int, tolerance: float
) -> bool:
    """Whether a velocity is merely this or the last Δq over Δt, or over the nominal period."""
    near = min(abs(1e-9 * qd * dt_ns - step), abs(1e-9 * qd * period_ns - step))
    return min(near, abs(1e-9 * qd * period_ns - step_last)) < tolerance


@inlined
def noise_score(bend: float, bend_last: float, limit: float, score: float) -> float:
    """Carry the score of a reading that is too noisy from `NOISY` on.

    A hit is a pair of second differences beyond `limit` in opposite directions; it adds one, every other
    sample takes `_RELIEF` off. Motion bends one way for many samples, a blow leaves one or two pairs, and the
    ringing of a structure one per half period, which `_RELIEF` outweighs up to a twelfth of the sample rate;
    white noise turns at almost every sample.

    Cost, for `limit` at 3.5 standard deviations of the second difference (3.5 √6 of the reading's): on white
    Gaussian noise as configured the score is at `NOISY` in about 2e-12 of all samples, once in 14 years at
    1 kHz (5e8 simulated samples up to a score of 3; from there by the tail, 25 times rarer per unit); on 1.25
    times that noise in about 2e-9. Delay for 8, 10 and 15 times the noise: median 20, 17, 13 samples, in nine
    of ten cases at most 36, 29, 22.
    """
    if bend * bend_last < 0.0 and min(abs(bend), abs(bend_last)) > limit:
        return min(score + 1.0, NOISY + 2.0)  # no more, to end soon after the noise
    return max(score - _RELIEF, 0.0)


@inlined
def roughness(
    bend: float, limit: float, total: float, count: int, largest: float
) -> tuple[float, int, float]:
    """Carry the mean square of second differences over `ROUGH` samples, and the largest mean so far.

    A second difference beyond `limit` counts as one of it: a blow makes some that are no noise.
    """
    total += min(bend * bend, limit * limit)
    if count + 1 < ROUGH:
        return total, count + 1, largest
    return 0.0, 0, max(largest, total / ROUGH)


@inlined
def beyond_lag(drift: float, swing: float, lag: float) -> float:
    """Return what of the drift Δq − ∫v dt a velocity that lags behind by 0 to `lag` [s] does not explain.

    A first-order lag of L leaves a drift of exactly L times the change of the velocity reading (swing).
    """
    lagged = lag * swing
    return abs(drift - min(max(drift, min(lagged, 0.0)), max(lagged, 0.0)))


@inlined
def liveliness(change: float, change_last: float, sd: float, run: int, lively: int) -> tuple[int, int]:
    """Carry how many samples the reading has repeated itself exactly, and how often it has shown noise.

    Noise is a second difference of at least the configured `sd`; a smooth signal without noise shows none. A
    repetition outweighs `_REPETITION` noisy samples, so that a coarse reading never counts as lively.
    """
    if change == 0.0:
        return run + 1, lively
    lively = max(lively - _REPETITION * run, 0)
    if abs(change - change_last) >= sd:
        lively = min(lively + 1, 2 * LIVELY)
    return 0, lively
