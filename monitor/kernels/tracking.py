"""Friction that changes slowly: recursive least squares on the residual, forgetting towards what is normal.

Per row three parameters, additions to Coulomb, viscous and constant friction. The residual they explain is
`-(x . theta)` with x the filtered `(tanh(v/v0), v, 1)`; their own uncertainty `x' P x` widens the band.

Beside it their trend, for health: the same least squares with a long memory and next to no prior. What is
tracked can be no trend: its prior draws it back by a share that depends on how much the joint moves and how
wide the band is, and while the joint rests it forgets.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]

# Prior sd of a trend in units of its limit: as large as any fault, so that it draws nothing back.
TREND_SD = 10.0


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


@kernel
def gather(
    row: int, r: float, variance: float, feature: Floats, limit: Floats, keep: float,
    info: Floats, total: Floats,
) -> None:  # fmt: skip
    """Add one residual r [N m] of a row to what its trend is estimated from; older ones count less by `keep`.

    Parameters are in units of limit (n,3) [N m, N m s/rad, N m]: info (n,3,3) and total (n,3) are the
    weighted sums of `x x'` and `x r` over the variance, x the features times their limits.
    """
    x0 = -feature[row, 1] * limit[row, 0]
    x1 = -feature[row, 2] * limit[row, 1]
    x2 = -limit[row, 2]
    for a in range(3):
        xa = x0 if a == 0 else x1 if a == 1 else x2
        total[row, a] = keep * total[row, a] + xa * r / variance
        for b in range(3):
            xb = x0 if b == 0 else x1 if b == 1 else x2
            info[row, a, b] = keep * info[row, a, b] + xa * xb / variance


@kernel
def trend(
    row: int, info: Floats, total: Floats, limit: Floats, lasting: float, mean: Floats, sd: Floats
) -> None:
    """Fill mean (n,3) and sd (n,3) of a row with what was gathered, in units of the limits.

    lasting [N m] is the error of the model that does not average out: it counts as one further error of the
    whole memory. Without it the sd would go to zero, and every error of the model become a trend.
    """
    # 1 / variance, added up, is what the constant's entry holds.
    shared = 1.0 + lasting * lasting * info[row, 2, 2] / (limit[row, 2] * limit[row, 2])
    prior = 1.0 / (TREND_SD * TREND_SD)
    A00, A11, A22 = (info[row, 0, 0], info[row, 1, 1], info[row, 2, 2])
    A00, A11, A22 = A00 / shared + prior, A11 / shared + prior, A22 / shared + prior
    A01, A02, A12 = info[row, 0, 1] / shared, info[row, 0, 2] / shared, info[row, 1, 2] / shared
    b0, b1, b2 = total[row, 0] / shared, total[row, 1] / shared, total[row, 2] / shared
    C00, C11, C22 = A11 * A22 - A12 * A12, A00 * A22 - A02 * A02, A00 * A11 - A01 * A01
    C01, C02, C12 = A02 * A12 - A01 * A22, A01 * A12 - A02 * A11, A01 * A02 - A00 * A12
    D = A00 * C00 + A01 * C01 + A02 * C02
    mean[row, 0] = (C00 * b0 + C01 * b1 + C02 * b2) / D
    mean[row, 1] = (C01 * b0 + C11 * b1 + C12 * b2) / D
    mean[row, 2] = (C02 * b0 + C12 * b1 + C22 * b2) / D
    sd[row, 0], sd[row, 1], sd[row, 2] = math.sqrt(C00 / D), math.sqrt(C11 / D), math.sqrt(C22 / D)
