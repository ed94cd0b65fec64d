"""Friction that changes slowly: recursive least squares on the residual, forgetting towards what is normal.

Per row three parameters, additions to Coulomb, viscous and constant friction. The residual they explain is
`-(x . theta)` with x the filtered `(tanh(v/v0), v, 1)`; their own uncertainty `x' P x` widens the band.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]


@kernel
def explained(feature: Floats, theta: Floats, P: Floats, torque: Floats, variance: Floats) -> None:
    """Fill the residual (n) that tracked friction explains, and its variance.

    feature (n, >= 3) is tau, tanh(v/v0) and v through the residual's filter; theta (n,3) with covariance P
    (n,3,3): added Coulomb and viscous friction and offset [N m, N m s/rad, N m].
    """
    for i in range(torque.shape[0]):
        c, w = feature[i, 1], feature[i, 2]
        torque[i] = -(c * theta[i, 0] + w * theta[i, 1] + theta[i, 2])
        variance[i] = c * (P[i, 0, 0] * c + 2.0 * P[i, 0, 1] * w + 2.0 * P[i, 0, 2])
        variance[i] += w * (P[i, 1, 1] * w + 2.0 * P[i, 1, 2]) + P[i, 2, 2]


@kernel
def track(
    row: int, r: float, variance: float, feature: Floats, sd: Floats, keep: float, clip: float,
    theta: Floats, P: Floats,
) -> None:  # fmt: skip
    """Take in one residual r [N m] of a row; an innovation beyond `clip` sd counts as one of `clip` sd.

    variance is the residual's, times the steps that count as one. The parameters wander, `theta := keep
    theta + noise`, about their prior: zero with standard deviations sd (n,3).
    """
    x0, x1, x2 = -feature[row, 1], -feature[row, 2], -1.0
    for a in range(3):
        theta[row, a] *= keep
        for b in range(3):
            P[row, a, b] *= keep * keep
        P[row, a, a] += (1.0 - keep * keep) * sd[row, a] * sd[row, a]
    g0 = P[row, 0, 0] * x0 + P[row, 0, 1] * x1 + P[row, 0, 2] * x2
    g1 = P[row, 1, 0] * x0 + P[row, 1, 1] * x1 + P[row, 1, 2] * x2
    g2 = P[row, 2, 0] * x0 + P[row, 2, 1] * x1 + P[row, 2, 2] * x2
    S = variance + x0 * g0 + x1 * g1 + x2 * g2
    nu = r - (x0 * theta[row, 0] + x1 * theta[row, 1] + x2 * theta[row, 2])
    limit = clip * math.sqrt(S)
    nu = min(max(nu, -limit), limit)
    theta[row, 0] += g0 / S * nu
    theta[row, 1] += g1 / S * nu
    theta[row, 2] += g2 / S * nu
    for a in range(3):
        ga = g0 if a == 0 else g1 if a == 1 else g2
        for b in range(3):
            gb = g0 if b == 0 else g1 if b == 1 else g2
            P[row, a, b] -= ga * gb / S
