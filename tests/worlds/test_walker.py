"""The walker against `pin`: every row obeys Newton, on the joints and as a whole; truths are true."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pinocchio
import pytest
from numpy.typing import NDArray

from tests.worlds.arm import Push
from tests.worlds.sessions import FOLDER_VARIABLE
from tests.worlds.walker import (
    MOTIONS,
    PERIOD_S,
    TOUCH_N,
    Defect,
    Ground,
    Happenings,
    Noise,
    WalkerRecording,
    WalkerTruth,
    as_sensed,
    draw_happenings,
    simulate,
    truths,
    walker_session,
)
from tests.worlds.walker_gait import START_S, Gait, gait
from tests.worlds.walker_robot import ENCODER_STEP, FEET, JOINTS, Terrace, terrace

Floats = NDArray[np.float64]

SECONDS = 4.0
ROBOT, SEED = 3, 7


@pytest.fixture(autouse=True)
def _no_sessions_from_disk(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv(FOLDER_VARIABLE, raising=False)


@cache
def timetable(motion: str) -> Gait:
    return gait(motion, np.random.default_rng(SEED))


@cache
def busy(motion: str) -> tuple[Terrace, Happenings, WalkerRecording]:
    """A walker to which much happens at once: pushes on trunk and shank, one defect of each kind."""
    robot = terrace(ROBOT)
    happenings = Happenings(
        pushes=(
            Push(2.0, 0.3, "trunk", (30.0, -20.0, 10.0), (0.1, 0.05, 0.02)),
            Push(2.9, 0.3, "hind_left_shank", (15.0, 25.0, 5.0), (0.0, 0.0, -0.1)),
        ),
        defects=(
            Defect(0, "offset", 2.0, 1.8, 3.8),
            Defect(4, "torque-loss", 0.3, 2.2, 3.8),
            Defect(5, "coulomb-friction", 1.5, 2.4, 3.8),
            Defect(10, "viscous-friction", 8.0, 2.6, 3.8),
        ),
    )
    return robot, happenings, simulate(robot, timetable(motion), SECONDS, SEED, happenings)


@cache
def minute(motion: str, robot_seed: int) -> WalkerRecording:
    return simulate(terrace(robot_seed), gait(motion, np.random.default_rng(robot_seed)), 60.0, robot_seed)


@cache
def grounded(motion: str, detail: str) -> tuple[Gait, WalkerRecording, WalkerTruth]:
    """One hole, trapdoor or step under the front right foot."""
    robot, plan = terrace(ROBOT), timetable(motion)
    lift = plan.lifts(1, 20.0)[1]
    high, landing = lift + 0.5 * plan.swing_s, lift + plan.swing_s
    back = high + plan.period_s
    ground = {
        "hole": Ground(1, high, back, -0.04),
        "trapdoor": Ground(1, landing + 0.4 * (plan.period_s - plan.swing_s), back, -0.04),
        "step": Ground(1, high, back, 0.55 * plan.clearance_m),
    }[detail]
    happenings = Happenings(grounds=(ground,))
    recording = simulate(robot, plan, back + 1.0, SEED, happenings)
    (truth,) = truths(robot, plan, happenings, recording)
    return plan, recording, truth


class Judge:
    """The walker in `pin`, by its true description; rotor inertia is added by hand."""

    def __init__(self, robot: Terrace) -> None:
        self.model = pinocchio.buildModelFromXML(robot.urdf, pinocchio.JointModelFreeFlyer())
        self.data, self.armature = self.model.createData(), robot.armature
        assert tuple(self.model.names)[2:] == JOINTS

    def q(self, rows: WalkerRecording, k: int) -> Floats:
        w, x, y, z = rows.base_quat[k]
        return np.concatenate((rows.base_p[k], (x, y, z, w), rows.q[k]))

    def v(self, rows: WalkerRecording, k: int) -> Floats:
        R = self.rotation(rows, k)
        return np.concatenate((R.T @ rows.base_v[k], rows.base_w[k], rows.qd[k]))

    def rotation(self, rows: WalkerRecording, k: int) -> Floats:
        return np.asarray(pinocchio.XYZQUATToSE3(self.q(rows, k)[:7]).rotation)

    def force(self, rows: WalkerRecording, k: int) -> Floats:
        """Return `M a + C v + g` (18,), moment of the base first as in the product."""
        a = np.concatenate((rows.a[k, 3:6], rows.a[k, :3], rows.a[k, 6:]))
        force = pinocchio.rnea(self.model, self.data, self.q(rows, k), self.v(rows, k), a)
        force[6:] += self.armature * rows.a[k, 6:]
        return np.concatenate((force[3:6], force[:3], force[6:]))

    def of_point(self, rows: WalkerRecording, k: int, frame: str, point: Floats, force: Floats) -> Floats:
        """Return `Jᵀ f` (18,) of a force at a point, both in world axes, on a link."""
        q, frame_id = self.q(rows, k), self.model.getFrameId(frame)
        J = pinocchio.computeFrameJacobian(
            self.model, self.data, q, frame_id, pinocchio.ReferenceFrame.LOCAL_WORLD_ALIGNED
        )
        pinocchio.updateFramePlacement(self.model, self.data, frame_id)
        arm = point - self.data.oMf[frame_id].translation
        total = J.T @ np.concatenate((force, np.cross(arm, force)))
        return np.concatenate((total[3:6], total[:3], total[6:]))

    def place(self, rows: WalkerRecording, k: int, frame: str, point: Floats) -> Floats:
        pinocchio.framesForwardKinematics(self.model, self.data, self.q(rows, k))
        place: Floats = self.data.oMf[self.model.getFrameId(frame)].act(point)
        return place

    def left_over(self, rows: WalkerRecording, k: int) -> Floats:
        """Return what the equation of motion leaves over (18,) once everything recorded is accounted for."""
        rest = self.force(rows, k) - rows.unexplained[k]
        rest[:6] -= rows.harness[k]
        rest[6:] -= rows.tau[k] + rows.friction[k]
        for i in np.flatnonzero(np.isfinite(rows.foot_point[k, :, 0])):
            rest -= self.of_point(rows, k, f"{FEET[i]}_shank", rows.foot_point[k, i], rows.foot_force[k, i])
        return rest


@pytest.mark.parametrize("motion", MOTIONS)
def test_every_row_fulfils_the_equation_of_motion(motion: str) -> None:
    # Judge: pin.rnea and pin.computeFrameJacobian. A row is one instant, so that the engine's integrator has
    # no part in it; what is left is how far its contact solver iterates (measured: 3e-5).
    robot, _, rows = busy(motion)
    judge = Judge(robot)
    rest = np.array([judge.left_over(rows, k) for k in range(0, rows.t.size, 7)])
    assert rows.fell_s is None
    assert np.abs(rest).max() < 3e-4


@pytest.mark.parametrize("motion", MOTIONS)
def test_the_unexplained_force_is_that_of_pushes_and_defects(motion: str) -> None:
    # Judge: pin.computeFrameJacobian for pushes; for defects their definition.
    robot, happenings, rows = busy(motion)
    judge = Judge(robot)
    for k in range(0, rows.t.size, 11):
        t, expected = rows.t[k], np.zeros(18)
        for push in happenings.pushes:
            point = judge.place(rows, k, push.link, np.array(push.point_m))
            expected += judge.of_point(rows, k, push.link, point, push.force_at(t))
        if 1.8 <= t < 3.8:
            expected[6 + 0] += 2.0
        if 2.2 <= t < 3.8:
            expected[6 + 4] -= 0.3 * rows.tau[k, 4]
        for j in (5, 10):
            expected[6 + j] += rows.unexplained[k, 6 + j]
        np.testing.assert_allclose(rows.unexplained[k], expected, atol=1e-9)
    sliding = (rows.t >= 2.6) & (rows.t < 3.8) & (np.abs(rows.qd[:, 5]) > 0.3)
    added = -1.5 * robot.coulomb[5] * np.sign(rows.qd[sliding, 5])
    # The day's friction is within 12 % of the robot's own; at the turn of a blow the joint may stick.
    right = np.abs(rows.unexplained[sliding, 11] / added - 1.0) < 0.12
    if motion in ("trot", "hoisted"):  # in the others this joint hardly moves
        assert right.size > 50
        assert right.mean() > 0.97


def test_nothing_is_unexplained_where_nothing_happens() -> None:
    for motion in MOTIONS:
        _, _, rows = busy(motion)
        assert not rows.unexplained[rows.t < 1.8].any()
        assert not rows.unexplained[rows.t >= 3.8].any()
        assert np.abs(rows.unexplained[:, :6]).max() > 30.0


@pytest.mark.parametrize("motion", MOTIONS)
def test_the_forces_on_the_whole_robot_move_its_centre_of_mass(motion: str) -> None:
    # Newton: sum of outer forces = mass * acceleration of the centre of mass, the latter by pin.
    robot, happenings, rows = busy(motion)
    judge = Judge(robot)
    for k in range(0, rows.t.size, 13):
        a = np.concatenate((rows.a[k, 3:6], rows.a[k, :3], rows.a[k, 6:]))
        pinocchio.centerOfMass(judge.model, judge.data, judge.q(rows, k), judge.v(rows, k), a)
        outer = rows.foot_force[k].sum(axis=0) + sum(push.force_at(rows.t[k]) for push in happenings.pushes)
        outer += judge.rotation(rows, k) @ rows.harness[k, 3:]
        outer[2] -= 9.81 * robot.mass_kg
        np.testing.assert_allclose(robot.mass_kg * judge.data.acom[0], outer, atol=3e-4)


@pytest.mark.parametrize(("motion", "share"), [("stand", 0.15), ("hoisted", 0.25), ("trot", 0.35)])
def test_speeds_grow_by_the_acceleration_between_two_rows(motion: str, share: float) -> None:
    # Trapezoidal rule. What is left is the integrator, steps of torque where the controller commands anew,
    # and what is shorter than the time between two rows: reversals of dry friction, blows of landing feet.
    _, _, rows = busy(motion)
    change, mean = np.diff(rows.qd, axis=0) / PERIOD_S, 0.5 * (rows.a[1:, 6:] + rows.a[:-1, 6:])
    assert np.sqrt(np.mean((change - mean) ** 2)) < share * np.sqrt(np.mean(mean**2))


@pytest.mark.parametrize(("motion", "robot_seed"), [("crawl", 11), ("trot", 12)])
def test_it_walks_for_a_minute(motion: str, robot_seed: int) -> None:
    rows = minute(motion, robot_seed)
    robot = terrace(robot_seed)
    assert rows.fell_s is None
    assert rows.t.size == 60000
    assert 25.0 < robot.mass_kg < 40.0
    assert np.abs(rows.base_quat[:, 1:3]).max() < 0.02
    assert np.abs(rows.tau).max() < robot.peak.max()


@pytest.mark.parametrize(("motion", "robot_seed"), [("crawl", 11), ("trot", 12)])
def test_feet_touch_and_leave_the_ground_when_planned_within_some_milliseconds(
    motion: str, robot_seed: int
) -> None:
    rows = minute(motion, robot_seed)
    lateness = []
    for i in range(4):
        lifts = np.flatnonzero(np.diff(rows.planned[:, i].astype(int)) < 0)
        landings = np.flatnonzero(np.diff(rows.planned[:, i].astype(int)) > 0)
        for lift, landing in zip(lifts, landings, strict=False):
            air = np.flatnonzero(~rows.contact[lift - 50 : landing + 50, i]) + lift - 50
            lateness.append((air[0] - lift, air[-1] - landing))
    off, on = np.array(lateness).T
    assert len(lateness) > 40
    assert np.abs(off).max() <= 5
    assert on.min() > -20
    assert on.max() < 30
    assert on.std() > 1.0  # no clockwork


def test_a_hoisted_walker_moves_in_the_air() -> None:
    _, _, rows = busy("hoisted")
    assert not rows.foot_force.any()
    assert not rows.planned.any()
    assert np.abs(rows.qd[2000:]).max(axis=0).min() > 0.2
    assert np.abs(rows.harness).max() > 200.0


@pytest.mark.parametrize("motion", ["crawl", "trot"])
@pytest.mark.parametrize("detail", ["hole", "trapdoor"])
def test_a_lost_foothold_is_a_planned_foot_without_force(motion: str, detail: str) -> None:
    plan, rows, truth = grounded(motion, detail)
    first, last = round(truth.start_s / PERIOD_S), round(truth.end_s / PERIOD_S)
    assert (truth.kind, truth.detail, truth.foot) == ("foothold-lost", detail, "front_right")
    assert truth.size == 0.04
    assert rows.fell_s is None
    assert rows.planned[first:last, 1].all()
    assert not rows.contact[first:last, 1].any()
    assert rows.contact[last, 1] or not rows.planned[last, 1]
    assert last - first > 40
    before = rows.contact[first - 20 : first - 1, 1]
    assert before.all() if detail == "trapdoor" else not before.any()
    assert rows.contact[-1000:][rows.planned[-1000:]].mean() > 0.9  # all is well again
    assert plan.planned(truth.start_s + 1e-3)[1]


@pytest.mark.parametrize("motion", ["crawl", "trot"])
def test_an_early_touchdown_is_a_force_on_a_foot_that_is_not_planned_to_carry(motion: str) -> None:
    plan, rows, truth = grounded(motion, "step")
    first, last = round(truth.start_s / PERIOD_S), round(truth.end_s / PERIOD_S)
    assert (truth.kind, truth.detail, truth.foot) == ("touchdown", "step", "front_right")
    assert rows.fell_s is None
    assert not rows.planned[first:last, 1].any()
    assert rows.planned[last + 1, 1]
    assert rows.contact[first, 1]
    assert not rows.contact[first - 20 : first, 1].any()
    assert rows.contact[first:last, 1].mean() > 0.9
    assert 10 < last - first < 1000 * plan.swing_s
    assert truth.size == pytest.approx(np.linalg.norm(rows.foot_force[first:last, 1], axis=1).max())
    assert truth.size > 10 * TOUCH_N


@pytest.mark.parametrize("motion", MOTIONS)
def test_happenings_are_apart_and_of_every_kind(motion: str) -> None:
    robot, plan = terrace(5), timetable(motion)
    drawn = draw_happenings(robot, plan, 1800.0, np.random.default_rng(2))
    alone = [d for d in drawn.defects if not any(d.start_s < p.start_s < d.end_s for p in drawn.pushes)]
    during = [d for d in drawn.defects if d not in alone]
    starts = (
        [p.start_s for p in drawn.pushes] + [d.start_s for d in alone] + [g.start_s for g in drawn.grounds]
    )
    assert during
    assert np.diff(np.sort(starts)).min() > 4.0
    assert {p.link == "trunk" for p in drawn.pushes} == {True, False}
    standard = [p for p in drawn.pushes if np.linalg.norm(p.force_n) == pytest.approx(40.0)]
    if motion != "hoisted":
        assert all(p.duration_s == 0.1 and p.link == "trunk" for p in standard)
        assert len(standard) > 10
    sizes = [float(np.linalg.norm(p.force_n)) for p in drawn.pushes]
    assert min(sizes) >= 20.0 - 1e-9
    assert max(sizes) <= 120.0 + 1e-9
    kinds = {d.kind for d in drawn.defects}
    assert {"torque-loss", "coulomb-friction", "viscous-friction", "offset"} <= kinds
    assert ("open-circuit" in kinds) == (motion != "stand")
    if motion in ("crawl", "trot"):
        phases = {bool(plan.planned(d.start_s)[d.joint // 3]) for d in drawn.defects}
        assert phases == {True, False}
        assert {g.height_m > 0.0 for g in drawn.grounds} == {True, False}
    else:
        assert not drawn.grounds


def test_truths_say_what_was_done() -> None:
    robot, happenings, rows = busy("trot")
    found = truths(robot, timetable("trot"), happenings, rows)
    assert [truth.start_s for truth in found] == [1.8, 2.0, 2.2, 2.4, 2.6, 2.9]
    offset, trunk, loss, coulomb, _, shank = found
    assert (offset.joint, offset.unit) == ("front_left_roll", "of rated")
    assert offset.size == pytest.approx(2.0 / robot.rated[0])
    assert offset.effect is not None
    assert offset.effect >= offset.size  # the others' effects fall into it too
    assert (loss.joint, loss.size, loss.during) == ("front_right_pitch", 0.3, 0)
    assert (coulomb.size, coulomb.unit) == (1.5, "times normal")
    assert (trunk.kind, trunk.link, trunk.joint, trunk.phase) == ("contact", "trunk", None, None)
    assert trunk.size == pytest.approx(np.linalg.norm((30.0, -20.0, 10.0)))
    assert (shank.link, shank.end_s) == ("hind_left_shank", pytest.approx(3.2))
    assert shank.phase == ("stance" if timetable("trot").planned(2.9)[2] else "swing")
    assert shank.effect is not None
    assert shank.effect > 0.05


def turn(quat: Floats) -> Floats:
    """Return the matrix of a quaternion w-x-y-z, by pin."""
    w, x, y, z = quat
    return np.asarray(pinocchio.Quaternion(w, x, y, z).toRotationMatrix())


def test_sensors_and_estimator_have_the_stated_noise() -> None:
    robot = terrace(11)
    exact = minute("crawl", 11)
    noisy = as_sensed(exact, robot, Noise(), np.random.default_rng(1))
    np.testing.assert_array_equal(noisy["foot_force"], exact.foot_force)
    steps = noisy["q"] / ENCODER_STEP
    np.testing.assert_allclose(steps, np.round(steps), atol=1e-6)
    assert np.abs(noisy["q"] - exact.q).max() <= 0.5 * ENCODER_STEP * (1.0 + 1e-9)
    white = {0.007: noisy["qd"] - exact.qd, 0.005: (noisy["tau"] - exact.tau) / robot.rated}
    for sd, error in white.items():
        np.testing.assert_allclose(error.std(axis=0), sd, rtol=0.02)
        assert abs((error[1:] * error[:-1]).mean() / sd**2) < 0.01
    tilt = [
        pinocchio.log3(turn(before).T @ turn(after))
        for before, after in zip(exact.base_quat[::20], noisy["base_quat"][::20], strict=True)
    ]
    np.testing.assert_allclose(np.std(tilt, axis=0), 0.0015, rtol=0.15)
    errors = {
        0.001: noisy["base_p"] - exact.base_p,
        0.01: np.hstack((noisy["base_v"] - exact.base_v, noisy["base_w"] - exact.base_w)),
    }
    for sd, error in errors.items():
        np.testing.assert_allclose(error.std(axis=0), sd, rtol=0.1)
        # Half of the variance is slow, time constant 0.25 s: correlation 0.5 exp(-lag / 0.25 s).
        for lag in (1, 250):
            correlation = (error[lag:] * error[:-lag]).mean() / (error**2).mean()
            assert correlation == pytest.approx(0.5 * np.exp(-lag / 250.0), abs=0.06)
    np.testing.assert_allclose(np.linalg.norm(noisy["base_quat"], axis=1), 1.0, atol=1e-12)


def test_the_drawing_is_off_by_three_to_eight_percent() -> None:
    robot = terrace(ROBOT)
    true, drawn = (
        pinocchio.buildModelFromXML(text, pinocchio.JointModelFreeFlyer()) for text in (robot.urdf, robot.cad)
    )
    ratios = np.array([b.mass / a.mass for a, b in zip(true.inertias[1:], drawn.inertias[1:], strict=True)])
    assert np.abs(ratios - 1.0).min() > 0.029
    assert np.abs(ratios - 1.0).max() < 0.081
    for a, b in zip(true.inertias[1:], drawn.inertias[1:], strict=True):
        ratio = np.trace(b.inertia) / np.trace(a.inertia)
        assert 0.029 < abs(ratio - 1.0) < 0.081
        assert 0.0 < np.abs(a.lever - b.lever).max() <= 0.004
    assert sum(a.mass for a in true.inertias) == pytest.approx(robot.mass_kg)


def test_leg_kinematics_agree_with_the_description() -> None:
    # Judge: pin.framesForwardKinematics and pin.computeFrameJacobian.
    robot = terrace(ROBOT)
    model = pinocchio.buildModelFromXML(robot.urdf)
    data, rng = model.createData(), np.random.default_rng(0)
    for _ in range(5):
        q = rng.uniform((-0.5, -0.2, -2.0), (0.5, 1.5, -0.6), (4, 3))
        feet, J = robot.legs.feet(q)
        np.testing.assert_allclose(robot.legs.angles(feet), q, atol=1e-9)
        pinocchio.framesForwardKinematics(model, data, q.ravel())
        for i, foot in enumerate(robot.feet):
            frame = model.getFrameId(foot["link"])
            place = data.oMf[frame].act(np.array(foot["point"]))
            np.testing.assert_allclose(feet[i], place, atol=1e-12)
            full = pinocchio.computeFrameJacobian(
                model, data, q.ravel(), frame, pinocchio.ReferenceFrame.LOCAL_WORLD_ALIGNED
            )[:, 3 * i : 3 * i + 3]
            arm = place - data.oMf[frame].translation
            np.testing.assert_allclose(J[i], full[:3] + np.cross(full[3:].T, arm).T, atol=1e-12)


def test_the_same_seeds_give_the_same_session_from_disk_or_not(tmp_path: Path) -> None:
    first = walker_session("trot", ROBOT, SEED, 8.0, folder=tmp_path)
    (stored,) = tmp_path.iterdir()
    changed = stored.stat().st_mtime_ns
    again = walker_session("trot", ROBOT, SEED, 8.0, folder=tmp_path)
    anew = walker_session("trot", ROBOT, SEED, 8.0)
    assert stored.stat().st_mtime_ns == changed
    assert first.truths == again.truths == anew.truths
    assert len(first.truths) >= 1
    for name in ("q", "qd", "tau", "base_p", "base_quat", "base_v", "base_w", "planned", "unexplained"):
        assert (
            getattr(first, name).tobytes() == getattr(again, name).tobytes() == getattr(anew, name).tobytes()
        )
    other = walker_session("trot", ROBOT, SEED + 1, 8.0, folder=tmp_path)
    assert not np.array_equal(other.q[:2000], first.q[:2000])
    assert other.urdf == first.urdf
    assert terrace(ROBOT + 1).urdf != terrace(ROBOT).urdf


def test_a_fall_ends_the_session_and_is_said() -> None:
    push = Push(2.0, 0.5, "trunk", (0.0, 500.0, 0.0), (0.0, 0.0, 0.05))
    rows = simulate(terrace(ROBOT), timetable("trot"), SECONDS, SEED, Happenings(pushes=(push,)))
    assert rows.fell_s is not None
    assert 2.0 < rows.fell_s < 3.5
    assert rows.t[-1] == rows.fell_s
    assert len({len(getattr(rows, name)) for name in ("t", "q", "a", "foot_force", "planned")}) == 1


def test_friction_differs_by_day_but_stays_near_the_data_sheet() -> None:
    robot = terrace(ROBOT)
    sheet = np.array([joint["coulomb_friction"] for joint in robot.joints])
    assert np.abs(robot.coulomb / sheet - 1.0).max() <= 0.25
    days = []
    for seed in (1, 2):
        rows = simulate(robot, replace(timetable("hoisted"), sway_m=0.06), 6.0, seed)
        fast = np.abs(rows.qd) > 0.2
        size = np.abs(rows.friction) - robot.viscous * np.abs(rows.qd)
        days.append(np.array([np.median(size[fast[:, j], j]) for j in range(12)]) / robot.coulomb)
    assert np.abs(np.array(days) - 1.0).max() < 0.15
    assert np.abs(days[0] - days[1]).max() > 0.02
    assert START_S < SECONDS
