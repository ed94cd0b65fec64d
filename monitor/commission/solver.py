"""The optimum of a weighted least-squares fit whose inertias stay those of real bodies.

Each pseudo-inertia is written `E = L (1 + X) L'` with `E0 = L L'` the one from CAD, so X = 0 is CAD whatever
the frame and the units. Its distance from CAD is the log-det (entropic) divergence
`-log det(E) + log det(E0) + tr(E0^-1 E) - 4 = -log det(1 + X) + tr X`: convex, zero at CAD, infinite where E
stops being a body ("Geometric Robot Dynamic Identification: A Convex Programming Approach", T-RO 2020,
doi 10.1109/TRO.2019.2926491).
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import nnls

Floats = NDArray[np.float64]

# Places of the ten numbers of a symmetric 4x4 matrix, in the order of kernels/regressor.py.
ROWS = np.array([0, 0, 0, 1, 1, 2, 0, 1, 2, 3])
COLUMNS = np.array([0, 1, 2, 1, 2, 2, 3, 3, 3, 3])

_MAX_STEPS = 200
# Decrement, over the weight, after which one full step is exact to rounding.
_SETTLED = 1e-14
# How much larger than asked for the weight begins at most (more drowns in rounding), by how much it falls
# from stage to stage, and how far towards the edge of the cone a step may go.
_LARGEST, _FALL, _EDGE = 1e7, 0.1, 0.9


def _basis() -> Floats:
    """Return ten symmetric matrices (10,4,4) of unit length, orthogonal to each other."""
    basis = np.zeros((10, 4, 4))
    for k, (i, j) in enumerate(zip(ROWS, COLUMNS, strict=True)):
        basis[k, i, j] = basis[k, j, i] = 1.0 if i == j else math.sqrt(0.5)
    return basis


BASIS = _basis()


def symmetric(x: Floats, bodies: int) -> Floats:
    """Return X (bodies,4,4) of the first 10*bodies numbers of x."""
    X: Floats = np.einsum("bk,kij->bij", x[: 10 * bodies].reshape(bodies, 10), BASIS)
    return X


def divergence_slopes(x: Floats, bodies: int) -> tuple[Floats, Floats]:
    """Return gradient (10*bodies,) and Hessian (10*bodies,10*bodies) of the divergence from CAD."""
    Y = np.asarray(np.linalg.inv(np.eye(4) + symmetric(x, bodies)), np.float64)
    return _coordinates(np.eye(4) - Y), _products(Y)


def _coordinates(X: Floats) -> Floats:
    """Return the numbers (10*bodies,) of symmetric matrices (bodies,4,4); `symmetric` turns them back."""
    x: Floats = np.einsum("bij,kij->bk", X, BASIS).ravel()
    return x


def _products(Y: Floats) -> Floats:
    """Return the matrix (10*bodies,10*bodies) that takes X to Y X Y, body by body."""
    bodies = len(Y)
    YB = np.einsum("bij,kjl->bkil", Y, BASIS)
    total = np.zeros((bodies, 10, bodies, 10))
    total[range(bodies), :, range(bodies)] = np.einsum("bkil,bmli->bkm", YB, YB)
    return total.reshape(10 * bodies, 10 * bodies)


def curvature(x: Floats, H: Floats, weight: float, bodies: int) -> Floats:
    """Return the Hessian (K,K) of what `minimise` minimises."""
    return _with_prior(H, weight * divergence_slopes(x, bodies)[1])


def minimise(H: Floats, b: Floats, weight: float, bodies: int, lower: Floats) -> Floats:
    """Return the x (K,) that minimises `½ x'Hx - b'x + weight * divergence + ½ |rest|²`, x >= lower.

    `rest` are all numbers of x after the bodies'. A primal-dual method comes close in about twenty steps,
    however near the optimum is to the edge of what is a body (Newton's method alone creeps along that edge);
    Newton's method under bounds then settles it. Over the weight, the sum is self-concordant: full steps
    converge quadratically once the decrement is below 1/16 of the weight, and shorter ones are safe before.
    No look at the sum itself is needed, whose rounding would hide the last gains ("Convex Optimization",
    Cambridge University Press 2004, sections 9.6 and 11.7).

    Parameters
    ----------
    H : (K,K)
        Information of the data; positive semidefinite.
    b : (K,)
        Its right-hand side.
    weight : float
        Of the divergence, above 0.
    bodies : int
        The first 10*bodies numbers are coordinates of their X in `BASIS`.
    lower : (K,)
        Bounds, not above 0 and -inf for those of the bodies.

    Raises
    ------
    ArithmeticError
        If the optimum lies so close to the edge that rounding hides it: too small a weight for such data.
    """
    x, last = _approach(H, b, weight, bodies, lower), math.inf
    for _ in range(_MAX_STEPS):
        gradient = _with_rest(H @ x - b, x, weight * divergence_slopes(x, bodies)[0])
        step = _newton_step(curvature(x, H, weight, bodies), gradient, x - lower)
        decrement = float(-gradient @ step)
        near = decrement <= weight / 16.0
        if not near:
            step /= 1.0 + math.sqrt(decrement / weight)
        x = np.maximum(x + step, lower)
        if near and (decrement <= _SETTLED * weight or decrement >= last):
            break  # exact, or nothing but rounding is left
        last = decrement if near else math.inf
    else:
        raise ArithmeticError(f"the fit does not settle within {_MAX_STEPS} steps: decrement {decrement:.3g}")
    _eigenvalues(np.eye(4) + symmetric(x, bodies))
    return x


def _approach(H: Floats, b: Floats, weight: float, bodies: int, lower: Floats) -> Floats:
    """Return an x close to the optimum, by a primal-dual interior-point method.

    The optimum has `(1 + X) Z = weight 1`, Z the slope of the log-det term. Both are moved, in the scaling
    of `_scaling`, with a weight of that term that begins large and falls whenever a full step leaves both
    positive definite.
    """
    x = np.zeros(len(b))
    slope = float(np.abs(b[: 10 * bodies]).max(initial=0.0))
    now = min(max(weight, slope), _LARGEST * weight)
    Z = np.tile(now * np.eye(4), (bodies, 1, 1))
    for _ in range(_MAX_STEPS):
        grown = np.eye(4) + symmetric(x, bodies)
        Y, scaling = _power(grown, -1.0), _scaling(grown, Z)
        gradient = _with_rest(H @ x - b, x, _coordinates(weight * np.eye(4) - now * Y))
        step = _newton_step(_with_prior(H, _products(scaling)), gradient, x - lower)
        X_step = symmetric(step, bodies)
        Z_step = _symmetric_part(now * Y - Z - scaling @ X_step @ scaling)
        shares = _inside(grown, X_step), _inside(Z, Z_step)
        x, Z = np.maximum(x + shares[0] * step, lower), Z + shares[1] * Z_step
        if shares == (1.0, 1.0):
            if now == weight:
                break
            now = max(weight, _FALL * now)
    return x


def _scaling(X: Floats, Z: Floats) -> Floats:
    """Return the matrices G (bodies,4,4) with `G X G = Z`, in which a step looks the same from X and from Z.

    "Primal-Dual Interior-Point Methods for Self-Scaled Cones", SIAM Journal on Optimization 1998,
    doi 10.1137/S1052623495290209.
    """
    root, inverse = _power(X, 0.5), _power(X, -0.5)
    return _symmetric_part(inverse @ _power(_symmetric_part(root @ Z @ root), 0.5) @ inverse)


def _power(X: Floats, exponent: float) -> Floats:
    """Return positive definite X (bodies,4,4) to that power."""
    roots, U = _eigenvalues(X)
    return np.asarray((U * roots[:, None, :] ** exponent) @ U.transpose(0, 2, 1), np.float64)


def _eigenvalues(X: Floats) -> tuple[Floats, Floats]:
    """Return eigenvalues (bodies,4) and eigenvectors (bodies,4,4), all of the former above zero."""
    roots, U = np.linalg.eigh(X)
    if not (roots > 0.0).all():
        raise ArithmeticError("the optimum is on the edge of what is a body, to rounding")
    return roots, U


def _symmetric_part(X: Floats) -> Floats:
    """Return the symmetric part: rounding must not grow."""
    return 0.5 * (X + X.transpose(0, 2, 1))


def _inside(X: Floats, step: Floats) -> float:
    """Return how much of the step, at most 1, leaves all X (bodies,4,4) well positive definite."""
    inverse = _power(X, -0.5)
    furthest = -np.linalg.eigvalsh(_symmetric_part(inverse @ step @ inverse)).min(initial=0.0)
    return 1.0 if furthest <= _EDGE else _EDGE / float(furthest)


def _with_prior(H: Floats, of_bodies: Floats) -> Floats:
    """Return H plus the curvature of the prior, that of the bodies given."""
    size, total = len(of_bodies), H.copy()
    total[:size, :size] += of_bodies
    total[range(size, len(H)), range(size, len(H))] += 1.0
    return total


def _with_rest(gradient: Floats, x: Floats, of_bodies: Floats) -> Floats:
    """Return the gradient of the data plus that of the prior, that of the bodies given."""
    size = len(of_bodies)
    total: Floats = gradient + np.concatenate([of_bodies, x[size:]])
    return total


def _newton_step(A: Floats, gradient: Floats, room: Floats) -> Floats:
    """Return the step d (K,) that minimises `½ d'Ad + gradient'd` for `d >= -room`.

    What has no bound is eliminated; the rest is non-negative least squares.
    """
    bound = np.isfinite(room)
    free, step = ~bound, np.zeros(len(gradient))
    cross = A[np.ix_(free, bound)]
    try:
        solved = np.linalg.solve(A[np.ix_(free, free)], np.column_stack([cross, gradient[free]]))
        C = np.linalg.cholesky(A[np.ix_(bound, bound)] - cross.T @ solved[:, :-1])
    except np.linalg.LinAlgError as error:
        raise ArithmeticError("the information of the data drowns in rounding") from error
    slope = C @ (C.T @ room[bound]) - gradient[bound] + cross.T @ solved[:, -1]
    inside, _ = nnls(C.T, np.linalg.solve(C, slope))
    step[bound] = inside - room[bound]
    step[free] = -solved[:, -1] - solved[:, :-1] @ step[bound]
    return step
