"""M, C, g and Jacobians against the rigid-body library `pin` (an independent implementation)."""

from __future__ import annotations

import numpy as np
import pinocchio as pin
import pytest
from numpy.typing import NDArray

from monitor.robot.robot import Robot
from monitor.robot.tree import Base, build_tree
from monitor.robot.urdf import Description, parse_urdf
from tests.reference.random_trees import random_state, random_urdf

Floats = NDArray[np.float64]

GRAVITY = np.array([1.5, -2.0, -9.3])
TOLERANCE = 1e-10
CASES = [(seed, joints) for joints in (1, 2, 3, 5, 8, 13, 20, 30, 40) for seed in range(3)]


class PinRobot:
    """The same URDF in pin, folded onto our q and v.

    pin knows no followers here: its full model is reduced by the constant matrix G with v_pin = G v:
    M = Gᵀ M G, C = Gᵀ C G, g = Gᵀ g. Joints are matched by name, since pin sorts children by name.
    """

    def __init__(self, urdf: str, description: Description, robot: Robot) -> None:
        self.floating = robot.tree.base == "floating"
        free_flyer = [pin.JointModelFreeFlyer()] if self.floating else []
        self.model = pin.buildModelFromXML(urdf, *free_flyer)
        self.model.gravity.linear = GRAVITY
        self.data = self.model.createData()
        self.joints = {joint.name: joint for joint in description.joints if joint.moves}
        self.dof = {name: robot.n - len(robot.joints) + k for k, name in enumerate(robot.joints)}
        self.G = np.zeros((self.model.nv, robot.n))
        if self.floating:
            # pin has the linear velocity of the free flyer first.
            self.G[0:3, 3:6] = self.G[3:6, 0:3] = np.eye(3)
        for name in self.joints:
            leader, multiplier, _ = self.leader(name)
            self.G[self.model.joints[self.model.getJointId(name)].idx_v, self.dof[leader]] = multiplier

    def leader(self, name: str) -> tuple[str, float, float]:
        mimic = self.joints[name].mimic
        return (name, 1.0, 0.0) if mimic is None else (mimic.joint, mimic.multiplier, mimic.offset)

    def positions(self, q: Floats) -> Floats:
        result: Floats = pin.neutral(self.model)
        if self.floating:
            result[:3], result[3:6], result[6] = q[:3], q[4:7], q[3]
        for name, joint in self.joints.items():
            leader, multiplier, offset = self.leader(name)
            x = multiplier * q[self.dof[leader] + self.floating] + offset
            index = self.model.joints[self.model.getJointId(name)].idx_q
            if joint.kind == "continuous":
                result[index : index + 2] = np.cos(x), np.sin(x)
            else:
                result[index] = x
        return result

    def dynamics(self, q: Floats, v: Floats) -> tuple[Floats, Floats, Floats]:
        q, v = self.positions(q), self.G @ v
        upper = np.triu(pin.crba(self.model, self.data, q))
        M = upper + np.triu(upper, 1).T
        C = pin.computeCoriolisMatrix(self.model, self.data, q, v)
        g = pin.computeGeneralizedGravity(self.model, self.data, q)
        return self.G.T @ M @ self.G, self.G.T @ C @ self.G, self.G.T @ g

    def jacobian(self, link: str, point: Floats, q: Floats) -> Floats:
        q = self.positions(q)
        frame = self.model.getFrameId(link, pin.FrameType.BODY)
        J = pin.computeFrameJacobian(self.model, self.data, q, frame, pin.LOCAL_WORLD_ALIGNED)
        J = J.reshape(6, -1) @ self.G  # pin returns a vector where there is one joint
        pin.updateFramePlacement(self.model, self.data, frame)
        arm = self.data.oMf[frame].rotation @ point
        return np.vstack([J[3:], J[:3] - np.cross(arm, J[3:].T).T])


def _pair(seed: int, joints: int, base: Base) -> tuple[Robot, PinRobot, Floats, Floats]:
    urdf = random_urdf(seed, joints)
    description = parse_urdf(urdf)
    robot = Robot(build_tree(description, base), GRAVITY)
    return robot, PinRobot(urdf, description, robot), *random_state(seed, base, len(robot.joints))


def _error(ours: Floats, theirs: Floats, scale: float = 0.0) -> float:
    return float(np.abs(ours - theirs).max() / max(np.abs(theirs).max(), scale))


@pytest.mark.parametrize("base", ["fixed", "floating"])
@pytest.mark.parametrize(("seed", "joints"), CASES)
def test_dynamics_of_random_trees_agree_with_pin(seed: int, joints: int, base: Base) -> None:
    robot, reference, q, v = _pair(seed, joints, base)
    ours, theirs = robot.dynamics(q, v), reference.dynamics(q, v)
    assert _error(ours.M, theirs[0]) < TOLERANCE
    # C vanishes for a single joint; a thousandth of M times a speed is where it counts as vanished.
    vanished = 1e-3 * np.abs(theirs[0]).max() * np.abs(v).max()
    assert _error(ours.C, theirs[1], vanished) < TOLERANCE
    assert _error(ours.g, theirs[2]) < TOLERANCE


@pytest.mark.parametrize("base", ["fixed", "floating"])
@pytest.mark.parametrize(("seed", "joints"), CASES[::4])
def test_jacobians_of_every_link_agree_with_pin(seed: int, joints: int, base: Base) -> None:
    robot, reference, q, _ = _pair(seed, joints, base)
    point = np.array([0.3, -0.2, 0.5])
    for link in robot.tree.links:
        theirs = reference.jacobian(link.name, point, q)
        assert _error(robot.jacobian(link.name, point, q), theirs, 1.0) < TOLERANCE


def test_the_cases_hold_every_kind_of_joint_followers_branches_and_massless_links() -> None:
    descriptions = [parse_urdf(random_urdf(*case)) for case in CASES]
    joints = [joint for description in descriptions for joint in description.joints]
    assert {joint.kind for joint in joints} == {"revolute", "continuous", "prismatic", "fixed"}
    assert any(joint.mimic for joint in joints)
    assert any(link.inertial is None for description in descriptions for link in description.links)
    parents = [[joint.parent for joint in description.joints] for description in descriptions]
    assert any(len(set(names)) < len(names) for names in parents)
    assert any(names != sorted(names) for names in parents)
