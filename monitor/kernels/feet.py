"""Forces of feet that stand: nuisance to the judgement of all else, and estimated beside it.

A force f at a foot's point loads the rows by `J' f`. Of a foot that stands f is known only to be like
`N(0, sd² 1)`, which adds `sd² J' J` to the covariance R of the residual r. With `K = R^-1` of that sum,
`(K r)_i / sqrt(K_ii)` is what row i has more than all other rows predict, in its own sd ("Gaussian Markov
Random Fields", Chapman & Hall 2005, ch. 2.2), and `sd² J K r` is the mean of f, `sd² - sd⁴ J K J'` its
covariance.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@kernel
def jacobian(
    axis: int, point: Floats, radius: float, up: Floats, parent: Ints, dof: Ints,
    S: Floats, R: Floats, p: Floats, J: Floats,
) -> None:  # fmt: skip
    """Fill J (3,n): velocity, world axes, of where a foot on the body of an axis meets ground.

    That is `radius` below its point (3, body frame), against up (3). Joint twists S (N,6) and poses R
    (N+1,3,3), p (N+1,3) are from one origin.
    """
    for k in range(3):
        for i in range(J.shape[1]):
            J[k, i] = 0.0
    x = p[axis, 0] + R[axis, 0, 0] * point[0] + R[axis, 0, 1] * point[1] + R[axis, 0, 2] * point[2]
    y = p[axis, 1] + R[axis, 1, 0] * point[0] + R[axis, 1, 1] * point[1] + R[axis, 1, 2] * point[2]
    z = p[axis, 2] + R[axis, 2, 0] * point[0] + R[axis, 2, 1] * point[1] + R[axis, 2, 2] * point[2]
    x, y, z = x - radius * up[0], y - radius * up[1], z - radius * up[2]
    i = axis
    while i >= 0:
        d = dof[i]
        J[0, d] += S[i, 3] + S[i, 1] * z - S[i, 2] * y
        J[1, d] += S[i, 4] + S[i, 2] * x - S[i, 0] * z
        J[2, d] += S[i, 5] + S[i, 0] * y - S[i, 1] * x
        i = parent[i]


@kernel
def widen(J: Floats, sd: float, R: Floats) -> None:
    """Add to R (n,n) what a foot's unknown force does: `sd² J' J`."""
    n = R.shape[0]
    for k in range(3):
        for i in range(n):
            w = sd * sd * J[k, i]
            if w != 0.0:
                for j in range(n):
                    R[i, j] += w * J[k, j]


@kernel
def invert(L: Floats, inverse: Floats) -> None:
    """Fill the lower triangle of inverse (n,n) with `L^-1`, L (n,n) lower triangular."""
    n = L.shape[0]
    for j in range(n):
        inverse[j, j] = 1.0 / L[j, j]
        for i in range(j + 1, n):
            s = 0.0
            for k in range(j, i):
                s -= L[i, k] * inverse[k, j]
            inverse[i, j] = s / L[i, i]


@kernel
def pulls(inverse: Floats, white: Floats, pull: Floats, alone: Floats, alone_sd: Floats) -> None:
    """Fill pull (n) with `K r`, and what each row has alone, `(K r)_i / K_ii`, with its sd `K_ii^-1/2`.

    inverse (n,n) is `L^-1` of `R = L L'`, white (n) is `L^-1 r`.
    """
    n = white.shape[0]
    for i in range(n):
        own, total = 0.0, 0.0
        for k in range(i, n):
            own += inverse[k, i] * inverse[k, i]
            total += inverse[k, i] * white[k]
        pull[i] = total
        alone[i] = total / own
        alone_sd[i] = math.sqrt(1.0 / own)


@kernel
def force(
    J: Floats, sd: float, inverse: Floats, pull: Floats, work: Floats, f: Floats, covariance: Floats
) -> None:  # fmt: skip
    """Fill mean f (3) and covariance (3,3) of the force of a foot with Jacobian J (3,n); work is (3,n)."""
    n = pull.shape[0]
    for k in range(3):
        total = 0.0
        for i in range(n):
            total += J[k, i] * pull[i]
            w = 0.0
            for j in range(i + 1):
                w += inverse[i, j] * J[k, j]
            work[k, i] = w
        f[k] = sd * sd * total
        for m in range(k + 1):
            seen = 1.0 if m == k else 0.0
            for i in range(n):
                seen -= sd * sd * work[k, i] * work[m, i]
            covariance[k, m] = sd * sd * seen
            covariance[m, k] = covariance[k, m]


@kernel
def standing_out(f: Floats, C: Floats) -> float:
    """Return `f' C^-1 f` of a force f (3) with covariance C (3,3)."""
    a = C[1, 1] * C[2, 2] - C[1, 2] * C[1, 2]
    b = C[0, 2] * C[1, 2] - C[0, 1] * C[2, 2]
    c = C[0, 1] * C[1, 2] - C[0, 2] * C[1, 1]
    d = C[0, 0] * C[2, 2] - C[0, 2] * C[0, 2]
    e = C[0, 1] * C[0, 2] - C[0, 0] * C[1, 2]
    g = C[0, 0] * C[1, 1] - C[0, 1] * C[0, 1]
    total = a * f[0] * f[0] + d * f[1] * f[1] + g * f[2] * f[2]
    total += 2.0 * (b * f[0] * f[1] + c * f[0] * f[2] + e * f[1] * f[2])
    return float(total / (C[0, 0] * a + C[0, 1] * b + C[0, 2] * c))
