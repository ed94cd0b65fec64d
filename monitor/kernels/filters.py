"""Small linear algebra and filters on arrays given by the caller."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.jit import inlined

Floats = NDArray[np.float64]


@inlined
def cholesky(M: Floats, L: Floats) -> None:
    """Fill the lower triangle of L (n,n) with the Cholesky factor of M; the rest of L is zeroed.

    M has to be positive definite; setup refuses models for which it is not. L may be M itself.
    """
    n = M.shape[0]
    for i in range(n):
        for j in range(i + 1):
            s = M[i, j]
            for k in range(j):
                s -= L[i, k] * L[j, k]
            L[i, j] = math.sqrt(s) if i == j else s / L[j, j]
        for j in range(i + 1, n):
            L[i, j] = 0.0


@inlined
def cholesky_solve(L: Floats, b: Floats, x: Floats) -> None:
    """Fill x (n) with the solution of `L L' x = b`; x may be b itself."""
    n = b.shape[0]
    for i in range(n):
        s = b[i]
        for k in range(i):
            s -= L[i, k] * x[k]
        x[i] = s / L[i, i]
    for i in range(n - 1, -1, -1):
        s = x[i]
        for k in range(i + 1, n):
            s -= L[k, i] * x[k]
        x[i] = s / L[i, i]


@inlined
def multiply(A: Floats, x: Floats, y: Floats) -> None:
    """Fill y with `A x`."""
    for i in range(A.shape[0]):
        s = 0.0
        for j in range(A.shape[1]):
            s += A[i, j] * x[j]
        y[i] = s
