"""The physics for the tests against another independent library (`pin`)."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import cache
from typing import Any

import numpy as np
import pinocchio
import pytest
from numpy.typing import NDArray

from replay.simulate import URDF
from tests.worlds.arm import (
    PERIOD_S,
    ArmWorld,
    Ball,
    Friction,
    Push,
    Recording,
    place,
    random_arm,
    random_motion,
    simulate,
)

Floats = NDArray[np.float64]

RIND = ArmWorld(
    URDF.read_text(encoding="utf-8"),
    random_motion(7, 1, 1.0, centre=(0.0, 0.4, 0.0, 1.3, 0.0, 0.7, 0.0)),
    armature=(0.62, 0.74, 0.30, 0.30, 0.10, 0.10, 0.055),
    friction=Friction((4.2, 5.0, 2.6, 2.6, 1.1, 1.1, 0.65), (2.4, 2.8, 1.4, 1.4, 0.55, 0.55, 0.3)),
)
STICKING = replace(RIND, friction=replace(RIND.friction, by_engine=True))
PUSHES = (
    Push(0.2, 0.3, "spar", (40.0, 30.0, -20.0), (0.0, 0.05, 0.1)),
    Push(0.4, 0.2, "beam", (0.0, 80.0, 10.0), (0.0, 0.0, 0.18), rise_s=0.02),
)
SMALL_BALL = {"radius_m": 0.03, "mass_kg": 0.5, "stiffness": 400.0, "damping": 10.0}


@cache
def pushed() -> Recording:
    return simulate(RIND, 0.8, PUSHES)


@cache
def sticking() -> Recording:
    return simulate(STICKING, 0.5, PUSHES[:1])


@cache
def colliding() -> Recording:
    x, y, z = place(RIND, RIND.motion.at(0.6)[0], "paddle", (0.1, 0.0, 0.042))
    return simulate(replace(RIND, ball=Ball((x, y, z), **SMALL_BALL)), 1.0)


class Judge:
    """The arm in `pin`; rotor inertia is added by hand."""

    def __init__(self, world: ArmWorld) -> None:
        self.model = pinocchio.buildModelFromXML(world.urdf)
        self.model.gravity.linear = np.array(world.gravity)
        self.data = self.model.createData()
        self.armature = np.broadcast_to(np.asarray(world.armature, dtype=float), self.model.nv)

    def q(self, angles: Floats) -> Floats:
        """Return positions as `pin` wants them: a continuous joint is cosine and sine."""
        sizes = self.model.nqs[1:]
        parts = [[np.cos(a), np.sin(a)] if size == 2 else [a] for a, size in zip(angles, sizes, strict=True)]
        return np.concatenate(parts)

    def torque(self, q: Floats, qd: Floats, qdd: Floats) -> Floats:
        """Return `M qdd + C qd + g`."""
        torque: Floats = pinocchio.rnea(self.model, self.data, self.q(q), qd, qdd) + self.armature * qdd
        return torque

    def push(self, q: Floats, push: Push, t: float) -> Floats:
        """Return `Jᵀ F` of a push at time t."""
        frame = self.model.getFrameId(push.link)
        J = pinocchio.computeFrameJacobian(
            self.model, self.data, self.q(q), frame, pinocchio.ReferenceFrame.LOCAL_WORLD_ALIGNED
        )
        pinocchio.updateFramePlacement(self.model, self.data, frame)
        arm = self.data.oMf[frame].rotation @ np.array(push.point_m)
        force = push.force_at(t)
        torque: Floats = J.T @ np.concatenate([force, np.cross(arm, force)])
        return torque

    def energy(self, q: Floats, qd: Floats) -> float:
        """Return kinetic and potential energy, rotors included."""
        energy = pinocchio.computeMechanicalEnergy(self.model, self.data, self.q(q), qd)
        return float(energy + 0.5 * self.armature @ qd**2)


def unexplained(world: ArmWorld, rows: Recording) -> Floats:
    """Return what the equation of motion leaves over at every row."""
    judge = Judge(world)
    needed = [judge.torque(*state) for state in zip(rows.q, rows.qd, rows.qdd, strict=True)]
    difference: Floats = np.array(needed) - rows.tau - rows.friction - rows.tau_ext
    return difference


@pytest.mark.parametrize(
    ("world", "record"),
    [(RIND, pushed), (RIND, colliding), (STICKING, sticking)],
    ids=["pushes", "ball", "sticking"],
)
def test_every_row_of_rind_fulfils_the_equation_of_motion(
    world: ArmWorld, record: Callable[[], Recording]
) -> None:
    # Judge: pin.rnea.
    rows = record()
    assert np.abs(unexplained(world, rows)).max() < 1e-9 * np.abs(rows.tau).max()


@pytest.mark.parametrize("seed", range(4))
def test_every_row_of_a_random_arm_that_hangs_fulfils_the_equation_of_motion(seed: int) -> None:
    # Judge: pin.rnea.
    n = 2 + 2 * seed
    world = ArmWorld(
        random_arm(n, seed), random_motion(n, seed), 0.1, Friction(0.5, 0.2), gravity=(0.5, 0.0, 9.8)
    )
    rows = simulate(world, 0.2, [Push(0.05, 0.1, f"link{n}", (10.0, -5.0, 8.0), (0.0, 0.02, 0.1))])
    assert np.abs(rows.tau_ext).max() > 0.1
    assert np.abs(unexplained(world, rows)).max() < 1e-9 * np.abs(rows.tau).max()


def test_external_torque_of_pushes_is_the_transposed_jacobian_times_the_force() -> None:
    # Judge: pin.computeFrameJacobian.
    rows, judge = pushed(), Judge(RIND)
    expected = np.zeros_like(rows.q)
    for k, t in enumerate(rows.t.tolist()):
        for push in PUSHES:
            expected[k] += judge.push(rows.q[k], push, t)
    np.testing.assert_allclose(rows.tau_ext, expected, atol=1e-9)
    assert np.abs(rows.tau_ext).max() > 10.0


def test_nothing_from_outside_acts_where_there_is_neither_push_nor_touch() -> None:
    rows = pushed()
    assert not rows.tau_ext[rows.t < 0.2].any()
    ball = colliding()
    touching = np.abs(ball.tau_ext).max(axis=1) > 0.0
    assert 0.0 < ball.t[touching][0] < 0.6
    assert np.abs(ball.tau_ext).max() > 1.0


def test_torque_between_two_rows_runs_about_straight() -> None:
    # The momentum of `pin` against the trapezoidal sum of the rows' torques over each millisecond.
    rows, judge = pushed(), Judge(RIND)
    zero = np.zeros(7)
    momentum = [
        judge.torque(q, zero, qd) - judge.torque(q, zero, zero) for q, qd in zip(rows.q, rows.qd, strict=True)
    ]
    drift = []
    for q, qd in zip(rows.q, rows.qd, strict=True):
        C = pinocchio.computeCoriolisMatrix(judge.model, judge.data, judge.q(q), qd)
        drift.append(C.T @ qd - judge.torque(q, zero, zero))
    u = rows.tau + rows.friction + rows.tau_ext + np.array(drift)
    rest = np.diff(momentum, axis=0) / PERIOD_S - 0.5 * (u[1:] + u[:-1])
    held = np.diff(momentum, axis=0) / PERIOD_S - u[:-1]
    scale = np.abs(rows.tau).max()
    assert np.sqrt(np.mean(rest**2)) < 2e-3 * scale
    assert np.sqrt(np.mean(rest**2)) < 0.5 * np.sqrt(np.mean(held**2))


def test_energy_changes_by_the_work_of_all_torques() -> None:
    # Judge: pin.computeMechanicalEnergy.
    rows, judge = pushed(), Judge(RIND)
    energy = np.array([judge.energy(q, qd) for q, qd in zip(rows.q, rows.qd, strict=True)])
    power = ((rows.tau + rows.friction + rows.tau_ext) * rows.qd).sum(axis=1)
    work = np.concatenate([[0.0], np.cumsum(0.5 * (power[1:] + power[:-1]) * PERIOD_S)])
    np.testing.assert_allclose(energy - energy[0], work, atol=5e-3 * np.ptp(energy))


def test_friction_opposes_motion_and_has_the_stated_size() -> None:
    rows = pushed()
    expected = -np.asarray(RIND.friction.coulomb) * np.tanh(rows.qd / 0.01)
    np.testing.assert_allclose(
        rows.friction - expected, -np.asarray(RIND.friction.viscous) * rows.qd, atol=1e-12
    )
    moving = np.abs(sticking().qd) > 0.1
    sizes = np.asarray(RIND.friction.coulomb) + np.asarray(RIND.friction.viscous) * np.abs(sticking().qd)
    np.testing.assert_allclose(np.abs(sticking().friction)[moving], sizes[moving], rtol=0.02)


def test_the_arm_follows_its_motion() -> None:
    rows = pushed()
    wanted = np.array([RIND.motion.at(t)[0] for t in rows.t.tolist()])
    assert np.abs(rows.q - wanted).max() < 0.05
    assert np.abs(rows.q - wanted)[rows.t < 0.2].max() < 2e-3


def test_a_motion_gives_its_own_derivatives() -> None:
    motion, h = random_motion(3, 5, speed=1.2), 1e-5
    for t in (0.0, 0.7, 3.1):
        (before, v_before, _), (_, v, a), (after, v_after, _) = (
            motion.at(t - h),
            motion.at(t),
            motion.at(t + h),
        )
        np.testing.assert_allclose((after - before) / (2 * h), v, atol=1e-8)
        np.testing.assert_allclose((v_after - v_before) / (2 * h), a, atol=1e-7)
        assert np.abs(v).max() <= 1.2


def test_a_point_on_a_link_is_placed_where_the_reference_places_it() -> None:
    # Judge: pin.framesForwardKinematics.
    judge, q = Judge(RIND), np.array([0.3, -0.4, 0.5, 1.1, -0.6, 0.7, 2.0])
    pinocchio.framesForwardKinematics(judge.model, judge.data, q)
    expected = judge.data.oMf[judge.model.getFrameId("fork")].act(np.array([0.1, 0.2, 0.3]))
    np.testing.assert_allclose(place(RIND, q, "fork", (0.1, 0.2, 0.3)), expected, atol=1e-12)


def test_running_into_a_joint_limit_is_an_error() -> None:
    world = replace(RIND, motion=replace(RIND.motion, centre=np.array([0.0, 0.4, 0.0, 2.29, 0.0, 0.7, 0.0])))
    with pytest.raises(RuntimeError, match="limit"):
        simulate(world, 2.0)


def test_the_same_world_gives_the_same_bytes() -> None:
    first, second = simulate(RIND, 0.05, PUSHES), simulate(RIND, 0.05, PUSHES)
    assert first.q.tobytes() == second.q.tobytes()
    assert first.tau.tobytes() == second.tau.tobytes()


def test_a_push_swells_and_fades_over_its_rise_time() -> None:
    push: Any = Push(1.0, 0.5, "beam", (0.0, 0.0, 10.0), rise_s=0.04)
    sizes = [float(np.linalg.norm(push.force_at(t))) for t in (0.999, 1.02, 1.04, 1.3, 1.46, 1.48, 1.501)]
    np.testing.assert_allclose(sizes, [0.0, 5.0, 10.0, 10.0, 10.0, 5.0, 0.0], atol=1e-9)
