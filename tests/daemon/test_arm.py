"""An arm simulated by another engine (`mujoco`, see tests/worlds/arm.py), sent through real sockets."""

from __future__ import annotations

import json
from pathlib import Path

import msgpack
import numpy as np

from monitor.session import TICK, TUPLE, Session
from monitor.setup.build import build
from monitor.setup.config import loads
from replay.simulate import DATASHEET, URDF
from tests.daemon.conftest import Start
from tests.daemon.running import conversation
from tests.flow.test_mujoco import RATED, expected
from tests.replay.rind import condition, write_rind
from tests.worlds.arm import ArmWorld, Friction, Push, random_motion, simulate
from tests.worlds.noise import with_noise

SHEET = json.loads(DATASHEET.read_text(encoding="utf-8"))["joints"]
WORLD = ArmWorld(
    URDF.read_text(encoding="utf-8"),
    random_motion(7, 1, 1.0, centre=(0.0, 0.4, 0.0, 1.3, 0.0, 0.7, 0.0)),
    armature=[row["armature"] for row in SHEET],
    friction=Friction((4.2, 5.0, 2.6, 2.6, 1.1, 1.1, 0.65), (2.4, 2.8, 1.4, 1.4, 0.55, 0.55, 0.3)),
)
PUSH = Push(1.5, 0.4, "spar", (50.0, 60.0, -30.0), (0.0, 0.05, 0.1))
MS = 1_000_000


def residuals_of(path: Path) -> tuple[list[int], np.ndarray]:
    """Return which samples of the arm a session shows as stepped, and the fast residual (T,n) after each."""
    session = Session(path)
    setup = build(loads(session.config_toml, str(path), session.model))
    pipeline = setup.pipeline(session.run)
    state, stepped, residuals = pipeline.blocks.state[0], [], []
    for kind, topic, payload, time_ns in session.records():
        before = state["stepped"]
        if kind == TUPLE:
            pipeline.feed(topic, payload, time_ns)
        elif kind == TICK:
            pipeline.tick(time_ns)
        if state["stepped"] > before:
            stepped.append(int(state["t_ns"]) // MS)
            residuals.append(state["r_fast"].copy())
    return stepped, np.array(residuals)


def test_a_push_is_felt_at_a_joint_that_it_loads_and_nothing_before(start: Start, tmp_path: Path) -> None:
    arm = simulate(WORLD, 2.5, [PUSH])
    measured = with_noise(
        arm,
        seed=2,
        encoder_step=[row["encoder_step"] for row in SHEET],
        velocity_sd=[row["velocity_noise_sd"] for row in SHEET],
        torque_sd=[row["torque_noise_sd"] for row in SHEET],
    )
    config = write_rind(tmp_path)
    v0 = f"friction_velocity = {WORLD.friction.v0}"
    config.write_text(config.read_text().replace("friction_velocity = 0.004", v0))
    daemon = start(config=config)
    rows = [
        {"v": 1, "seq": k, "t_ns": k * MS}
        | {name: getattr(measured, name)[k].astype("<f8").tobytes() for name in ("q", "qd", "tau")}
        for k in range(len(arm.t))
    ]
    with conversation(daemon) as (speaker, listener):
        speaker.send("robot", msgpack.packb(condition()))
        speaker.play((k * MS, "joints", msgpack.packb(row)) for k, row in enumerate(rows))
        listener.alarm("signal", "stale")
        # A busy test machine may let the stream stall; that would be a `signal`, and is not asked here.
        felt, *others = [
            a
            for a in listener.bodies("alarm")
            if a["state"] == "unacknowledged" and a["kind"] == "unexplained-torque"
        ]
        health = listener.health()
        assert daemon.stop() == 0

    # Replayed, the session's residual is the engine's torque as the filter shows it.
    # Noise at the worst joint is .0085 of rated torque rms (tests/flow/test_mujoco.py).
    rows_seen, residual = residuals_of(daemon.sessions()[0])
    error = (residual - expected(arm.tau_ext, "joint-space", slow=False)[rows_seen])[600:] / RATED
    assert np.sqrt((error**2).mean(axis=0)).max() < 0.012
    assert np.abs(error.mean(axis=0)).max() < 5e-4

    assert PUSH.start_s < felt["onset_t"] <= felt["t"] < PUSH.start_s + 0.15
    assert all(a["t"] < PUSH.start_s + PUSH.duration_s + 0.3 for a in others)
    # The engine's own Jᵀ F, at the joint that was named: the same sign, and well above what noise would do.
    loaded = arm.tau_ext[:, arm.joints.index(felt["joint"])]
    peak = loaded[np.argmax(np.abs(loaded))]
    assert np.sign(felt["size"]["value"]) == np.sign(peak)
    assert abs(felt["size"]["value"]) < 1.2 * abs(peak)
    assert health["counts"]["stepped"] == len(rows)
    assert health["counts"]["bad"] == health["counts"]["lost"] == 0
