"""Columns and window equations against an outside library, and what every kernel owes."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pinocchio as pin
import pytest
from numpy.typing import NDArray

from monitor.kernels import dynamics, regressor
from monitor.robot.robot import Robot
from monitor.robot.tree import Base, Tree, build_tree
from monitor.robot.urdf import parse_urdf
from tests.commission.motions import V0, Machine
from tests.flow.rig import PAIR, SLED
from tests.kernels.driven import allocated, control
from tests.reference.random_trees import random_state, random_urdf
from tests.robot.test_against_pin import GRAVITY, PinRobot

Floats = NDArray[np.float64]


def work(tree: Tree, bodies: int) -> list[Floats]:
    """Return poisoned work arrays of `weak_rows`; the last two are P and U."""
    N, n, K = len(tree.arrays.parent), tree.n, 10 * bodies
    shapes = ((N + 1, 3, 3), (N + 1, 3), (N, 6), (N, 6), (N + 1, 6), (N, 10), (N, 12), (n, K), (n, K))
    return [np.full(shape, math.nan) for shape in shapes]


def massive(tree: Tree) -> NDArray[np.int64]:
    return np.flatnonzero(tree.arrays.E[:, 3, 3] > 0.0)


def product_columns(tree: Tree, q: Floats, v: Floats) -> tuple[Floats, Floats]:
    """Return P and U: what the kernel makes of a state."""
    arrays, body = tree.arrays, massive(tree)
    *poses, P, U = work(tree, len(body))
    rows = np.full((1, *P.shape), math.nan), np.full((1, tree.n, 5), math.nan)
    regressor.weak_rows(
        *arrays, body, GRAVITY, np.full(tree.n, V0), np.array([0.0, 1e-3, 2e-3]),
        np.tile(q, (3, 1)), np.tile(v, (3, 1)), np.zeros((3, tree.n)), np.array([0]), np.array([2]),
        *poses, P, U, *rows,
    )  # fmt: skip
    return P, U


def pin_columns(urdf: str, tree: Tree, q: Floats, v: Floats) -> tuple[Floats, Floats]:
    """Return the same from `pin.computeJointTorqueRegressor`.

    Mv is the torque of the acceleration v at rest without gravity; (C'v) = dM/dt v - C v, where dM/dt v is a
    difference along the motion.
    """
    description = parse_urdf(urdf)
    reference = PinRobot(urdf, description, Robot(tree, GRAVITY))
    model, G = reference.model, reference.G
    weightless = model.copy()
    weightless.gravity.linear = np.zeros(3)
    Q, y, zero = reference.positions(q), G @ v, np.zeros(model.nv)

    def torque(which: Any, Q: Floats, y: Floats, a: Floats) -> Floats:
        Y: Floats = pin.computeJointTorqueRegressor(which, which.createData(), Q, y, a)
        return np.asarray(G.T @ Y.reshape(model.nv, -1), np.float64)  # pin returns a vector for one joint

    h = 1e-5
    P = torque(weightless, Q, zero, y)
    later, earlier = (
        torque(weightless, pin.integrate(model, Q, sign * h * y), zero, y) for sign in (1.0, -1.0)
    )
    Mdot_v = (later - earlier) / (2.0 * h)
    U = torque(model, Q, zero, zero) - Mdot_v + torque(weightless, Q, y, zero)
    axes = {link.name: link.axis for link in tree.links}
    joint_of = {axes[joint.child]: joint.name for joint in description.joints if joint.moves}
    if tree.base == "floating":
        joint_of[5] = model.names[1]
    order = [10 * (model.getJointId(joint_of[b]) - 1) for b in massive(tree)]
    return tuple(np.hstack([_of_E(part[:, at : at + 10]) for at in order]) for part in (P, U))  # type: ignore[return-value]


def _of_E(Y: Floats) -> Floats:
    """Turn columns of m, mc, Ixx Ixy Iyy Ixz Iyz Izz into those of E, where I = tr(Sigma) 1 - Sigma."""
    m, x, y, z, xx, xy, yy, xz, yz, zz = Y.T
    return np.array([yy + zz, -xy, -xz, xx + zz, -yz, xx + yy, x, y, z, m]).T


@pytest.mark.parametrize("base", ["fixed", "floating"])
@pytest.mark.parametrize(("seed", "joints"), [(0, 1), (1, 4), (2, 8), (3, 13)])
def test_columns_of_momentum_and_known_torque_agree_with_pin(seed: int, joints: int, base: Base) -> None:
    urdf = random_urdf(seed, joints)
    tree = build_tree(parse_urdf(urdf), base)
    q, v = random_state(seed, base, len(tree.joints))
    for ours, theirs, tolerance in zip(
        product_columns(tree, q, v), pin_columns(urdf, tree, q, v), (1e-12, 1e-7), strict=True
    ):
        np.testing.assert_allclose(ours, theirs, atol=tolerance * np.abs(theirs).max())


MACHINES = {
    "fixed": Machine(PAIR, "fixed", *np.array([[0.3, 0.1], [2.0, 1.0], [1.5, 0.7], [0.2, -0.3]])),
    "floating": Machine(
        SLED, "floating",
        *np.hstack([np.zeros((4, 6)), [[0.05, 0.5], [0.7, 3.0], [0.4, 2.0], [0.2, -0.3]]]),
    ),
}  # fmt: skip


def window_error(machine: Machine, period: float) -> float:
    """Return by how much the window equations miss on an exact motion [N m]."""
    t, q, v, tau, _ = machine.moved(1.0, 4, period=period)
    tree, body = machine.tree, massive(machine.tree)
    first = np.arange(0, round(0.8 / period), round(0.05 / period))
    last = first + round(0.15 / period)
    rows = np.full((len(first), tree.n, 10 * len(body)), math.nan), np.full((len(first), tree.n, 5), math.nan)
    gravity, v0 = np.array([0.0, 0.0, -9.81]), np.full(tree.n, V0)
    regressor.weak_rows(
        *tree.arrays, body, gravity, v0, t, q, v, tau, first, last, *work(tree, len(body)), *rows
    )
    A, own = rows
    E = tree.arrays.E[body][:, [0, 0, 0, 1, 1, 2, 0, 1, 2, 3], [0, 1, 2, 1, 2, 2, 3, 3, 3, 3]].ravel()
    friction = np.array([machine.armature, machine.viscous, machine.coulomb, machine.offset]).T
    slow = np.array([np.abs(v[a : b + 1]).min(axis=0) < 10.0 * V0 for a, b in zip(first, last, strict=True)])
    error = A @ E + (own[:, :, :4] * friction).sum(axis=2) - own[:, :, 4]
    return float(np.abs(np.where(slow, 0.0, error)).max())


@pytest.mark.parametrize("base", ["fixed", "floating"])
def test_window_equations_hold_on_motions_by_pin_to_second_order_in_the_period(base: str) -> None:
    coarse, fine = (window_error(MACHINES[base], period) for period in (2e-3, 1e-3))
    assert coarse < 2e-3
    assert fine < 0.35 * coarse


def arguments(base: Base) -> list[Any]:
    urdf = random_urdf(5, 6)
    tree = build_tree(parse_urdf(urdf), base)
    body, states = massive(tree), [random_state(seed, base, len(tree.joints)) for seed in range(12)]
    q, v = (np.array(column) for column in zip(*states, strict=True))
    rows = [np.full((3, tree.n, 10 * len(body)), math.nan), np.full((3, tree.n, 5), math.nan)]
    return [
        *tree.arrays, body, GRAVITY, np.full(tree.n, V0), 1e-3 * np.arange(12.0), q, v, 0.5 * v,
        np.array([1, 3, 7]), np.array([5, 9, 11]), *work(tree, len(body)), *rows,
    ]  # fmt: skip


@pytest.mark.parametrize("base", ["fixed", "floating"])
def test_poisoned_outputs_are_all_written_and_two_runs_leave_the_same_bytes(base: Base) -> None:
    once, again = arguments(base), arguments(base)
    regressor.weak_rows(*once)
    for array in again[-11:]:
        array[...] = -3.0
    regressor.weak_rows(*again)
    for one, other in zip(once[-4:], again[-4:], strict=True):
        assert np.isfinite(one).all()
        assert one.tobytes() == other.tobytes()


@pytest.mark.parametrize("base", ["fixed", "floating"])
def test_the_kernels_compute_the_same_when_they_are_interpreted(base: Base) -> None:
    compiled, interpreted = arguments(base), arguments(base)
    regressor.weak_rows(*compiled)
    regressor.weak_rows.py_func(*interpreted)  # type: ignore[attr-defined]
    np.testing.assert_allclose(interpreted[-1], compiled[-1], rtol=1e-12, atol=1e-12)
    np.testing.assert_allclose(interpreted[-2], compiled[-2], rtol=1e-12, atol=1e-12)
    a = compiled
    poses, P, U = a[-11:-4], np.full_like(a[-4], math.nan), np.full_like(a[-3], math.nan)
    q, v = a[13][-1], a[14][-1]
    dynamics.outward(*a[:9], q, v, *poses)
    regressor.columns.py_func(a[0], a[2], a[9], GRAVITY, *poses[:5], P, U)  # type: ignore[attr-defined]
    np.testing.assert_allclose(P, a[-4], rtol=1e-12, atol=1e-12)
    np.testing.assert_allclose(U, a[-3], rtol=1e-12, atol=1e-12)


def test_the_kernel_allocates_nothing() -> None:
    import numba

    weak_rows = regressor.weak_rows

    @numba.njit
    def drive(count: int, given: Any) -> None:
        for _ in range(count):
            weak_rows(*given)

    once, often = allocated(control())
    assert often - once == 1000
    once, often = allocated(drive, tuple(arguments("floating")))
    assert often == once
