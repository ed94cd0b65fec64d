"""Friction that changes over days: absorbed by tracking, but not in silence."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pinocchio

from monitor.setup.build import Setup
from tests.flow.rig import PAIR, PAIR_JOINTS, Mover, Rig, made

COULOMB, VISCOUS, V0 = 2.0, 1.0, 0.01
HOURS, SHIFT_S = 72, 1.5  # a robot that works so long once an hour
# Memory and time as they are for shifts of a minute, in proportion.
TRENDS = {"drift_memory_s": 10 * SHIFT_S, "drift_s": SHIFT_S}


def rubbing() -> Setup:
    """Return the arm with friction in its upper joint, its model known as well as commissioning can tell."""
    joints = [{**PAIR_JOINTS[0], "coulomb_friction": COULOMB, "viscous_friction": VISCOUS}, PAIR_JOINTS[1]]
    joints = [{**joint, "friction_velocity": V0} for joint in joints]
    watch = {"start_settle_s": 0.1}
    setup = made(PAIR, joints, watch=watch, explain=TRENDS)
    band = replace(setup.band, fast=0.1 * setup.band.fast, cusum_sd=0.1 * setup.band.cusum_sd)
    return setup.with_band(band)


def work(rig: Rig, mover: Mover, rng: np.random.Generator, added: tuple[float, float]) -> None:
    """Let the arm work one shift after a restart, its upper joint with added Coulomb friction and offset."""
    rig.seq, rig.t_ns = 0, 5_000_000_000
    rig.condition(boot=str(rng.random()))
    for k in range(round(1000 * SHIFT_S)):
        angle = 2.0 * math.pi * k / 750.0 + np.array([0.0, 0.4])
        q, qd = 0.5 * np.sin(angle), 0.5 * 2.0 * math.pi / 0.75 * np.cos(angle)
        qdd = -0.5 * (2.0 * math.pi / 0.75) ** 2 * np.sin(angle)
        tau = pinocchio.rnea(mover.model, mover.data, q, qd, qdd)
        tau[0] += (COULOMB + added[0]) * math.tanh(qd[0] / V0) + VISCOUS * qd[0] + added[1]
        rig.sample(q, qd + 0.005 * rng.standard_normal(2), tau + [0.2, 0.1] * rng.standard_normal(2))


def drifts(rig: Rig) -> list[dict[str, Any]]:
    return rig.alarms("drift")


def test_friction_that_doubles_within_three_days_is_alarmed_though_no_event_opens() -> None:
    rig, rng = Rig(rubbing()), np.random.default_rng(1)
    mover, raised_at = Mover(PAIR, (0.3, 0.1)), None
    for hour in range(HOURS):
        share = 1.3 * hour / HOURS
        work(rig, mover, rng, (share * COULOMB, 0.0))
        if hour == HOURS // 4:  # the loop is replaced by one that goes on from a snapshot
            another = rig.setup.pipeline("a-run")
            another.restore(rig.pipeline.snapshot())
            rig.pipeline, rig.state, rig.outputs = another, another.blocks.state[0], another.blocks.outputs[0]
        if drifts(rig) and raised_at is None:
            raised_at = share
    (alarm,) = drifts(rig)
    assert [alarm[name] for name in ("verdict", "detail", "joint")] == [
        "actuator",
        "coulomb-friction",
        "upper",
    ]
    assert alarm["probability"] > 0.9
    # The limit is half of the normal friction; the memory lags by ten hours, and it has to be certain.
    assert raised_at is not None
    assert 0.5 < raised_at < 1.1
    lag = 1.3 * 10 / HOURS
    assert alarm["size"]["unit"] == "N m"
    assert abs(alarm["size"]["value"] - (raised_at - lag) * COULOMB) < alarm["size"]["sd"]
    assert rig.alarms() == [alarm]  # what is tracked explained all the while what was felt
    assert rig.state["events"] == 1
    # Repaired, the trend comes back and the alarm with it.
    for _ in range(30):
        work(rig, mover, rng, (0.0, 0.0))
    assert rig.alarms()[-1]["detail"] == "coulomb-friction"
    assert ("drift", "coulomb-friction", "upper") not in rig.standing()


def test_a_monitor_that_starts_anew_finds_what_has_changed_before() -> None:
    rig, rng, mover = Rig(rubbing()), np.random.default_rng(2), Mover(PAIR, (0.3, 0.1))
    for _ in range(6):
        work(rig, mover, rng, (0.0, -2.8))
    (alarm,) = drifts(rig)
    assert (alarm["detail"], alarm["joint"]) == ("offset", "upper")
    assert abs(alarm["size"]["value"] + 2.8) < 2.0 * alarm["size"]["sd"]


def test_a_joint_that_stands_or_is_held_tells_nothing_of_its_friction() -> None:
    rig, rng = Rig(rubbing()), np.random.default_rng(3)
    weight = Mover(PAIR, (0.3, 0.1)).gravity_torque(np.array([0.3, -0.5]))
    for k in range(3000):
        if k == 1500:
            rig.condition(brake=[1, 1])
        noise = rng.standard_normal((2, 2))
        rig.sample([0.3, -0.5], 1e-4 * noise[0], weight + [1.5, 0.0] + 0.1 * noise[1])
    assert not rig.state["trend_info"].any()
    assert drifts(rig) == []
