"""The walker's controller, compiled: from the state of the robot to what its drives are to follow.

The common recipe: the trunk is held by a wrench from feedback, shared out among the feet that carry, and
every leg follows the angles that put its foot where the timetable wants it. All kernels live in this file:
numba's cache keeps stale code when a callee in another file changes.
"""

from __future__ import annotations

import math

import numba
import numpy as np

# What a controller is set to. Modes of the timetable: see MODES.
MODES = ("stand", "crawl", "trot", "hoisted")
STAND, CRAWL, TROT, HOISTED = range(4)
SETTING = np.dtype(
    [
        ("mode", np.int64),
        ("start", float),  # of the gait [s]
        ("step", float),  # between two calls [s]
        ("period", float),  # of the timetable [s]
        ("swing", float),  # duration [s]
        ("lift", float, 4),  # first lift of each foot after the start [s]
        ("clearance", float),  # of a swinging foot at half time [m]
        ("landing_speed", float),  # [m/s]
        ("stride", float),  # [m] in a period
        ("sway", float),  # of trunk or hoisted feet [m]
        ("frequency", float, (4, 3)),  # of that [Hz]
        ("phase", float, (4, 3)),
        ("lean", float),  # share of the way to the middle of the three feet that stay
        ("mass", float),
        ("inertia", float, 3),  # about roll, pitch, yaw; rough
        ("radius", float),  # of a foot
        ("hips", float, (4, 3)),
        ("outward", float, 4),
        ("thigh", float),
        ("shank", float),
        ("below", float, (4, 3)),  # feet under the hips, ground level
        ("home", float, 3),  # trunk at ease
        ("to_com", float, 2),  # from the base origin to the centre of mass at ease
    ]
)
MEMORY = np.dtype(
    [
        ("planned", np.int8, 4),  # of the last call
        ("searching", np.int8, 4),  # planned to carry but without ground
        ("loose", float, 4),  # for how long [s]
        ("early", np.int8, 4),  # touched before its time
        ("deepest", float, 4),  # height at which such a foot stops pressing [m]
        ("anchor", float, (4, 3)),  # where feet stand
        ("lifted", float, (4, 3)),  # where they left the ground
        ("landing", float, (4, 3)),  # where they will meet it
        ("drift", float, 2),  # of the trunk, smoothed [m/s]
        ("slot", np.int64),  # number of the lean
        ("lean_from", float, 3),
        ("lean_to", float, 3),
    ]
)
# The exact state, as a perfect estimator would see it.
SENSED = np.dtype(
    [
        ("planned", np.int8, 4),
        ("touching", np.int8, 4),
        ("position", float, 3),
        ("R_WB", float, (3, 3)),
        ("velocity", float, 3),  # world axes
        ("omega", float, 3),  # base axes
        ("com", float, 3),
        ("q", float, (4, 3)),
    ]
)
COMMAND = np.dtype(
    [("q", float, (4, 3)), ("qd", float, (4, 3)), ("qdd", float, (4, 3)), ("carrying", float, (4, 3))]
)
_TO_COM_S = 0.06  # how far ahead of its drift the trot steps, beside half a stance
_GRIP = 0.5
_LATE_S = 0.02  # a foot without ground for longer than this carries no more, and searches
_SEARCH_SPEED = 0.5
_PRESSING_M = 0.012  # an early foot goes on downward by this much at most

_compiled = numba.njit(cache=True, error_model="numpy")


@_compiled
def foot_place(hip, outward, thigh, shank, q, p, J):  # type: ignore[no-untyped-def]
    """Fill p (3,) and J (3,3) of a foot, base axes, for leg angles q (3,): roll, pitch, knee."""
    upper, lower = q[1], q[1] + q[2]
    x_low, z_low = -shank * math.sin(lower), -shank * math.cos(lower)
    x, z = x_low - thigh * math.sin(upper), z_low - thigh * math.cos(upper)
    s, c = math.sin(q[0]), math.cos(q[0])
    y_out, z_out = c * outward - s * z, s * outward + c * z
    p[0], p[1], p[2] = hip[0] + x, hip[1] + y_out, hip[2] + z_out
    J[0, 0], J[1, 0], J[2, 0] = 0.0, -z_out, y_out
    J[0, 1], J[1, 1], J[2, 1] = z, s * x, -c * x
    J[0, 2], J[1, 2], J[2, 2] = z_low, s * x_low, -c * x_low


@_compiled
def leg_angles(hip, outward, thigh, shank, p, q):  # type: ignore[no-untyped-def]
    """Fill leg angles q (3,) that bring the foot to p (3,), base axes; out of reach: almost straight."""
    x, y, z = p[0] - hip[0], p[1] - hip[1], p[2] - hip[2]
    down = math.sqrt(max(y * y + z * z - outward * outward, 1e-6))
    q[0] = math.atan2(z, y) - math.atan2(-down, outward)
    bend = (x * x + down * down - thigh * thigh - shank * shank) / (2.0 * thigh * shank)
    bend = min(max(bend, -0.9), 0.995)
    q[2] = -math.acos(bend)
    q[1] = math.atan2(-x, down) - math.atan2(shank * math.sin(q[2]), thigh + shank * bend)


@_compiled
def _smooth(x):  # type: ignore[no-untyped-def]
    """Return the quintic from 0 to 1 with level ends, its slope and its curvature."""
    x = min(max(x, 0.0), 1.0)
    share = x * x * x * (10.0 + x * (6.0 * x - 15.0))
    return share, 30.0 * (x * (1.0 - x)) ** 2, 60.0 * x * (1.0 - x) * (1.0 - 2.0 * x)


@_compiled
def _search_speed(a, m, i):  # type: ignore[no-untyped-def]
    """Return how fast a foot goes down that finds no ground [m/s]."""
    return a.landing_speed if m.loose[i] < _LATE_S else _SEARCH_SPEED


@_compiled
def _keep_account(t, a, m, s, feet):  # type: ignore[no-untyped-def]
    """Note where feet left the ground, where they found it, and which planned ones still look for it."""
    for i in range(2):
        m.drift[i] += (s.velocity[i] - m.drift[i]) * (a.step / 0.1)
    rest = 0.5 * (a.period - a.swing)
    for i in range(4):
        planned, was = s.planned[i], m.planned[i]
        if was and not planned:
            m.lifted[i], m.early[i] = feet[i], False
            if a.mode == CRAWL:
                m.landing[i, 0], m.landing[i, 1] = feet[i, 0] + a.stride, a.below[i, 1]
        if a.mode == TROT:
            for c in range(2):
                away = s.position[c] - a.home[c]
                m.landing[i, c] = a.below[i, c] + 1.1 * away + (rest + _TO_COM_S) * m.drift[c]
        m.landing[i, 2] = a.radius
        late_swing = not planned and (t - a.start - a.lift[i]) % a.period > 0.4 * a.swing
        if late_swing and s.touching[i] and not m.early[i]:
            m.early[i], m.anchor[i] = True, feet[i]
            m.deepest[i] = feet[i, 2] - _PRESSING_M
        lost = planned and not s.touching[i]
        m.loose[i] = m.loose[i] + a.step if lost else 0.0
        if planned and ((not was and not m.early[i]) or (m.searching[i] and not lost)):
            m.anchor[i] = feet[i]
        if lost:
            m.anchor[i, 2] -= _search_speed(a, m, i) * a.step
        m.searching[i], m.planned[i] = lost, planned


@_compiled
def _trunk(t, a, m, place, speed):  # type: ignore[no-untyped-def]
    """Fill wanted position and velocity of the trunk (3,)."""
    if a.mode == CRAWL and t >= a.start:
        step = a.period / 4.0
        slot = int((t - a.start) / step + 1e-9)
        if slot > m.slot:
            foot = np.argsort(a.lift)[slot % 4]
            m.slot, m.lean_from[:] = slot, m.lean_to
            for c in range(2):
                middle = 0.25 * (m.anchor[0, c] + m.anchor[1, c] + m.anchor[2, c] + m.anchor[3, c])
                # From the middle of all feet, the middle of the other three is a third as far as the foot is.
                m.lean_to[c] = middle + a.lean / 3.0 * (middle - m.anchor[foot, c]) - a.to_com[c]
        leaning = step - a.swing
        share, rate, _ = _smooth((t - a.start - slot * step) / leaning)
        for c in range(3):
            way = m.lean_to[c] - m.lean_from[c]
            place[c], speed[c] = m.lean_from[c] + share * way, rate / leaning * way
    else:
        size = a.sway * _smooth(t / a.start)[0]
        for c in range(3):
            w = 2.0 * math.pi * a.frequency[0, c]
            place[c] = a.home[c] + size * math.sin(w * t + a.phase[0, c])
            speed[c] = size * w * math.cos(w * t + a.phase[0, c])


@_compiled
def _swing(into, a, m, i, place, velocity, acceleration):  # type: ignore[no-untyped-def]
    """Fill place, velocity, acceleration (3,) of swinging foot i, `into` [s] after its lift, world axes."""
    T = a.swing
    x = into / T
    share, rate, curve = _smooth(x)
    for c in range(3):
        way = m.landing[i, c] - m.lifted[i, c]
        place[c], velocity[c], acceleration[c] = (
            m.lifted[i, c] + share * way,
            rate / T * way,
            curve / T**2 * way,
        )
    # Height x² (1 - x) (c0 + c1 x): the clearance at half time, the landing speed at the end.
    c0 = 16.0 * a.clearance - a.landing_speed * T
    c1 = 2.0 * a.landing_speed * T - 16.0 * a.clearance
    place[2] += x * x * (c0 + x * (c1 - c0 - x * c1))
    velocity[2] += x * (2.0 * c0 + x * (3.0 * (c1 - c0) - 4.0 * x * c1)) / T
    acceleration[2] += (2.0 * c0 + x * (6.0 * (c1 - c0) - 12.0 * x * c1)) / T**2


@_compiled
def _share_out(a, m, s, into, feet, trunk, trunk_speed, force):  # type: ignore[no-untyped-def]
    """Fill forces on the feet (4,3), world axes: least squares, weighted by share, in a friction pyramid."""
    R = s.R_WB
    tilt = (0.5 * (R[2, 1] - R[1, 2]), 0.5 * (R[0, 2] - R[2, 0]), 0.5 * (R[1, 0] - R[0, 1]))
    wrench, stiff = np.empty(6), (60.0, 60.0, 120.0)
    for c in range(3):
        wrench[c] = a.mass * (stiff[c] * (trunk[c] - s.position[c]) + 14.0 * (trunk_speed[c] - s.velocity[c]))
        turning = R[c, 0] * s.omega[0] + R[c, 1] * s.omega[1] + R[c, 2] * s.omega[2]
        wrench[3 + c] = -a.inertia[c] * (150.0 * tilt[c] + 20.0 * turning)
    wrench[2] += 9.81 * a.mass
    ramp = min(0.04, 0.2 * a.swing)
    A, weight = np.zeros((6, 12)), np.zeros(12)
    for i in range(4):
        share = 1.0
        if a.mode != STAND:
            left = -into[i] if into[i] < 0.0 else a.period - into[i] % a.period
            since = 1.0 if into[i] < 0.0 else into[i] % a.period - a.swing + 0.005
            share = min(max(min(left, since) / ramp, 0.0), 1.0)
        if not s.planned[i] or m.loose[i] >= _LATE_S:
            share = 0.0
        x, y, z = feet[i, 0] - s.com[0], feet[i, 1] - s.com[1], feet[i, 2] - s.com[2]
        for c in range(3):
            A[c, 3 * i + c] = 1.0
            weight[3 * i + c] = share
        A[3, 3 * i + 1], A[3, 3 * i + 2] = -z, y
        A[4, 3 * i], A[4, 3 * i + 2] = z, -x
        A[5, 3 * i], A[5, 3 * i + 1] = -y, x
    # (A W Aᵀ + small) x = wrench, f = W Aᵀ x, by Cholesky's method.
    S = np.zeros((6, 6))
    for r in range(6):
        for c in range(r + 1):
            for k in range(12):
                S[r, c] += A[r, k] * weight[k] * A[c, k]
        S[r, r] += 1e-4
    for r in range(6):
        for c in range(r + 1):
            for k in range(c):
                S[r, c] -= S[r, k] * S[c, k]
            S[r, c] = math.sqrt(S[r, r]) if r == c else S[r, c] / S[c, c]
        for k in range(r):
            wrench[r] -= S[r, k] * wrench[k]
        wrench[r] /= S[r, r]
    for r in range(5, -1, -1):
        for k in range(r + 1, 6):
            wrench[r] -= S[k, r] * wrench[k]
        wrench[r] /= S[r, r]
    f = np.zeros(12)
    for k in range(12):
        for r in range(6):
            f[k] += weight[k] * A[r, k] * wrench[r]
    for i in range(4):
        up = min(max(f[3 * i + 2], 0.0), 15.0 * a.mass)
        force[i, 2] = up
        for c in range(2):
            force[i, c] = min(max(f[3 * i + c], -_GRIP * up), _GRIP * up)


@_compiled
def _out_of_base(R, x, y):  # type: ignore[no-untyped-def]
    """Fill y (3,) = R x."""
    for c in range(3):
        y[c] = R[c, 0] * x[0] + R[c, 1] * x[1] + R[c, 2] * x[2]


@_compiled
def _into_base(R, x, y):  # type: ignore[no-untyped-def]
    """Fill y (3,) = Rᵀ x; also Jᵀ f."""
    for c in range(3):
        y[c] = R[0, c] * x[0] + R[1, c] * x[1] + R[2, c] * x[2]


@_compiled
def _determinant(J):  # type: ignore[no-untyped-def]
    return (
        J[0, 0] * (J[1, 1] * J[2, 2] - J[1, 2] * J[2, 1])
        + J[0, 1] * (J[1, 2] * J[2, 0] - J[1, 0] * J[2, 2])
        + J[0, 2] * (J[1, 0] * J[2, 1] - J[1, 1] * J[2, 0])
    )


@_compiled
def _solve3(J, x, y):  # type: ignore[no-untyped-def]
    """Fill y (3,) with J y = x by Cramer's rule, kept from bursting where the leg is straight."""
    det = _determinant(J)
    det = math.copysign(max(abs(det), 1e-3), det)
    K = J.copy()
    for c in range(3):
        K[:, c] = x
        y[c] = _determinant(K) / det
        K[:, c] = J[:, c]


@_compiled
def _paddling(t, a, i, place, velocity, acceleration):  # type: ignore[no-untyped-def]
    """Fill place, velocity, acceleration (3,) of foot i of a hoisted robot, base axes."""
    size = a.sway * _smooth(t / a.start)[0]
    for c in range(3):
        w = 2.0 * math.pi * a.frequency[i, c]
        sine, cosine = math.sin(w * t + a.phase[i, c]), math.cos(w * t + a.phase[i, c])
        place[c] = a.below[i, c] - a.home[c] + size * sine
        velocity[c], acceleration[c] = size * w * cosine, -size * w * w * sine


@_compiled
def control(t, setting, memory, sensed, command):  # type: ignore[no-untyped-def]
    """Fill a COMMAND from a SENSED at time t [s], each an array of one; MEMORY is kept between calls.

    `carrying` is the torque of the feet's wanted forces; what moving the legs takes is not in it.
    """
    a, m, s, out = setting[0], memory[0], sensed[0], command[0]
    feet, J, force = np.empty((4, 3)), np.zeros((4, 3, 3)), np.zeros((4, 3))
    trunk, trunk_speed, into = np.empty(3), np.empty(3), t - a.start - a.lift
    place, velocity, acceleration, other = np.empty(3), np.empty(3), np.empty(3), np.empty(3)
    for i in range(4):
        foot_place(a.hips[i], a.outward[i], a.thigh, a.shank, s.q[i], other, J[i])
        _out_of_base(s.R_WB, other, feet[i])
        feet[i] += s.position
    if a.mode != HOISTED:
        _keep_account(t, a, m, s, feet)
        _trunk(t, a, m, trunk, trunk_speed)
        _share_out(a, m, s, into, feet, trunk, trunk_speed, force)
    for i in range(4):
        if a.mode == HOISTED:
            _paddling(t, a, i, place, velocity, acceleration)
        elif (s.planned[i] or m.early[i]) and not m.searching[i]:
            if not s.planned[i]:  # presses on downward as planned, but not far
                _swing(into[i] % a.period, a, m, i, place, velocity, acceleration)
                m.anchor[i, 2] = max(min(m.anchor[i, 2], place[2]), m.deepest[i])
            for c in range(3):
                place[c], velocity[c], acceleration[c] = m.anchor[i, c] - trunk[c], -trunk_speed[c], 0.0
        else:
            # From where the trunk is, not from where it should be: the foot is to meet the ground in time.
            if m.searching[i]:
                place[:], velocity[:], acceleration[:] = m.anchor[i], 0.0, 0.0
                velocity[2] = -_search_speed(a, m, i)
            else:
                _swing(into[i] % a.period, a, m, i, place, velocity, acceleration)
            for x, less in ((place, s.position), (velocity, s.velocity)):
                for c in range(3):
                    other[c] = x[c] - less[c]
                _into_base(s.R_WB, other, x)
            w = s.omega
            velocity[0] -= w[1] * place[2] - w[2] * place[1]
            velocity[1] -= w[2] * place[0] - w[0] * place[2]
            velocity[2] -= w[0] * place[1] - w[1] * place[0]
            other[:] = acceleration
            _into_base(s.R_WB, other, acceleration)
        leg_angles(a.hips[i], a.outward[i], a.thigh, a.shank, place, out.q[i])
        _solve3(J[i], velocity, out.qd[i])
        _solve3(J[i], acceleration, out.qdd[i])
        _into_base(s.R_WB, force[i], other)
        _into_base(J[i], other, out.carrying[i])
        for c in range(3):
            out.carrying[i, c] = -out.carrying[i, c]
