"""Size of bodies and points of contact, against closed forms, `scipy` and the ray caster of `mujoco`."""

from __future__ import annotations

import math
from functools import cache

import mujoco
import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import dblquad
from scipy.optimize import lsq_linear, minimize

from monitor.robot.pseudo_inertia import rotation
from monitor.robot.shape import Contact, bodies, contact_point
from monitor.robot.tree import Base, PlacedShape, Tree, build_tree
from monitor.robot.urdf import parse_urdf, read_urdf
from replay.simulate import URDF

Floats = NDArray[np.float64]

CYLINDER = '<cylinder radius="0.05" length="0.3"/>'
BOX = '<box size="0.4 0.1 0.2"/>'
SPHERE = '<sphere radius="0.07"/>'


def collision(geometry: str, xyz: str = "0 0 0", rpy: str = "0 0 0") -> str:
    return f'<collision><origin xyz="{xyz}" rpy="{rpy}"/><geometry>{geometry}</geometry></collision>'


def inertial(mass: float, ixx: float, iyy: float, izz: float, xyz: str = "0 0 0") -> str:
    return (
        f'<inertial><origin xyz="{xyz}" rpy="0.3 -0.2 0.5"/><mass value="{mass}"/>'
        f'<inertia ixx="{ixx}" iyy="{iyy}" izz="{izz}" ixy="0" ixz="0" iyz="0"/></inertial>'
    )


MASS = inertial(2.0, 0.02, 0.03, 0.04)


def one(inside: str, base: Base = "fixed") -> Tree:
    """Return a robot of a wheel stand and one turning link (a root with one turning link, if floating)."""
    return build_tree(
        parse_urdf(
            f'<robot name="stand"><link name="post">{MASS}</link><link name="wheel">{inside}</link>'
            '<joint name="turn" type="continuous"><parent link="post"/><child link="wheel"/></joint></robot>'
        ),
        base,
        {"turn": 0.1},
    )


# --- size --------------------------------------------------------------------------------------


def test_the_radius_of_single_shapes_is_their_closed_form() -> None:
    for geometry, square in (
        (SPHERE, 0.07**2),
        # Side 2 pi r l at mean r² + l²/12, two ends 2 pi r² at mean r²/2 + l²/4.
        (CYLINDER, (0.3 * (0.05**2 + 0.3**2 / 12) + 0.05 * (0.05**2 / 2 + 0.3**2 / 4)) / (0.3 + 0.05)),
        ('<box size="2 2 2"/>', 1.0 + 2.0 / 3.0),  # a cube of half edge 1: one coordinate 1, two at mean 1/3
    ):
        found = bodies(one(MASS + collision(geometry, "0.1 -0.2 0.3", "0.4 0.1 -0.7")))
        assert found.names == ("wheel",)
        assert found.axis.tolist() == [0]
        np.testing.assert_allclose(found.centre, [[0.1, -0.2, 0.3]], atol=1e-15)
        np.testing.assert_allclose(found.radius, [math.sqrt(square)], rtol=1e-14)


def test_the_radius_of_several_shapes_is_the_integral_over_their_surfaces() -> None:
    tree = one(MASS + collision(BOX, "0 0 0.1", "0.5 0.2 0.1") + collision(CYLINDER, "0.3 0 0", "0 1.1 0"))
    found = bodies(tree)
    area, total = 0.0, 0.0
    for placed in (shape for place in tree.links for shape in place.shapes):
        for patch, jacobian in patches(placed):
            area += dblquad(lambda v, u, j=jacobian: j(u), 0, 1, 0, 1, epsabs=1e-9)[0]  # type: ignore[misc]
            total += dblquad(
                lambda v, u, x=patch, j=jacobian: j(u) * ((x(u, v) - found.centre[0]) ** 2).sum(),  # type: ignore[misc]
                0, 1, 0, 1, epsabs=1e-9,
            )[0]  # fmt: skip
    assert found.radius[0] == pytest.approx(math.sqrt(total / area), rel=1e-7)


def patches(placed):  # type: ignore[no-untyped-def]
    """Yield (point(u, v), area density(u)) of each smooth part of a surface, u and v from 0 to 1."""
    size, R, p = placed.shape.size, placed.R, placed.p
    if placed.shape.kind == "box":
        half = np.array(size) / 2
        for i in range(3):
            for side in (-1.0, 1.0):
                j, k = (i + 1) % 3, (i + 2) % 3

                def face(u, v, i=i, j=j, k=k, side=side):  # type: ignore[no-untyped-def]
                    x = np.zeros(3)
                    x[i], x[j], x[k] = side * half[i], (2 * u - 1) * half[j], (2 * v - 1) * half[k]
                    return R @ x + p

                yield face, lambda u, j=j, k=k: 4 * half[j] * half[k]
        return
    r, length = size

    def side_at(u, v):  # type: ignore[no-untyped-def]
        angle = 2 * math.pi * v
        return R @ [r * math.cos(angle), r * math.sin(angle), (u - 0.5) * length] + p

    yield side_at, lambda u: 2 * math.pi * r * length
    for end in (-0.5, 0.5):

        def lid(u, v, end=end):  # type: ignore[no-untyped-def]
            angle = 2 * math.pi * v
            return R @ [u * r * math.cos(angle), u * r * math.sin(angle), end * length] + p

        yield lid, lambda u: 2 * math.pi * r * u * r


def surface_points(placed: PlacedShape, rng: np.random.Generator, count: int = 40_000) -> Floats:
    """Return corners, or many points of the rims or of the whole sphere, in the body frame."""
    size = placed.shape.size
    if placed.shape.kind == "box":
        signs = np.array([[i, j, k] for i in (-1, 1) for j in (-1, 1) for k in (-1, 1)])
        x = signs * np.array(size) / 2
    elif placed.shape.kind == "sphere":
        x = rng.standard_normal((count, 3))
        x *= size[0] / np.linalg.norm(x, axis=1)[:, None]
    else:
        angle = rng.uniform(0.0, 2.0 * math.pi, count)
        x = np.stack(
            [size[0] * np.cos(angle), size[0] * np.sin(angle), size[1] / 2 * rng.choice([-1, 1], count)], 1
        )
    return np.asarray(x @ placed.R.T + placed.p)


def test_the_centre_is_that_of_the_bounding_box_of_all_points() -> None:
    rng = np.random.default_rng(3)
    for _ in range(5):
        parts = "".join(
            collision(
                geometry,
                "{} {} {}".format(*rng.uniform(-0.5, 0.5, 3)),
                "{} {} {}".format(*rng.uniform(-3, 3, 3)),
            )
            for geometry in (CYLINDER, BOX, SPHERE)
        )
        tree = one(MASS + parts)
        points = np.vstack([surface_points(s, rng) for place in tree.links for s in place.shapes])
        wanted = (points.min(axis=0) + points.max(axis=0)) / 2
        np.testing.assert_allclose(bodies(tree).centre[0], wanted, atol=2e-3 * 0.07)


def test_a_body_without_shapes_is_the_ellipsoid_with_its_inertia() -> None:
    # A ball of 0.2 m: 2/5 m r²; its surface is everywhere at r.
    ball = inertial(3.0, *3 * [0.4 * 3.0 * 0.2**2], xyz="0.1 0.2 -0.3")
    found = bodies(one(ball))
    np.testing.assert_allclose(found.centre, [[0.1, 0.2, -0.3]], atol=1e-12)
    assert found.radius[0] == pytest.approx(0.2, rel=1e-9)
    # A long and a flat spheroid (a = b, c): one integral over the height z = c cos t,
    # ring 2 pi a sin t sqrt(a² cos² t + c² sin² t) dt.
    for a, c in ((0.05, 0.5), (0.3, 0.03), (0.01, 1.0)):
        m = 2.0
        body = inertial(m, m * (a * a + c * c) / 5, m * (a * a + c * c) / 5, m * 2 * a * a / 5)
        t = (np.arange(200_000) + 0.5) * math.pi / 200_000
        ring = np.sin(t) * np.hypot(a * np.cos(t), c * np.sin(t))
        square = (ring * ((a * np.sin(t)) ** 2 + (c * np.cos(t)) ** 2)).sum() / ring.sum()
        assert bodies(one(body)).radius[0] == pytest.approx(math.sqrt(square), rel=1e-4)


def test_meshes_have_no_size_and_what_has_neither_mass_nor_shape_is_no_body() -> None:
    mesh = '<collision><geometry><mesh filename="wheel.stl"/></geometry></collision>'
    with_mesh, without = bodies(one(MASS + mesh)), bodies(one(MASS))
    assert with_mesh.radius.tolist() == without.radius.tolist()
    assert contact_point(one(MASS + mesh), 0, [1.0, 0.0, 0.0], [0.0, 0.0, 0.0]) is None
    massless = one("", "floating")  # the post carries mass, the wheel nothing but a rotor
    assert bodies(massless).names == ("post",)


def test_bodies_are_called_by_the_moved_link_and_the_base_by_the_root() -> None:
    tree = build_tree(
        parse_urdf(
            f'<robot name="cart"><link name="hub">{MASS}</link><link name="trunk">{MASS}</link>'
            f'<link name="lamp">{MASS}{collision(SPHERE)}</link><link name="shank">{MASS}</link>'
            '<joint name="bolt" type="fixed"><parent link="trunk"/><child link="lamp"/></joint>'
            '<joint name="knee" type="continuous"><parent link="trunk"/><child link="shank"/></joint>'
            '<joint name="glue" type="fixed"><parent link="shank"/><child link="hub"/></joint></robot>'
        ),
        "floating",
    )
    found = bodies(tree)
    assert found.names == ("trunk", "shank")
    assert found.axis.tolist() == [5, 6]
    assert found.radius[0] == pytest.approx(0.07, rel=1e-14)
    # What is fixed to the world of an arm is no moving body.
    assert bodies(one(MASS)).names == ("wheel",)


# --- points of contact ---------------------------------------------------------------------------


@cache
def rind() -> Tree:
    return build_tree(read_urdf(URDF), "fixed")


class Caster:
    """The shapes of one axis as bodies of `mujoco`."""

    def __init__(self, tree: Tree, axis: int) -> None:
        geoms = ""
        self.shapes = [s for place in tree.links if place.axis == axis for s in place.shapes]
        for placed in self.shapes:
            quat = np.zeros(4)
            mujoco.mju_mat2Quat(quat, placed.R.ravel())
            size = placed.shape.size
            if placed.shape.kind == "box":
                size = tuple(0.5 * edge for edge in size)
            elif placed.shape.kind == "cylinder":
                size = size[0], 0.5 * size[1]
            numbers = [" ".join(map(repr, map(float, row))) for row in (size, placed.p, quat)]
            geoms += '<geom type="{}" size="{}" pos="{}" quat="{}"/>'.format(placed.shape.kind, *numbers)
        self.model = mujoco.MjModel.from_xml_string(f"<mujoco><worldbody>{geoms}</worldbody></mujoco>")
        self.data = mujoco.MjData(self.model)
        mujoco.mj_forward(self.model, self.data)

    def first(self, x: Floats, d: Floats) -> float:
        """Distance from x to the first surface along the unit vector d; -1 where there is none."""
        geom = np.zeros(1, np.int32)
        return float(mujoco.mj_ray(self.model, self.data, x, d, None, 1, -1, geom))


@pytest.mark.parametrize("axis", range(7))
def test_points_of_contact_on_a_whole_arm_are_those_of_a_ray_from_outside(axis: int) -> None:
    tree, rng = rind(), np.random.default_rng(axis)
    caster, size = Caster(tree, axis), bodies(tree)
    hits = 0
    for _ in range(300):
        d = rng.standard_normal(3)
        d /= np.linalg.norm(d)
        aim = size.centre[axis] + 1.3 * size.radius[axis] * rng.uniform(-1.0, 1.0, 3)
        force = rng.uniform(1.0, 80.0) * d
        # A free part along the force is left aside.
        moment = np.cross(aim, force) + 3.0 * d
        found = contact_point(tree, axis, force, moment)
        assert found is not None
        start = aim - 5.0 * d
        distance = caster.first(start, d)
        if distance >= 0.0:
            hits += 1
            assert found.point is not None
            np.testing.assert_allclose(found.point, start + distance * d, atol=1e-9)
            assert found.miss_m == 0.0
            # The force pushes: a step further along it is inside, so a ray back meets the surface at once.
            assert caster.first(found.point - 1e-6 * d, d) == pytest.approx(1e-6, abs=1e-9)
        else:
            assert found.point is None
            assert found.miss_m > 0.0
    assert 50 < hits < 300


def missing(found: Contact | None) -> tuple[float, Floats]:
    assert found is not None
    assert found.point is None
    return found.miss_m, found.nearest


def test_the_miss_of_a_box_is_that_of_least_squares_within_bounds() -> None:
    tree = one(MASS + collision(BOX, "0.1 0.2 0.3", "0.4 -0.3 0.9"))
    R, rng, count = rotation((0.4, -0.3, 0.9)), np.random.default_rng(4), 0
    for _ in range(200):
        d, aim = rng.standard_normal(3), np.array([0.1, 0.2, 0.3]) + rng.uniform(-0.5, 0.5, 3)
        d /= np.linalg.norm(d)
        found = contact_point(tree, 0, d, np.cross(aim, d))
        if found is not None and found.point is not None:
            continue
        count += 1
        miss, nearest = missing(found)
        # min |aim + s d - c - R y| over s and y in the box.
        half = np.array([0.2, 0.05, 0.1])
        solved = lsq_linear(
            np.column_stack([-d, R]), aim - [0.1, 0.2, 0.3],
            ([-np.inf, *-half], [np.inf, *half]), tol=1e-14, lsq_solver="exact",
        )  # fmt: skip
        assert miss == pytest.approx(math.sqrt(2.0 * solved.cost), abs=1e-7)
        on_line = aim + ((nearest - aim) @ d) * d
        assert np.linalg.norm(nearest - on_line) == pytest.approx(miss, abs=1e-12)
        assert (np.abs(R.T @ (nearest - [0.1, 0.2, 0.3])) <= half + 1e-12).all()
    assert count > 50


def test_the_miss_of_a_cylinder_is_that_of_a_general_optimiser() -> None:
    tree, rng, count = one(MASS + collision(CYLINDER)), np.random.default_rng(5), 0
    for _ in range(60):
        d, aim = rng.standard_normal(3), rng.uniform(-0.4, 0.4, 3)
        d /= np.linalg.norm(d)
        found = contact_point(tree, 0, d, np.cross(aim, d))
        if found is not None and found.point is not None:
            continue
        count += 1
        miss, _ = missing(found)
        solved = minimize(
            lambda x, aim=aim, d=d: ((aim + x[0] * d - x[1:]) ** 2).sum(),
            np.zeros(4), method="SLSQP", options={"ftol": 1e-16, "maxiter": 500},
            constraints=[{"type": "ineq", "fun": lambda x: 0.05**2 - x[1] ** 2 - x[2] ** 2}],
            bounds=[(None, None), (None, None), (None, None), (-0.15, 0.15)],
        )  # fmt: skip
        assert miss == pytest.approx(math.sqrt(solved.fun), abs=1e-5)
    assert count > 20


def test_a_line_that_just_passes_still_meets_within_its_uncertainty() -> None:
    tree = one(MASS + collision(SPHERE, "0 0 0.5"))
    force, moment = np.array([10.0, 0.0, 0.0]), np.cross([0.0, 0.09, 0.5], [10.0, 0.0, 0.0])
    miss, nearest = missing(contact_point(tree, 0, force, moment))
    assert miss == pytest.approx(0.02, abs=1e-12)
    np.testing.assert_allclose(nearest, [0.0, 0.07, 0.5], atol=1e-9)
    found = contact_point(tree, 0, force, moment, uncertainty_m=0.021)
    assert found is not None
    assert found.point is not None
    assert found.link == "wheel"
    np.testing.assert_allclose(found.point, nearest)


def test_the_force_pushes_where_it_comes_in_and_its_opposite_on_the_other_side() -> None:
    tree = one(MASS + collision(BOX))
    for sign in (1.0, -1.0):
        found = contact_point(
            tree, 0, [sign * 30.0, 0.0, 0.0], np.cross([0.0, 0.02, 0.05], [sign * 30.0, 0.0, 0.0])
        )
        assert found is not None
        assert found.point is not None
        np.testing.assert_allclose(found.point, [-sign * 0.2, 0.02, 0.05], atol=1e-15)
    assert contact_point(tree, 0, [0.0, 0.0, 0.0], [1.0, 0.0, 0.0]) is None


def test_the_link_whose_shape_is_met_is_named() -> None:
    tree = build_tree(
        parse_urdf(
            f'<robot name="r"><link name="post"/><link name="wheel">{MASS}{collision(SPHERE)}</link>'
            f'<link name="lamp">{collision(SPHERE)}</link>'
            '<joint name="turn" type="continuous"><parent link="post"/><child link="wheel"/></joint>'
            '<joint name="bolt" type="fixed"><parent link="wheel"/><child link="lamp"/>'
            '<origin xyz="0 0 0.5"/></joint></robot>'
        ),
        "fixed",
    )
    for height, sign, link in ((0.0, 1, "wheel"), (0.5, 1, "lamp"), (0.2, 1, "wheel"), (0.3, 1, "lamp")):
        found = contact_point(tree, 0, [sign, 0, 0], np.cross([0.0, 0.0, height], [sign, 0, 0]))
        assert found is not None
        assert found.link == link
    for down, link in ((-1.0, "lamp"), (1.0, "wheel")):  # through both: the one that is met first
        found = contact_point(tree, 0, [0.0, 0.0, down], [0.0, 0.0, 0.0])
        assert found is not None
        assert found.link == link
