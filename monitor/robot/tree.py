"""The tree of moving axes as arrays in kernel order, built from a robot description.

An axis is one moving joint, or one of the six of a floating base. Its body frame is the joint frame after
motion, which is the frame of the URDF child link; links fixed to that one are merged into it.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from monitor.errors import ModelError
from monitor.kernels.dynamics import BASE_ANGULAR, BASE_LINEAR, PRISMATIC, REVOLUTE
from monitor.robot.pseudo_inertia import moved, pseudo_inertia, rotation, transform
from monitor.robot.urdf import Description, Inertial, Joint, Link, Origin, Shape

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Base = Literal["fixed", "floating"]

WORLD = -1
# Share of the largest singular value below which a motion moves no mass.
_SINGULAR = 1e-9


class TreeArrays(NamedTuple):
    """The tree as the kernels take it: N axes, depth-first, parents before children.

    parent, kind, dof : int64[N]
        Axis that carries this one (-1: the world), kind of motion (0 revolute, 1 prismatic, 2 base angular,
        3 base linear) and index into v. A mimic follower has the dof of its leader.
    multiplier, offset : float64[N]
        Coordinate of the axis = multiplier * q of its dof + offset.
    R_PJ, p_PJ : float64[N,3,3], float64[N,3]
        Joint frame in the parent's body frame [m].
    axis : float64[N,3]
        Unit axis in the joint frame.
    E : float64[N,4,4]
        Pseudo-inertia of the body that the axis moves, in its body frame.
    """

    parent: Ints
    kind: Ints
    dof: Ints
    multiplier: Floats
    offset: Floats
    R_PJ: Floats
    p_PJ: Floats
    axis: Floats
    E: Floats


class Limits(NamedTuple):
    """Limits per joint, float64[joints], infinite where the description gives none.

    `lower`, `upper` [rad or m], `velocity` [rad/s or m/s], `effort` [Nm or N].
    """

    lower: Floats
    upper: Floats
    velocity: Floats
    effort: Floats


@dataclass(frozen=True, eq=False)
class PlacedShape:
    """A shape with its pose `R` (3,3), `p` (3,) [m] in the body frame of the axis that carries its link."""

    shape: Shape
    R: Floats
    p: Floats


@dataclass(frozen=True, eq=False)
class LinkPlace:
    """Where a link is: carried by `axis` (-1: the world), at pose `R` (3,3), `p` (3,) [m] in its body frame.

    `mass` in kg; `inertia` is the verdict on the link's inertia, `realizable` or `massless`.
    """

    name: str
    axis: int
    R: Floats
    p: Floats
    shapes: tuple[PlacedShape, ...]
    mass: float
    inertia: str


@dataclass(frozen=True, eq=False)
class Tree:
    """A robot ready for the kernels.

    Attributes
    ----------
    name : str
        Name of the robot.
    base : {'fixed', 'floating'}
        Whether the root link is fixed to the world.
    joints, joint_kinds : tuple of str
        Independent moving joints in the order of q and v (without the base), and their kinds.
    limits : Limits
        Per joint.
    damping, friction : float64[joints]
        Viscous [Nm s/rad or N s/m] and Coulomb friction [Nm or N] of the description, followers included.
    armature : float64[n]
        Reflected rotor inertia [kg m² or kg], zero for the base.
    arrays : TreeArrays
        The axes.
    links : tuple of LinkPlace
        Every link of the description, depth-first.
    n, nq : int
        Lengths of v and q.
    """

    name: str
    base: Base
    joints: tuple[str, ...]
    joint_kinds: tuple[str, ...]
    limits: Limits
    damping: Floats
    friction: Floats
    armature: Floats
    arrays: TreeArrays
    links: tuple[LinkPlace, ...]
    n: int
    nq: int


def build_tree(description: Description, base: Base, armature: Mapping[str, float] | None = None) -> Tree:
    """Turn a description into arrays: fixed links merged, mimic joints folded into their leaders.

    Parameters
    ----------
    description : Description
        A checked description.
    base : {'fixed', 'floating'}
        A floating base puts six axes before the joints.
    armature : mapping of str to float, optional
        Reflected rotor inertia by joint name [kg m² or kg]; zero where not named.

    Raises
    ------
    ModelError
        If nothing moves, or some motion moves no mass.
    ValueError
        If `base` or `armature` is not as described.
    """
    if base not in ("fixed", "floating"):
        raise ValueError(f"base is {base!r}; expected 'fixed' or 'floating'")
    free = 6 if base == "floating" else 0
    places, axes = _walk(description, free)
    leaders = [axis.joint for axis in axes if axis.joint.mimic is None]
    if not axes and not free:
        expected = "at least one moving joint, or a floating base"
        raise ModelError(description.where, "no moving joint", expected, "Describe the joints that move.")
    dofs = {joint.name: free + index for index, joint in enumerate(leaders)}
    arrays = _arrays(places, axes, dofs, free)
    rotors = _rotors(armature or {}, dofs, free)
    _check_motions(description.where, arrays, rotors, leaders)
    n = free + len(leaders)
    return Tree(
        name=description.name,
        base=base,
        joints=tuple(dofs),
        joint_kinds=tuple(joint.kind for joint in leaders),
        limits=Limits(*(np.array([getattr(joint, key) for joint in leaders]) for key in Limits._fields)),
        damping=_folded("damping", axes, arrays, n, power=2)[free:],
        friction=_folded("friction", axes, arrays, n, power=1)[free:],
        armature=rotors,
        arrays=arrays,
        links=tuple(_link_place(place) for place in places),
        n=n,
        nq=n + 1 if free else n,
    )


class _Place(NamedTuple):
    """A link and the axis that carries it; `T` (4,4) is the link frame in the frame of that axis."""

    link: Link
    axis: int
    T: Floats


class _Axis(NamedTuple):
    """A moving joint; `T` (4,4) is its frame in the body frame of the axis `parent`."""

    joint: Joint
    parent: int
    T: Floats


def _walk(description: Description, free: int) -> tuple[list[_Place], list[_Axis]]:
    """Visit all links depth-first, children in the order of the document; `free` axes belong to the base."""
    links = {link.name: link for link in description.links}
    below: dict[str, list[Joint]] = {name: [] for name in links}
    for child in description.joints:
        below[child.parent].append(child)
    places: list[_Place] = []
    axes: list[_Axis] = []
    # A stack, because a chain may be longer than Python's own recursion allows.
    waiting: list[tuple[Joint | None, int, Floats]] = [(None, free - 1 if free else WORLD, np.eye(4))]
    while waiting:
        joint, carrier, T = waiting.pop()
        if joint is not None and joint.moves:
            axes.append(_Axis(joint, carrier, T))
            carrier, T = free + len(axes) - 1, np.eye(4)
        link = links[description.root if joint is None else joint.child]
        places.append(_Place(link, carrier, T))
        waiting += ((child, carrier, T @ _pose(child.origin)) for child in reversed(below[link.name]))
    return places, axes


def _arrays(places: list[_Place], axes: list[_Axis], dofs: Mapping[str, int], free: int) -> TreeArrays:
    """Fill the arrays: the base first, then the joints; what is fixed to the world is left out."""
    N = free + len(axes)
    arrays = TreeArrays(
        parent=np.arange(-1, N - 1),
        kind=np.array([BASE_ANGULAR] * (free // 2) + [BASE_LINEAR] * (free // 2) + [REVOLUTE] * len(axes)),
        dof=np.arange(N),
        multiplier=np.ones(N),
        offset=np.zeros(N),
        R_PJ=np.tile(np.eye(3), (N, 1, 1)),
        p_PJ=np.zeros((N, 3)),
        axis=np.tile(np.eye(3), (N // 3 + 1, 1))[:N],
        E=np.zeros((N, 4, 4)),
    )
    for i, (joint, parent, T) in enumerate(axes, start=free):
        arrays.parent[i] = parent
        arrays.kind[i] = PRISMATIC if joint.kind == "prismatic" else REVOLUTE
        arrays.dof[i] = dofs[joint.mimic.joint if joint.mimic else joint.name]
        if joint.mimic:
            arrays.multiplier[i], arrays.offset[i] = joint.mimic.multiplier, joint.mimic.offset
        arrays.R_PJ[i], arrays.p_PJ[i], arrays.axis[i] = T[:3, :3], T[:3, 3], joint.axis
    for link, carrier, T in places:
        if carrier != WORLD and link.inertial is not None:
            arrays.E[carrier] += moved(_pseudo_inertia(link.inertial), T)
    return arrays


def _pose(origin: Origin) -> Floats:
    return transform(rotation(origin.rpy), origin.xyz)


def _pseudo_inertia(inertial: Inertial) -> Floats:
    return pseudo_inertia(inertial.mass, inertial.origin.xyz, inertial.matrix, rotation(inertial.origin.rpy))


def _rotors(armature: Mapping[str, float], dofs: Mapping[str, int], free: int) -> Floats:
    rotors = np.zeros(free + len(dofs))
    for name, inertia in armature.items():
        if name not in dofs:
            raise ValueError(f"armature names {name!r}; expected one of {', '.join(dofs)}")
        if not 0.0 <= inertia < math.inf:
            raise ValueError(f"armature of {name!r} is {inertia!r}; expected a finite number, not negative")
        rotors[dofs[name]] = inertia
    return rotors


def _folded(key: str, axes: list[_Axis], arrays: TreeArrays, n: int, power: int) -> Floats:
    """Return a friction coefficient per dof: a follower adds its own, seen through its multiplier."""
    total = np.zeros(n)
    moving = slice(len(arrays.dof) - len(axes), None)
    share = np.abs(arrays.multiplier[moving]) ** power
    np.add.at(total, arrays.dof[moving], share * [getattr(axis.joint, key) for axis in axes])
    return total


def _link_place(place: _Place) -> LinkPlace:
    link, axis, T = place
    shapes = []
    for shape in link.shapes:
        T_shape = T @ _pose(shape.origin)
        shapes.append(PlacedShape(shape, T_shape[:3, :3], T_shape[:3, 3]))
    mass = link.inertial.mass if link.inertial else 0.0
    verdict = "realizable" if link.inertial else "massless"
    return LinkPlace(link.name, axis, T[:3, :3], T[:3, 3], tuple(shapes), mass, verdict)


def _check_motions(where: str, arrays: TreeArrays, rotors: Floats, leaders: list[Joint]) -> None:
    """Refuse a tree whose mass matrix is singular: some motion would move no mass and no rotor.

    Bodies with mass have realizable inertias, so the energy of a motion is zero exactly if the twist
    of every one of them is. The posture looked at is generic: a massless wrist may well have singular ones.
    """
    n = len(rotors)
    J = np.vstack([_body_twists(arrays, n), np.diag(np.where(rotors > 0.0, 1.0, 0.0))])
    _, size, motions = np.linalg.svd(J)
    idle = motions[size < _SINGULAR * size[0]] if size[0] > 0.0 else motions
    if not len(idle):
        return
    moving = np.abs(idle).max(axis=0) > _SINGULAR
    free = n - len(leaders)
    parts = [f"joint '{joint.name}'" for joint, idles in zip(leaders, moving[free:], strict=True) if idles]
    if moving[:free].any():
        parts.insert(0, "floating base")
    raise ModelError(
        f"{where}: {', '.join(parts)}",
        "a motion that moves no mass and no rotor inertia",
        "some mass moved by every motion (a positive definite mass matrix)",
        "Give the links moved mass and inertia, or the joint a rotor inertia (armature), or make it fixed.",
    )


def _body_twists(arrays: TreeArrays, n: int) -> Floats:
    """Return the twists (6*bodies, n) of all bodies with mass per unit of v, in a generic posture."""
    coordinates = np.random.default_rng(1).uniform(0.5, 1.0, n)
    T_W: list[Floats] = []
    J = np.zeros((len(arrays.parent), 6, n))
    for i, parent in enumerate(arrays.parent):
        dof, axis = arrays.dof[i], arrays.axis[i]
        x = arrays.multiplier[i] * coordinates[dof] + arrays.offset[i]
        T = (np.eye(4) if parent == WORLD else T_W[parent]) @ transform(arrays.R_PJ[i], arrays.p_PJ[i])
        turns = arrays.kind[i] in (REVOLUTE, BASE_ANGULAR)
        T = T @ (transform(_turn(axis, x), np.zeros(3)) if turns else transform(np.eye(3), axis * x))
        T_W.append(T)
        direction = arrays.multiplier[i] * T[:3, :3] @ axis
        if parent != WORLD:
            J[i] = J[parent]
        if turns:
            J[i, :3, dof] += direction
            J[i, 3:, dof] += np.cross(T[:3, 3], direction)
        else:
            J[i, 3:, dof] += direction
    return J[arrays.E[:, 3, 3] > 0.0].reshape(-1, n)


def _turn(axis: Floats, angle: float) -> Floats:
    """Return the rotation matrix (3,3) by `angle` [rad] about a unit axis."""
    x, y, z = axis
    K = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    R: Floats = np.eye(3) + math.sin(angle) * K + (1.0 - math.cos(angle)) * K @ K
    return R
