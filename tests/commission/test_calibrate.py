"""From recordings as the wire brings them to a calibration: conversion, words and refusals."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pinocchio as pin
import pytest
import tomlkit
from numpy.typing import NDArray

from monitor.commission.band import without_limits
from monitor.commission.calibrate import Report, calibrate, recording
from monitor.commission.drive import Samples, free_rows, run
from monitor.errors import ConfigError, SessionError
from monitor.flow.step import step
from monitor.setup.build import Setup, build
from monitor.setup.calibration import Calibration, calibration_text
from monitor.setup.config import Config, loads
from tests.commission.motions import V0, Machine, noisy
from tests.flow.rig import PAIR, PAIR_JOINTS, SLED, SLED_JOINTS

Floats = NDArray[np.float64]

RATED = np.array([40.0, 20.0])
ARM = Machine(
    PAIR, "fixed",
    armature=np.array([0.3, 0.1]), viscous=np.array([1.5, 0.6]), coulomb=np.array([2.0, 0.9]),
    offset=np.array([0.4, -0.2]),
)  # fmt: skip


def config(
    urdf: str = PAIR,
    joints: list[dict[str, Any]] = PAIR_JOINTS,
    files: dict[str, str] | None = None,
    **robot: Any,
) -> Config:
    document = {"schema": 1, "robot": {"urdf": "r.urdf", **robot, "joint": joints}}
    return loads(tomlkit.dumps(document), "robot.toml", {"r.urdf": urdf} | (files or {}))


def no_base(samples: int) -> Floats:
    return np.zeros((samples, 0))


def drawn(samples: int, m: int, seed: int = 1) -> Samples:
    """Smooth readings of any kind, times by the clock of a robot that has run for a while."""
    rng = np.random.default_rng(seed)
    t = 1e-3 * np.arange(samples)[:, None]
    turn, phase = rng.uniform(1.0, 3.0, m), rng.uniform(0.0, 6.0, m)
    q, qd, tau = np.sin(turn * t + phase), turn * np.cos(turn * t + phase), np.sin(3.0 * turn * t)
    return Samples(
        np.arange(samples, dtype=np.int64) * 1_000_000 + 5_000_000_000, q, qd, tau, no_base(samples)
    )


# --- conversion ----------------------------------------------------------------------------------


WIRE = [
    {"name": "lower", "rated_torque": 20.0, "sign": -1, "zero_offset": 0.3, "torque_delay_s": 0.002},
    {
        "name": "upper", "rated_torque": 40.0, "torque_meaning": "current", "torque_constant": 0.1,
        "gear_ratio": 50.0, "torque_delay_s": -0.003,
    },
]  # fmt: skip


def test_readings_come_in_the_order_signs_and_units_of_the_model() -> None:
    """By hand: order swapped, one joint turned round, one torque a current; each late by its own delay."""
    setup, samples = build(config(joints=WIRE)), drawn(400, 2)
    found = recording(setup, samples)
    q = np.column_stack([samples.q[:, 1], -samples.q[:, 0] + 0.3])
    v = np.column_stack([samples.qd[:, 1], -samples.qd[:, 0]])
    # The torque of `lower` comes two samples late: that of a moment is two rows on; `upper` is three early.
    rows = 3 + np.arange(400 - 2 - 3)
    tau = np.column_stack([0.1 * 50.0 * samples.tau[rows - 3, 1], -samples.tau[rows + 2, 0]])
    np.testing.assert_allclose(found.q, q[rows], rtol=1e-12)
    np.testing.assert_allclose(found.v, v[rows], rtol=1e-12)
    np.testing.assert_allclose(found.tau, tau, rtol=1e-12)
    np.testing.assert_allclose(found.t, 1e-3 * rows, rtol=1e-9)
    assert found.usable is not None
    assert found.usable.all()


def stepped(setup: Setup, samples: Samples, k: int) -> tuple[Floats, Floats, Floats]:
    """What the step of the live loop takes for q, v, tau after sample k."""
    blocks = setup.blocks()
    for j in range(k + 1):
        x = blocks.inputs[0]
        x["seq"], x["t_ns"], x["q"], x["qd"], x["tau"] = j, *(part[j] for part in samples[:4])
        if setup.sizes.base:
            x["base_p"], x["base_quat"] = samples.base[j, :3], samples.base[j, 3:7]
            x["base_v"], x["base_w"] = samples.base[j, 7:10], samples.base[j, 10:]
        step(*blocks)
    s = blocks.state[0]
    return s["q"].copy(), s["v"].copy(), s["tau"].copy()


@pytest.mark.parametrize("k", [5, 50, 399])
def test_the_fit_sees_what_the_live_loop_sees(k: int) -> None:
    setup, samples = build(config(joints=WIRE)), drawn(400, 2)
    found = recording(setup, samples)
    for mine, its in zip((found.q, found.v, found.tau), stepped(setup, samples, k), strict=True):
        np.testing.assert_allclose(mine[k - (setup.sizes.D - 1)], its, rtol=1e-12)


def test_torques_are_not_paired_with_motion_across_a_gap() -> None:
    setup, samples = build(config(joints=WIRE)), drawn(400, 2)
    t_ns = samples.t_ns.copy()
    t_ns[200:] += 50_000_000
    usable = recording(setup, samples._replace(t_ns=t_ns)).usable
    assert usable is not None
    # Of each five samples that belong together, none may be beyond the gap: four rows are lost.
    np.testing.assert_array_equal(np.flatnonzero(~usable.all(axis=1)), 200 - 2 - 3 + np.arange(5))


FEET = [{"name": "foot", "link": "rod", "point": [0.0, 0.0, -0.2]}]


def walking(samples: int, standing: slice) -> Samples:
    rng = np.random.default_rng(8)
    base = np.hstack(
        [rng.normal(size=(samples, 3)), rng.normal(size=(samples, 4)), rng.normal(size=(samples, 6))]
    )
    feet = np.zeros((samples, 1), np.int64)
    feet[standing] = 1
    return drawn(samples, 2)._replace(base=base, feet=feet)


def test_the_base_comes_in_body_axes() -> None:
    setup = build(config(SLED, SLED_JOINTS, base="floating", foot=FEET))
    samples = walking(50, slice(0, 0))
    found = recording(setup, samples)
    for k in (0, 17, 49):
        w, x, y, z = samples.base[k, 3:7] / np.linalg.norm(samples.base[k, 3:7])
        # Outside judge: the quaternion class of pin (x y z w).
        R = pin.Quaternion(np.array([x, y, z, w])).toRotationMatrix()
        np.testing.assert_allclose(found.q[k, :7], [*samples.base[k, :3], w, x, y, z], rtol=1e-12)
        np.testing.assert_allclose(found.v[k, :3], samples.base[k, 10:13], rtol=1e-12)
        np.testing.assert_allclose(found.v[k, 3:6], R.T @ samples.base[k, 7:10], rtol=1e-9)
    assert (found.tau[:, :6] == 0.0).all()


def test_rows_that_feel_a_planned_foot_are_not_used() -> None:
    setup = build(config(SLED, SLED_JOINTS, base="floating", foot=FEET))
    samples = walking(1000, slice(400, 600))
    free = free_rows(setup, samples)
    # The only leg carries the foot: all its joints, and the base; from 20 ms before the plan to 50 ms after.
    np.testing.assert_array_equal(np.flatnonzero((free == 0).all(axis=1)), np.arange(380, 650))
    np.testing.assert_array_equal(free.any(axis=1), free.all(axis=1))
    np.testing.assert_array_equal(recording(setup, samples).usable, free != 0)


def test_a_leg_beside_the_standing_one_is_free() -> None:
    two = (
        SLED.replace("</robot>", "")
        + SLED.split('name="sled">')[1].replace("</robot>", "").split("</link>", 1)[1]
    )
    two = two[: two.rindex('<joint name="hip"')] + two[two.rindex('<joint name="hip"') :].replace(
        "hip", "hip_b"
    ).replace("thigh", "thigh_b").replace("slide", "slide_b").replace('"rod"', '"rod_b"')
    joints = SLED_JOINTS + [{**joint, "name": f"{joint['name']}_b"} for joint in SLED_JOINTS]
    feet = [*FEET, {"name": "foot_b", "link": "rod_b"}]
    setup = build(config(two + "</robot>", joints, base="floating", foot=feet))
    samples = walking(300, slice(0, 0))._replace(q=np.zeros((300, 4)), feet=np.tile([[1, 0]], (300, 1)))
    free = free_rows(setup, samples)
    rows = {name: bool(free[:, row].all()) for row, name in enumerate(setup.facts.rows)}
    assert [name for name, is_free in rows.items() if is_free] == ["hip_b", "slide_b"]


@pytest.mark.parametrize(
    ("feet", "found"), [(None, "no planned feet"), (np.zeros((50, 3), np.int64), "planned feet of shape")]
)
def test_a_walking_robot_without_planned_feet_is_refused(feet: Any, found: str) -> None:
    setup = build(config(SLED, SLED_JOINTS, base="floating", foot=FEET))
    for use in (recording, run):
        with pytest.raises(SessionError, match=found):
            use(setup, walking(50, slice(0, 0))._replace(feet=feet))


# --- the whole -----------------------------------------------------------------------------------


def said(**robot: Any) -> Config:
    """A description 8 % off, friction unknown, noise as it is."""
    joints = [
        {**joint, "friction_velocity": V0, "encoder_step": 2.0 * np.pi / 2**17, "velocity_noise_sd": 0.007}
        for joint in PAIR_JOINTS
    ]
    urdf = PAIR.replace('<mass value="4"/>', '<mass value="4.3"/>').replace(
        '<mass value="2"/>', '<mass value="1.85"/>'
    )
    return config(urdf, joints, **robot)


@cache
def session(seed: int, seconds: float) -> Samples:
    rows = noisy(ARM.moved(seconds, seed), seed, 0.005 * RATED)
    t_ns = np.round(1e9 * rows.t).astype(np.int64) + 10**9
    return Samples(t_ns, rows.q, rows.v, rows.tau, no_base(len(t_ns)))


@cache
def calibrated() -> tuple[Calibration, Report]:
    return calibrate(
        said(), [session(1, 20.0), session(2, 20.0)], [session(3, 40.0), session(4, 40.0)], 300.0
    )


def test_a_calibrated_robot_explains_unseen_work_and_stays_calm() -> None:
    calibration, _ = calibrated()
    unseen = session(9, 60.0)
    plain = build(said())
    calm = build(said(), calibration)
    before = run(plain.with_band(without_limits(plain.band)), unseen)
    after = run(calm, unseen)
    assert not after.open.any()
    settled = after.settling == 0
    worse = np.sqrt((before.r_slow[settled] ** 2).mean(axis=0))
    better = np.sqrt(((after.r_slow - after.explained)[settled] ** 2).mean(axis=0))
    assert (better < 0.2 * worse).all()
    # The band knows how large the residual is: normalised, its square is one in the mean.
    left, sd = (after.r_fast - after.explained)[settled], after.variance[settled]
    cause = np.einsum("tic,ic->ti", after.cause[settled], calibration.band.fast)
    assert (left**2 / (cause + sd[:, 2])).mean(axis=0) == pytest.approx(1.0, abs=0.25)
    # A tenth of rated torque does not pass unnoticed.
    assert (calibration.band.row_limit * np.sqrt(np.median(cause, axis=0)) < 0.1 * RATED).all()


def test_the_report_says_what_the_limits_rest_on() -> None:
    calibration, report = calibrated()
    assert report.band.band is calibration.band
    assert report.band.judged_s == pytest.approx(78.0, abs=2.0)  # two settling seconds off
    assert report.band.shown_s == pytest.approx(report.band.judged_s / 3.0)
    words = report.band.in_words()
    assert "for one false alarm in 300 s rest on 7" in words
    assert "extrapolated: without an alarm, such recordings show at best one in 2" in words
    assert "extrapolated" not in report.band._replace(wanted_s=20.0).in_words()
    assert (report.model.residual_rms < 0.2 * report.model.cad_rms).all()


def test_rarer_alarms_need_higher_limits() -> None:
    from monitor.commission.band import limited

    calibration, report = calibrated()
    month = limited(build(said(), calibration), calibration.band, [session(3, 40.0), session(4, 40.0)], 2.6e6)
    for name in ("row_limit", "body_limit", "cusum_limit"):
        assert getattr(month.band, name) >= getattr(calibration.band, name)
    assert month.band.row_limit > calibration.band.row_limit
    assert month.tails == report.band.tails


def test_a_calibration_written_to_its_file_gives_the_same_setup() -> None:
    calibration, _ = calibrated()
    plain = build(said())
    text = calibration_text(calibration, plain.tree, plain.config)
    setup = build(said(calibration="r.json", files={"r.json": text}))
    assert setup.params.tobytes() == build(said(), calibration).params.tobytes()


def test_too_short_recordings_give_no_limits_whatever_calibration_is_named_already() -> None:
    named = said(calibration="r.json", files={"r.json": "not even JSON"})
    with pytest.raises(SessionError) as caught:
        calibrate(named, [session(1, 20.0), session(2, 20.0)], [session(1, 20.0)], 300.0)
    assert caught.value.where == "recordings for the band"
    assert caught.value.expected == "at least 60"


@pytest.mark.parametrize(
    ("changed", "robot", "where"),
    [
        ({"gravity_compensated": True}, {}, "robot.joint[0] 'upper'.gravity_compensated"),
        ({}, {"coupling": [[1.0, 0.5], [0.0, 1.0]]}, "robot.coupling"),
    ],
)
def test_what_cannot_be_fitted_is_refused(changed: dict[str, Any], robot: dict[str, Any], where: str) -> None:
    joints = [PAIR_JOINTS[0] | changed, PAIR_JOINTS[1]]
    with pytest.raises(ConfigError) as caught:
        calibrate(config(joints=joints, **robot), [session(1, 20.0)], [session(2, 20.0)], 300.0)
    assert caught.value.where == f"robot.toml: {where}"
