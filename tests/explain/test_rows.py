"""Columns of the explanations against the rigid-body library `pin`: random trees, both kinds of base."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import pinocchio as pin
import pytest
from numpy.typing import NDArray

from monitor.explain import actuator, contact, load, position_sensor, torque_sensor
from monitor.kernels.dynamics import dynamics
from monitor.robot.robot import Robot
from monitor.robot.tree import Base, LinkPlace, build_tree
from monitor.robot.urdf import parse_urdf
from tests.flow.rig import PAIR, SLED
from tests.reference.random_trees import random_state, random_urdf
from tests.robot.test_against_pin import GRAVITY, PinRobot

Floats = NDArray[np.float64]

TOLERANCE = 1e-10
ROBOTS: list[tuple[str, Base]] = [
    (PAIR, "fixed"),
    (SLED, "floating"),
    # Branches, all kinds of joints, followers, massless links.
    *((random_urdf(seed, 5 * seed + 3), "fixed") for seed in range(3)),
    *((random_urdf(seed, 5 * seed + 3), "floating") for seed in range(3)),
]


class Motion(NamedTuple):
    """A robot in motion here and in pin, and what the kernels make of it."""

    robot: Robot
    reference: PinRobot
    q: Floats
    v: Floats
    a: Floats
    R_W: Floats
    p_W: Floats
    S: Floats
    V: Floats
    Vd: Floats
    M: Floats

    def columns(self, count: int) -> Floats:
        return np.full((self.robot.n, count), math.nan)

    def inverse_dynamics(self) -> Floats:
        """Return pin's torque (n) of this motion."""
        G, r = self.reference.G, self.reference
        tau = pin.rnea(r.model, r.model.createData(), r.positions(self.q), G @ self.v, G @ self.a)
        torque: Floats = G.T @ tau
        return torque


def motion(urdf: str, base: Base, seed: int = 0) -> Motion:
    description = parse_urdf(urdf)
    robot = Robot(build_tree(description, base), GRAVITY)
    q, v = random_state(seed, base, len(robot.joints))
    a = 3.0 * np.random.default_rng(seed).normal(size=robot.n)
    N, n, tree = len(robot.tree.arrays.parent), robot.n, robot.tree
    poses, shapes = (np.zeros((N + 1, 3, 3)), np.zeros((N + 1, 3))), ((N, 6), (N, 6), (N + 1, 6))
    S, Sd, V = (np.zeros(shape) for shape in shapes)
    work = [np.zeros(shape) for shape in ((N, 10), (N, 12), (n, n), (n, n), (n,), (n,), (n,))]
    dynamics(*tree.arrays, tree.armature, GRAVITY, q, v, *poses, S, Sd, V, *work)
    return Motion(
        robot, PinRobot(urdf, description, robot), q, v, a, *poses, S, V, rates(robot, S, Sd, v, a), work[2]
    )


def rates(robot: Robot, S: Floats, Sd: Floats, v: Floats, a: Floats) -> Floats:
    """Return the bodies' accelerations (N,6) from V = sum S v over all axes before, weight taken off."""
    Vd = np.zeros((len(S), 6))
    for i, parent in enumerate(robot.tree.arrays.parent):
        d = robot.tree.arrays.dof[i]
        Vd[i] = Vd[parent] if parent >= 0 else np.concatenate([np.zeros(3), -GRAVITY])
        Vd[i] += S[i] * a[d] + Sd[i] * v[d]
    return Vd


def moving_links(robot: Robot) -> list[LinkPlace]:
    return [place for place in robot.tree.links if place.axis >= 0]


def worst(ours: Floats, theirs: Floats) -> float:
    return float(np.abs(ours - theirs).max() / max(1.0, np.abs(theirs).max()))


@pytest.mark.parametrize("number", range(len(ROBOTS)))
def test_a_force_and_a_moment_on_a_link_load_the_joints_by_its_jacobian(number: int) -> None:
    m = motion(*ROBOTS[number])
    arrays, point = m.robot.tree.arrays, np.array([0.3, -0.2, 0.5])
    for place in moving_links(m.robot):
        H = m.columns(6)
        centre = place.R @ point + place.p
        contact.rows(place.axis, centre, arrays.parent, arrays.dof, m.S, m.R_W, m.p_W, H)
        J = m.reference.jacobian(place.name, point, m.q)
        # pin: angular rows, then linear ones; here force, then moment.
        assert worst(H, np.hstack([J[3:].T, J[:3].T])) < TOLERANCE


def added(m: Motion, place: LinkPlace, mass: float, point: Floats) -> Floats:
    """Return by how much inverse dynamics changes when a point mass is fixed to a link (its own axes)."""
    before = m.inverse_dynamics()
    model = m.reference.model
    frame = model.frames[model.getFrameId(place.name, pin.FrameType.BODY)]
    kept = pin.Inertia(model.inertias[frame.parentJoint])
    there = frame.placement.act(point)
    extra = pin.Inertia(mass, there, np.zeros((3, 3)))
    model.inertias[frame.parentJoint] = kept + extra
    after = m.inverse_dynamics()
    model.inertias[frame.parentJoint] = kept
    assert not np.array_equal(before, after)
    return after - before


@pytest.mark.parametrize("number", range(len(ROBOTS)))
def test_a_load_makes_the_residual_that_inverse_dynamics_lacks_without_it(number: int) -> None:
    # Judge: pin.rnea with and without a point mass. Its first moment is that about the centre, so half of the
    # difference of a mass before and one behind it; what the second moment adds is the same for both.
    m = motion(*ROBOTS[number])
    arrays, point, arm, mass = m.robot.tree.arrays, np.array([0.1, -0.05, 0.2]), 0.15, 1.7
    for place in moving_links(m.robot):
        H = m.columns(4)
        centre = place.R @ point + place.p
        load.rows(place.axis, centre, arrays.parent, arrays.dof, m.S, m.V, m.Vd, m.R_W, m.p_W, H)
        assert worst(H[:, 0], -added(m, place, mass, point) / mass) < TOLERANCE
        for k in range(3):
            step = arm * place.R.T[:, k]  # along an axis of the body frame
            ahead, behind = added(m, place, mass, point + step), added(m, place, mass, point - step)
            assert worst(H[:, 1 + k], -(ahead - behind) / (2.0 * mass * arm)) < TOLERANCE


@pytest.mark.parametrize("number", range(len(ROBOTS)))
def test_a_slipping_sensor_accelerates_beside_its_joint(number: int) -> None:
    # The column of pin's mass matrix: the change of its inverse dynamics per unit of acceleration.
    m = motion(*ROBOTS[number])
    here = m.inverse_dynamics()
    for row in range(m.robot.n - len(m.robot.joints), m.robot.n):
        H, slope = m.columns(4), np.random.default_rng(row).normal(size=(m.robot.n, m.robot.n))
        feature = np.full((m.robot.n, 3), 9.0)
        feature[row, 2] = 0.0
        position_sensor.rows(row, slope, m.M, feature, np.zeros(0, np.int64), m.robot.tree.armature, H)
        there = m._replace(a=m.a + np.eye(m.robot.n)[row]).inverse_dynamics()
        assert worst(H[:, 2], there - here) < 1e-9
        np.testing.assert_array_equal(H[:, 3], H[:, 2])
        np.testing.assert_array_equal(H[:, 0], slope[row])
        np.testing.assert_array_equal(H[:, 1], np.eye(m.robot.n)[row])


def test_friction_of_a_joint_that_moves_well_is_not_misread() -> None:
    # A slip turns the direction of a motion only where the joint is slower than the slip.
    feature, H = np.zeros((2, 3)), np.full((2, 6), math.nan)
    misread = []
    for speed in (0.0, position_sensor.SLOW, -4.0 * position_sensor.SLOW):
        feature[0, 2] = speed
        position_sensor.rows(0, np.zeros((2, 2)), np.eye(2), feature, np.zeros(0, np.int64), np.zeros(2), H)
        misread.append(H[0, 1])
        assert H[1, 1] == 0.0
    assert misread[0] == 1.0
    assert 0.3 < misread[1] < 0.6
    assert 0.0 <= misread[2] < 0.01


@pytest.mark.parametrize(
    ("kind", "expected"),
    [
        (actuator.TORQUE, -7.0),
        (actuator.COULOMB, 0.9),
        (actuator.VISCOUS, 1.3),
        (actuator.OFFSET, -1.0),
        (actuator.VARYING, 1.0),
    ],
)
def test_a_faulty_drive_leaves_a_residual_on_its_own_joint_alone(kind: int, expected: float) -> None:
    # A drive that gives (1 - loss) of 7 N m leaves -7 loss; added friction acts against the motion.
    feature, H = np.array([[3.0, 0.1, 0.2], [7.0, -0.9, -1.3], [1.0, 1.0, 1.0]]), np.full((3, 6), math.nan)
    actuator.rows(8 * 1 + kind, feature, H)
    np.testing.assert_array_equal(H[:, 0], [0.0, expected, 0.0])


def test_a_slipping_position_is_seen_at_both_sides_of_its_joint_and_adds_up() -> None:
    rng, armature = np.random.default_rng(2), np.array([0.3, 0.2, 0.1])
    slope, M = rng.normal(size=(2, 3, 3))
    whole, apart, still = np.full((3, 4), math.nan), np.full((5, 4), math.nan), np.zeros((5, 3))
    position_sensor.rows(2, slope, M, still, np.zeros(0, np.int64), armature, whole)
    position_sensor.rows(2, slope, M, still, np.array([0, 2]), armature, apart)
    np.testing.assert_array_equal(apart[4], [0.0, 1.0, 0.1, 0.1])  # friction and rotor of its own joint
    np.testing.assert_array_equal(apart[3], np.zeros(4))
    apart[2] += apart[4]
    np.testing.assert_allclose(apart[:3], whole, atol=1e-15)


@pytest.mark.parametrize(
    ("kind", "expected"),
    [
        (torque_sensor.OFFSET, [[1.0]]),
        (torque_sensor.SCALE, [[7.0]]),
        (torque_sensor.FROZEN, [[1.0, 7.0]]),
        (torque_sensor.NOISE, [[1.0]]),
    ],
)
def test_a_torque_sensor_that_reads_wrong_is_seen_at_both_sides_with_opposite_sign(
    kind: int, expected: list[list[float]]
) -> None:
    # The second of two sensors, at the third of three joints; 7 N m should pass it.
    feature, H = np.zeros((5, 3)), np.full((5, 2), math.nan)
    feature[2, 0] = 7.0
    torque_sensor.rows(8 * 1 + kind, np.array([0, 2]), feature, H)
    columns = len(expected[0])
    np.testing.assert_array_equal(H[[4], :columns], expected)
    np.testing.assert_array_equal(H[2, :columns], -H[4, :columns])
    np.testing.assert_array_equal(H[[0, 1, 3], :columns], np.zeros((3, columns)))
