"""How large may a residual be? Its variance as a sum of causes, and statistics of how far it stands out.

Causes of the squared residual of a row, each through a low-pass as long as the residual's own filter: a
floor; sensor noise seen through the mass matrix; standing or reversing, where friction hides torque (`D` and
`D²`, `D = 1 - tanh²(v/v0)`, held for a while); squares of torque, velocity and inertial torque; low speed, as
`D` with wider v0; other joints that stand or reverse, whose friction shakes this one through the mass matrix.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.jit import kernel
from monitor.kernels.ledger import WIDTHS

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

FLOOR, NOISE, STANDS, STANDS_SQUARED, TORQUE, VELOCITY, INERTIA, CREEPS, CRAWLS, SHAKEN = range(10)
CAUSES = 10

# Variance of a row that must not count, in squares of its rated torque.
BLIND = 1e4


@kernel
def causes(
    M: Floats, a: Floats, v: Floats, tau: Floats, v0: Floats, coulomb: Floats, e_variance: Floats,
    dt: float, pole: float, hold_s: float, held: Floats, left: Floats, cause: Floats,
) -> None:  # fmt: skip
    """Advance cause (n,CAUSES) by one sample of dt; held, left (n) carry the holding of D.

    e_variance (n) is the variance of the unexplained acceleration that sensor noise alone makes.
    """
    n = v.shape[0]
    keep = math.exp(-pole * dt)
    for i in range(n):
        noise, inertia = 0.0, 0.0
        for j in range(n):
            noise += M[i, j] * M[i, j] * e_variance[j]
            inertia += M[i, j] * a[j]
        t = math.tanh(v[i] / v0[i])
        D = 1.0 - t * t
        if held[i] <= D:
            held[i], left[i] = D, hold_s
        elif left[i] > 0.0:
            left[i] -= dt
        else:
            held[i] = keep * held[i] + (1.0 - keep) * D
        D = held[i]
        # Friction law and sensors are least certain where a joint just moves: wider looks at low speed.
        t = math.tanh(v[i] / (WIDTHS[0] * v0[i]))
        creeps = 1.0 - t * t
        t = math.tanh(v[i] / (WIDTHS[1] * v0[i]))
        crawls = 1.0 - t * t
        cause[i, CREEPS] = keep * cause[i, CREEPS] + (1.0 - keep) * creeps
        cause[i, CRAWLS] = keep * cause[i, CRAWLS] + (1.0 - keep) * crawls
        cause[i, FLOOR] = 1.0
        cause[i, NOISE] = keep * cause[i, NOISE] + (1.0 - keep) * noise
        cause[i, STANDS] = keep * cause[i, STANDS] + (1.0 - keep) * D
        cause[i, STANDS_SQUARED] = keep * cause[i, STANDS_SQUARED] + (1.0 - keep) * D * D
        cause[i, TORQUE] = keep * cause[i, TORQUE] + (1.0 - keep) * tau[i] * tau[i]
        cause[i, VELOCITY] = keep * cause[i, VELOCITY] + (1.0 - keep) * v[i] * v[i]
        cause[i, INERTIA] = keep * cause[i, INERTIA] + (1.0 - keep) * inertia * inertia
    for i in range(n):
        shaken = 0.0
        for j in range(n):
            if j != i:
                shaken += (M[i, j] / M[j, j] * coulomb[j] * held[j]) ** 2
        cause[i, SHAKEN] = keep * cause[i, SHAKEN] + (1.0 - keep) * shaken


@kernel
def variance(cause: Floats, weight: Floats, out: Floats) -> None:
    """Fill out (n) with the variance of the residual: cause times weight (n,CAUSES), row by row."""
    for i in range(out.shape[0]):
        out[i] = 0.0
        for c in range(cause.shape[1]):
            out[i] += weight[i, c] * cause[i, c]


@kernel
def standing(cause: Floats, weight: Floats, out: Floats) -> None:
    """Fill out (n) with the part of the variance that is friction of a standing joint: it does not change."""
    for i in range(out.shape[0]):
        out[i] = weight[i, STANDS] * cause[i, STANDS] + weight[i, STANDS_SQUARED] * cause[i, STANDS_SQUARED]


@kernel
def covariance(variance: Floats, rho: Floats, extra: Floats, R: Floats) -> None:
    """Fill R (n,n) from correlation rho and variance (n), with `extra` (n), uncorrelated, on the diagonal."""
    n = variance.shape[0]
    for i in range(n):
        si = math.sqrt(variance[i])
        for j in range(n):
            R[i, j] = rho[i, j] * si * math.sqrt(variance[j])
        R[i, i] += extra[i]


@kernel
def cusum(z: float, reference: float, sums: Floats) -> None:
    """Advance the two one-sided cumulative sums (2) of a normalised value: upward, downward.

    Cost: on independent normal values, reference .5 and limit 5, one of both passes the limit every 465
    values by chance, and 10.4 values after a shift by one sd (Technometrics 24 (1982) p. 199). Values that
    depend on each other pass far more often, every 30 at a correlation of .95: commissioning finds the limit.
    """
    sums[0] = max(0.0, sums[0] + z - reference)
    sums[1] = max(0.0, sums[1] - z - reference)


@kernel
def largest(ratio: Floats, judged: Ints) -> int:
    """Return the judged row with the largest ratio, or -1 when no row is judged."""
    row = -1
    for i in range(ratio.shape[0]):
        if judged[i] != 0 and (row < 0 or ratio[i] > ratio[row]):
            row = i
    return row
