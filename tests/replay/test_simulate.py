"""The simulated robot of the demo, judged by `pin` and `mujoco`."""

from __future__ import annotations

import csv
import json
import multiprocessing
import os
import signal
from pathlib import Path
from typing import Any

import msgpack
import mujoco
import numpy as np
import pinocchio
import pytest
import zmq
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from monitor.errors import SystemFault
from monitor.flow.wire import JointsFormat, decode_condition
from replay.simulate import (
    DATASHEET,
    PERIOD_NS,
    TANH_V0,
    URDF,
    Push,
    Rind,
    Sample,
    Schedule,
    Stop,
    TorqueLoss,
    default_schedule,
    publish,
    write_truth,
)

Floats = NDArray[np.float64]

SHEET = json.loads(DATASHEET.read_text(encoding="utf-8"))["joints"]
QUIET = Schedule()


def run(rind: Rind, seconds: float) -> tuple[Floats, Floats, Floats]:
    """Return q, qd and tau (T,7) of the next samples."""
    samples = [rind.step() for _ in range(round(seconds * 1000))]
    q, qd, tau = (np.array([getattr(sample, name) for sample in samples]) for name in ("q", "qd", "tau"))
    return q, qd, tau


def judge(rind: Rind) -> Any:
    """Return the true robot in `pin`."""
    model = pinocchio.buildModelFromUrdf(str(URDF))
    for i, E in enumerate(rind.inertias):
        mass, com = E[3, 3], E[:3, 3] / E[3, 3]
        Sigma = E[:3, :3] - mass * np.outer(com, com)
        model.inertias[i + 1] = pinocchio.Inertia(mass, com, np.trace(Sigma) * np.eye(3) - Sigma)
    return model


def unexplained(rind: Rind, q: Floats, qd: Floats, tau: Floats) -> Floats:
    """Return the torque (T-1,7) that the true robot's momentum balance in `pin` leaves over each period."""
    model = judge(rind)
    data = model.createData()
    armature = np.diag([row["armature"] for row in SHEET])
    p, u = np.empty_like(q), np.empty_like(q)
    for k in range(len(q)):
        M = pinocchio.crba(model, data, q[k])
        M = np.triu(M) + np.triu(M, 1).T + armature
        C = pinocchio.computeCoriolisMatrix(model, data, q[k], qd[k])
        friction = rind.coulomb * np.tanh(qd[k] / TANH_V0) + rind.viscous * qd[k]
        p[k] = M @ qd[k]
        u[k] = tau[k] - friction + C.T @ qd[k] - pinocchio.computeGeneralizedGravity(model, data, q[k])
    rest: Floats = np.diff(p, axis=0) / 1e-3 - 0.5 * (u[1:] + u[:-1])
    return rest


def test_inertias_of_the_description_are_those_of_its_shapes_filled_evenly() -> None:
    # Judge: mujoco's own inertia from shapes of constant density.
    spec = mujoco.MjSpec.from_file(str(URDF))
    spec.compiler.fusestatic = False
    stated = spec.compile()
    spec.compiler.inertiafromgeom = mujoco.mjtInertiaFromGeom.mjINERTIAFROMGEOM_TRUE
    filled = spec.compile()
    for name in ("plinth", "shoulder", "beam", "sleeve", "crook", "spar", "fork", "paddle"):
        mine, its = stated.body(name), filled.body(name)
        np.testing.assert_allclose(mine.ipos, its.ipos, atol=1e-6)
        scale = mine.mass / its.mass
        np.testing.assert_allclose(np.sort(mine.inertia), np.sort(its.inertia) * scale, rtol=2e-5)


def test_rind_moves_about_twenty_kilograms_and_reaches_nine_tenths_of_a_metre() -> None:
    model = pinocchio.buildModelFromUrdf(str(URDF))
    data = model.createData()
    assert sum(inertia.mass for inertia in list(model.inertias)[1:]) == pytest.approx(20.0, abs=1.0)
    pinocchio.framesForwardKinematics(model, data, np.zeros(7))
    paddle, shoulder = (data.oMf[model.getFrameId(name)].translation for name in ("paddle", "beam"))
    assert np.linalg.norm(paddle + np.array([0.0, 0.0, 0.05]) - shoulder) == pytest.approx(0.9, abs=0.05)


def test_the_true_robot_is_another_body_by_a_few_percent() -> None:
    rind, described = Rind(1, QUIET), pinocchio.buildModelFromUrdf(str(URDF))
    for E, inertia in zip(rind.inertias, list(described.inertias)[1:], strict=True):
        assert np.linalg.eigvalsh(E).min() > 0.0
        assert 0.0 < abs(E[3, 3] / inertia.mass - 1.0) < 0.08
    assert not np.allclose(Rind(2, QUIET).inertias, rind.inertias, rtol=1e-3)


def test_the_quiet_robot_moves_by_its_true_dynamics() -> None:
    # Judge: pin.crba, computeCoriolisMatrix, computeGeneralizedGravity.
    rind = Rind(3, QUIET, noisy=False)
    q, qd, tau = run(rind, 3.0)
    assert np.abs(qd).max() > 0.8
    rest = unexplained(rind, q, qd, tau)
    rated = np.array([row["rated_torque"] for row in SHEET])
    assert (np.sqrt(np.mean(rest**2, axis=0)) < 5e-4 * rated).all()
    # Within the millisecond of a reversal friction is no straight line.
    assert (np.abs(rest).max(axis=0) < 5e-3 * rated).all()


def test_a_push_is_felt_as_the_transposed_jacobian_times_its_force() -> None:
    # Judge: pin.computeFrameJacobian, for the torque left over and for the stated peaks.
    push = Push(0.6, 0.3, "spar", (40.0, 30.0, 25.0), (0.0, 0.05, 0.1))
    rind = Rind(4, Schedule(pushes=(push,)), noisy=False)
    q, qd, tau = run(rind, 1.2)
    rest = unexplained(rind, q, qd, tau)
    plateau = range(630, 871)
    model = judge(rind)
    data = model.createData()
    felt = np.zeros((len(q), 7))
    for k in plateau:
        frame = model.getFrameId(push.link)
        J = pinocchio.computeFrameJacobian(
            model, data, q[k], frame, pinocchio.ReferenceFrame.LOCAL_WORLD_ALIGNED
        )
        pinocchio.updateFramePlacement(model, data, frame)
        arm = data.oMf[frame].rotation @ np.array(push.point_m)
        felt[k] = J.T @ np.concatenate([push.force_n, np.cross(arm, push.force_n)])
    np.testing.assert_allclose(rest[630:870], felt[630:870], atol=0.1)
    assert np.abs(rest[:599]).max() < 0.1
    (happened,) = rind.truth
    assert (happened.kind, happened.where, happened.start_ns) == ("push", "spar", 600_000_000)
    assert happened.size == pytest.approx(np.sqrt(40**2 + 30**2 + 25**2))
    assert list(happened.peak_nm) == list(rind.joints)
    np.testing.assert_allclose(list(happened.peak_nm.values()), np.abs(felt).max(axis=0), atol=0.1)


def test_a_torque_loss_takes_its_share_of_the_believed_torque_on_one_joint_only() -> None:
    # Judge: pin's momentum balance.
    rind = Rind(5, Schedule(losses=(TorqueLoss(0.8, 0.5, "lean", 0.25),)), noisy=False)
    q, qd, tau = run(rind, 1.5)
    rest = unexplained(rind, q, qd, tau)
    np.testing.assert_allclose(rest[815:1285, 1], -0.25 * tau[815:1285, 1], atol=0.1)
    assert np.abs(np.delete(rest, 1, axis=1)).max() < 0.1
    (happened,) = rind.truth
    assert (happened.kind, happened.where, happened.size) == ("torque-loss", "lean", 0.25)
    peaks = np.array(list(happened.peak_nm.values()))
    assert peaks[1] == pytest.approx(0.25 * np.abs(tau[800:1300, 1]).max(), rel=0.01)
    assert not np.delete(peaks, 1).any()


def test_an_ordinary_stop_comes_to_rest_closes_the_brakes_takes_the_drives_off_and_goes_on() -> None:
    rind = Rind(6, Schedule(stops=(Stop(1.5, 3.0, "door-open"),)), noisy=False)
    samples: list[Sample] = []
    conditions: list[dict[str, Any]] = []
    for _ in range(6000):
        samples.append(rind.step())
        conditions.append(rind.condition())
    q, qd, tau = (np.array([getattr(s, name) for s in samples]) for name in ("q", "qd", "tau"))
    braked = np.array([c["brake"] == [1] * 7 for c in conditions])
    unpowered = np.array([c["drive"] == [0] * 7 for c in conditions])
    closed = np.flatnonzero(braked)
    assert (np.diff(closed) == 1).all()  # one stretch
    first, last = closed[0], closed[-1]
    assert 1500 < first < last < 4500
    assert np.abs(qd[first - 1]).max() < 0.01
    assert (q[first : last + 1] == q[first]).all()
    assert unpowered.any()
    assert not unpowered[~braked].any()
    assert np.abs(tau[(first + last) // 2]).max() == 0.0
    # The drives carry the arm again before the brakes open: nothing sags.
    assert np.abs(q[last + 200] - q[last]).max() < 0.01
    assert np.abs(qd[5000:]).max() > 0.3
    for stopped, condition in zip(braked, conditions, strict=True):
        assert condition["mode"] == ("stopped" if stopped else "work")
        assert condition["stop"] == ("door-open" if stopped else None)
    (happened,) = rind.truth
    assert (happened.kind, happened.where) == ("stop", "door-open")
    assert happened.size == pytest.approx(braked.sum() * 1e-3, abs=2e-3)


def test_the_truth_holds_only_what_has_begun() -> None:
    rind = Rind(1, Schedule(pushes=(Push(0.01, 0.1, "beam", (1.0, 0.0, 0.0)),)), start_ns=7)
    run(rind, 0.01)
    assert rind.truth == []
    run(rind, 0.01)
    assert [(one.start_ns, one.end_ns) for one in rind.truth] == [(10_000_007, 110_000_007)]


def test_the_clock_of_the_robot_ticks_in_whole_milliseconds_from_its_start() -> None:
    rind = Rind(1, QUIET, start_ns=123)
    assert [rind.step().t_ns for _ in range(3)] == [123, 123 + PERIOD_NS, 123 + 2 * PERIOD_NS]


def test_the_seed_decides_every_byte() -> None:
    first, again, other = (np.array(run(Rind(seed, QUIET), 0.2)) for seed in (1, 1, 2))
    assert first.tobytes() == again.tobytes()
    assert first.tobytes() != other.tobytes()


def test_sensors_have_the_steps_and_noise_of_the_datasheet() -> None:
    noisy, clean = run(Rind(1, QUIET), 4.0), run(Rind(1, QUIET, noisy=False), 4.0)
    step = np.array([row["encoder_step"] for row in SHEET])
    np.testing.assert_allclose(noisy[0] / step, np.round(noisy[0] / step), atol=1e-6)
    assert (np.abs(noisy[0] - clean[0]) <= 0.5 * step * (1 + 1e-9)).all()
    # Standard error of the standard deviation of 4000 samples: 1.1 %.
    for measured, exact, key in (
        (noisy[1], clean[1], "velocity_noise_sd"),
        (noisy[2], clean[2], "torque_noise_sd"),
    ):
        np.testing.assert_allclose((measured - exact).std(axis=0), [row[key] for row in SHEET], rtol=0.06)


def test_work_and_the_default_schedule_stay_within_the_limits_of_the_robot() -> None:
    model = pinocchio.buildModelFromUrdf(str(URDF))
    q, qd, tau = run(Rind(1, default_schedule(30.0), noisy=False), 30.0)
    assert (q > model.lowerPositionLimit).all()
    assert (q < model.upperPositionLimit).all()
    assert (np.abs(qd) < model.velocityLimit).all()
    assert (np.abs(tau).max(axis=0) < [row["rated_torque"] for row in SHEET]).all()
    assert 1.0 < np.abs(qd).max() < 2.0
    # It works on: in every whole second of the first cycle something turns.
    assert all(np.abs(qd[s * 1000 : (s + 1) * 1000]).max() > 0.2 for s in range(1, 7))


def test_the_default_pushes_and_loss_are_worth_noticing() -> None:
    rated = {row["name"]: row["rated_torque"] for row in SHEET}
    rind = Rind(1, default_schedule(40.0))
    run(rind, 40.0)
    effects = [
        max(one.peak_nm[name] / rated[name] for name in rated) for one in rind.truth if one.kind != "stop"
    ]
    assert len(effects) > 6
    assert min(effects) > 0.08


@given(st.floats(12.0, 3600.0))
def test_the_default_schedule_fits_any_length_with_quiet_between(seconds: float) -> None:
    schedule = default_schedule(seconds)
    events: list[Any] = sorted((*schedule.pushes, *schedule.losses, *schedule.stops), key=lambda e: e.start_s)
    assert len(schedule.losses) == len(schedule.stops) == 1
    assert len({push.link for push in schedule.pushes}) >= 2
    assert events[0].start_s >= 3.0
    ends = [e.start_s + e.duration_s for e in events]
    assert all(later.start_s - end > 0.5 for end, later in zip(ends, events[1:], strict=False))
    assert ends[-1] < seconds - 0.5


def test_too_short_or_impossible_schedules_are_refused() -> None:
    with pytest.raises(ValueError, match="at least 12"):
        default_schedule(11.9)
    with pytest.raises(ValueError, match=r"'wing'; expected one of .*paddle"):
        Rind(1, Schedule(pushes=(Push(1.0, 0.1, "wing", (1.0, 0.0, 0.0)),)))
    with pytest.raises(ValueError, match=r"'knee'; expected one of .*elbow"):
        Rind(1, Schedule(losses=(TorqueLoss(1.0, 0.1, "knee", 0.1),)))
    with pytest.raises(ValueError, match="at least 2"):
        Rind(1, Schedule(stops=(Stop(1.0, 1.0),)))


def test_the_truth_is_written_as_json_or_as_a_table(tmp_path: Path) -> None:
    rind = Rind(1, Schedule(pushes=(Push(0.05, 0.1, "beam", (50.0, 50.0, 0.0), (0.0, 0.0, 0.2)),)))
    run(rind, 0.2)
    write_truth(tmp_path / "truth.json", rind.truth)
    write_truth(tmp_path / "truth.csv", rind.truth)
    (entry,) = json.loads((tmp_path / "truth.json").read_text(encoding="utf-8"))
    with (tmp_path / "truth.csv").open(encoding="utf-8", newline="") as file:
        (row,) = csv.DictReader(file)
    peak = rind.truth[0].peak_nm["lean"]
    assert peak > 1.0
    assert entry["peak_nm"]["lean"] == float(row["peak_nm.lean"]) == peak
    assert entry["where"] == row["where"] == "beam"


def start_publishing(endpoint: str, seconds: float, truth: Path) -> Any:
    schedule = Schedule(pushes=(Push(0.05, 0.1, "beam", (50.0, 50.0, 0.0)),))
    process = multiprocessing.get_context("spawn").Process(
        target=publish, args=(endpoint, seconds, 1, schedule, truth)
    )
    process.start()
    return process


def test_the_process_publishes_both_topics_in_the_wire_format_and_ends_by_itself(tmp_path: Path) -> None:
    endpoint, truth = f"ipc://{tmp_path}/robot", tmp_path / "truth.json"
    received: list[tuple[bytes, bytes]] = []
    with zmq.Context() as context, context.socket(zmq.SUB) as socket:
        socket.linger = 0
        socket.subscribe(b"")
        socket.connect(endpoint)
        process = start_publishing(endpoint, 1.5, truth)
        while process.is_alive() or socket.poll(100):
            if socket.poll(100):
                topic, payload = socket.recv_multipart()
                received.append((topic, payload))
        process.join()
    assert process.exitcode == 0
    joints = [msgpack.unpackb(payload) for topic, payload in received if topic == b"joints"]
    assert len(joints) > 500  # a late subscriber misses the first ones
    assert [m["seq"] for m in joints] == list(range(joints[0]["seq"], 1500))
    assert {m["v"] for m in joints} == {1}
    assert set(np.diff([m["t_ns"] for m in joints])) == {PERIOD_NS}
    tau = np.array([np.frombuffer(m["tau"], dtype="<f8") for m in joints])
    assert tau.shape == (len(joints), 7)
    assert np.isfinite(tau).all()
    wire = JointsFormat([row["name"] for row in SHEET], floating=False)
    decoded = [wire.decode(payload) for topic, payload in received if topic == b"joints"]
    assert [sample.seq for sample in decoded] == [m["seq"] for m in joints]
    conditions = [decode_condition(payload, 7) for topic, payload in received if topic == b"robot"]
    assert len(conditions) >= 2  # one each half second
    assert {(c.mode, c.payload, c.payload_known) for c in conditions} == {("work", None, True)}
    assert [one["kind"] for one in json.loads(truth.read_text(encoding="utf-8"))] == ["push"]


def test_a_process_asked_to_stop_writes_the_truth_and_ends_cleanly(tmp_path: Path) -> None:
    endpoint, truth = f"ipc://{tmp_path}/robot", tmp_path / "truth.json"
    with zmq.Context() as context, context.socket(zmq.SUB) as socket:
        socket.linger = 0
        socket.subscribe(b"joints")
        socket.connect(endpoint)
        process = start_publishing(endpoint, 600.0, truth)
        assert socket.poll(60_000)
        os.kill(process.pid, signal.SIGTERM)
        process.join(60)
    assert process.exitcode == 0
    assert truth.exists()


def test_an_address_in_use_is_said_with_the_way_out() -> None:
    with zmq.Context() as context, context.socket(zmq.PUB) as taken:
        taken.linger = 0
        port = taken.bind_to_random_port("tcp://127.0.0.1")
        handlers = {number: signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)}
        try:
            with pytest.raises(SystemFault, match="Choose another port"):
                publish(f"tcp://127.0.0.1:{port}", 0.1, 1, QUIET)
        finally:
            for number, handler in handlers.items():
                signal.signal(number, handler)
