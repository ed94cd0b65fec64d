"""Torque sensors at links: drive, world and sensor told apart. Judge: an arm that `mujoco` moves."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from functools import cache
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from monitor.errors import ConfigError
from monitor.flow import link_torque
from monitor.flow.layout import Coverage, Reason
from monitor.kernels.band import FLOOR, INERTIA, TORQUE
from monitor.setup.build import Setup, build
from monitor.setup.calibration import Calibration
from tests.flow.rig import FORMS, PAIR, PAIR_JOINTS, Mover, Rig, made
from tests.flow.test_mujoco import ENCODER_STEP, VELOCITY_SD, expected
from tests.worlds.arm import ArmWorld, Friction, Push, Recording, random_motion, simulate
from tests.worlds.noise import with_noise

Floats = NDArray[np.float64]

UPPER, LOWER = range(2)
LINKS, MOTORS = slice(0, 2), slice(2, 4)  # of the rows that are judged
RATED, ROTOR = np.array([40.0, 20.0]), np.array([0.3, 0.1])
COULOMB, VISCOUS, V0 = np.array([2.0, 1.0]), np.array([1.5, 0.6]), 0.02
TORQUE_SD = 0.005 * RATED  # the configuration's default
AT = 1.5  # s: when things happen
WORLD = ArmWorld(PAIR, random_motion(2, 6, 1.2, centre=(0.6, 0.7)), ROTOR, Friction(COULOMB, VISCOUS, V0))
ON_BLADE = Push(AT, 0.4, "blade", (-12.0, 15.0, 9.0), (0.1, 0.02, 0.3))
ON_BEAM = Push(AT, 0.4, "beam", (25.0, 0.0, 10.0), (0.0, 0.0, 0.35))  # loads the first joint alone


@cache
def motion(*pushes: Push, seconds: float = 2.5) -> Recording:
    return simulate(WORLD, seconds, pushes)


def wired(form: str = "joint-space", **changes: Any) -> Setup:
    """Return the arm with sensors at its links made ready, keys of its joints changed."""
    joints = [
        joint
        | {"coulomb_friction": float(COULOMB[i]), "viscous_friction": float(VISCOUS[i])}
        | {"friction_velocity": V0, "encoder_step": ENCODER_STEP, "velocity_noise_sd": VELOCITY_SD}
        | {"link_torque_sensor": True}
        | changes
        for i, joint in enumerate(PAIR_JOINTS)
    ]
    return made(PAIR, joints, {"tool_link": "tip"}, {"residual": form})


@cache
def narrow() -> Setup:
    """Return a setup whose band knows that the model is right."""
    setup = wired()
    fast, rated = setup.band.fast.copy(), setup.params["rated"][0]
    fast[:, FLOOR], fast[:, TORQUE], fast[:, INERTIA] = (0.004 * rated) ** 2, 0.01**2, 0.02**2
    band = replace(setup.band, fast=fast, slow=fast, cusum_sd=0.004 * rated)
    return build(setup.config, Calibration(setup.model, band))


def played(rig: Rig, recording: Recording, silent: slice = slice(0, 0)) -> Floats:
    """Send a motion with its link torques, but for the `silent` samples; return the rows (T,4) after each."""
    rows = np.zeros((len(recording.t), len(rig.outputs["row_fast"])))
    told = set(range(len(recording.t))[silent])
    for k in range(len(recording.t)):
        fields = {} if k in told else {"tau_link": recording.tau_link[k].tolist()}
        rig.sample(recording.q[k], recording.qd[k], recording.tau[k], **fields)
        rows[k] = rig.outputs["row_fast"]
        whole = rig.outputs["r_fast"]
        if len(rows[k]) == 4:
            assert np.abs(rows[k, LINKS] + rows[k, MOTORS] - whole).max() < 1e-9
    assert rig.state["bad"][1:].sum() == 0
    return rows


def noisy(recording: Recording) -> Recording:
    return with_noise(recording, 7, ENCODER_STEP, VELOCITY_SD, TORQUE_SD, TORQUE_SD)


def lost(recording: Recording, torque: Floats) -> Recording:
    """Return the same motion, its drives believing to give that much (T,n) more than they do."""
    return replace(recording, tau=recording.tau + torque)


def misread(recording: Recording, torque: Floats) -> Recording:
    """Return the same motion, its sensors reading that much (T,n) too much."""
    return replace(recording, tau_link=recording.tau_link + torque)


def from_then(recording: Recording, joint: int, torque: float | Floats) -> Floats:
    """Return (T,n): a torque at one joint that comes within 50 ms from `AT` on, as smooth as motion is."""
    after = np.zeros_like(recording.tau)
    share = np.sin(0.5 * np.pi * np.clip((recording.t - AT) / 0.05, 0.0, 1.0)) ** 2
    after[:, joint] = share * torque
    return after


# --- two ledgers --------------------------------------------------------------------------------


@pytest.mark.parametrize("form", FORMS)
def test_a_contact_is_seen_at_the_link_side_alone_and_is_the_engines_outside_torque(form: str) -> None:
    rows, truth = played(Rig(wired(form)), motion(ON_BLADE)), motion(ON_BLADE).tau_ext
    error = (rows - np.hstack([expected(truth, form, slow=False), 0.0 * truth]))[600:]
    assert np.abs(truth).max(axis=0).min() > 1.0
    assert np.abs(error / np.tile(RATED, 2)).max() < 5e-3


@pytest.mark.parametrize("form", FORMS)
def test_a_fault_of_a_drive_is_seen_at_the_motor_side_alone(form: str) -> None:
    recording = motion()
    missing = from_then(recording, UPPER, 0.2 * recording.tau[:, UPPER])
    rows = played(Rig(wired(form)), lost(recording, missing))
    wanted = np.hstack([0.0 * missing, -expected(missing, form, slow=False)])
    assert np.abs(missing).max() > 1.0
    assert np.abs((rows - wanted)[600:] / np.tile(RATED, 2)).max() < 5e-3


@pytest.mark.parametrize("form", FORMS)
def test_a_sensor_that_reads_wrong_is_seen_at_both_sides_with_opposite_sign(form: str) -> None:
    recording = motion()
    error = from_then(recording, LOWER, 3.0)
    rows = played(Rig(wired(form)), misread(recording, error))
    seen = expected(error, form, slow=False)
    assert np.abs((rows - np.hstack([-seen, seen]))[600:] / np.tile(RATED, 2)).max() < 5e-3


@pytest.mark.parametrize("form", FORMS)
def test_a_drive_that_leaves_gravity_out_is_given_it_back_beside_the_sensor(form: str) -> None:
    recording = motion(ON_BLADE)
    gravity = np.array([Mover(PAIR).gravity_torque(q) for q in recording.q])
    assert np.abs(gravity).max() > 5.0
    left_out = replace(recording, tau=recording.tau - gravity)
    rows = played(Rig(wired(form, gravity_compensated=True)), left_out)
    np.testing.assert_allclose(rows[600:], played(Rig(wired(form)), recording)[600:], atol=0.02)


def test_readings_are_held_back_as_the_torque_of_their_drive_is() -> None:
    # Delays of 3 and 1 ms: the state is held back by 3 samples, the torques by none and by 2.
    joints = [
        joint | {"link_torque_sensor": True, "torque_delay_s": delay}
        for joint, delay in zip(PAIR_JOINTS, (0.003, 0.001), strict=True)
    ]
    blocks = made(PAIR, joints).blocks()
    s = blocks.state[0]
    for k in range(12):
        s["line_at"] = k % 4
        s["tau_link"][:] = (k, 100 + k)
        link_torque.delayed(blocks.params, blocks.state)
        if k >= 4:
            assert s["tau_link"].tolist() == [k, 100 + k - 2]


# --- what is said -------------------------------------------------------------------------------


def said(recording: Recording) -> list[dict[str, Any]]:
    """Return the last statement on each event of a motion with sensor noise, in order."""
    rig = Rig(narrow())
    played(rig, noisy(recording))
    assert rig.alarms("signal") == []
    last = {m.body["event"]: m.body for m in rig.messages if m.topic == "verdict"}
    return [last[number] for number in sorted(last)]


def named(body: Mapping[str, Any]) -> tuple[Any, ...]:
    return body["verdict"], body["detail"], body["joint"], body["link"]


def test_work_without_faults_opens_no_event() -> None:
    assert said(motion()) == []


def test_a_push_that_loads_one_joint_alone_is_a_contact_and_no_fault_of_its_drive() -> None:
    (event,) = said(motion(ON_BEAM))
    assert (event["verdict"], event["link"]) == ("contact", "beam")
    assert event["probability"] > 0.99


def test_a_drive_of_the_same_joint_that_gives_less_is_an_actuator() -> None:
    recording = motion()
    (event,) = said(lost(recording, from_then(recording, UPPER, 5.0)))
    assert (event["verdict"], event["joint"]) == ("actuator", "upper")


def test_a_sensor_with_an_offset_is_named_with_its_size() -> None:
    recording = motion(seconds=4.2)
    first, *_ = said(misread(recording, from_then(recording, LOWER, 2.0)))
    assert named(first) == ("torque-sensor", "offset", "lower", None)
    assert first["lasting"]
    assert first["size"]["unit"] == "N m"
    assert first["size"]["value"] == pytest.approx(2.0, rel=0.1)


def test_a_sensor_that_reads_too_large_a_torque_is_named_with_the_share() -> None:
    recording = motion(seconds=4.2)
    error = from_then(recording, UPPER, 0.4 * recording.tau_link[:, UPPER])
    first, *_ = said(misread(recording, error))
    assert named(first) == ("torque-sensor", "scale", "upper", None)
    assert first["lasting"]
    assert first["size"]["unit"] == "1"
    assert first["size"]["value"] == pytest.approx(0.4, rel=0.1)


# --- sensors that fall silent --------------------------------------------------------------------


def coverage(rig: Rig) -> tuple[list[int], list[int]]:
    return rig.outputs["coverage"].tolist(), rig.outputs["reason"].tolist()


def missing(rig: Rig) -> set[str | None]:
    """Return the joints whose sensor is said to be missing."""
    return {joint for kind, detail, joint in rig.standing() if (kind, detail) == ("sensor", "missing")}


def test_silent_sensors_are_said_and_one_ledger_is_kept_until_they_read_again() -> None:
    rig, recording = Rig(narrow()), noisy(motion(ON_BLADE, seconds=4.2))
    first, silent, again = (
        replace(
            recording,
            **{name: getattr(recording, name)[part] for name in ("t", "q", "qd", "tau", "tau_link")},
        )
        for part in (slice(0, 800), slice(800, 2500), slice(2500, None))
    )
    played(rig, first)
    assert coverage(rig) == ([Coverage.WATCHING] * 2, [Reason.NONE] * 2)
    assert missing(rig) == set()
    rows = played(rig, silent, silent=slice(None))
    assert coverage(rig) == ([Coverage.CONDITIONAL] * 2, [Reason.LINK_TORQUE_MISSING] * 2)
    assert missing(rig) == {"upper", "lower"}
    assert not rows[:, LINKS].any()
    assert np.abs(rows[:, MOTORS] / RATED).max() > 0.1
    assert len({m.body["event"] for m in rig.messages if m.topic == "verdict"}) == 1
    last = [m.body for m in rig.messages if m.topic == "verdict"][-1]
    assert last["onset_t"] - 5.0 == pytest.approx(AT, abs=0.06)
    assert not last["open"]
    played(rig, again)
    assert coverage(rig) == ([Coverage.WATCHING] * 2, [Reason.NONE] * 2)
    assert missing(rig) == set()
    assert last == [m.body for m in rig.messages if m.topic == "verdict"][-1]


def test_both_sides_of_a_silent_sensor_count_as_their_sum() -> None:
    # Outside judge: the normalised square of the sums alone, by numpy's solver.
    rig, recording = Rig(narrow()), noisy(motion(ON_BLADE))
    for k in range(1750):
        link = [float("nan"), recording.tau_link[k, LOWER]]
        rig.sample(recording.q[k], recording.qd[k], recording.tau[k], tau_link=link)
    assert coverage(rig)[1] == [Reason.LINK_TORQUE_MISSING, Reason.NONE]
    s = rig.state
    together = np.array([[1.0, 0.0, 1.0, 0.0], [0.0, 1.0, 0.0, 0.0], [0.0, 0.0, 0.0, 1.0]])
    left, R = together @ s["left"], together @ s["R"] @ together.T
    limit = rig.setup.params["body_limit"][0]
    assert rig.outputs["body_ratio"] * limit == pytest.approx(left @ np.linalg.solve(R, left), rel=1e-5)
    assert rig.outputs["body_ratio"] > 1.0


def test_a_reading_beyond_the_range_is_none() -> None:
    rig, recording = Rig(wired(link_torque_range=100.0)), motion()
    for k in range(1300):
        link = recording.tau_link[k] if k != 600 else np.array([0.0, 101.0])
        rig.sample(recording.q[k], recording.qd[k], recording.tau[k], tau_link=link.tolist())
    assert coverage(rig)[1] == [Reason.NONE, Reason.LINK_TORQUE_MISSING]
    assert missing(rig) == {"lower"}


def test_a_reading_that_nobody_asked_for_is_ignored_and_said_so(pair: Rig) -> None:
    for _ in range(1100):
        pair.sample([0.3, -0.5], [0.0, 0.0], [0.0, 0.0], tau_link=[5.0, 7.0])
    health = [m.body for m in pair.messages if m.topic == "health"]
    assert health[-1]["ignored"] == ["tau_link"]
    assert pair.outputs["row_fast"].tolist() == pair.outputs["r_fast"].tolist()


# --- what cannot be ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("joint", "robot", "found"),
    [
        (
            {"torque_meaning": "link"},
            {},
            r"robot.joint\[0\] 'upper'.link_torque_sensor: found true beside torque_meaning",
        ),
        ({}, {"coupling": [[1.0, 0.5], [0.0, 1.0]]}, "link_torque_sensor: found true beside a coupling"),
    ],
)
def test_what_two_ledgers_cannot_be_kept_of_is_refused(
    joint: dict[str, Any], robot: dict[str, Any], found: str
) -> None:
    joints = [{**one, "link_torque_sensor": True, **joint} for one in PAIR_JOINTS]
    with pytest.raises(ConfigError, match=found):
        made(PAIR, joints, robot)
