"""A robot for notebooks and programs: dynamics, momenta and Jacobians from a URDF file."""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from monitor.kernels import dynamics as kernels
from monitor.robot.tree import WORLD, Base, Tree, build_tree
from monitor.robot.urdf import read_urdf

Floats = NDArray[np.float64]

# A quaternion this far from unit length is a mistake, not rounding.
_QUATERNION_TOLERANCE = 1e-3


class Dynamics(NamedTuple):
    """Terms of `M(q) v̇ + C(q, v) v + g(q) = tau`: M (n,n), C (n,n) Christoffel, g (n,)."""

    M: Floats
    C: Floats
    g: Floats


class Workspace:
    """Preallocated outputs of one robot, for programs that call often: `fill` allocates and checks nothing.

    Attributes
    ----------
    M, C : (n,n)
        Mass matrix and Christoffel Coriolis matrix.
    g, p, Ctv : (n,)
        Gravity torque, momentum `M v` and `Cᵀ v`.
    R_W, p_W : (N+1,3,3), (N+1,3)
        Poses of the bodies, from the base position, world axes; the last row is the world.
    S : (N,6)
        Joint twists.
    """

    def __init__(self, tree: Tree, gravity: Floats) -> None:
        arrays, n = tree.arrays, tree.n
        N = len(arrays.parent)
        self._ints = np.concatenate((arrays.parent, arrays.kind, arrays.dof))
        reals = (*arrays[3:], tree.armature, gravity)
        self._reals = np.concatenate([np.ravel(part) for part in reals])
        self._memory = np.zeros(kernels.memory_size(N, n))
        shapes = ((n, n), (n, n), (n,), (n,), (n,), (N + 1, 3, 3), (N + 1, 3), (N + 1, 6), (N, 6))
        ends = np.cumsum([math.prod(shape) for shape in shapes])
        views = np.split(self._memory, ends)[:-1]
        self.M, self.C, self.g, self.p, self.Ctv, self.R_W, self.p_W, _, self.S = (
            view.reshape(shape) for view, shape in zip(views, shapes, strict=True)
        )

    def fill(self, q: Floats, v: Floats) -> None:
        """Fill all outputs for q (nq) and v (n), contiguous float64, the quaternion of unit length."""
        kernels.dynamics_packed(self._ints, self._reals, q, v, self._memory)


class Robot:
    """A robot that stands on a fixed or floating base.

    Positions `q` are joint coordinates [rad or m] in the order of `joints`; for a floating base the base
    position (3) [m] and unit quaternion w-x-y-z (4) come first. Velocities `v` are the rates of the joints;
    for a floating base its angular (3) [rad/s] and linear (3) [m/s] velocity in base axes come first.
    One instance serves one thread.

    Parameters
    ----------
    tree : Tree
        The robot as arrays.
    gravity : (3,) array_like
        Acceleration of gravity [m/s²] in world axes, z up; tilt it for a tilted mount.
    """

    def __init__(self, tree: Tree, gravity: ArrayLike = (0.0, 0.0, -9.81)) -> None:
        self.tree = tree
        self._gravity = _vector(gravity, 3, "gravity")
        self._work = self.workspace()
        self._links = {link.name: link for link in tree.links}

    @classmethod
    def from_urdf(
        cls,
        path: str | Path,
        base: Base = "fixed",
        gravity: ArrayLike = (0.0, 0.0, -9.81),
        armature: Mapping[str, float] | None = None,
    ) -> Robot:
        """Read a robot from a URDF file.

        Parameters
        ----------
        path : str or Path
            The file.
        base : {'fixed', 'floating'}
            Whether the root link is fixed to the world.
        gravity : (3,) array_like
            Acceleration of gravity [m/s²] in world axes.
        armature : mapping of str to float, optional
            Reflected rotor inertia by joint name [kg m² or kg], `N² J_rotor`.

        Raises
        ------
        ModelError
            If the description is malformed or physically impossible.
        ValueError
            If another argument is not as described.
        """
        return cls(build_tree(read_urdf(path), base, armature), gravity)

    @property
    def joints(self) -> tuple[str, ...]:
        """Names of the independent moving joints, in the order of q and v."""
        return self.tree.joints

    @property
    def n(self) -> int:
        """Length of v."""
        return self.tree.n

    @property
    def nq(self) -> int:
        """Length of q."""
        return self.tree.nq

    def workspace(self) -> Workspace:
        """Return preallocated outputs; several threads take one each."""
        return Workspace(self.tree, self._gravity)

    def dynamics(self, q: ArrayLike, v: ArrayLike) -> Dynamics:
        """Return mass matrix, Coriolis matrix and gravity torque in fresh arrays.

        Parameters
        ----------
        q : (nq,) array_like
            Positions.
        v : (n,) array_like
            Velocities.

        Raises
        ------
        ValueError
            If a shape is wrong, a number is not finite, or the base quaternion is not of unit length.
        """
        work = self._evaluate(q, v)
        return Dynamics(work.M.copy(), work.C.copy(), work.g.copy())

    def momentum(self, q: ArrayLike, v: ArrayLike) -> tuple[Floats, Floats]:
        """Return the generalised momentum `M v` and `Cᵀ v`, both (n,), by a route that needs no matrix.

        Raises
        ------
        ValueError
            As `dynamics`.
        """
        work = self._evaluate(q, v)
        return work.p.copy(), work.Ctv.copy()

    def jacobian(self, link: str, point: ArrayLike, q: ArrayLike) -> Floats:
        """Return the Jacobian (6,n) of a point on a link, in world axes.

        Rows are the angular velocity of the link, then the linear velocity of the point, per unit of v.

        Parameters
        ----------
        link : str
            Name of the link.
        point : (3,) array_like
            The point [m] in the link frame.
        q : (nq,) array_like
            Positions.

        Raises
        ------
        ValueError
            If the link is unknown, a shape is wrong, a number is not finite, or the base quaternion is not of
            unit length.
        """
        if link not in self._links:
            raise ValueError(f"unknown link {link!r}; expected one of {', '.join(self._links)}")
        place = self._links[link]
        r = place.R @ _vector(point, 3, "point") + place.p
        J = np.zeros((6, self.n))
        work = self._evaluate(q, np.zeros(self.n))
        if place.axis != WORLD:
            arrays = self.tree.arrays
            r = work.R_W[place.axis] @ r + work.p_W[place.axis]
            kernels.jacobian(arrays.parent, arrays.dof, work.S, place.axis, r, J)
        return J

    def _evaluate(self, q: ArrayLike, v: ArrayLike) -> Workspace:
        """Fill the robot's own workspace after checking the arguments."""
        self._work.fill(self._positions(q), _vector(v, self.n, "v"))
        return self._work

    def _positions(self, q: ArrayLike) -> Floats:
        q = _vector(q, self.nq, "q")
        if self.tree.base == "floating":
            length = float(np.linalg.norm(q[3:7]))
            if abs(length - 1.0) > _QUATERNION_TOLERANCE:
                raise ValueError(f"the base quaternion q[3:7] has length {length:g}; expected 1")
            q[3:7] /= length
        return q


def _vector(values: ArrayLike, size: int, name: str) -> Floats:
    """Return a fresh vector of finite doubles of that size."""
    vector = np.array(values, dtype=np.float64)
    if vector.shape != (size,):
        raise ValueError(f"{name} has shape {vector.shape}; expected ({size},)")
    if not np.isfinite(vector).all():
        raise ValueError(f"{name} is {vector}; expected finite numbers")
    return vector
