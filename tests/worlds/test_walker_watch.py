"""What the monitor makes of a walker on the ground, with the settings of the data sheet alone.

Model and band are those of description and data sheet, not fitted: how often and how soon things are told is
what `score_walker` measures.
"""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pytest

from monitor.commission.drive import Samples, ready, until
from monitor.flow.layout import Notice
from monitor.setup.build import Setup, build
from tests.worlds.score_walker import Event, config_of, played, samples_of
from tests.worlds.walker import Ground, Happenings, Noise, WalkerSession, as_sensed, simulate
from tests.worlds.walker_gait import Gait, gait
from tests.worlds.walker_robot import FEET, terrace

ROBOT, FOOT = 1, 1
SECONDS = 9.0


@cache
def timetable(motion: str) -> Gait:
    return gait(motion, np.random.default_rng(3))


@cache
def session(motion: str, height_m: float = 0.0) -> WalkerSession:
    """Return a session in which one foot finds ground that much higher (or a hole) in one of its steps."""
    robot, gait_ = terrace(ROBOT), timetable(motion)
    high = (
        gait_.lifts(FOOT, SECONDS)[0 if motion == "crawl" else 5] + 0.5 * gait_.swing_s
        if gait_.swing_s
        else 0.0
    )
    grounds = (Ground(FOOT, high, high + gait_.period_s, height_m),) if height_m else ()
    recording = simulate(robot, gait_, SECONDS, 4, Happenings(grounds=grounds))
    arrays = as_sensed(recording, robot, Noise(), np.random.default_rng(5))
    support = "hoisted" if motion == "hoisted" else "ground"
    return WalkerSession(
        motion, support, ROBOT, 0, robot.cad, robot.joints, robot.feet, truths=(), fell_s=None, **arrays
    )


@pytest.fixture(scope="module")
def setup() -> Setup:
    return build(config_of(session("stand")))


def told(events: list[Event], verdict: str) -> list[Any]:
    return [(t, v.link) for event in events for t, v in event.said if v.verdict == verdict]


@pytest.mark.parametrize("motion", ["stand", "crawl", "trot"])
def test_the_forces_of_feet_are_those_of_the_engine(setup: Setup, motion: str) -> None:
    one = session(motion)
    samples = samples_of(one)
    blocks = ready(setup, samples)
    found, sds = [], []
    for k in range(0, len(samples.t_ns), 25):
        until(blocks, Samples(*(x[: k + 1] for x in samples[:6])), max(k - 24, 0), 0)
        found.append(blocks.outputs["foot_force"][0].copy())
        sds.append(blocks.outputs["foot_force_sd"][0].copy())
    lag = 10  # ms by which the estimate is late
    rows = np.arange(0, len(samples.t_ns), 25)[60:]
    error = np.array(found)[60:] - one.foot_force[rows - lag]
    assert np.sqrt((error**2).mean()) < 0.05 * 9.81 * terrace(ROBOT).mass_kg
    assert (np.abs(error) < 3.0 * np.array(sds)[60:]).mean() > 0.95


@pytest.mark.parametrize("motion", ["stand", "crawl", "trot"])
def test_a_walk_without_fault_is_no_event(setup: Setup, motion: str) -> None:
    assert played(setup, samples_of(session(motion))) == []


@pytest.mark.parametrize(("height_m", "verdict"), [(-0.045, "foothold-lost"), (0.025, "touchdown")])
def test_a_hole_and_a_step_are_named_with_their_foot(setup: Setup, height_m: float, verdict: str) -> None:
    one = session("crawl", height_m)
    landing = timetable("crawl").lifts(FOOT, SECONDS)[0] + timetable("crawl").swing_s
    said = told(played(setup, samples_of(one)), verdict)
    assert said
    t, link = said[0]
    assert link == FEET[FOOT]
    assert landing - 0.1 < t < landing + 0.1


def test_the_verdict_does_not_depend_on_where_the_robot_heads(setup: Setup) -> None:
    samples = samples_of(session("crawl", -0.045))
    base = samples.base.copy()
    c, s = np.cos(1.1), np.sin(1.1)
    turn = np.array([[c, -s, 0.0], [s, c, 0.0], [0.0, 0.0, 1.0]])
    base[:, :3], base[:, 7:10] = base[:, :3] @ turn.T + (5.0, -3.0, 0.4), base[:, 7:10] @ turn.T
    a, b = np.cos(0.55), np.sin(0.55)
    w, x, y, z = samples.base[:, 3:7].T
    base[:, 3:7] = np.column_stack([a * w - b * z, a * x - b * y, a * y + b * x, a * z + b * w])
    here, there = played(setup, samples), played(setup, samples._replace(base=base))
    assert [(e.opened_s, [v.verdict for _, v in e.said]) for e in here] == [
        (e.opened_s, [v.verdict for _, v in e.said]) for e in there
    ]


def test_without_planned_feet_a_walker_on_the_ground_is_not_judged(setup: Setup) -> None:
    samples = replace_feet(samples_of(session("crawl", -0.045)))
    blocks = ready(setup, samples)
    until(blocks, samples, 0, int(Notice.EVENT_OPENED))
    assert not blocks.state["event_open"][0]
    assert blocks.outputs["feet_unknown"][0] == 1


def replace_feet(samples: Samples) -> Samples:
    return samples._replace(feet=None)
