"""What the signal checks refuse never reaches the ledger, and they leave a healthy robot alone."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pinocchio
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from monitor.flow.credible import credible
from monitor.flow.layout import Signal
from monitor.kernels import band
from monitor.setup.build import Setup
from tests.flow.rig import (
    PAIR,
    PAIR_JOINTS,
    PERIOD_NS,
    SLED,
    SLED_JOINTS,
    Mover,
    Rig,
    base_fields,
    both,
    made,
)

Floats = NDArray[np.float64]

LEDGER = (
    "q_fast", "v_fast", "e_fast", "q_slow", "v_slow", "e_slow", "a", "p_fast", "p_slow", "r_fast", "r_slow",
    "q", "v", "tau", "t_ns", "started", "stepped", "event_open", "line_q",
)  # fmt: skip


def turning(k: int) -> tuple[Floats, Floats]:
    """Return q and qd of a slow turn at .5 and -.8 rad/s, after k samples."""
    speed = np.array([0.5, -0.8])
    return np.array([-0.4, 0.6]) + speed * 1e-3 * k, speed


class Turning:
    """A rig whose two joints turn steadily, with the torque that takes."""

    def __init__(self, setup: Setup) -> None:
        self.rig, self.k = Rig(setup), 0
        self.mover = Mover(PAIR, (0.3, 0.1))

    def send(
        self, change: Callable[[dict[str, Any]], None] | None = None, step_ns: int = PERIOD_NS, skip: int = 0
    ) -> None:
        """Send the next sample, changed; `skip` so many before it."""
        self.k += 1 + skip
        self.rig.seq += skip
        q, qd = turning(self.k)
        tau = pinocchio.rnea(self.mover.model, self.mover.data, q, qd, np.zeros(2))
        fields: dict[str, Any] = {"q": q, "qd": qd.copy(), "tau": tau.copy()}
        if change is not None:
            change(fields)
        self.rig.sample(step_ns=step_ns, **fields)

    def run(self, count: int) -> None:
        for _ in range(count):
            self.send()

    def ledger(self) -> bytes:
        return b"".join(self.rig.state[name].tobytes() for name in LEDGER)

    def signal(self) -> tuple[Signal, int]:
        return Signal(int(self.rig.outputs["signal"])), int(self.rig.outputs["signal_joint"])


@pytest.fixture
def arm(pair_setup: Setup) -> Turning:
    arm = Turning(pair_setup)
    arm.run(700)
    assert arm.rig.outputs["settling"] == 0
    return arm


def at(name: str, i: int, value: float) -> Callable[[dict[str, Any]], None]:
    def change(fields: dict[str, Any]) -> None:
        fields[name][i] = value

    return change


def moved(i: int, by: float) -> Callable[[dict[str, Any]], None]:
    def change(fields: dict[str, Any]) -> None:
        fields["q"][i] += by

    return change


@pytest.mark.parametrize(
    ("change", "fault", "joint"),
    [
        (at("q", 0, math.nan), Signal.NON_FINITE, 0),
        (at("qd", 1, math.inf), Signal.NON_FINITE, 1),
        (at("tau", 1, -math.inf), Signal.NON_FINITE, 1),
        (at("q", 0, 3.11), Signal.OUT_OF_RANGE, 0),
        (at("q", 1, -3.11), Signal.OUT_OF_RANGE, 1),
        (at("qd", 1, 9.1), Signal.OUT_OF_RANGE, 1),
        (at("tau", 0, 181.0), Signal.OUT_OF_RANGE, 0),
        (at("tau", 1, -91.0), Signal.OUT_OF_RANGE, 1),
        (moved(0, 0.021), Signal.JUMP, 0),
        (moved(1, -0.021), Signal.JUMP, 1),
        (moved(1, 0.002), Signal.JUMP, 1),  # forty steps of the encoder
    ],
)
def test_a_bad_sample_is_named_and_never_enters_the_ledger(
    arm: Turning, change: Callable[[dict[str, Any]], None], fault: Signal, joint: int
) -> None:
    before, rebased = arm.ledger(), int(arm.rig.state["rebased"])
    arm.send(change)
    assert arm.signal() == (fault, joint)
    assert arm.ledger() == before
    assert arm.rig.state["bad"][fault] == 1
    detail = fault.name.lower().replace("_", "-")
    name = ("upper", "lower")[joint]
    assert arm.rig.standing() == {("signal", detail, name)}
    alarm = arm.rig.alarms()[-1]
    assert (alarm["verdict"], alarm["detail"], alarm["priority"]) == ("signal", detail, "medium")
    # The next good one re-bases; the judgement pauses for the settling time and no longer.
    arm.send()
    if arm.signal()[0] == Signal.JUMP:  # back from where it had jumped to
        arm.send()
    assert arm.signal() == (Signal.OK, -1)
    assert arm.rig.state["rebased"] == rebased + 1
    assert arm.rig.outputs["settling"] == 1
    arm.run(115)
    assert arm.rig.outputs["settling"] == 1
    arm.run(10)
    assert arm.rig.outputs["settling"] == 0
    # It clears by quiet, and left no residual and no event.
    arm.run(200)
    assert arm.rig.standing() == set()
    assert {body["kind"] for body in arm.rig.alarms()} == {"signal"}
    assert np.abs(arm.rig.outputs["r_fast"]).max() < 0.01


def test_a_position_that_stays_while_its_velocity_says_otherwise_is_frozen(arm: Turning) -> None:
    stuck, seen = turning(arm.k)[0][1], []
    for _ in range(100):
        arm.send(at("q", 1, stuck))
        seen.append(arm.signal())
    # At .8 rad/s velocity and position are apart by more than is credible before frozen_s is over.
    first = seen.index((Signal.FROZEN, 1))
    assert 10 < first < 51
    assert set(seen[:first]) == {(Signal.OK, -1)}
    assert set(seen[first:]) == {(Signal.FROZEN, 1)}


def test_a_slowly_turning_joint_that_freezes_is_called_frozen_after_the_stated_time(
    pair_setup: Setup,
) -> None:
    rig = Rig(pair_setup)
    weight = Mover(PAIR, (0.3, 0.1)).gravity_torque(np.array([0.1, 0.2]))
    for k in range(600):
        rig.sample([0.1 + 1e-4 * k, 0.2], [0.1, 0.0], weight)
    first = None
    for k in range(80):
        rig.sample([0.1 + 1e-4 * 599, 0.2], [0.1, 0.0], weight)
        if rig.outputs["signal"] and first is None:
            first = k, Signal(int(rig.outputs["signal"])), int(rig.outputs["signal_joint"])
    assert first == (50, Signal.FROZEN, 0)
    # Until then the frozen reading is in the residual too; what is made of that is undecided.
    assert ("signal", "frozen", "upper") in rig.standing()
    assert {b["verdict"] for b in rig.alarms()} <= {"signal", "undecided"}


def test_a_position_that_moves_otherwise_than_its_velocity_contradicts_it(pair_setup: Setup) -> None:
    rig = Rig(pair_setup)
    weight = Mover(PAIR, (0.3, 0.1)).gravity_torque(np.array([0.1, 0.2]))
    for _ in range(600):
        rig.sample([0.1, 0.2], [0.0, 0.0], weight)
    seen = []
    for k in range(300):
        # Drifts at 1 rad/s while the velocity says nothing.
        rig.sample([0.1, 0.2 + 1e-3 * k], [0.0, 0.0], weight)
        seen.append((Signal(int(rig.outputs["signal"])), int(rig.outputs["signal_joint"])))
    # d' = 1 - d / .1 s reaches a limit d after -.1 ln(1 - d / .1) s: here .0258 after 29.8 ms.
    limit = pair_setup.params["drift"][0, 1]
    assert limit == pytest.approx(0.0258, abs=1e-4)
    first = seen.index((Signal.CONTRADICTION, 1))
    assert first == pytest.approx(-100.0 * math.log(1.0 - limit / 0.1), abs=2)
    assert set(seen[first:]) == {(Signal.CONTRADICTION, 1)}
    assert ("signal", "contradiction", "lower") in rig.standing()
    assert {b["verdict"] for b in rig.alarms()} <= {"signal", "undecided"}


@pytest.mark.parametrize("hour_ns", [3_600_000_000_000, -3_600_000_000_000, 60_000_000, -900_000])
def test_a_clock_that_is_set_is_reported_and_watching_goes_on(arm: Turning, hour_ns: int) -> None:
    arm.rig.t_ns += 2 * 3_600_000_000_000
    arm.send()
    arm.run(1000)
    arm.rig.messages.clear()
    before, rebased = arm.ledger(), int(arm.rig.state["rebased"])
    # The numbers go on, the clock does not; -.9 ms puts it just behind the last sample.
    arm.send(step_ns=PERIOD_NS + hour_ns - (200_000 if hour_ns == -900_000 else 0))
    assert arm.signal() == (Signal.CLOCK, -1)
    assert arm.ledger() == before
    arm.run(600)
    assert arm.rig.state["rebased"] == rebased + 1
    assert arm.rig.outputs["settling"] == 0
    assert {(b["kind"], b["detail"]) for b in arm.rig.alarms()} == {("signal", "clock")}
    assert arm.rig.standing() == set()
    assert int(arm.rig.state["restarts"]) == 0


def test_brakes_and_drives_are_still_watched_after_the_clock_was_set_back(arm: Turning) -> None:
    rig = arm.rig
    rig.condition(brake=[0, 1])
    hold = turning(arm.k)[0]
    weight = Mover(PAIR, (0.3, 0.1)).gravity_torque(hold)
    for _ in range(500):
        rig.sample(hold, [0.0, 0.0], weight, tau_cmd=weight.tolist())
    rig.t_ns -= 3_600_000_000_000
    # Time of the robot is above zero all the same.
    rig.t_ns = max(rig.t_ns, 1_000)
    for _ in range(700):
        rig.sample(hold, [0.0, 0.0], weight, tau_cmd=weight.tolist())
    for k in range(200):
        asked = (weight + both(10.0, 0.0)).tolist()
        rig.sample(hold + both(0.0, 2e-4 * k), [0.0, 0.2], weight, tau_cmd=asked)
    kinds = {(b["kind"], b["joint"]) for b in rig.alarms() if b["kind"] in ("brake", "drive")}
    assert kinds == {("brake", "lower"), ("drive", "upper")}


def test_a_restart_of_the_robot_whose_first_sample_is_bad_raises_no_alarm_of_the_clock(arm: Turning) -> None:
    arm.rig.elapse(2_000_000_000)
    arm.rig.seq, arm.rig.t_ns = -1, 0
    arm.send(at("q", 0, math.nan))
    arm.run(700)
    assert arm.rig.state["restarts"] == 1
    assert arm.rig.state["bad"][Signal.CLOCK] == 0
    assert {b["detail"] for b in arm.rig.alarms()} == {"stale", "non-finite"}
    assert not [b for b in arm.rig.alarms() if b["kind"] == "unexplained-torque"]
    assert np.abs(arm.rig.outputs["r_fast"]).max() < 0.01


def test_bad_samples_in_a_row_are_no_gap_in_the_stream(arm: Turning) -> None:
    for _ in range(60):
        arm.send(at("tau", 0, math.nan))
    arm.run(800)
    assert {b["detail"] for b in arm.rig.alarms()} == {"non-finite"}
    assert len(arm.rig.alarms()) == 2


@pytest.mark.parametrize("where", ["duplicate", "swap", "restart", "lost"])
def test_odd_arrivals_leave_no_spike(arm: Turning, where: str) -> None:
    rig = arm.rig
    if where == "duplicate":
        for _ in range(300):
            arm.send()
            rig.seq -= 1
            arm.k -= 1
            arm.send(step_ns=0)
    elif where == "swap":
        for _ in range(150):
            rig.seq += 1
            rig.t_ns += PERIOD_NS
            arm.k += 1
            arm.send()
            rig.seq -= 2
            rig.t_ns -= 2 * PERIOD_NS
            arm.k -= 2
            arm.send()
            rig.seq += 1
            rig.t_ns += PERIOD_NS
            arm.k += 1
    elif where == "restart":
        rig.elapse(50_000_000)
        rig.seq, rig.t_ns = -1, -PERIOD_NS
        arm.run(700)
        assert rig.state["restarts"] == 1
    else:
        for lost in (1, 3, 18, 19, 25):
            rig.t_ns += lost * PERIOD_NS
            rig.elapse(lost * PERIOD_NS)
            arm.send(skip=lost)
            arm.run(300)
    assert np.abs(rig.outputs["r_fast"]).max() < 0.01
    assert max(m.body["band_ratio"]["upper"] for m in rig.messages if m.topic == "health") < 0.05
    assert {b["detail"] for b in rig.alarms()} <= {"gap"}
    assert rig.state["bad"][1:].sum() == 0
    assert rig.state["duplicates"] == (300 if where == "duplicate" else 0)


@pytest.mark.parametrize("kind", ["noise", "exact"])
def test_a_robot_that_stands_still_for_minutes_fires_nothing(pair_setup: Setup, kind: str) -> None:
    rig, rng = Rig(pair_setup), np.random.default_rng(7)
    q = np.array([0.3, -0.5])
    weight = Mover(PAIR, (0.3, 0.1)).gravity_torque(q)
    for _ in range(120_000 // (4 if kind == "exact" else 1)):
        if kind == "exact":
            rig.sample(q, [0.0, 0.0], weight)
        else:
            # An encoder of 5e-5 rad that flips between two steps, and the configured noise.
            seen = q + 5e-5 * rng.integers(0, 2, 2)
            noise = rng.standard_normal((2, 2))
            rig.sample(seen, 0.005 * noise[0], weight + np.array([0.2, 0.1]) * noise[1])
    assert rig.alarms() == []
    assert rig.state["bad"][1:].sum() == 0
    assert rig.state["events"] == 0
    assert rig.outputs["coverage_whole"] == 0


def test_torque_at_its_limit_is_counted_and_no_alarm(pair_setup: Setup) -> None:
    rig = Rig(pair_setup)
    q, limit = [0.3, -0.5], np.array([0.0, 30.0])
    for _ in range(100):
        rig.sample(q, [0.0, 0.0], limit)
    assert rig.state["at_limit"].tolist() == [0, 100]
    assert rig.alarms() == []


@pytest.mark.parametrize("known", [True, False])
def test_a_drive_that_does_not_give_what_is_commanded_is_an_actuator_alarm_by_itself(
    pair_setup: Setup, known: bool
) -> None:
    # Methods §7: 5 % of rated for 20 ms.
    rig = Rig(pair_setup, known)
    q = np.array([0.3, -0.5])
    weight = Mover(PAIR, (0.3, 0.1)).gravity_torque(q)

    def send(count: int, error: float) -> None:
        for _ in range(count):
            rig.sample(q, [0.0, 0.0], weight, tau_cmd=(weight + both(0.0, error)).tolist())

    send(100, 0.99)  # just below 5 % of 20 N m
    send(20, 1.01)
    send(1, 0.0)
    send(20, 1.01)
    assert rig.alarms() == []
    send(2, 1.01)
    (alarm,) = rig.alarms()
    assert (alarm["kind"], alarm["verdict"], alarm["detail"], alarm["joint"]) == (
        "drive", "actuator", "command-differs", "lower",
    )  # fmt: skip
    send(1, 0.0)
    assert rig.standing() == set()
    assert rig.state["bad"][1:].sum() == 0


def test_numbers_that_no_limit_names_are_bounded_before_they_can_spoil_the_ledger() -> None:
    # Motors behind a coupling, and the base of a walker: finite but absurd, then healthy again.
    sled = made(SLED, SLED_JOINTS, {"base": "floating"})
    rig = Rig(sled)
    q = np.array([0.0, 0.0, 1.0, 1.0, 0.0, 0.0, 0.0])
    zeros = np.zeros(6)
    for field, fault in (("p", "base-pose"), ("v", "base-pose"), ("w", "base-pose"), ("quat", "base-pose")):
        for value in (1e200, -1e200, math.nan, math.inf):
            for _ in range(5):
                rig.sample([0.0, 0.0], [0.0, 0.0], [0.0, 0.0], **base_fields(q, zeros))
            wild = base_fields(q, zeros)
            wild["base"][field][1] = value
            rig.sample([0.0, 0.0], [0.0, 0.0], [0.0, 0.0], **wild)
            assert Signal(int(rig.outputs["signal"])) == Signal.BASE_POSE
            assert ("signal", fault, None) in rig.standing()
    for _ in range(20):
        rig.sample([0.0, 0.0], [0.0, 0.0], [0.0, 0.0], **base_fields(q, zeros))
    assert np.isfinite(rig.outputs["r_fast"]).all()
    coupled = Rig(made(PAIR, PAIR_JOINTS, {"coupling": [[1.0, 0.5], [0.0, 1.0]]}))
    for large in (1e200, 1e9):
        coupled.sample([0.0, 0.0], [0.0, 0.0], [0.0, 0.0])
        for q1, qd1 in ((large, 0.0), (0.0, large)):
            coupled.sample([0.0, q1], [0.0, qd1], [0.0, 0.0])
            assert Signal(int(coupled.outputs["signal"])) == Signal.OUT_OF_RANGE


def test_a_slightly_long_quaternion_is_normalised_and_a_wrong_one_refused(sled_setup: Setup) -> None:
    rig = Rig(sled_setup)
    quat = np.array([0.8, 0.3, -0.4, 0.33])
    quat /= np.linalg.norm(quat)
    q, v = np.concatenate([[0.0, 0.0, 1.0], quat]), np.zeros(6)
    for scale, fault in (
        (1.0, Signal.OK),
        (1.004, Signal.OK),
        (1.02, Signal.BASE_POSE),
        (0.0, Signal.BASE_POSE),
    ):
        fields = base_fields(q, v)
        fields["base"]["quat"] = (scale * quat).tolist()
        rig.sample([0.0, 0.0], [0.0, 0.0], [0.0, 0.0], **fields)
        assert Signal(int(rig.outputs["signal"])) == fault
        assert np.linalg.norm(rig.state["q"][3:7]) == pytest.approx(1.0, abs=1e-15)


@pytest.mark.parametrize("what", ["position", "attitude", "frozen"])
def test_a_base_pose_that_contradicts_the_velocity_of_the_base_is_a_bad_signal(
    sled_setup: Setup, what: str
) -> None:
    rig = Rig(sled_setup)
    q = np.array([0.0, 0.0, 1.0, 1.0, 0.0, 0.0, 0.0])
    v = np.array([0.0, 0.0, 0.0, 0.4, 0.0, 0.0])

    def send(moves: bool = True) -> int:
        q[0] += 0.4e-3 if moves else 0.0
        rig.sample([0.0, 0.0], [0.0, 0.0], [0.0, 0.0], **base_fields(q, v))
        return int(rig.outputs["signal"])

    assert {send() for _ in range(300)} == {Signal.OK}
    if what == "position":
        q[1] += 0.2
    elif what == "attitude":
        q[3:7] = np.cos(0.05), 0.0, np.sin(0.05), 0.0
    else:
        assert {send(moves=False) for _ in range(50)} == {Signal.OK}
    assert send(moves=what != "frozen") == Signal.BASE_POSE
    assert ("signal", "base-pose", None) in rig.standing()
    if what != "frozen":  # a jump is reported once
        assert {send() for _ in range(50)} == {Signal.OK}


def test_the_time_of_alarms_goes_on_while_all_samples_are_bad(arm: Turning) -> None:
    arm.run(1000)
    for _ in range(3000):
        arm.rig.sample([math.nan, 0.0], [0.0, 0.0], [0.0, 0.0])
    arm.rig.messages.clear()
    arm.rig.elapse(1000, b"\xc1")
    (alarm,) = arm.rig.alarms("wire")
    assert alarm["t"] == pytest.approx(arm.rig.t_ns / 1e9, abs=2e-3)


# --- readings against their own past --------------------------------------------------------------


def verdicts(
    setup: Setup, q: Floats, qd: Floats, tau: Floats, t_ns: NDArray[np.int64] | None = None
) -> list[tuple[Signal, int]]:
    """Return (fault, joint) of each row (T,2) of readings of a powered arm, by the signal checks alone."""
    blocks = setup.blocks()
    x, out = blocks.inputs[0], blocks.outputs[0]
    x["drive"], x["rebase"] = 1, 2
    found = []
    for k in range(len(q)):
        x["seq"], x["t_ns"] = k + 1, 10**9 + PERIOD_NS * k if t_ns is None else t_ns[k]
        x["q"], x["qd"], x["tau"] = q[k], qd[k], tau[k]
        credible(*blocks)
        x["rebase"] = 0
        found.append((Signal(int(out["signal"])), int(out["signal_joint"])))
    return found


def faults(found: list[tuple[Signal, int]]) -> set[tuple[Signal, int]]:
    return set(found) - {(Signal.OK, -1)}


STEP = 5e-5  # rad: the default encoder step
VELOCITY_SD, TORQUE_SD = 0.005, np.array([0.2, 0.1])  # configured


def encoded(q: Floats) -> Floats:
    return STEP * np.round(q / STEP)


def sensed(q: Floats, qd: Floats, rng: np.random.Generator, kind: str = "noisy") -> Floats:
    """Return the velocity reading of a kind of sensor."""
    if kind == "exact":
        return qd
    if kind in ("differenced", "differenced late"):
        read = encoded(q)
        late = kind == "differenced late"
        steps = np.diff(read, axis=0, prepend=read[:1])
        steps[0] = steps[1]
        return np.vstack([steps[:1], steps[:-1]])[: len(q)] / 1e-3 if late else steps / 1e-3
    if kind == "lagging":
        shown, keep = qd.copy(), math.exp(-1.0 / 5.0)
        for k in range(1, len(qd)):
            shown[k] = keep * shown[k - 1] + (1.0 - keep) * qd[k]
        qd = shown
    elif kind == "late":
        qd = np.vstack([np.repeat(qd[:1], 5, axis=0), qd[:-5]])
    noisy = qd + VELOCITY_SD * rng.standard_normal(qd.shape)
    return 0.004 * np.round(noisy / 0.004) if kind == "coarse" else noisy


KINDS_OF_VELOCITY = ("noisy", "coarse", "lagging", "late", "differenced", "differenced late", "exact")


def swaying(samples: int, speed: float = 1.0) -> tuple[Floats, Floats]:
    """Return q and qd (T,2) of two joints that turn to and fro, at rest to begin with."""
    t = 1e-3 * np.arange(samples)[:, None]
    w, size = 2.0 * math.pi * np.array([0.5, 0.8]), speed * np.array([1.0, 0.6])
    return size / w * (1.0 - np.cos(w * t)), size * np.sin(w * t)


def torques(samples: int, rng: np.random.Generator) -> Floats:
    return 5.0 + TORQUE_SD * rng.standard_normal((samples, 2))


@given(
    kind=st.sampled_from(KINDS_OF_VELOCITY),
    speed=st.floats(0.0, 3.0),
    blow=st.floats(-3.0, 3.0),
    width_ms=st.floats(3.0, 30.0),
    back_ms=st.floats(4.0, 300.0),
    uneven=st.booleans(),
    seed=st.integers(0, 2**32 - 1),
)
@settings(
    deadline=None, max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture]
)  # the setup is shared, and never written
def test_no_motion_and_no_blow_makes_a_healthy_reading_incredible(
    pair_setup: Setup,
    kind: str,
    speed: float,
    blow: float,
    width_ms: float,
    back_ms: float,
    uneven: bool,
    seed: int,
) -> None:
    # At its own rate and ten times finer, for a blow of up to 1000 rad/s² that begins between two samples.
    rng, samples = np.random.default_rng(seed), 900
    q, qd = swaying(samples, speed)
    t = 0.1 * np.arange(10 * samples)
    push = np.clip((t - 500.4) / width_ms, 0.0, 1.0) - np.clip(
        (t - 500.4 - width_ms - 20.0) / back_ms, 0.0, 1.0
    )
    fast = blow * push * min(1.0, back_ms / 4.0)
    moved_by = 1e-4 * (np.cumsum(fast) - 0.5 * fast)
    qd[:, 0] += fast[::10]
    q[:, 0] += moved_by[::10]
    t_ns = 10**9 + PERIOD_NS * np.arange(samples)
    if uneven:
        t_ns += rng.integers(-20_000, 20_001, samples)
    read = q if kind == "exact" else encoded(q)
    found = verdicts(pair_setup, read, sensed(q, qd, rng, kind), torques(samples, rng), t_ns)
    assert faults(found) == set()


@pytest.mark.parametrize("kind", KINDS_OF_VELOCITY)
def test_a_robot_at_rest_is_credible_with_every_kind_of_velocity(pair_setup: Setup, kind: str) -> None:
    # Servo-held on the edge between two steps, then perfectly still, as with the brakes closed.
    rng, samples = np.random.default_rng(9), 6000
    q = np.full((samples, 2), 0.3 + 0.5 * STEP)
    q[:3000] += 1e-6 * rng.standard_normal((3000, 2))
    qd, tau = sensed(q, np.zeros_like(q), rng, kind), torques(samples, rng)
    assert faults(verdicts(pair_setup, encoded(q), qd, tau)) == set()
    if kind in ("differenced", "differenced late", "exact"):
        tau[3000:] = tau[3000]  # not even the torque is measured any more
        still = np.where(np.arange(samples)[:, None] < 3000, qd, 0.0)
        tau[3000:] = 0.0
        assert faults(verdicts(pair_setup, encoded(q), still, tau)) == set()


def test_closed_brakes_and_unpowered_drives_may_repeat_everything(pair_setup: Setup) -> None:
    rig, rng = Rig(pair_setup), np.random.default_rng(10)
    q = np.array([0.3, -0.5])
    weight = Mover(PAIR, (0.3, 0.1)).gravity_torque(q)
    for _ in range(1700):
        rig.sample(q, VELOCITY_SD * rng.standard_normal(2), weight + TORQUE_SD * rng.standard_normal(2))
    rig.condition(brake=[1, 1], drive=[0, 0])
    for _ in range(500):
        rig.sample(q, [0.0011, -0.0003], [0.02, -0.01])
    assert rig.alarms() == []


@pytest.mark.parametrize("moving", [True, False])
def test_an_old_sample_that_is_sent_again_and_again_is_a_frozen_robot(
    pair_setup: Setup, moving: bool
) -> None:
    rng, samples = np.random.default_rng(11), 3000
    q, qd = swaying(samples) if moving else (np.full((samples, 2), 0.3), np.zeros((samples, 2)))
    read, speed, tau = encoded(q), sensed(q, qd, rng), torques(samples, rng)
    for reading in (read, speed, tau):
        reading[2200:2400] = reading[2200]
    found = verdicts(pair_setup, read, speed, tau)
    assert faults(found[:2200]) == set()
    assert set(found[2252:2400]) == {(Signal.FROZEN, -1)}
    # What moved on meanwhile jumps once, and all is well again.
    assert faults(found[2401:]) == set()
    assert faults(found[2200:2252]) <= {(Signal.FROZEN, 0), (Signal.FROZEN, 1), (Signal.FROZEN, -1)}


def test_a_simulator_without_noise_may_stand_and_repeat_itself(pair_setup: Setup) -> None:
    samples = 5000
    q, qd = swaying(samples)
    q[2000:], qd[2000:] = q[2000], 0.0  # a full period: at rest there
    found = verdicts(pair_setup, q, qd, np.full((samples, 2), 5.0))
    assert faults(found) == set()


def test_a_joint_whose_noise_vanishes_is_frozen_and_named(pair_setup: Setup) -> None:
    rng, samples = np.random.default_rng(12), 3000
    q = np.full((samples, 2), 0.3)
    speed = sensed(q, np.zeros_like(q), rng)
    speed[2500:2700, 1] = speed[2500, 1]
    found = verdicts(pair_setup, encoded(q), speed, torques(samples, rng))
    assert faults(found) == {(Signal.FROZEN, 1)}
    assert found.index((Signal.FROZEN, 1)) == 2551
    assert faults(found[2700:]) == set()


@pytest.mark.parametrize(
    ("case", "frozen"),
    [
        ("both ways", True),
        ("one way", False),
        ("weak", False),
        ("slow", False),
        ("flickers", False),
        ("braked", False),
        ("guided", False),
    ],
)
def test_a_joint_that_repeats_itself_while_torque_must_move_it_either_way_is_frozen(
    pair_setup: Setup, case: str, frozen: bool
) -> None:
    # Rated torque 40 N m: half of it cannot be held one way and the other.
    rig, q = Rig(pair_setup), np.array([0.3, -0.5])
    rig.condition(mode="guided" if case == "guided" else "work", brake=[int(case == "braked"), 0])
    weight = Mover(PAIR, (0.3, 0.1)).gravity_torque(q)
    size = {"weak": 18.0}.get(case, 30.0)
    period = {"slow": 4.0}.get(case, 0.5)
    seen = set()
    for k in range(2500):
        swing = size * math.sin(2.0 * math.pi * 1e-3 * (k - 500) / period) if k > 500 else 0.0
        swing = abs(swing) if case == "one way" else swing
        read = q + both(STEP * (k % 40 == 0), 0.0) if case == "flickers" else q
        rig.sample(read, [0.0, 0.0], weight + both(swing, 0.0))
        seen.add((Signal(int(rig.outputs["signal"])), int(rig.outputs["signal_joint"])))
    assert faults(list(seen)) == ({(Signal.FROZEN, 0)} if frozen else set())
    assert (("signal", "frozen", "upper") in rig.standing()) == frozen
    if frozen:  # it ends when the reading moves
        for k in range(400):
            rig.sample(q + both(STEP * (1 + k % 2), 0.0), [0.0, 0.0], weight)
        assert ("signal", "frozen", "upper") not in rig.standing()


@pytest.mark.parametrize("reading", ["position", "velocity", "torque"])
def test_a_burst_of_noise_is_named_with_its_joint_and_ends_with_it(pair_setup: Setup, reading: str) -> None:
    rng = np.random.default_rng(13)
    rig, (q, qd) = Rig(pair_setup), swaying(2500)
    mover = Mover(PAIR, (0.3, 0.1))
    for k in range(1, 2499):
        tau = pinocchio.rnea(
            mover.model, mover.data, q[k], qd[k], np.gradient(qd[k - 1 : k + 2], 1e-3, axis=0)[1]
        )
        speed, place = qd[k] + VELOCITY_SD * rng.standard_normal(2), q[k].copy()
        if 1500 <= k < 1530:
            if reading == "velocity":
                speed[1] += 15.0 * VELOCITY_SD * rng.standard_normal()
            elif reading == "torque":
                tau[1] += 15.0 * 0.1 * rng.standard_normal()  # configured: 0.5 % of 20 N m
            else:
                place[1] += 15.0 * STEP / math.sqrt(12.0) * rng.standard_normal()
        rig.sample(encoded(place), speed, tau)
    assert {(b["kind"], b["detail"], b["joint"]) for b in rig.alarms()} == {("signal", "noise", "lower")}
    assert 1 <= int(rig.state["bad"][Signal.NOISE]) < 40
    assert rig.standing() == set()


def test_an_event_that_begins_with_noise_is_held_to_be_nothing_else(pair_setup: Setup) -> None:
    # In a narrow band the noise stands out before it is named.
    rng, fast = np.random.default_rng(22), pair_setup.band.fast.copy()
    fast[:, band.FLOOR] *= 0.1
    rig, q = Rig(pair_setup.with_band(replace(pair_setup.band, fast=fast))), np.full(2, 0.3)
    weight = Mover(PAIR, (0.3, 0.1)).gravity_torque(q)
    for k in range(3500):
        louder = 20.0 if 2000 <= k < 2400 else 1.0
        rig.sample(
            encoded(q), louder * VELOCITY_SD * rng.standard_normal(2), weight + 0.1 * rng.standard_normal(2)
        )
    said = [m.body for m in rig.messages if m.topic == "verdict"]
    assert {body["verdict"] for body in said} == {"undecided"}
    assert not said[-1]["open"]
    assert {b["kind"] for b in rig.alarms()} == {"unexplained-torque", "signal"}
    assert rig.standing() == set()


@pytest.mark.parametrize(
    ("case", "noisy"),
    [("blows", False), ("chattering drive", False), ("burst in it", True), ("brakes open", False)],
)
def test_what_a_drive_truly_does_is_no_noise_of_its_reading(
    pair_setup: Setup, case: str, noisy: bool
) -> None:
    rng, samples = np.random.default_rng(21), 4000
    q, qd = np.full((samples, 2), 0.3), np.zeros((samples, 2))
    rig, sd = Rig(pair_setup), np.array([0.2, 0.1])
    tau = sd * rng.standard_normal((samples, 2))
    if case == "blows":  # a drive answers at once, and its torque rings
        for k in range(1500, samples, 37):
            tau[k:, 1] += 10.0 * rng.standard_normal() * np.exp(-np.arange(samples - k) / 3.0)
    else:  # a drive that passes on the noise of its readings
        tau[1000 if case == "brakes open" else 0 :] *= 8.0
    if case == "burst in it":
        tau[2500:2600, 1] *= 10.0
    seen = set()
    for k in range(samples):
        if case == "brakes open" and k in (0, 1000):
            rig.condition(brake=[int(k == 0)] * 2)
        rig.sample(encoded(q[k]), sensed(q[k], qd[k], rng), np.clip(tau[k], -25.0, 25.0))
        seen.add((Signal(int(rig.outputs["signal"])), int(rig.outputs["signal_joint"])))
    assert faults(list(seen)) == ({(Signal.NOISE, 1)} if noisy else set())


@pytest.mark.parametrize(("size", "found"), [(0.0003, False), (0.002, True), (-0.003, True)])
def test_small_jumps_are_found_as_far_as_no_blow_explains_them(
    pair_setup: Setup, size: float, found: bool
) -> None:
    rng, samples = np.random.default_rng(14), 1200
    q, qd = swaying(samples)
    shifted = q.copy()
    shifted[1000:, 0] += size
    seen = verdicts(pair_setup, encoded(shifted), sensed(q, qd, rng, "lagging"), torques(samples, rng))
    assert faults(seen) == ({(Signal.JUMP, 0)} if found else set())
    assert seen.count((Signal.JUMP, 0)) == int(found)


@pytest.mark.parametrize(("scale", "offset"), [(0.6, 0.0), (-1.0, 0.0), (1.0, 0.4)])
def test_a_velocity_that_is_wrong_contradicts_the_position(
    pair_setup: Setup, scale: float, offset: float
) -> None:
    rng, samples = np.random.default_rng(15), 1500
    q, qd = swaying(samples)
    wrong = qd * [1.0, 1.0]
    wrong[500:, 0] = scale * wrong[500:, 0] + offset
    seen = faults(verdicts(pair_setup, encoded(q), sensed(q, wrong, rng), torques(samples, rng)))
    assert seen == {(Signal.CONTRADICTION, 0)}


@pytest.mark.parametrize(
    ("case", "detail"),
    [("lost 4 %", ""), ("lost 10 %", "dropouts"), ("doubled 10 %", "duplicates"), ("gaps", "")],
)
def test_scattered_losses_and_doubled_samples_are_called_while_they_last(
    pair: Rig, case: str, detail: str
) -> None:
    q = np.array([0.3, -0.5])
    weight = Mover(PAIR, (0.3, 0.1)).gravity_torque(q)

    def send(samples: int, case: str = "") -> None:
        for k in range(samples):
            lost = {"lost 4 %": k % 25 == 0, "lost 10 %": k % 10 == 0, "gaps": 80 * (k % 400 == 200)}.get(
                case, 0
            )
            pair.seq += int(lost)
            pair.t_ns += PERIOD_NS * int(lost)
            pair.elapse(PERIOD_NS * int(lost))
            pair.sample(q, [0.0, 0.0], weight)
            if case == "doubled 10 %" and k % 10 == 0:
                pair.seq -= 1
                pair.sample(q, [0.0, 0.0], weight, step_ns=0)

    send(1500)
    send(3000, case)
    assert {b["detail"] for b in pair.alarms()} - {"gap"} == ({detail} - {""})
    if detail:
        (alarm,) = pair.alarms()
        assert (alarm["kind"], alarm["verdict"], alarm["joint"]) == ("signal", "signal", None)
        assert "samples within a second" in alarm["text"]
        assert pair.standing() == {("signal", detail, None)}
        send(2100)
        assert pair.standing() == set()
        assert int(pair.state["bad"][1:].sum()) == 0
