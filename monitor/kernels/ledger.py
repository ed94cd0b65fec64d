"""The momentum ledger: what torque the model cannot explain, from one sample to the next.

With `dp/dt = tau - friction + C'v - g + d` the residual is an estimate of d. Three forms:

* `first_order`: `w = (p_k - p_k-1)/dt - (u_k + u_k-1)/2` through a low-pass, its pole exact in discrete time
  (discretising the continuous observer instead doubles its error: "Contact Model Fusion for Event-Based
  Locomotion in Unstructured Terrains", ICRA 2018, doi 10.1109/ICRA.2018.8460904). Half of a step after
  ln 2 / pole; white velocity noise passes with gain pole*M over the whole band.
* `second_order`: momentum measured, d a random walk; poles at damping 1/sqrt(2), placed exactly for any dt.
* `joint_space`: encoder position and velocity are fused; the unexplained acceleration e is a random walk and
  `r = M e`. Steady-state Riccati gains, computed by `setup.build` for the configured noise.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.jit import inlined

Floats = NDArray[np.float64]


# Friction may bend: to Coulomb's tanh(v/v0) come terms that saturate at 10 and 50 times v0. A dip at low
# speed (Stribeck) is a rise of the first with a fall of the others.
BENDS = 2
WIDTHS = (10.0, 50.0)


@inlined
def friction(
    v: Floats, viscous: Floats, coulomb: Floats, bend: Floats, offset: Floats, v0: Floats, out: Floats
) -> None:
    """Subtract joint friction from out (n): `viscous v + coulomb tanh(v/v0) + offset`, and what bends it.

    bend (n,BENDS): N m of `tanh(v / (WIDTHS v0))`.
    """
    for i in range(v.shape[0]):
        out[i] -= viscous[i] * v[i] + offset[i]
        if coulomb[i] != 0.0:
            out[i] -= coulomb[i] * math.tanh(v[i] / v0[i])
        for k in range(BENDS):
            if bend[i, k] != 0.0:
                out[i] -= bend[i, k] * math.tanh(v[i] / (WIDTHS[k] * v0[i]))


@inlined
def friction_slope(
    v: Floats, viscous: Floats, coulomb: Floats, bend: Floats, v0: Floats, slope: Floats
) -> None:
    """Fill slope (n), N m s/rad, with `friction(v) / v`, the offset left out."""
    for i in range(v.shape[0]):
        slope[i] = viscous[i]
        if coulomb[i] != 0.0:
            x = v[i] / v0[i]
            slope[i] += coulomb[i] / v0[i] * (math.tanh(x) / x if abs(x) > 1e-6 else 1.0)
        for k in range(BENDS):
            if bend[i, k] != 0.0:
                x = v[i] / (WIDTHS[k] * v0[i])
                slope[i] += bend[i, k] / (WIDTHS[k] * v0[i]) * (math.tanh(x) / x if abs(x) > 1e-6 else 1.0)


@inlined
def first_order(
    p: Floats, p_last: Floats, u: Floats, u_last: Floats, pole: float, dt: float, r: Floats
) -> None:
    """Update the residual r (n), N m, from momenta and known torques u at both ends of dt."""
    keep = math.exp(-pole * dt)
    for i in range(r.shape[0]):
        w = (p[i] - p_last[i]) / dt - 0.5 * (u[i] + u_last[i])
        r[i] = keep * r[i] + (1.0 - keep) * w


@inlined
def second_order(
    p: Floats, u: Floats, u_last: Floats, pole: float, dt: float, p_hat: Floats, r: Floats
) -> None:
    """Update the momentum estimate p_hat (n) and the residual r (n), N m.

    The gains put the error's two poles at `exp(-pole dt (1 ± i)/sqrt(2))`.
    """
    x = pole * dt * math.sqrt(0.5)
    gain_p = 1.0 - math.exp(-2.0 * x)
    gain_r = (2.0 - gain_p - 2.0 * math.exp(-x) * math.cos(x)) / dt
    for i in range(r.shape[0]):
        predicted = p_hat[i] + dt * (0.5 * (u[i] + u_last[i]) + r[i])
        innovation = p[i] - predicted
        p_hat[i] = predicted + gain_p * innovation
        r[i] += gain_r * innovation


@inlined
def advance_pose(base: int, v: Floats, a: Floats, e: Floats, dt: float, q: Floats) -> None:
    """Move q (nq) over dt with velocity v and acceleration a + e (n); base is 6 if floating, else 0.

    The base turns by its mean body rate (exact for a constant one) and moves along its axes of halfway.
    """
    shift = 0
    if base == 6:
        shift = 1
        _advance_base(v, a, e, dt, q)
    for i in range(base, v.shape[0]):
        q[i + shift] += dt * (v[i] + 0.5 * dt * (a[i] + e[i]))


@inlined
def _advance_base(v: Floats, a: Floats, e: Floats, dt: float, q: Floats) -> None:
    w, x, y, z = q[3], q[4], q[5], q[6]
    u0 = v[3] + 0.5 * dt * (a[3] + e[3])
    u1 = v[4] + 0.5 * dt * (a[4] + e[4])
    u2 = v[5] + 0.5 * dt * (a[5] + e[5])
    # Halfway the axes have turned by half of what they will: u + dt/2 omega x u.
    h0, h1, h2 = 0.5 * dt * v[0], 0.5 * dt * v[1], 0.5 * dt * v[2]
    u0, u1, u2 = u0 + h1 * u2 - h2 * u1, u1 + h2 * u0 - h0 * u2, u2 + h0 * u1 - h1 * u0
    # Rotate u by the quaternion: u + 2 w (s x u) + 2 s x (s x u).
    c0, c1, c2 = y * u2 - z * u1, z * u0 - x * u2, x * u1 - y * u0
    q[0] += dt * (u0 + 2.0 * (w * c0 + y * c2 - z * c1))
    q[1] += dt * (u1 + 2.0 * (w * c1 + z * c0 - x * c2))
    q[2] += dt * (u2 + 2.0 * (w * c2 + x * c1 - y * c0))
    turn_quaternion(
        dt * (v[0] + 0.5 * dt * (a[0] + e[0])),
        dt * (v[1] + 0.5 * dt * (a[1] + e[1])),
        dt * (v[2] + 0.5 * dt * (a[2] + e[2])),
        q,
    )


@inlined
def turn_quaternion(r0: float, r1: float, r2: float, q: Floats) -> None:
    """Turn the base attitude q[3:7] by the rotation vector r (rad, body axes), keeping unit length."""
    angle2 = r0 * r0 + r1 * r1 + r2 * r2
    c = 1.0 - angle2 / 8.0
    s = 0.5 - angle2 / 48.0
    if angle2 > 1e-6:
        angle = math.sqrt(angle2)
        c, s = math.cos(0.5 * angle), math.sin(0.5 * angle) / angle
    w, x, y, z = q[3], q[4], q[5], q[6]
    a, b, d = s * r0, s * r1, s * r2
    n0 = w * c - x * a - y * b - z * d
    n1 = w * a + x * c + y * d - z * b
    n2 = w * b - x * d + y * c + z * a
    n3 = w * d + x * b - y * a + z * c
    scale = 1.0 / math.sqrt(n0 * n0 + n1 * n1 + n2 * n2 + n3 * n3)
    q[3], q[4], q[5], q[6] = n0 * scale, n1 * scale, n2 * scale, n3 * scale


@inlined
def joint_space(
    base: int, q: Floats, v: Floats, a: Floats, dt: float, gain: Floats,
    q_hat: Floats, v_hat: Floats, e_hat: Floats,
) -> None:  # fmt: skip
    """Predict q_hat, v_hat over dt with the model's mean acceleration a, then correct them and e_hat.

    gain (n,3,2): rows position, velocity, unexplained acceleration; columns position and velocity innovation.
    """
    n = v.shape[0]
    shift = 1 if base == 6 else 0
    advance_pose(base, v_hat, a, e_hat, dt, q_hat)
    for i in range(n):
        v_hat[i] += dt * (a[i] + e_hat[i])
    if base == 6:
        _correct_base(q, v, gain, q_hat, v_hat, e_hat)
    for i in range(base, n):
        dq = q[i + shift] - q_hat[i + shift]
        dv = v[i] - v_hat[i]
        q_hat[i + shift] += gain[i, 0, 0] * dq + gain[i, 0, 1] * dv
        v_hat[i] += gain[i, 1, 0] * dq + gain[i, 1, 1] * dv
        e_hat[i] += gain[i, 2, 0] * dq + gain[i, 2, 1] * dv


@inlined
def _correct_base(q: Floats, v: Floats, gain: Floats, q_hat: Floats, v_hat: Floats, e_hat: Floats) -> None:
    """Correct attitude by the small rotation between both quaternions, position along the base's own axes."""
    w, x, y, z = q_hat[3], q_hat[4], q_hat[5], q_hat[6]
    # Vector part of conj(q_hat) q, with the sign that makes the turn the short one: half the rotation vector.
    d = w * q[3] + x * q[4] + y * q[5] + z * q[6]
    k = 2.0 if d >= 0.0 else -2.0
    r0 = k * (w * q[4] - x * q[3] - y * q[6] + z * q[5])
    r1 = k * (w * q[5] + x * q[6] - y * q[3] - z * q[4])
    r2 = k * (w * q[6] - x * q[5] + y * q[4] - z * q[3])
    # World difference of position into body axes (rotation by the conjugate).
    p0, p1, p2 = q[0] - q_hat[0], q[1] - q_hat[1], q[2] - q_hat[2]
    c0, c1, c2 = y * p2 - z * p1, z * p0 - x * p2, x * p1 - y * p0
    b0 = p0 + 2.0 * (-w * c0 + y * c2 - z * c1)
    b1 = p1 + 2.0 * (-w * c1 + z * c0 - x * c2)
    b2 = p2 + 2.0 * (-w * c2 + x * c1 - y * c0)
    for i in range(6):
        dv = v[i] - v_hat[i]
        dq = r0 if i == 0 else r1 if i == 1 else r2 if i == 2 else b0 if i == 3 else b1 if i == 4 else b2
        v_hat[i] += gain[i, 1, 0] * dq + gain[i, 1, 1] * dv
        e_hat[i] += gain[i, 2, 0] * dq + gain[i, 2, 1] * dv
        step = gain[i, 0, 0] * dq + gain[i, 0, 1] * dv
        if i == 0:
            r0 = step
        elif i == 1:
            r1 = step
        elif i == 2:
            r2 = step
        elif i == 3:
            b0 = step
        elif i == 4:
            b1 = step
        else:
            b2 = step
    c0, c1, c2 = y * b2 - z * b1, z * b0 - x * b2, x * b1 - y * b0
    q_hat[0] += b0 + 2.0 * (w * c0 + y * c2 - z * c1)
    q_hat[1] += b1 + 2.0 * (w * c1 + z * c0 - x * c2)
    q_hat[2] += b2 + 2.0 * (w * c2 + x * c1 - y * c0)
    turn_quaternion(r0, r1, r2, q_hat)


@inlined
def gain_step(dt: float, period_ns: int, steps: int) -> int:
    """Return which of `steps` gains belongs to dt [s]: gain k is that of k + 1 periods."""
    return int(min(max(round(dt * 1e9 / period_ns), 1), steps) - 1)


@inlined
def respond_joint_space(w: float, dt: float, gain: Floats, x: Floats) -> None:
    """Advance x (3): errors of position and velocity, and e, of `joint_space` under an acceleration w."""
    free = w - x[2]
    dq = x[0] + dt * (x[1] + 0.5 * dt * free)
    dv = x[1] + dt * free
    x[0] = dq - gain[0, 0] * dq - gain[0, 1] * dv
    x[1] = dv - gain[1, 0] * dq - gain[1, 1] * dv
    x[2] += gain[2, 0] * dq + gain[2, 1] * dv


@inlined
def respond_first_order(w: float, dt: float, pole: float, x: Floats) -> None:
    """Advance x[2], the residual of `first_order` under a torque w."""
    keep = math.exp(-pole * dt)
    x[2] = keep * x[2] + (1.0 - keep) * w


@inlined
def respond_second_order(w: float, dt: float, pole: float, x: Floats) -> None:
    """Advance x (momentum error, -, residual) of `second_order` under a torque w."""
    y = pole * dt * math.sqrt(0.5)
    gain_p = 1.0 - math.exp(-2.0 * y)
    gain_r = (2.0 - gain_p - 2.0 * math.exp(-y) * math.cos(y)) / dt
    innovation = x[0] + dt * (w - x[2])
    x[0] = innovation * (1.0 - gain_p)
    x[2] += gain_r * innovation
