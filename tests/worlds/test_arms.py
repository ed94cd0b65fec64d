"""The simulated sessions of arms against `pin`, and against what they say of themselves."""

from __future__ import annotations

import math
import warnings
from collections.abc import Callable
from dataclasses import fields
from functools import cache
from itertools import pairwise
from pathlib import Path

import numpy as np
import pinocchio
import pytest
from numpy.typing import NDArray

from monitor.robot.urdf import read_urdf
from tests.worlds.arms import fault_free, session, trial
from tests.worlds.engine import PERIOD_S
from tests.worlds.happenings import Fault, Grip, Happenings, Misreading, SignalFault, actuator_fault
from tests.worlds.programs import TOP_ACCELERATION, work
from tests.worlds.robots import ENCODER_STEP_RAD, JOINTS, LINK_TORQUE_SD_SHARE, robot
from tests.worlds.sessions import HELD_OUT_FROM, Exact, Truth, WorldSession, held_out

Floats = NDArray[np.float64]

ROBOT = 1
PHYSICS = ("rigid", "elastic", "dip")  # the sensed world moves as the rigid one
SECONDS = 6.0
# Start and end of what is put into short sessions, away from the flanks.
BEGIN_S, END_S = 2.0, 5.0
FULL = slice(2100, 4900)
# Time between happenings.
APART_S = 6.0


@cache
def short(world: str, *faults: Fault) -> WorldSession:
    return session(world, ROBOT, 3, SECONDS, lambda program, rng: Happenings(faults=list(faults)), exact=True)


def faulty(world: str, detail: str, joint: int, size: float, truthful: bool | None = None) -> WorldSession:
    return short(world, actuator_fault(robot(ROBOT), detail, joint, BEGIN_S, END_S, size, truthful=truthful))


@cache
def long(world: str, kind: str | None, seed: int = 2, seconds: float = 30.0) -> WorldSession:
    return trial(world, ROBOT, seed, kind, seconds, exact=True)


def exact(told: WorldSession) -> Exact:
    assert told.exact is not None
    return told.exact


class Judge:
    """The arm in `pin`."""

    def __init__(self, urdf: str) -> None:
        self.model = pinocchio.buildModelFromXML(urdf)
        self.data = self.model.createData()

    def torque(self, q: Floats, qd: Floats, qdd: Floats) -> Floats:
        """Return `M qdd + C qd + g` of rows (T,n), rotors left out."""
        rows = [pinocchio.rnea(self.model, self.data, *state) for state in zip(q, qd, qdd, strict=True)]
        return np.array(rows)

    def torque_of(self, q: Floats, link: str, point: Floats, force: Floats) -> Floats:
        """Return `Jᵀ F` of a force in world axes at a point in link axes."""
        frame = self.model.getFrameId(link)
        J = pinocchio.computeFrameJacobian(
            self.model, self.data, q, frame, pinocchio.ReferenceFrame.LOCAL_WORLD_ALIGNED
        )
        pinocchio.updateFramePlacement(self.model, self.data, frame)
        arm = self.data.oMf[frame].rotation @ point
        torque: Floats = J.T @ np.concatenate([force, np.cross(arm, force)])
        return torque


def left_over(told: WorldSession, every: int = 5) -> Floats:
    """Return what the equation of motion of the true robot leaves over (T/every, n)."""
    x, rows = exact(told), slice(None, None, every)
    needed = Judge(robot(told.robot_seed).true_urdf).torque(x.q[rows], x.qd[rows], x.qdd[rows])
    needed += robot(told.robot_seed).armature * x.motor_qdd[rows]
    difference: Floats = needed - x.tau[rows] - x.friction[rows] - told.unexplained[rows]
    return difference


def index(truth: Truth) -> int:
    assert truth.joint is not None
    return int(truth.joint.removeprefix("joint")) - 1


# --- the physics


# The rotors of the elastic world have a milligram of their own, and the engine's solver of dry friction a
# tolerance; the law of friction is exact.
@pytest.mark.parametrize(("world", "tolerance"), [("rigid", 1e-8), ("elastic", 1e-6), ("dip", 1e-12)])
@pytest.mark.parametrize("kind", ["contact", "actuator", "signal", "position-sensor", "contact-in-fault"])
def test_every_row_fulfils_the_equation_of_motion(world: str, kind: str, tolerance: float) -> None:
    # Judge: pin.rnea with the true inertias.
    told = long(world, kind)
    assert told.truths
    assert np.abs(left_over(told)).max() < tolerance * np.abs(exact(told).tau).max()


@pytest.mark.parametrize("world", ["rigid", "dip"])
def test_collisions_fulfil_the_equation_of_motion_and_are_forces_at_the_stated_points(world: str) -> None:
    # Judge: pin.rnea and pin.computeFrameJacobian.
    told = long(world, "collision")
    assert told.truths
    scale = np.abs(exact(told).tau).max()
    assert np.abs(left_over(told)).max() < 1e-6 * scale  # the tolerance of the engine's solver
    judge = Judge(told.urdf)
    for truth in told.truths:
        rows = slice(round(truth.start_s / PERIOD_S), round(truth.end_s / PERIOD_S))
        k = rows.start + int(np.linalg.norm(told.force[rows], axis=1).argmax())
        assert truth.point_m is not None
        assert truth.link is not None
        np.testing.assert_allclose(told.force[k], truth.force_n)
        torque = judge.torque_of(exact(told).q[k], truth.link, np.array(truth.point_m), told.force[k])
        # The ball may touch a neighbour link lightly too.
        np.testing.assert_allclose(torque, told.unexplained[k], atol=1e-3 * np.abs(torque).max())
        assert np.abs(torque).max() > 0.3


@pytest.mark.parametrize("world", PHYSICS)
def test_prescribed_contacts_are_forces_at_the_stated_points(world: str) -> None:
    # Judge: pin.computeFrameJacobian.
    told, judge, seen = long(world, "contact"), Judge(robot(ROBOT).urdf), 0
    for truth in told.truths:
        assert truth.point_m is not None
        assert truth.link is not None
        for k in range(math.ceil(truth.start_s / PERIOD_S), int(truth.end_s / PERIOD_S), 7):
            torque = judge.torque_of(exact(told).q[k], truth.link, np.array(truth.point_m), told.force[k])
            np.testing.assert_allclose(torque, told.unexplained[k], atol=1e-9)
            seen += 1
        sizes = np.linalg.norm(told.force, axis=1)[
            round(truth.start_s / PERIOD_S) : round(truth.end_s / PERIOD_S)
        ]
        assert 0.97 * truth.size < sizes.max() <= truth.size * (1.0 + 1e-12)
    assert seen > 20


def test_a_load_is_a_mass_at_the_last_link() -> None:
    # Judge: pin.rnea of the arm with the mass added to its last link.
    grip = Grip(BEGIN_S, END_S, 0.1, 1.3, (0.02, -0.03, 0.2))
    told = session("dip", ROBOT, 3, SECONDS, lambda program, rng: Happenings(grips=[grip]), exact=True)
    (truth,) = told.truths
    assert (truth.kind, truth.size, truth.unit) == ("load", 1.3, "kg")
    judge, x = Judge(robot(ROBOT).true_urdf), exact(told)
    block = pinocchio.Inertia(grip.mass_kg, np.array(grip.com_m), grip.mass_kg * 6e-4 * np.eye(3))
    before = judge.torque(x.q[FULL], x.qd[FULL], x.qdd[FULL])
    judge.model.inertias[JOINTS] += block
    loaded = judge.torque(x.q[FULL], x.qd[FULL], x.qdd[FULL])
    rest = loaded + robot(ROBOT).armature * x.motor_qdd[FULL] - x.tau[FULL] - x.friction[FULL]
    assert np.abs(rest).max() < 1e-9
    assert not told.unexplained.any()
    shares = np.abs(loaded - before).max(axis=0) / robot(ROBOT).rated
    assert truth.effect == pytest.approx(shares.max(), rel=0.4)  # its weight, without its inertia


def test_dry_friction_sticks_in_the_rigid_world() -> None:
    told = long("rigid", "contact")
    x = exact(told)
    still = np.abs(x.qd) < 1e-4
    held = np.abs(x.friction) > 0.2 * robot(ROBOT).coulomb
    assert (still & held).mean() > 0.05
    assert np.abs(x.friction[np.abs(x.qd) > 0.05]).min() > 0.0


def test_friction_falls_with_speed_only_in_the_world_with_a_dip() -> None:
    for world, falls in (("rigid", False), ("dip", True)):
        x = exact(long(world, "contact"))
        slow, faster = [], []
        for i in range(JOINTS):
            speed, size = np.abs(x.qd[:, i]), np.abs(x.friction[:, i])
            slow.append(size[(speed > 0.02) & (speed < 0.04)].mean())
            faster.append(size[(speed > 0.25) & (speed < 0.35)].mean())
        assert (np.array(slow) > np.array(faster)).all() == falls


def test_friction_differs_by_day_and_falls_while_the_arm_gets_warm() -> None:
    # Least squares: |friction| = c (1 + drift t) + b (1 + drift t) |v| while a joint moves.
    arm, days = robot(ROBOT), []
    for seed in range(2):
        told = session("rigid", ROBOT, seed, 40.0, lambda program, rng: Happenings(), exact=True)
        for i in range(JOINTS):
            speed, size = np.abs(exact(told).qd[:, i]), np.abs(exact(told).friction[:, i])
            moving = speed > 0.05
            columns = [np.ones(len(speed)), told.t, speed, speed * told.t]
            fit, *_ = np.linalg.lstsq(np.stack(columns, axis=1)[moving], size[moving], rcond=None)
            days.append((fit[0] / arm.coulomb[i], fit[2] / arm.viscous[i]))
            assert -0.06 / 120 * 1.2 < fit[1] / fit[0] < 1e-5
            assert -0.15 / 120 * 1.2 < fit[3] / fit[2] < 0.0
    coulomb, viscous = np.array(days).T
    assert ((coulomb > 0.9) & (coulomb < 1.1 * 1.06)).all()
    assert ((viscous > 0.9) & (viscous < 1.1 * 1.15)).all()
    assert np.ptp(coulomb) > 0.05


def test_elastic_joints_twist_by_their_torque_and_their_backlash() -> None:
    # Judge: pin.rnea for the torque that the gear passes on; spring law with a dead zone.
    told, arm = long("elastic", "signal"), robot(ROBOT)
    x, rows = exact(told), slice(1000, 8000)
    passed_on = Judge(arm.true_urdf).torque(x.q[rows], x.qd[rows], x.qdd[rows])
    motor = session("elastic", ROBOT, 2, 8.0, lambda program, rng: Happenings(), exact=True)
    twist = motor.q[rows] - exact(motor).q[rows]
    np.testing.assert_allclose(x.q[rows], exact(motor).q[rows], atol=1e-12)
    spring = np.sign(twist) * np.maximum(np.abs(twist) - arm.backlash / 2, 0.0) * arm.stiffness
    for i in range(6):  # the last joint turns about its own axis and passes on next to nothing
        slope, _ = np.polyfit(passed_on[:, i], spring[:, i], 1)
        assert slope == pytest.approx(1.0, abs=0.05)
    assert np.abs(twist).max() > 1e-3


# --- sensors


@pytest.mark.parametrize("world", ["rigid", "dip"])
def test_sensors_have_the_stated_noise(world: str) -> None:
    told = short(world)
    x, arm = exact(told), robot(ROBOT)
    assert pytest.approx(2.0 * math.pi / 2**17) == ENCODER_STEP_RAD
    np.testing.assert_allclose(told.q / ENCODER_STEP_RAD, np.round(told.q / ENCODER_STEP_RAD), atol=1e-6)
    assert np.abs(told.q - x.q).max() <= 0.5 * ENCODER_STEP_RAD * (1 + 1e-9)
    # Standard error of a standard deviation of 6000 samples: 0.9 %.
    np.testing.assert_allclose((told.qd - x.qd).std(axis=0), 0.007, rtol=0.05)
    np.testing.assert_allclose((told.tau - x.tau).std(axis=0), 0.005 * arm.rated, rtol=0.05)
    assert np.abs((told.tau - x.tau).mean(axis=0) / arm.rated).max() < 5 * 0.005 / math.sqrt(len(told.t))


def test_signal_faults_are_in_the_readings_and_nowhere_else() -> None:
    signals = [
        SignalFault("jump", 1, 1.0, 1.5, 0.05, "rad"),
        SignalFault("frozen", 2, 2.0, 2.4, 0.4, "s"),
        SignalFault("contradiction", 3, 3.0, 3.5, 0.3, "rad/s"),
        SignalFault("noise", 4, 4.0, 4.4, 0.1, "share of rated"),
        SignalFault("gap", None, 5.0, 5.02, 0.02, "s"),
        SignalFault("duplicate", None, 5.5, 5.51, 0.01, "s"),
    ]
    told = session("rigid", ROBOT, 3, SECONDS, lambda program, rng: Happenings(signals=signals), exact=True)
    clean, x = short("rigid"), exact(told)
    assert not told.unexplained.any()
    np.testing.assert_array_equal(np.setdiff1d(clean.seq, told.seq), np.arange(5000, 5020))
    twice, counts = np.unique(told.seq, return_counts=True)
    np.testing.assert_array_equal(twice[counts == 2], np.arange(5500, 5510))
    np.testing.assert_array_equal(told.t, told.seq * PERIOD_S)
    np.testing.assert_array_equal(x.q, exact(clean).q[told.seq])
    rows = slice(0, 5000)
    wrong = np.abs(told.q[rows] - clean.q[rows]) > 0.0
    np.testing.assert_allclose(told.q[1000:1500, 1] - x.q[1000:1500, 1], 0.05, atol=ENCODER_STEP_RAD)
    assert np.ptp(told.q[2000:2400, 2]) == 0.0
    assert not np.delete(wrong, [1, 2], axis=1).any()
    np.testing.assert_allclose(told.qd[3000:3500, 3] - clean.qd[3000:3500, 3], 0.3, atol=1e-6)
    extra = (told.tau - clean.tau[told.seq])[4000:4400, 4] / robot(ROBOT).rated[4]
    assert extra.std() == pytest.approx(0.1, rel=0.2)


def test_an_offset_of_a_position_sensor_misleads_the_drive_too() -> None:
    told = long("rigid", "position-sensor")
    for truth in told.truths:
        i, k = index(truth), round((0.5 * (truth.start_s + truth.end_s)) / PERIOD_S)
        off = told.q[k, i] - exact(told).q[k, i]
        assert off == pytest.approx(truth.size, abs=ENCODER_STEP_RAD)
    assert not told.unexplained.any()


# --- faults of drives, each by its own law


@pytest.mark.parametrize("world", PHYSICS)
def test_a_torque_loss_takes_its_share(world: str) -> None:
    told = faulty(world, "torque-loss", 1, 0.3)
    np.testing.assert_allclose(told.unexplained[FULL, 1], -0.3 * exact(told).tau[FULL, 1], atol=1e-9)
    assert not np.delete(told.unexplained, 1, axis=1).any()
    assert not told.unexplained[: round(BEGIN_S / PERIOD_S)].any()
    assert not told.unexplained[round(END_S / PERIOD_S) + 12 :].any()


@pytest.mark.parametrize("world", PHYSICS)
def test_added_dry_friction_opposes_the_motion_by_its_size(world: str) -> None:
    told, arm = faulty(world, "coulomb-friction", 3, 2.0), robot(ROBOT)
    added = told.unexplained[FULL, 3]
    size = 2.0 * arm.coulomb[3]
    # The engine's dry friction is a soft constraint: it may fall short by a little.
    assert np.abs(added).max() <= size * 1.001
    speed = motor_speed(told, 3)[FULL]
    moving = np.abs(speed) > 0.05
    np.testing.assert_allclose(added[moving], -np.sign(speed[moving]) * size, rtol=0.02)


def motor_speed(told: WorldSession, i: int) -> Floats:
    """Return the speed of a joint smoothed over 15 ms, motor side."""
    return np.convolve(told.qd[:, i], np.ones(15) / 15, "same")


@pytest.mark.parametrize("world", ["rigid", "dip"])
def test_added_viscous_friction_grows_with_speed(world: str) -> None:
    told, arm = faulty(world, "viscous-friction", 0, 1.5), robot(ROBOT)
    expected = -1.5 * arm.viscous[0] * exact(told).qd[FULL, 0]
    np.testing.assert_allclose(told.unexplained[FULL, 0], expected, atol=1e-9)


@pytest.mark.parametrize("world", PHYSICS)
def test_an_offset_is_constant_and_a_ripple_turns_with_the_joint(world: str) -> None:
    rated = robot(ROBOT).rated[2]
    offset = faulty(world, "offset", 2, -0.1)
    np.testing.assert_allclose(offset.unexplained[FULL, 2], -0.1 * rated, atol=1e-9)
    ripple = faulty(world, "ripple", 2, 0.06)
    angle = ripple.q[FULL, 2]  # to half a step of the encoder
    np.testing.assert_allclose(ripple.unexplained[FULL, 2] / rated, 0.06 * np.sin(30.0 * angle), atol=1e-4)


def test_a_drive_with_an_open_circuit_says_so_or_does_not() -> None:
    for truthful in (False, True):
        told = faulty("rigid", "open-circuit", 6, 1.0, truthful)
        begin = round(BEGIN_S / PERIOD_S) + 12
        end = min(len(told.t), FULL.stop)
        command, said = told.tau_cmd[begin:end, 6], exact(told).tau[begin:end, 6]
        lost = told.unexplained[begin:end, 6]
        assert np.abs(command).max() > 0.5
        np.testing.assert_allclose(said, 0.0 if truthful else command, atol=1e-5)
        np.testing.assert_allclose(lost, 0.0 if truthful else -command, atol=1e-5)
        (truth,) = told.truths
        assert truth.truthful == truthful


@pytest.mark.parametrize("world", PHYSICS)
def test_a_stuck_joint_stands_until_the_protective_stop(world: str) -> None:
    fault = actuator_fault(robot(ROBOT), "stuck", 0, 2.4, math.inf, 3.0)
    told = short(world, fault)
    after = slice(2500, len(told.t))
    assert np.abs(told.qd[after, 0]).mean() < 0.01
    assert told.stopped
    assert len(told.t) < SECONDS / PERIOD_S
    assert told.truths[0].end_s == pytest.approx(len(told.t) * PERIOD_S)
    assert np.abs(told.unexplained[after, 0]).max() > 0.3 * robot(ROBOT).rated[0]


def test_faults_fade_to_nothing_and_the_arm_goes_on() -> None:
    told, clean = faulty("dip", "offset", 2, -0.1), short("dip")
    assert len(told.t) == len(clean.t)
    assert np.abs(exact(told).q[-100:] - exact(clean).q[-100:]).max() < 5e-3


# --- what the sessions say of themselves

MIXED = [
    ("rigid", None, 0),
    ("dip", None, 3),
    ("rigid", "contact-in-fault", 1),
    ("elastic", "contact-in-fault", 2),
]


@pytest.mark.parametrize(("world", "kind", "seed"), MIXED)
def test_truths_agree_with_the_unexplained_torque(world: str, kind: str | None, seed: int) -> None:
    told, arm = long(world, kind, seed, 60.0), robot(ROBOT)
    known = np.zeros(len(told.t), dtype=bool)
    for truth in told.truths:
        if truth.kind in ("contact", "actuator"):
            known |= (told.t > truth.start_s - 1e-9) & (told.t < truth.end_s + 2 * PERIOD_S)
    assert not told.unexplained[~known].any()
    assert not told.force[~known].any()
    shares = np.abs(told.unexplained) / arm.rated
    for truth in told.truths:
        if truth.kind != "contact" and truth.kind != "actuator":
            continue
        alone = truth.during is None and all(
            told.truths[other.during] is not truth for other in told.truths if other.during is not None
        )
        rows = (told.t >= truth.start_s) & (told.t < truth.end_s)
        if alone:
            assert truth.effect == pytest.approx(shares[rows].max(), rel=1e-9)
            if truth.passes_s is not None:
                early = (told.t >= truth.start_s) & (told.t < truth.passes_s - PERIOD_S / 2)
                assert shares[early].max(initial=0.0) < 0.03
                at = int(np.argmin(np.abs(told.t - truth.passes_s)))
                assert shares[at].max() >= 0.03


@pytest.mark.parametrize(("world", "kind", "seed"), MIXED)
def test_happenings_are_far_apart_except_within_a_lasting_fault(
    world: str, kind: str | None, seed: int
) -> None:
    told = long(world, kind, seed, 60.0)
    assert len(told.truths) >= 3
    for first, second in pairwise(told.truths):
        if second.during is None:
            assert second.start_s - first.end_s >= APART_S
        else:
            around = told.truths[second.during]
            assert around.kind == "actuator"
            assert second.kind == "contact"
            assert second.start_s - max(around.start_s, first.start_s) >= APART_S
    assert told.truths[0].start_s >= 8.0


def test_contacts_have_the_stated_range_of_effects_on_all_links() -> None:
    effects, links = [], set()
    for seed in range(4):
        for truth in trial("dip", seed % 3, seed, "contact", 60.0).truths:
            assert truth.effect is not None
            assert truth.size < 350.1
            effects.append(truth.effect)
            links.add(truth.link)
    assert len(effects) > 20
    assert len(links) >= 6
    assert 0.015 < min(effects) < 0.04
    assert 0.2 < max(effects) < 0.5


def test_nothing_happens_in_fault_free_work_and_the_arm_works_at_speed() -> None:
    for world in PHYSICS:
        told = fault_free(world, ROBOT, 4, 12.0)
        assert told.truths == ()
        assert not told.stopped
        assert not told.unexplained.any()
        assert 0.9 < np.abs(told.qd).max() < 2.3
        assert (np.abs(told.tau_cmd) < robot(ROBOT).peak).all()


# --- torque sensors at the links


def test_a_torque_sensor_reads_what_moves_its_links_and_is_wrong_as_stated() -> None:
    # Judge: pin.rnea with the true inertias and no rotors, less the torque from outside.
    wrong = (
        Misreading("offset", 1, 2.0, 3.0, 0.01, 0.1, "share of rated"),
        Misreading("scale", 3, 2.0, 3.0, 0.01, -0.4, "share"),
        Misreading("frozen", 5, 2.0, 3.0, 0.005, 1.0, "share"),
    )
    told = session("sensed", ROBOT, 3, 4.0, lambda program, rng: Happenings(misreadings=list(wrong)), True)
    x, rated = exact(told), robot(ROBOT).rated
    assert told.tau_link is not None
    needed = Judge(robot(ROBOT).true_urdf).torque(x.q, x.qd, x.qdd) - told.unexplained
    spread = (told.tau_link - needed)[:1900] / rated
    np.testing.assert_allclose(spread.std(axis=0), LINK_TORQUE_SD_SHARE, rtol=0.1)
    assert np.abs(spread.mean(axis=0)).max() < 5e-4
    during = slice(2050, 2950)
    read, truly = told.tau_link[during], needed[during]
    tolerance = 6.0 * LINK_TORQUE_SD_SHARE * rated
    assert np.abs(read[:, 1] - truly[:, 1] - 0.1 * rated[1]).max() < tolerance[1]
    assert np.abs(read[:, 3] - 0.6 * truly[:, 3]).max() < tolerance[3]
    assert np.abs(read[:, 5] - needed[2000, 5]).max() < tolerance[5]
    assert [(truth.kind, truth.detail, index(truth)) for truth in told.truths] == [
        ("torque-sensor", one.detail, one.joint) for one in wrong
    ]


# --- robots


@pytest.mark.parametrize("seed", range(4))
def test_robots_are_plausible_and_their_description_is_a_little_wrong(seed: int) -> None:
    # Judge: pin for inertias and gravity.
    arm = robot(seed)
    said, true = (pinocchio.buildModelFromXML(urdf) for urdf in (arm.urdf, arm.true_urdf))
    for a, b in zip(list(said.inertias)[1:], list(true.inertias)[1:], strict=True):
        assert 0.0299 < abs(b.mass / a.mass - 1.0) < 0.0801
        assert (np.abs(b.lever / a.lever - 1.0) < 0.0801).all()
        ratio = np.diag(b.inertia) / np.diag(a.inertia)
        assert ((np.abs(ratio - 1.0) > 0.0299) & (np.abs(ratio - 1.0) < 0.0801)).all()
    masses = sum(inertia.mass for inertia in said.inertias)
    assert 12.0 <= masses <= 35.0 + 1e-9
    assert 0.8 <= sum(link.length_m for link in arm.links[1:]) <= 1.35
    data, rng = said.createData(), np.random.default_rng(5)
    for _ in range(50):
        q = np.array([0.0, 0.5, 0.0, 1.2, 0.0, 0.8, 0.0]) + 0.7 * rng.uniform(-1.0, 1.0, JOINTS)
        gravity = pinocchio.computeGeneralizedGravity(said, data, q)
        assert (np.abs(gravity) < 0.62 * arm.rated).all()
    assert ((arm.coulomb > 0.029 * arm.rated) & (arm.coulomb < 0.081 * arm.rated)).all()


def test_descriptions_are_read_without_a_complaint(tmp_path: Path) -> None:
    path = tmp_path / "arm.urdf"
    path.write_text(robot(0).urdf, encoding="utf-8")
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        read_urdf(path)


# --- seeds and the cache


def same(first: WorldSession, second: WorldSession) -> bool:
    for field in fields(WorldSession):
        a, b = getattr(first, field.name), getattr(second, field.name)
        if isinstance(a, np.ndarray):
            if a.tobytes() != b.tobytes():
                return False
        elif field.name not in ("exact",) and a != b:
            return False
    return True


@pytest.mark.parametrize("make", [fault_free, trial])
def test_seeds_decide_everything_and_a_cached_session_equals_a_fresh_one(
    make: Callable[..., WorldSession], tmp_path: Path
) -> None:
    fresh = make("rigid", 0, 7, seconds=12.0)
    stored = make("rigid", 0, 7, seconds=12.0, folder=tmp_path)
    assert len(list(tmp_path.iterdir())) == 1
    read = make("rigid", 0, 7, seconds=12.0, folder=tmp_path)
    assert same(fresh, stored)
    assert same(fresh, read)
    for world, robot_seed, seed in (("dip", 0, 7), ("rigid", 1, 7), ("rigid", 0, 8)):
        other = make(world, robot_seed, seed, seconds=12.0, folder=tmp_path)
        assert not np.array_equal(fresh.q, other.q)
    assert len(list(tmp_path.iterdir())) == 4


def test_held_out_seeds_begin_where_tuning_ends_and_are_other_robots() -> None:
    assert not held_out(HELD_OUT_FROM - 1)
    assert held_out(HELD_OUT_FROM)
    tuning, judging = robot(0), robot(HELD_OUT_FROM)
    assert tuning.urdf != judging.urdf
    assert not np.array_equal(tuning.coulomb, judging.coulomb)


def test_an_unknown_world_or_kind_is_refused() -> None:
    with pytest.raises(ValueError, match="world"):
        fault_free("soft", 0, 0, 1.0)
    with pytest.raises(ValueError, match="kind"):
        trial("rigid", 0, 0, "magic")


def test_steady_programs_ask_for_no_step_of_acceleration() -> None:
    # An elastic arm swings after such a step, by far more than any fault would show.
    t = np.arange(0.0, 60.0, PERIOD_S)
    for seed in range(3):
        plain, steady = (work(np.random.default_rng(seed), 60.0, steady)(t, 2) for steady in (False, True))
        assert np.abs(np.diff(plain, axis=0)).max() > 2.0
        assert np.abs(np.diff(steady, axis=0)).max() < 0.3
        assert np.abs(steady).max() < 1.1 * TOP_ACCELERATION
