"""Mass, centre of mass and inertia of a body as one 4x4 matrix.

The pseudo-inertia is `E = ∫ [r;1][r;1]ᵀ dm = [[Sigma, h], [hᵀ, m]]`. It is linear in the ten inertial
parameters, rigidly joined bodies add, and a body of positive density exists for it iff E is positive definite
("Linear Matrix Inequalities for Physically Consistent Inertial Parameter Identification: A Statistical
Perspective on the Mass Distribution", RA-L 2018, doi 10.1109/LRA.2017.2729659).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]

# Share of the largest moment below which a missing or negative thickness cannot be told from rounding.
_ROUNDING = 1e-12


def rotation(rpy: Sequence[float]) -> Floats:
    """Return the rotation matrix (3,3) of roll, pitch, yaw [rad] about the fixed axes x, y, z."""
    (cr, cp, cy), (sr, sp, sy) = np.cos(rpy), np.sin(rpy)
    return np.array(
        [
            [cy * cp, cy * sp * sr - sy * cr, cy * sp * cr + sy * sr],
            [sy * cp, sy * sp * sr + cy * cr, sy * sp * cr - cy * sr],
            [-sp, cp * sr, cp * cr],
        ]
    )


def transform(R: ArrayLike, p: ArrayLike) -> Floats:
    """Return the homogeneous matrix (4,4) of a rotation (3,3) and a position (3,) [m]."""
    T = np.eye(4)
    T[:3, :3] = R
    T[:3, 3] = p
    return T


def pseudo_inertia(mass: float, com: ArrayLike, inertia: ArrayLike, R: ArrayLike | None = None) -> Floats:
    """Return the pseudo-inertia (4,4) about the origin of the body frame.

    Parameters
    ----------
    mass : float
        Mass [kg].
    com : (3,) array_like
        Centre of mass [m] in the body frame.
    inertia : (3,3) array_like
        Inertia about the centre of mass [kg m²].
    R : (3,3) array_like, optional
        Orientation of the axes of `inertia` in the body frame; aligned when left out.
    """
    about_com = np.zeros((4, 4))
    about_com[:3, :3] = 0.5 * np.trace(inertia) * np.eye(3) - np.asarray(inertia)
    about_com[3, 3] = mass
    return moved(about_com, transform(np.eye(3) if R is None else R, com))


def moved(E: ArrayLike, T: ArrayLike) -> Floats:
    """Return the pseudo-inertia in another frame: `T E Tᵀ`, T (4,4) the pose of the old frame in it."""
    T = np.asarray(T, dtype=float)
    result: Floats = T @ np.asarray(E, dtype=float) @ T.T
    return result


def parameters(E: ArrayLike) -> tuple[float, Floats, Floats]:
    """Return mass [kg], centre of mass (3,) [m] and inertia about it (3,3) [kg m²].

    Raises
    ------
    ValueError
        If the mass is zero: there is no centre of mass then.
    """
    E = np.asarray(E, dtype=float)
    mass = float(E[3, 3])
    if mass == 0.0:
        raise ValueError("a massless body has no centre of mass")
    com = E[:3, 3] / mass
    Sigma = E[:3, :3] - mass * np.outer(com, com)
    return mass, com, np.trace(Sigma) * np.eye(3) - Sigma


def principal_moments(inertia: ArrayLike) -> Floats:
    """Return the principal moments (3,) [kg m²] of a symmetric inertia (3,3), smallest first."""
    moments: Floats = np.linalg.eigvalsh(np.asarray(inertia, dtype=float))
    return moments


def flaw(E: ArrayLike) -> str:
    """Return which condition of a real body fails, with its moments; empty if E is positive definite.

    E is positive definite iff the mass is positive and the principal moments about the centre of mass are
    positive and each smaller than the sum of the other two.
    """
    mass = float(np.asarray(E)[3, 3])
    if not mass > 0.0:
        return f"mass {mass:g} kg is not positive"
    small, middle, large = principal_moments(parameters(E)[2])
    shown = f"principal moments {small:.6g}, {middle:.6g}, {large:.6g} kg m²"
    if not small > 0.0:
        return f"inertia is not positive definite ({shown})"
    excess = large - small - middle
    if excess >= -_ROUNDING * large:
        return f"inertia violates the triangle inequality by {max(excess, 0.0):.6g} kg m² ({shown})"
    return ""
