"""Identities of mechanics, and definitions evaluated independently, on random trees.

The references (energies, mass matrix, Christoffel matrix) come from tests/reference/mechanics.py, which
shares no code with the product.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from monitor.robot.robot import Robot
from monitor.robot.tree import Base, build_tree
from monitor.robot.urdf import parse_urdf
from tests.reference.mechanics import ReferenceRobot
from tests.reference.random_trees import random_state, random_urdf

Floats = NDArray[np.float64]

GRAVITY = np.array([-2.0, 1.0, -9.4])
SMALL = [(seed, joints) for joints in (1, 3, 6, 9) for seed in range(3)]
LARGE = [*SMALL, (0, 20), (1, 40)]

bases = pytest.mark.parametrize("base", ["fixed", "floating"])
small_trees = pytest.mark.parametrize(("seed", "joints"), SMALL)
trees = pytest.mark.parametrize(("seed", "joints"), LARGE)


def _robot(seed: int, joints: int, base: Base) -> tuple[Robot, Floats, Floats]:
    robot = Robot(build_tree(parse_urdf(random_urdf(seed, joints)), base), GRAVITY)
    return robot, *random_state(seed, base, len(robot.joints))


def _reference(seed: int, joints: int, base: Base, robot: Robot) -> ReferenceRobot:
    return ReferenceRobot(random_urdf(seed, joints), robot.joints, base, GRAVITY)


def _moved(robot: Robot, q: Floats, v: Floats, time: float) -> Floats:
    """Return q after moving with constant v for `time`."""
    if robot.tree.base == "fixed":
        return q + time * v
    R = Rotation.from_quat(q[3:7], scalar_first=True)
    turn = Rotation.from_rotvec(time * v[:3])
    # A constant body twist moves the origin along a screw; to second order in time this is its chord.
    middle = R * Rotation.from_rotvec(0.5 * time * v[:3])
    position = q[:3] + time * middle.apply(v[3:6])
    return np.concatenate([position, (R * turn).as_quat(scalar_first=True), q[7:] + time * v[6:]])


def _close(ours: Floats, theirs: Floats, share: float, scale: float = 0.0) -> bool:
    """Whether two arrays agree to a share of the largest entry."""
    return bool(np.abs(ours - theirs).max() <= share * max(np.abs(theirs).max(), scale))


@bases
@trees
def test_the_mass_matrix_is_symmetric_and_positive_definite(seed: int, joints: int, base: Base) -> None:
    robot, q, v = _robot(seed, joints, base)
    M = robot.dynamics(q, v).M
    assert np.array_equal(M, M.T)
    assert np.linalg.eigvalsh(M).min() > 0.0


@bases
@trees
def test_the_rate_of_the_mass_matrix_less_twice_c_is_skew(seed: int, joints: int, base: Base) -> None:
    robot, q, v = _robot(seed, joints, base)
    step = 1e-5
    ahead, behind = (robot.dynamics(_moved(robot, q, v, time), v).M for time in (step, -step))
    M, C, _ = robot.dynamics(q, v)
    rate = (ahead - behind) / (2.0 * step)
    assert _close(C + C.T, rate, 1e-7, scale=np.abs(M).max())


@bases
@trees
def test_momenta_without_a_matrix_equal_those_from_the_matrices(seed: int, joints: int, base: Base) -> None:
    robot, q, v = _robot(seed, joints, base)
    M, C, _ = robot.dynamics(q, v)
    p, Ctv = robot.momentum(q, v)
    assert _close(p, M @ v, 1e-12)
    # C vanishes for a single joint: then M v² is the measure.
    assert _close(Ctv, C.T @ v, 1e-12, scale=np.abs(M).max() * np.abs(v).max() ** 2)


@bases
@small_trees
def test_the_mass_matrix_agrees_with_its_definition(seed: int, joints: int, base: Base) -> None:
    robot, q, v = _robot(seed, joints, base)
    assert _close(robot.dynamics(q, v).M, _reference(seed, joints, base, robot).mass_matrix(q), 1e-12)


@small_trees
def test_c_is_the_christoffel_matrix(seed: int, joints: int) -> None:
    robot, q, v = _robot(seed, joints, "fixed")
    M, C, _ = robot.dynamics(q, v)
    reference = _reference(seed, joints, "fixed", robot)
    assert _close(C, reference.coriolis_matrix(q, v), 1e-9, scale=np.abs(M).max())


@bases
@small_trees
def test_half_v_m_v_is_the_kinetic_energy(seed: int, joints: int, base: Base) -> None:
    robot, q, v = _robot(seed, joints, base)
    energy = _reference(seed, joints, base, robot).kinetic_energy(q, v)
    assert 0.5 * v @ robot.dynamics(q, v).M @ v == pytest.approx(energy, rel=1e-12)


@bases
@small_trees
def test_gravity_torque_is_the_gradient_of_the_potential_energy(seed: int, joints: int, base: Base) -> None:
    robot, q, v = _robot(seed, joints, base)
    assert _close(robot.dynamics(q, v).g, _reference(seed, joints, base, robot).gravity_torque(q), 1e-12)


@bases
@small_trees
def test_free_motion_keeps_energy(seed: int, joints: int, base: Base) -> None:
    """Where M a = -C v - g, no power enters, so kinetic plus potential energy does not change."""
    robot, q, v = _robot(seed, joints, base)
    reference = _reference(seed, joints, base, robot)
    M, C, g = robot.dynamics(q, v)
    acceleration = np.linalg.solve(M, -C @ v - g)
    step = 1e-5

    def energy(time: float) -> float:
        place = _moved(robot, q, v + 0.5 * time * acceleration, time)
        potential = reference.potential_energy(place, np.zeros(robot.n)).real
        return reference.kinetic_energy(place, v + time * acceleration) + potential

    power = (energy(step) - energy(-step)) / (2.0 * step)
    assert abs(power) < 1e-6 * np.abs(v * (C @ v + g)).sum()


@bases
@small_trees
def test_the_jacobian_gives_the_velocity_of_a_point_on_a_link(seed: int, joints: int, base: Base) -> None:
    robot, q, v = _robot(seed, joints, base)
    reference = _reference(seed, joints, base, robot)
    point = np.array([0.2, -0.1, 0.4])
    for link in robot.tree.links:
        T, T_dot = reference.velocity(link.name, q, v)
        W = T_dot[:3, :3] @ T[:3, :3].T
        velocity = np.concatenate([[W[2, 1], W[0, 2], W[1, 0]], (T_dot @ [*point, 1.0])[:3]])
        assert _close(robot.jacobian(link.name, point, q) @ v, velocity, 1e-12, scale=1.0)


@bases
def test_rotor_inertia_adds_to_the_diagonal_of_m_and_to_the_momentum(base: Base) -> None:
    description = parse_urdf(random_urdf(2, 6))
    plain = Robot(build_tree(description, base), GRAVITY)
    name = plain.joints[1]
    geared = Robot(build_tree(description, base, {name: 0.7}), GRAVITY)
    q, v = random_state(2, base, len(plain.joints))
    added = np.zeros(plain.n)
    added[plain.n - len(plain.joints) + 1] = 0.7
    assert np.allclose(geared.dynamics(q, v).M, plain.dynamics(q, v).M + np.diag(added), rtol=0, atol=1e-14)
    assert np.allclose(geared.momentum(q, v)[0], plain.momentum(q, v)[0] + added * v, rtol=0, atol=1e-14)
    assert np.array_equal(geared.dynamics(q, v).C, plain.dynamics(q, v).C)


def test_the_position_of_a_floating_base_changes_nothing() -> None:
    robot, q, v = _robot(4, 6, "floating")
    far = q.copy()
    far[:3] += 1e6
    for here, there in zip(robot.dynamics(q, v), robot.dynamics(far, v), strict=True):
        assert here.tobytes() == there.tobytes()
