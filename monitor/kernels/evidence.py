"""How well do competing explanations predict the same residuals? Kalman filters that share one noise model.

Every explanation predicts `r = H x + D s + noise`. The noise has covariance R (fast part); s are slow states,
one per row, of unit variance and correlation time `-dt / log(keep)`; D is diagonal. Everything is whitened
once per evidence step, with L of `R = L L'`: `y = L^-1 r`, `G = L^-1 D`, `H := L^-1 H`. Then the noise of the
rows is independent and of unit size, and rows can be taken one after the other.

x is either constant (unit prior: columns of H come multiplied by the prior standard deviation) or smooth in
time: each component a Matérn process of order 3/2, `x'' + 2 x'/T + x/T² = white noise`, of unit variance
("Gaussian Processes for Machine Learning", MIT Press 2006, ch. 4; as a state space "Kalman filtering and
smoothing solutions to temporal Gaussian process regression models", MLSP 2010,
doi 10.1109/MLSP.2010.5589113). Log evidences are relative to the common constant of the whitened rows.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.jit import inlined, kernel

Floats = NDArray[np.float64]


@kernel
def factor(R: Floats, L: Floats) -> float:
    """Fill the lower triangle of L (n,n) with the Cholesky factor of R; return log det R."""
    n = R.shape[0]
    log_det = 0.0
    for i in range(n):
        for j in range(i + 1):
            s = R[i, j]
            for k in range(j):
                s -= L[i, k] * L[j, k]
            L[i, j] = math.sqrt(s) if i == j else s / L[j, j]
        log_det += 2.0 * math.log(L[i, i])
    return log_det


@kernel
def whiten(L: Floats, b: Floats) -> None:
    """Replace b (n) by `L^-1 b`."""
    for i in range(b.shape[0]):
        s = b[i]
        for k in range(i):
            s -= L[i, k] * b[k]
        b[i] = s / L[i, i]


@kernel
def whiten_columns(L: Floats, H: Floats, d: int) -> None:
    """Replace the first d columns of H (n, >= d) by `L^-1 H`."""
    for i in range(H.shape[0]):
        for k in range(i):
            f = L[i, k]
            for j in range(d):
                H[i, j] -= f * H[k, j]
        f = 1.0 / L[i, i]
        for j in range(d):
            H[i, j] *= f


@kernel
def whiten_slow(L: Floats, d: Floats, G: Floats) -> None:
    """Fill G (n,n) with `L^-1 diag(d)`, lower triangular."""
    n = d.shape[0]
    for j in range(n):
        for i in range(j):
            G[i, j] = 0.0
        for i in range(j, n):
            s = d[j] if i == j else 0.0
            for k in range(j, i):
                s -= L[i, k] * G[k, j]
            G[i, j] = s / L[i, i]


@kernel
def null_step(
    y: Floats, G: Floats, keep: float, s: Floats, P: Floats, gain: Floats, innovation: Floats, spread: Floats
) -> float:
    """Advance the slow states s (n), P (n,n) by one step that explains nothing else; return its log evidence.

    Also fills gain (n,n), innovation and its variance spread (n), row by row: what `constant_step` needs.
    """
    n = y.shape[0]
    fresh = 1.0 - keep * keep
    for i in range(n):
        s[i] *= keep
        for j in range(n):
            P[i, j] *= keep * keep
        P[i, i] += fresh
    log_evidence = 0.0
    for i in range(n):
        for j in range(n):
            gain[i, j] = 0.0
        for k in range(i + 1):  # G is lower triangular
            g = G[i, k]
            for j in range(n):
                gain[i, j] += g * P[k, j]
        v, expected = 1.0, 0.0
        for k in range(i + 1):
            v += G[i, k] * gain[i, k]
            expected += G[i, k] * s[k]
        nu = y[i] - expected
        innovation[i], spread[i] = nu, v
        log_evidence -= 0.5 * (math.log(v) + nu * nu / v)
        for k in range(n):
            f = gain[i, k] / v
            s[k] += f * nu
            for j in range(n):
                P[k, j] -= f * gain[i, j]
        for k in range(n):
            gain[i, k] /= v
    return log_evidence


@kernel
def constant_step(
    H: Floats, d: int, G: Floats, keep: float, gain: Floats, innovation: Floats, spread: Floats,
    s: Floats, A: Floats, b: Floats,
) -> None:  # fmt: skip
    """Add one step to the information A (d,d), b (d) on constants with whitened columns H (n, >= d).

    The columns go through the filter of `null_step` (its gain, innovation, spread); s (d,n) are its states.
    """
    n = G.shape[0]
    for c in range(d):
        for k in range(n):
            s[c, k] *= keep
    for i in range(n):
        w = 1.0 / spread[i]
        for c in range(d):
            expected = 0.0
            for k in range(i + 1):
                expected += G[i, k] * s[c, k]
            H[i, c] -= expected  # innovation of the column
            for k in range(n):
                s[c, k] += gain[i, k] * H[i, c]
            b[c] += w * H[i, c] * innovation[i]
            for e in range(c + 1):
                A[c, e] += w * H[i, c] * H[i, e]


@kernel
def constant_evidence(A: Floats, b: Floats, d: int, L: Floats, x: Floats) -> float:
    """Return the log evidence of constants of unit prior over none of them; fill their mean x (d).

    `log N(r; 0, S + H H') - log N(r; 0, S)` from the information A (lower triangle), b. L (>= d,d) receives
    the factor of the posterior information `1 + A`.
    """
    gain = 0.0
    for i in range(d):
        for j in range(i + 1):
            s = A[i, j] + (1.0 if i == j else 0.0)
            for k in range(j):
                s -= L[i, k] * L[j, k]
            L[i, j] = math.sqrt(s) if i == j else s / L[j, j]
        s = b[i]
        for k in range(i):
            s -= L[i, k] * x[k]
        x[i] = s / L[i, i]
        gain += 0.5 * x[i] * x[i] - math.log(L[i, i])
    for i in range(d - 1, -1, -1):
        s = x[i]
        for k in range(i + 1, d):
            s -= L[k, i] * x[k]
        x[i] = s / L[i, i]
    return gain


@kernel
def _log_tail(x: float) -> float:
    """Return the log of the probability that a standard normal value is above x, also far out."""
    if x > 8.0:
        return -0.5 * x * x - math.log(x) - 0.5 * math.log(2.0 * math.pi)
    return math.log(0.5 * math.erfc(x * math.sqrt(0.5)))


@kernel
def worth(mean: float, sd: float, least: float, one_sided: int) -> float:
    """Return what the log evidence of a constant gains when less than `least` of it would be no fault.

    All in prior standard deviations; mean and sd are of the posterior under the whole normal prior. Exact for
    that prior cut off below `least`, on both sides or, one-sided, on the negative side altogether:
    the log of the posterior's probability of what is left over the prior's.
    """
    up = _log_tail((least - mean) / sd)
    if one_sided != 0:
        return up - _log_tail(least)
    down = _log_tail((least + mean) / sd)
    top = max(up, down)
    return top + math.log(math.exp(up - top) + math.exp(down - top)) - _log_tail(least) - math.log(2.0)


@kernel
def first_sd(L: Floats, d: int) -> float:
    """Return the posterior sd of the first of d constants, in prior sd.

    L is the factor that `constant_evidence` left. Column 0 of L^-1 replaces column 0 of L; its squared length
    is the first entry of (L L')^-1.
    """
    total = 0.0
    for i in range(d):
        s = 1.0 if i == 0 else 0.0
        for k in range(i):
            s -= L[i, k] * L[k, 0]
        L[i, 0] = s / L[i, i]
        total += L[i, 0] ** 2
    return math.sqrt(total)


@kernel
def smooth_start(d: int, near: float, s: Floats, P_s: Floats, x: Floats, P: Floats) -> None:
    """Begin smooth components near zero (standard deviation `near` of the prior's), their rate unknown.

    Slow states begin as `null_step` left them, s (n) and P_s (n,n). Order of x (m) and P (m,m): d components,
    n slow states, d rates of the components (in units of 1/T), then the values that the first components
    settle at, where they do.
    """
    m = P.shape[0]
    for i in range(m):
        x[i] = 0.0
        for j in range(m):
            P[i, j] = 0.0
        P[i, i] = near * near if i < d else 1.0
    for i in range(s.shape[0]):
        x[d + i] = s[i]
        for j in range(s.shape[0]):
            P[d + i, d + j] = P_s[i, j]


@kernel
def smooth_step(
    H: Floats, y: Floats, G: Floats, d: int, settles: int, keep: float,
    dt_T: Floats, moves: Floats, x: Floats, P: Floats, u: Floats,
) -> tuple[float, float]:  # fmt: skip
    """Advance d smooth components with whitened unit columns H (n, >= d) by one step.

    Returns the log evidence of the step and its misfit (sum of squared normalised innovations; expected n).
    dt_T (>= d) is the step over each component's time constant; moves (>= d) the share of the prior's
    variance with which it goes on moving (0: it rises once and fades).
    x (m), P (m,m) are those of `smooth_start`, m = n + 2d + settles: the first `settles` components settle at
    a value of their own. u (m) is work space.
    """
    n = y.shape[0]
    m = P.shape[0]
    _smooth_predict(d, n, settles, keep, dt_T, moves, x, P)
    log_evidence, misfit = 0.0, 0.0
    for i in range(n):
        for j in range(m):
            u[j] = 0.0
        expected, v = 0.0, 1.0
        for c in range(d):
            h = H[i, c]
            expected += h * x[c]
            for j in range(m):
                u[j] += h * P[c, j]
        for c in range(i + 1):
            h = G[i, c]
            expected += h * x[d + c]
            for j in range(m):
                u[j] += h * P[d + c, j]
        for c in range(d):
            v += H[i, c] * u[c]
        for c in range(i + 1):
            v += G[i, c] * u[d + c]
        nu = y[i] - expected
        log_evidence -= 0.5 * (math.log(v) + nu * nu / v)
        misfit += nu * nu / v
        for k in range(m):
            f = u[k] / v
            x[k] += f * nu
            for j in range(m):
                P[k, j] -= f * u[j]
    return log_evidence, misfit


@inlined
def _matern(dt_T: float) -> tuple[float, float, float, float]:
    """Return the transition of value and rate (in units of 1/T) of a Matérn 3/2 process, row by row."""
    e = math.exp(-dt_T)
    return e * (1.0 + dt_T), e * dt_T, -e * dt_T, e * (1.0 - dt_T)


@kernel
def _smooth_predict(
    d: int, n: int, settles: int, keep: float, dt_T: Floats, moves: Floats, x: Floats, P: Floats
) -> None:
    """Matérn 3/2 over one step for components and rates, AR(1) for the slow states.

    About zero or, the first `settles` components, about a value of their own.
    """
    m = P.shape[0]
    for c in range(d):
        f00, f01, f10, f11 = _matern(dt_T[c])
        r, t = d + n + c, 2 * d + n + c
        a, b = x[c], x[r]
        x[c], x[r] = f00 * a + f01 * b, f10 * a + f11 * b
        if c < settles:
            x[c] += (1.0 - f00) * x[t]
            x[r] -= f10 * x[t]
        for j in range(m):
            a, b = P[c, j], P[r, j]
            P[c, j], P[r, j] = f00 * a + f01 * b, f10 * a + f11 * b
            if c < settles:
                P[c, j] += (1.0 - f00) * P[t, j]
                P[r, j] -= f10 * P[t, j]
    for i in range(d, d + n):
        x[i] *= keep
        for j in range(m):
            P[i, j] *= keep
    for c in range(d):
        f00, f01, f10, f11 = _matern(dt_T[c])
        r, t = d + n + c, 2 * d + n + c
        for i in range(m):
            a, b = P[i, c], P[i, r]
            P[i, c], P[i, r] = f00 * a + f01 * b, f10 * a + f11 * b
            if c < settles:
                P[i, c] += (1.0 - f00) * P[i, t]
                P[i, r] -= f10 * P[i, t]
        # Stationary covariance is the identity in these units, so the fresh part is 1 - F F'.
        P[c, c] += moves[c] * (1.0 - f00 * f00 - f01 * f01)
        P[c, r] -= moves[c] * (f00 * f10 + f01 * f11)
        P[r, c] -= moves[c] * (f00 * f10 + f01 * f11)
        P[r, r] += moves[c] * (1.0 - f10 * f10 - f11 * f11)
    for j in range(d, d + n):
        for i in range(m):
            P[i, j] *= keep
        P[j, j] += 1.0 - keep * keep
