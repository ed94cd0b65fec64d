"""How large the moving bodies of a robot are, and where on its surface a force acts.

The shapes are the boxes, cylinders and spheres of the robot description; a mesh has no size here. All of them
are convex and look the same from the opposite side of their centre, on which everything below rests.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from monitor.robot.tree import WORLD, PlacedShape, Tree

Floats = NDArray[np.float64]

# Points per angle for the area of an ellipsoid; a rod a hundred times as long as thick is right to 1e-4.
_QUADRATURE = 48
# Halvings of an interval until two doubles within a robot's size are neighbours.
_HALVINGS = 52


class Bodies(NamedTuple):
    """The moving bodies that carry mass or shapes, ordered by axis.

    names : tuple of str
        Link each is called by: the child of the joint that moves it, the root link for a floating base.
    axis : int64[B]
        Axis of the tree that moves it (5 for a floating base).
    centre : float64[B,3]
        Centre of the bounding box of its shapes, in the body frame [m]; without shapes, centre of mass.
    radius : float64[B]
        Root mean square distance of the points of its surface from `centre` [m]. Where nothing else is known
        of the point a force acts at, the standard deviation of its moment is that of the force times this.
    """

    names: tuple[str, ...]
    axis: NDArray[np.int64]
    centre: Floats
    radius: Floats


class Contact(NamedTuple):
    """Where a line of action meets a body; everything in the body frame.

    point : (3,) or None
        Point of the surface through which the force pushes [m]; None where the line passes all shapes by more
        than its uncertainty.
    nearest : (3,)
        Point of the shapes nearest to the line, the same as `point` where that is known [m].
    miss_m : float
        Distance of the line from `nearest`; 0 where it meets a shape [m].
    link : str
        Link whose shape that is; one of several where links are fixed to one another.
    """

    point: Floats | None
    nearest: Floats
    miss_m: float
    link: str


def bodies(tree: Tree) -> Bodies:
    """Return the moving bodies of a robot with their size (for how, see `Bodies`).

    Surface that lies inside another shape of the same body counts too. Without shapes the surface is that of
    the ellipsoid of even density which has the body's inertia.
    """
    names, axes, centres, radii = [], [], [], []
    for axis, E in enumerate(tree.arrays.E):
        shapes = [shape for _, shape in _shapes(tree, axis)]
        if not shapes and E[3, 3] == 0.0:
            continue
        centre, radius = _of_shapes(shapes) if shapes else _of_inertia(E)
        names.append(next(place.name for place in tree.links if place.axis == axis))
        axes.append(axis)
        centres.append(centre)
        radii.append(radius)
    return Bodies(tuple(names), np.array(axes, np.int64), np.array(centres).reshape(-1, 3), np.array(radii))


def contact_point(
    tree: Tree, axis: int, force: ArrayLike, moment: ArrayLike, uncertainty_m: float = 0.0
) -> Contact | None:
    """Return where a force acts on a moving body, from its line of action.

    Parameters
    ----------
    tree : Tree
        The robot.
    axis : int
        Axis that moves the body.
    force, moment : (3,) array_like
        Force [N] on the body and its moment about the origin of the body frame [N m], in body axes. The part
        of the moment along the force is left aside: no single force has one.
    uncertainty_m : float
        How far the line may pass beside the shapes and still be taken to meet them [m].

    Returns
    -------
    Contact or None
        None where there is no line (no force) or no shape with a size. A line that enters the body more than
        once is taken to push where it first comes in from outside.
    """
    F = np.asarray(force, dtype=float)
    size = float(np.linalg.norm(F))
    candidates = list(_shapes(tree, axis))
    if size == 0.0 or not candidates:
        return None
    d = F / size
    r = np.cross(d, np.asarray(moment, dtype=float)) / size  # the point of the line nearest to the origin
    crossings = [(s, link) for link, shape in candidates if (s := _entry(shape, r, d)) is not None]
    if crossings:
        s, link = min(crossings)
        point = r + s * d
        return Contact(point, point, 0.0, link)
    passed = [(*_nearest(shape, r, d), link) for link, shape in candidates]
    miss_m, nearest, link = min(passed, key=lambda one: one[0])
    return Contact(nearest if miss_m <= uncertainty_m else None, nearest, miss_m, link)


def _shapes(tree: Tree, axis: int) -> Iterator[tuple[str, PlacedShape]]:
    """Yield the shapes of known size that an axis carries, each with the name of its link."""
    for place in tree.links:
        if place.axis == axis != WORLD:
            yield from ((place.name, placed) for placed in place.shapes if placed.shape.size)


# --- size --------------------------------------------------------------------------------------


def _of_shapes(shapes: list[PlacedShape]) -> tuple[Floats, float]:
    reach = np.array([_reach(shape) for shape in shapes])
    p = np.array([shape.p for shape in shapes])
    centre: Floats = 0.5 * ((p - reach).min(axis=0) + (p + reach).max(axis=0))
    area, mean_square = np.array([_surface(shape) for shape in shapes]).T
    # Parallel axes: the mean of a symmetric surface is its own centre.
    mean_square = mean_square + ((p - centre) ** 2).sum(axis=1)
    return centre, math.sqrt(float(area @ mean_square) / float(area.sum()))


def _reach(placed: PlacedShape) -> Floats:
    """Return how far (3,) the shape extends from its centre along the axes of the body frame [m]."""
    size = np.array(placed.shape.size)
    if placed.shape.kind == "box":
        return np.asarray(np.abs(placed.R) @ (0.5 * size))
    if placed.shape.kind == "sphere":
        return np.full(3, size[0])
    along = np.abs(placed.R[:, 2])
    return np.asarray(size[0] * np.sqrt(np.maximum(1.0 - along**2, 0.0)) + 0.5 * size[1] * along)


def _surface(placed: PlacedShape) -> tuple[float, float]:
    """Return area [m²] and mean square distance of the surface from the shape's own centre [m²]."""
    size = placed.shape.size
    if placed.shape.kind == "box":
        x, y, z = size
        faces = [
            (2.0 * a * b, c * c / 4.0 + (a * a + b * b) / 12.0)
            for a, b, c in ((x, y, z), (y, z, x), (z, x, y))
        ]
    elif placed.shape.kind == "sphere":
        faces = [(4.0 * math.pi * size[0] ** 2, size[0] ** 2)]
    else:
        r, length = size
        faces = [
            (2.0 * math.pi * r * length, r * r + length**2 / 12.0),
            (2.0 * math.pi * r * r, 0.5 * r * r + length**2 / 4.0),
        ]
    area = sum(a for a, _ in faces)
    return area, sum(a * square for a, square in faces) / area


def _of_inertia(E: Floats) -> tuple[Floats, float]:
    """Return centre and radius of the ellipsoid of even density with this pseudo-inertia."""
    com: Floats = E[:3, 3] / E[3, 3]
    Sigma = E[:3, :3] / E[3, 3] - np.outer(com, com)
    # An ellipsoid's second moment along a half axis a is m a² / 5.
    half = np.sqrt(5.0 * np.maximum(np.linalg.eigvalsh(Sigma), 0.0))
    z, weight = np.polynomial.legendre.leggauss(_QUADRATURE)
    angle = (np.arange(_QUADRATURE) + 0.5) * (2.0 * math.pi / _QUADRATURE)
    across = np.sqrt(1.0 - z**2)
    u = np.stack(
        [np.outer(across, np.cos(angle)), np.outer(across, np.sin(angle)), np.outer(z, np.ones_like(angle))]
    )
    # Stretched from the unit sphere, area grows by |(bc x, ca y, ab z)|.
    growth = np.linalg.norm(u * (np.roll(half, 1) * np.roll(half, 2))[:, None, None], axis=0)
    area = weight @ growth
    square = ((u * half[:, None, None]) ** 2).sum(axis=0)
    return com, math.sqrt(float((weight @ (growth * square)).sum() / area.sum()))


# --- line of action ----------------------------------------------------------------------------


def _entry(placed: PlacedShape, r: Floats, d: Floats) -> float | None:
    """Return s at which the line `r + s d` (unit d) comes into the shape; None where it passes."""
    x, e = placed.R.T @ (r - placed.p), placed.R.T @ d
    size = placed.shape.size
    if placed.shape.kind == "box":
        ends = [_within(x[i : i + 1], e[i : i + 1], 0.5 * size[i]) for i in range(3)]
    elif placed.shape.kind == "sphere":
        ends = [_within(x, e, size[0])]
    else:
        ends = [_within(x[:2], e[:2], size[0]), _within(x[2:], e[2:], 0.5 * size[1])]
    start, end = max(a for a, _ in ends), min(b for _, b in ends)
    return start if start <= end else None


def _within(x: Floats, e: Floats, radius: float) -> tuple[float, float]:
    """Return the interval of s in which `|x + s e| <= radius`; (inf, -inf) if there is none."""
    a, b, c = float(e @ e), float(x @ e), float(x @ x) - radius**2
    root = b * b - a * c
    if a == 0.0 or root < 0.0:
        return (-math.inf, math.inf) if a == 0.0 and c <= 0.0 else (math.inf, -math.inf)
    # Without the difference of near numbers: the far root first, the other from their product c / a.
    far = -(b + math.copysign(math.sqrt(root), b))
    if far == 0.0:
        return 0.0, 0.0
    one, other = far / a, c / far
    return min(one, other), max(one, other)


def _nearest(placed: PlacedShape, r: Floats, d: Floats) -> tuple[float, Floats]:
    """Return the distance of a line that passes the shape, and the point of the shape nearest to it.

    The square of the distance of `r + s d` is convex in s and its slope `(x - P(x)).d`, with P(x) the point
    of the shape nearest to x: the slope's zero is enclosed by halving.
    """
    reach = float(np.linalg.norm(placed.shape.size))
    middle = float((placed.p - r) @ d)
    low, high = middle - reach, middle + reach
    for _ in range(_HALVINGS):
        s = 0.5 * (low + high)
        x = r + s * d
        if float((x - _projected(placed, x)) @ d) < 0.0:
            low = s
        else:
            high = s
    x = r + high * d
    point = _projected(placed, x)
    return float(np.linalg.norm(x - point)), point


def _projected(placed: PlacedShape, x: Floats) -> Floats:
    """Return the point (3,) of the shape nearest to a point x."""
    y = placed.R.T @ (x - placed.p)
    size = placed.shape.size
    if placed.shape.kind == "box":
        y = np.clip(y, -0.5 * np.array(size), 0.5 * np.array(size))
    elif placed.shape.kind == "sphere":
        y = y * (size[0] / max(float(np.linalg.norm(y)), size[0]))
    else:
        y[:2] *= size[0] / max(math.hypot(y[0], y[1]), size[0])
        y[2] = min(max(y[2], -0.5 * size[1]), 0.5 * size[1])
    return np.asarray(placed.R @ y + placed.p)
