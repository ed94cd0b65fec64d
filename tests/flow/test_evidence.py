"""What an event is called, on robots that `pin` moves: causes that are known, through the whole data path."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import replace
from functools import cache
from typing import Any, NamedTuple

import numpy as np
import pinocchio as pin
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from monitor.explain import load
from monitor.flow.layout import RING
from monitor.kernels.band import FLOOR, INERTIA, TORQUE
from monitor.setup.build import Setup, build
from monitor.setup.calibration import Calibration
from tests.flow.rig import GRAVITY, PAIR, PAIR_JOINTS, SLED, SLED_JOINTS, Mover, Rig, Rows, base_fields, made

Floats = NDArray[np.float64]
Torque = Callable[[float, Floats, Floats], Floats]

RATED = np.array([40.0, 20.0])
STEP, VELOCITY_SD, TORQUE_SD = 5e-5, 0.005, 0.005 * RATED  # the configuration's defaults
AT = 1.0  # s: when things happen


# --- the arm: a model that is exact, so that its band is narrow -----------------------------------


def exact(setup: Setup) -> Setup:
    """Return a setup whose band knows that nothing but noise leaves a residual."""
    fast, rated = setup.band.fast.copy(), setup.params["rated"][0]
    fast[:, FLOOR], fast[:, TORQUE], fast[:, INERTIA] = (0.004 * rated) ** 2, 0.01**2, 0.02**2
    band = replace(setup.band, fast=fast, slow=fast, cusum_sd=0.004 * rated)
    return build(setup.config, Calibration(setup.model, band))


def arm(
    joints: list[dict[str, Any]] = PAIR_JOINTS, robot: Mapping[str, Any] | None = None, urdf: str = PAIR
) -> Setup:
    return exact(made(urdf, joints, {"tool_link": "tip"} | dict(robot or {})))


def mover() -> Mover:
    return Mover(PAIR, [joint["armature"] for joint in PAIR_JOINTS])


class Task(NamedTuple):
    """Joints swing about `centre` by `reach` [rad] at 2 and 3.1 rad/s."""

    centre: Floats
    reach: Floats

    def wanted(self, t: float) -> tuple[Floats, Floats, Floats]:
        rate = np.array([2.0, 3.1])
        sine, cosine = np.sin(rate * t), np.cos(rate * t)
        q, v, a = self.centre + self.reach * sine, self.reach * rate * cosine, -self.reach * rate**2 * sine
        return q, v, a

    def torque(self, t: float, q: Floats, v: Floats) -> Floats:
        """Return what a controller commands that knows the arm and reads q and v."""
        wanted, speed, acceleration = self.wanted(t)
        m = mover_of_controller()
        tau: Floats = pin.rnea(m.model, m.data, wanted, speed, acceleration)
        tau += np.array([300.0, 100.0]) * (wanted - q) + np.array([40.0, 10.0]) * (speed - v)
        return tau.copy()


mover_of_controller = cache(mover)
LEANING = Task(np.array([0.9, 0.6]), np.array([0.4, 0.4]))  # both joints always bear weight
SWINGING = Task(np.array([0.3, -0.7]), np.array([0.8, 0.9]))


def read(rows: Rows, seed: int = 5) -> Rows:
    """Return the arm's motion as its sensors report it."""
    rng = np.random.default_rng(seed)
    return rows._replace(
        q=np.round(rows.q / STEP) * STEP,
        v=rows.v + VELOCITY_SD * rng.standard_normal(rows.v.shape),
        tau=rows.tau + TORQUE_SD * rng.standard_normal(rows.tau.shape),
    )


def moved(task: Task, seconds: float, outside: Torque | None = None) -> Rows:
    q, v, _ = task.wanted(0.0)
    return read(mover().run(seconds, q, v, task.torque, outside, substeps=2))


def bell(t: float, begin: float, length: float) -> float:
    """Return half a sine from 0 to 0 over `length` [s]."""
    return math.sin(math.pi * (t - begin) / length) if 0.0 <= t - begin <= length else 0.0


def pushed(force: Floats, begin: float, length: float = 0.3) -> Torque:
    """Return the generalised torque of a force [N, world axes] at the tip, by pin's Jacobian."""
    m = mover()
    frame = m.model.getFrameId("tip")

    def torque(t: float, q: Floats, v: Floats) -> Floats:
        J = pin.computeFrameJacobian(m.model, m.data, q, frame, pin.LOCAL_WORLD_ALIGNED)
        generalised: Floats = J[:3].T @ (bell(t, begin, length) * force)
        return generalised

    return torque


def lost(task: Task, share: float, begin: float, end: float = math.inf) -> Torque:
    """Return what is missing when the motor of `lower` gives less than its drive believes."""

    def torque(t: float, q: Floats, v: Floats) -> Floats:
        missing: Floats = -share * (begin <= t < end) * np.array([0.0, 1.0]) * task.torque(t, q, v)
        return missing

    return torque


def carried(task: Task, mass: float, begin: float) -> Torque:
    """Return the torque that a point mass [kg] at the tip takes from the joints: two models' difference."""
    light, heavy = mover(), mover()
    frame = heavy.model.frames[heavy.model.getFrameId("tip")]
    heavy.model.appendBodyToJoint(
        frame.parentJoint, pin.Inertia(mass, np.zeros(3), np.zeros((3, 3))), frame.placement
    )
    data = heavy.model.createData()

    def torque(t: float, q: Floats, v: Floats) -> Floats:
        tau = task.torque(t, q, v)
        a = pin.aba(heavy.model, data, q, v, tau)
        load_: Floats = (t >= begin) * (pin.rnea(light.model, light.data, q, v, a) - tau)
        return load_

    return torque


def both(*torques: Torque) -> Torque:
    def torque(t: float, q: Floats, v: Floats) -> Floats:
        return np.asarray(np.sum([one(t, q, v) for one in torques], axis=0))

    return torque


# --- what is said ------------------------------------------------------------------------------


def said(setup: Setup, rows: Rows) -> list[dict[str, Any]]:
    """Return the last statement on each event of a motion, in order."""
    rig = Rig(setup)
    rig.play(rows)
    assert not rig.alarms("signal")
    last = {m.body["event"]: m.body for m in rig.messages if m.topic == "verdict"}
    return [last[number] for number in sorted(last)]


def named(body: Mapping[str, Any]) -> tuple[Any, ...]:
    return body["verdict"], body["joint"], body["link"]


@pytest.fixture(scope="module")
def setup() -> Setup:
    return arm()


@cache
def push() -> Rows:
    return moved(LEANING, 2.2, pushed(np.array([-12.0, 15.0, 9.0]), AT))


def test_work_without_faults_opens_no_event(setup: Setup) -> None:
    assert said(setup, moved(SWINGING, 3.0)) == []


def test_a_push_on_the_blade_is_called_contact(setup: Setup) -> None:
    (event,) = said(setup, push())
    assert named(event) == ("contact", None, "blade")
    assert not event["open"]
    size = event["size"]
    assert size["unit"] == "N"
    assert abs(size["value"] - np.linalg.norm([-12.0, 15.0, 9.0])) < 3.0 * size["sd"]
    assert event["onset_t"] - 5.0 == pytest.approx(AT, abs=0.05)


def test_a_motor_that_lost_torque_is_called_by_its_joint_and_how_much_it_lost(setup: Setup) -> None:
    first, *_ = said(setup, moved(LEANING, 3.5, lost(LEANING, 0.6, AT)))
    assert named(first) == ("actuator", "lower", None)
    assert first["detail"] == "torque-loss"
    assert first["size"]["unit"] == "1"
    assert abs(first["size"]["value"] - 0.6) < 3.0 * first["size"]["sd"]
    assert first["size"]["sd"] < 0.1


def test_a_mass_that_was_taken_up_is_called_a_load(setup: Setup) -> None:
    first, *_ = said(setup, moved(LEANING, 3.5, carried(LEANING, 0.8, AT)))
    assert named(first) == ("load", None, "tip")
    assert first["size"]["unit"] == "kg"
    assert abs(first["size"]["value"] - 0.8) < 3.0 * first["size"]["sd"]
    assert first["size"]["sd"] < 0.2


def smoothly(t: float, begin: float, length: float) -> tuple[float, float]:
    """Return a step from 0 to 1 and its rate: the fifth-order polynomial with rates of zero at both ends."""
    x = min(max((t - begin) / length, 0.0), 1.0)
    return x**3 * (10.0 - 15.0 * x + 6.0 * x * x), 30.0 * x * x * (1.0 - x) ** 2 / length


def slipped(offset: float, begin: float, end: float, seconds: float) -> Rows:
    """Return a motion in which the encoder of `upper` slips by an offset [rad], and back again at `end`."""

    def error(t: float) -> tuple[Floats, Floats]:
        (there, rate), (back, rate_back) = smoothly(t, begin, 0.4), smoothly(t, end, 0.4)
        axis = np.array([offset, 0.0])
        return (there - back) * axis, (rate - rate_back) * axis

    def torque(t: float, q: Floats, v: Floats) -> Floats:
        moved_, rate = error(t)
        return SWINGING.torque(t, q + moved_, v + rate)

    q, v, _ = SWINGING.wanted(0.0)
    rows = mover().run(seconds, q, v, torque, substeps=2)
    errors = [error(t) for t in rows.t]
    return read(rows._replace(q=rows.q + [one for one, _ in errors], v=rows.v + [rate for _, rate in errors]))


def test_an_encoder_that_slipped_is_called_by_its_joint_and_its_return_is_noticed(setup: Setup) -> None:
    first, *_ = events = said(setup, slipped(0.1, AT, 5.0, 8.0))
    assert named(first) == ("position-sensor", "upper", None)
    assert first["size"]["unit"] == "rad"
    assert abs(first["size"]["value"] - 0.1) < 3.0 * first["size"]["sd"]
    # Certain for two seconds it became part of the model, until it was gone.
    assert first["lasting"]
    assert not first["open"]
    assert not any(event["open"] for event in events)


def test_a_push_during_a_lasting_fault_is_called_contact(setup: Setup) -> None:
    torques = both(lost(LEANING, 0.6, AT), pushed(np.array([-12.0, 15.0, 9.0]), 4.0))
    fault, contact, *rest = said(setup, moved(LEANING, 5.0, torques))
    assert named(fault) == ("actuator", "lower", None)
    assert fault["lasting"]
    assert fault["open"]
    assert named(contact) == ("contact", None, "blade")
    assert contact["onset_t"] - 5.0 == pytest.approx(4.0, abs=0.06)
    assert not contact["open"]
    assert rest == []


# --- what does not matter ----------------------------------------------------------------------


def posteriors(setup: Setup, rows: Rows) -> Floats:
    """Return the probabilities (T,X+2) of all explanations after each sample."""
    rig, found = Rig(setup), []
    base = setup.tree.n - rig.m
    for k in range(len(rows.t)):
        fields = base_fields(rows.q[k], rows.v[k]) if base else {}
        rig.sample(rows.q[k, base and 7 :], rows.v[k, base:], rows.tau[k, base:], **fields)
        found.append(rig.outputs["probability"].copy())
    assert rig.state["bad"][1:].sum() == 0
    return np.array(found)


@pytest.fixture(scope="module")
def plain(setup: Setup) -> Floats:
    found = posteriors(setup, push())
    # The push is weighed, and the weights change as it goes on.
    assert len(np.unique(found[:, 2:].max(axis=1))) > 50
    return found


def joints_with(**fields: list[Any]) -> list[dict[str, Any]]:
    """Return the arm's joints with keys changed in each."""
    names = list(fields)
    return [
        joint | dict(zip(names, values, strict=True))
        for joint, values in zip(PAIR_JOINTS, zip(*fields.values(), strict=True), strict=True)
    ]


def test_the_unit_of_torque_on_the_wire_changes_no_probability(plain: Floats) -> None:
    rows = push()
    joints = joints_with(torque_meaning=["motor", "motor"], gear_ratio=[100.0, 50.0])
    wire = rows._replace(tau=rows.tau / np.array([100.0, 50.0]))
    np.testing.assert_allclose(posteriors(arm(joints), wire), plain, atol=1e-6)


def test_the_order_of_joints_on_the_wire_changes_no_probability(plain: Floats) -> None:
    rows = push()
    wire = rows._replace(q=rows.q[:, ::-1], v=rows.v[:, ::-1], tau=rows.tau[:, ::-1])
    np.testing.assert_allclose(posteriors(arm(PAIR_JOINTS[::-1]), wire), plain, atol=1e-6)


def test_signs_and_zeros_of_the_joints_change_no_probability(plain: Floats) -> None:
    rows, zero = push(), np.array([0.2, -0.35])
    wire = rows._replace(q=zero - rows.q, v=-rows.v, tau=-rows.tau)
    joints = joints_with(sign=[-1, -1], zero_offset=zero.tolist())
    np.testing.assert_allclose(posteriors(arm(joints), wire), plain, atol=1e-6)


@pytest.mark.parametrize("rpy", [(0.0, 0.0, 2.1), (0.4, -0.9, 1.3)])
def test_which_way_the_base_is_turned_changes_no_probability(
    plain: Floats, rpy: tuple[float, float, float]
) -> None:
    # The same arm from a base link that is turned the other way, under the same weight in its own axes.
    turn = Rotation.from_euler("xyz", rpy).inv()
    numbers = [" ".join(map(repr, map(float, v))) for v in (turn.apply([0, 0, 0.4]), turn.as_euler("xyz"))]
    origin = f'<origin xyz="{numbers[0]}" rpy="{numbers[1]}"/>'
    urdf = PAIR.replace('<origin xyz="0 0 0.4"/>\n <axis xyz="0 1 0"/>', f'{origin}\n <axis xyz="0 1 0"/>')
    assert urdf != PAIR
    for robot in ({"mount_rpy": list(rpy)}, {"gravity": turn.apply(GRAVITY).tolist()}):
        np.testing.assert_allclose(posteriors(arm(robot=robot, urdf=urdf), push()), plain, atol=1e-6)


# --- a floating base ---------------------------------------------------------------------------

BASE_SD = np.repeat([0.01, 0.01], 3)  # rad/s, m/s: the configuration's defaults
FORCE = np.array([60.0, 10.0, -50.0])  # N, world axes, at the frame of the rod


def hip_and_slide(t: float, q: Floats, v: Floats) -> Floats:
    shaking: Floats = np.array([3.0, 20.0]) * np.sin(np.array([5.0, 7.0]) * t)
    return shaking - np.array([8.0, 200.0]) * q[7:] - np.array([0.5, 10.0]) * v[6:]


@cache
def sled_push() -> Rows:
    """Return the sled's flight and fall, its rod pushed, as its sensors report it."""
    m = Mover(SLED, [joint["armature"] for joint in SLED_JOINTS], floating=True)
    attitude = Rotation.from_rotvec([0.5, -0.7, 0.6]).as_quat(scalar_first=True)

    frame = m.model.getFrameId("rod")

    def outside(t: float, q: Floats, v: Floats) -> Floats:
        J = pin.computeFrameJacobian(m.model, m.data, m._swap_q(q, -1), frame, pin.LOCAL_WORLD_ALIGNED)
        return m._swap(J[:3].T @ (bell(t, AT, 0.2) * FORCE))

    v = [0.3, -0.5, 0.4, 0.5, 0.2, 9.0, 0.3, 0.1]
    rows = m.run(1.5, [1.0, 2.0, 3.0, *attitude, 0.2, 0.05], v, hip_and_slide, outside, substeps=2)
    rng = np.random.default_rng(6)
    turned = Rotation.from_quat(rows.q[:, 3:7], scalar_first=True)
    turned *= Rotation.from_rotvec(0.0015 * rng.standard_normal((len(rows.t), 3)))
    place = rows.q[:, :3] + 0.001 * rng.standard_normal((len(rows.t), 3))
    q = np.hstack([place, turned.as_quat(scalar_first=True), np.round(rows.q[:, 7:] / STEP) * STEP])
    noise = np.append(BASE_SD, [VELOCITY_SD] * 2) * rng.standard_normal(rows.v.shape)
    return rows._replace(q=q, v=rows.v + noise)


def sled(urdf: str = SLED) -> Setup:
    return made(urdf, SLED_JOINTS, {"base": "floating"})


@pytest.fixture(scope="module")
def sled_plain() -> Floats:
    return posteriors(sled(), sled_push())


def test_a_push_on_a_limb_of_a_floating_robot_is_called_contact() -> None:
    (event,) = said(sled(), sled_push())
    assert named(event) == ("contact", None, "rod")


def turned_world(rows: Rows, turn: Rotation, shift: Floats) -> Rows:
    attitude = turn * Rotation.from_quat(rows.q[:, 3:7], scalar_first=True)
    place = turn.apply(rows.q[:, :3]) + shift
    return rows._replace(q=np.hstack([place, attitude.as_quat(scalar_first=True), rows.q[:, 7:]]))


def test_where_the_world_begins_and_which_way_north_is_changes_no_probability(sled_plain: Floats) -> None:
    rows = turned_world(sled_push(), Rotation.from_rotvec([0.0, 0.0, 2.1]), np.array([-7.0, 3.0, 0.5]))
    np.testing.assert_allclose(posteriors(sled(), rows), sled_plain, atol=1e-6)


def turned_base(rows: Rows, turn: Rotation) -> tuple[str, Rows]:
    """Return the sled with its base frame turned within the body, and its motion as told of that frame."""
    back = turn.inv()
    rpy = " ".join(map(repr, map(float, back.as_euler("xyz"))))

    def origin(*xyz: float) -> str:
        return f'<origin xyz="{" ".join(map(repr, map(float, back.apply(xyz))))}" rpy="{rpy}"/>'

    urdf = SLED.replace('<origin xyz="0.03 -0.02 0.05"/>', origin(0.03, -0.02, 0.05), 1)
    urdf = urdf.replace('<origin xyz="0.3 0.1 0"/>', origin(0.3, 0.1, 0.0), 1)
    attitude = Rotation.from_quat(rows.q[:, 3:7], scalar_first=True) * turn
    q = np.hstack([rows.q[:, :3], attitude.as_quat(scalar_first=True), rows.q[:, 7:]])
    v = np.hstack([back.apply(rows.v[:, :3]), back.apply(rows.v[:, 3:6]), rows.v[:, 6:]])
    return urdf, rows._replace(q=q, v=v)


def test_axes_of_the_base_in_another_order_change_no_probability(sled_plain: Floats) -> None:
    # A quarter of a turn: x becomes y, y becomes -x.
    turn = Rotation.from_rotvec([0.0, 0.0, 0.5 * math.pi])
    urdf, rows = turned_base(sled_push(), turn)
    np.testing.assert_allclose(posteriors(sled(urdf), rows), sled_plain, atol=1e-6)


def test_a_base_frame_turned_anyhow_gives_the_same_verdict() -> None:
    # The band is of single rows, which are others then: probabilities differ a little, what is said does not.
    urdf, rows = turned_base(sled_push(), Rotation.from_rotvec([0.4, -0.9, 0.7]))
    (event,) = said(sled(urdf), rows)
    assert named(event) == ("contact", None, "rod")


@pytest.mark.parametrize("floating", [False, True])
def test_the_geometry_of_an_evidence_step_is_that_of_inverse_dynamics(setup: Setup, floating: bool) -> None:
    # Judge: pin's analytical derivatives of inverse dynamics, and its torque of a point mass.
    rows, setup = (sled_push(), sled()) if floating else (push(), setup)
    urdf, base = (SLED, 6) if floating else (PAIR, 0)
    m, rig = Mover(urdf, floating=floating), Rig(setup)
    for k in range(len(rows.t)):
        rig.sample(
            rows.q[k, base and 7 :],
            rows.v[k, base:],
            rows.tau[k, base:],
            **(base_fields(rows.q[k], rows.v[k]) if floating else {}),
        )
        if rig.state["weighed"] > 5 and rig.state["weigh_stage"] > 0:
            break
    s, arrays = rig.state, setup.tree.arrays
    assert s["weighed"] > 5
    # The residual lags the posture that made it.
    lag = int(setup.params["column_lag"][0])
    assert lag > 0
    entry = (int(s["weigh_next"]) - lag) % RING
    n, model = setup.tree.n, m.model
    swap = np.r_[3:6, 0:3, 6:n] if floating else np.arange(n)  # pin: linear first
    q = m._swap_q(s["x_q"], -1)
    v, a = s["ring_v"][entry][swap], s["ring_a"][entry][swap]
    for i in range(base, n):
        # A difference over 1e-5 rad ahead is the slope half of that ahead.
        ahead = pin.integrate(model, q, 0.5e-5 * np.eye(n)[i])
        by_q, _, _ = pin.computeRNEADerivatives(model, m.data, ahead, v, a)
        np.testing.assert_allclose(s["slope"][i], by_q[swap, i], atol=1e-6)
    last = len(arrays.parent) - 1
    H, point = np.full((n, 4), math.nan), np.array([0.1, -0.05, 0.2])
    load.rows(
        last, point, arrays.parent, arrays.dof, s["x_S"], s["x_V"], s["x_Vd"], s["x_R_W"], s["x_p_W"], H
    )
    without = pin.rnea(model, m.data, q, v, a).copy()
    model.inertias[model.njoints - 1] += pin.Inertia(1.0, point, np.zeros((3, 3)))
    with_mass = pin.rnea(model, model.createData(), q, v, a)
    np.testing.assert_allclose(H[:, 0], (without - with_mass)[swap], atol=1e-9)
