"""Seven joints moved and pushed by an independent physics engine (`mujoco`), sent as wire bytes."""

from __future__ import annotations

import json
import math
import re
from functools import cache

import numpy as np
import pytest
from numpy.typing import NDArray

from monitor.flow.alarms import RETURNED, UNACKNOWLEDGED
from monitor.setup.build import Setup
from replay.simulate import DATASHEET, URDF
from tests.flow.rig import FORMS, Rig, Rows, made
from tests.kernels.test_ledger import iterated_gain
from tests.worlds.arm import ArmWorld, Friction, Push, Recording, random_motion, simulate
from tests.worlds.noise import with_noise

Floats = NDArray[np.float64]

SHEET = json.loads(DATASHEET.read_text(encoding="utf-8"))["joints"]
RATED = np.array([row["rated_torque"] for row in SHEET])
ENCODER_STEP, VELOCITY_SD = SHEET[0]["encoder_step"], SHEET[0]["velocity_noise_sd"]
TORQUE_SD = np.array([row["torque_noise_sd"] for row in SHEET])
ARMATURE = np.array([row["armature"] for row in SHEET])
COULOMB = np.array([4.2, 5.0, 2.6, 2.6, 1.1, 1.1, 0.65])
VISCOUS = np.array([2.4, 2.8, 1.4, 1.4, 0.55, 0.55, 0.3])
V0 = 0.01
WORLD = ArmWorld(
    URDF.read_text(encoding="utf-8"),
    random_motion(7, 1, 1.0, centre=(0.0, 0.4, 0.0, 1.3, 0.0, 0.7, 0.0)),
    armature=ARMATURE,
    friction=Friction(COULOMB, VISCOUS, V0),
)
PUSHES = (
    Push(1.0, 0.5, "spar", (40.0, 30.0, -20.0), (0.0, 0.05, 0.1)),
    Push(2.2, 0.4, "beam", (0.0, 80.0, 10.0), (0.0, 0.0, 0.18), rise_s=0.02),
)


@cache
def pushed() -> Recording:
    return simulate(WORLD, 3.2, PUSHES)


@cache
def pushed_once() -> Recording:
    return simulate(WORLD, 3.2, PUSHES[:1])


@cache
def quiet() -> Recording:
    return simulate(WORLD, 4.0)


def noise(recording: Recording, seed: int) -> Recording:
    return with_noise(recording, seed, ENCODER_STEP, VELOCITY_SD, TORQUE_SD)


def rows_of(recording: Recording) -> Rows:
    return Rows(recording.t, recording.q, recording.qd, recording.tau, recording.tau_ext)


def rind(form: str, urdf: str = WORLD.urdf, share: float = 1.0) -> Setup:
    """Return the arm made ready; friction and rotor inertia as they are, or off by a share."""
    joints = [
        {
            **row,
            "armature": share * row["armature"],
            "coulomb_friction": share * coulomb,
            "viscous_friction": share * viscous,
            "friction_velocity": V0,
        }
        for row, coulomb, viscous in zip(SHEET, COULOMB.tolist(), VISCOUS.tolist(), strict=True)
    ]
    return made(urdf, joints, watch={"residual": form})


def expected(torque: Floats, form: str, slow: bool) -> Floats:
    """Return the torque (T,n) as a filter of that form shows it, written anew: the default settings at 1 kHz.

    First order: `exp(-pole dt)`. Second order: the transfer function λ²/(s² + √2 λ s + λ²), by `scipy`. Joint
    space: the Kalman filter of one joint of unit inertia, its gain by iterating the covariance.
    """
    from scipy.signal import cont2discrete, lfilter

    dt, pole = 1e-3, 2.0 * math.pi * (3.0 if slow else 15.0)
    if form == "first-order":
        keep = math.exp(-pole * dt)
        mean = 0.5 * (torque + np.vstack([torque[:1], torque[:-1]]))
        return np.asarray(lfilter([1.0 - keep], [1.0, -keep], mean, axis=0))
    if form == "second-order":
        b, a, _ = cont2discrete(([pole**2], [1.0, math.sqrt(2.0) * pole, pole**2]), dt, method="foh")
        return np.asarray(lfilter(b.ravel(), a, torque, axis=0))
    K = iterated_gain(ENCODER_STEP / math.sqrt(12.0), VELOCITY_SD, 1.0 if slow else 6.0, dt)
    A = np.array([[1.0, dt, dt * dt / 2.0], [0.0, 1.0, dt], [0.0, 0.0, 1.0]])
    true, guess, rows = np.zeros((2, torque.shape[1])), np.zeros((3, torque.shape[1])), []
    for last, now in zip(np.vstack([torque[:1], torque[:-1]]), torque, strict=True):
        # Acceleration varies linearly over dt.
        true = A[:2, :2] @ true + np.array([dt * dt * (last / 3.0 + now / 6.0), dt * (last + now) / 2.0])
        guess = A @ guess
        guess = guess + K @ (true - guess[:2])
        rows.append(guess[2])
    return np.array(rows)


def off_by(share: float) -> str:
    """Return the description with mass and inertia of every link off by up to that share, as drawings are."""
    rng = np.random.default_rng(5)

    def changed(link: re.Match[str]) -> str:
        scale = 1.0 + rng.uniform(-share, share)
        return re.sub(
            r'(value|ixx|ixy|ixz|iyy|iyz|izz)="([^"]+)"',
            lambda m: f'{m[1]}="{float(m[2]) * scale!r}"',
            link[0],
        )

    text, links = re.subn(r"<inertial>.*?</inertial>", changed, WORLD.urdf, flags=re.DOTALL)
    assert links == 8
    return text


@pytest.mark.parametrize("form", FORMS)
def test_residuals_are_the_outside_torque_of_the_engine_seen_through_the_filter(form: str) -> None:
    # Measured: 0.005 to 0.06 % of rated torque rms, at most 0.4 %.
    rig = Rig(rind(form))
    for slow, r in enumerate(rig.play(rows_of(pushed()))):
        error = (r - expected(pushed().tau_ext, form, bool(slow)))[600:] / RATED
        assert np.sqrt((error**2).mean(axis=0)).max() < 0.001
        assert np.abs(error).max() < 0.005
    assert rig.state["bad"][1:].sum() == 0


@pytest.mark.parametrize(
    ("form", "fast_sd", "slow_sd"),
    # Measured at the worst joint: .0085 .0021, .0045 .0006, .022 .0045 of rated torque.
    [("joint-space", 0.012, 0.003), ("second-order", 0.0065, 0.001), ("first-order", 0.03, 0.0065)],
)
def test_with_sensor_noise_the_outside_torque_is_met_within_a_few_thousandths_of_rated(
    form: str, fast_sd: float, slow_sd: float
) -> None:
    rig = Rig(rind(form))
    residuals = rig.play(rows_of(noise(pushed(), 1)))
    for slow, (r, sd) in enumerate(zip(residuals, (fast_sd, slow_sd), strict=True)):
        error = (r - expected(pushed().tau_ext, form, bool(slow)))[600:] / RATED
        assert np.sqrt((error**2).mean(axis=0)).max() < sd
        assert np.abs(error.mean(axis=0)).max() < 5e-4
    assert rig.state["bad"][1:].sum() == 0


@pytest.mark.parametrize("form", FORMS)
def test_a_push_opens_one_event_within_milliseconds_is_called_contact_and_ends_when_it_is_gone(
    form: str,
) -> None:
    rig = Rig(rind(form))
    rig.play(rows_of(noise(pushed_once(), 1)))
    start = 5.0  # the rig's robot clock before the first sample
    alarms = rig.alarms()
    assert {body["event"] for body in alarms} == {1}
    first, named, last = alarms
    assert (first["kind"], first["verdict"]) == ("unexplained-torque", "undecided")
    assert [body["state"] for body in alarms] == [UNACKNOWLEDGED, UNACKNOWLEDGED, RETURNED]
    assert 0.0 < first["t"] - start - PUSHES[0].start_s < 0.04
    assert PUSHES[0].start_s - 0.005 < first["onset_t"] - start < PUSHES[0].start_s + 0.03
    assert (named["kind"], named["verdict"]) == ("contact", "contact")
    assert named["t"] - first["t"] < 0.03
    # It ends 0.3 s after the residual is well back in its band; slow filter and sums take their time.
    assert 0.25 < last["t"] - start - 1.5 < 1.5
    assert (last["kind"], last["verdict"], last["joint"]) == ("contact", "contact", None)
    links = [place.name for place in rig.setup.tree.links]
    assert abs(links.index(last["link"]) - links.index(PUSHES[0].link)) <= 1
    assert last["probability"] > 0.9
    force = math.hypot(*PUSHES[0].force_n)
    assert abs(last["size"]["value"] - force) < max(0.25 * force, 2.0 * last["size"]["sd"])


@pytest.mark.parametrize("form", FORMS)
def test_motion_without_fault_is_silent_with_noise_and_a_model_a_few_percent_off(form: str) -> None:
    rig = Rig(rind(form, off_by(0.03), share=1.04))
    rig.play(rows_of(noise(quiet(), 2)))
    assert rig.alarms() == []
    assert rig.state["stepped"] == len(quiet().t)
    ratios = [max(m.body["band_ratio"].values()) for m in rig.messages if m.topic == "health"]
    assert len(ratios) >= 4
    assert 0.05 < max(ratios) < 1.0


def test_the_joint_space_form_lets_far_less_velocity_noise_through_than_the_first_order() -> None:
    # Methods §3: a first-order observer lets white velocity noise through over the whole band.
    at_rest = quiet()
    spread = {}
    for form in FORMS:
        fast, _ = Rig(rind(form)).play(rows_of(noise(at_rest, 3)))
        clean, _ = Rig(rind(form)).play(rows_of(at_rest))
        spread[form] = (fast - clean)[600:].std(axis=0) / RATED
    assert (spread["joint-space"] < 0.6 * spread["first-order"]).all()
    assert (spread["second-order"] < 0.6 * spread["first-order"]).all()
