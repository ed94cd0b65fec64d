"""Alarms come and go by one table, carry the documented fields, and are numbered without a gap."""

from __future__ import annotations

from dataclasses import replace

import msgpack
import numpy as np
import pytest
from numpy.typing import ArrayLike

from monitor.flow.alarms import NORMAL, RETURNED, TRANSITIONS, UNACKNOWLEDGED, AlarmBoard, Key
from monitor.flow.layout import KINDS
from monitor.flow.pipeline import _PATIENCE_NS
from monitor.flow.verdict import Size, Verdict
from monitor.flow.wire import pack
from monitor.setup.build import Setup
from tests.flow.rig import PAIR, PERIOD_NS, Mover, Rig, both, message

REST = np.array([0.3, 1.0])  # both joints bear weight
WEIGHT = Mover(PAIR, (0.3, 0.1)).gravity_torque(REST)
STATEMENT = [
    "verdict", "detail", "joint", "link", "probability", "alternatives", "size", "onset_t",
]  # fmt: skip
FIELDS = {
    "alarm": ["seq", "t", "utc", "run", "event", *STATEMENT, "state", "kind", "priority"],
    "verdict": [
        "seq",
        "t",
        "utc",
        "run",
        "event",
        "open",
        "lasting",
        "continues",
        *STATEMENT,
        "explanations",
        "contact",
    ],
    "health": [
        "seq",
        "t",
        "utc",
        "run",
        "coverage",
        "reason",
        "joints",
        "band_ratio",
        "counts",
        "standing",
        "ignored",
        "loop",
    ],
}
# Names that programs read: design.md, `alarms.jsonl`.
VERDICTS = {
    "contact", "touchdown", "foothold-lost", "actuator", "position-sensor", "torque-sensor", "load", "signal",
    "system", "undecided",
}  # fmt: skip


def stand(rig: Rig, count: int, tau: ArrayLike = WEIGHT) -> None:
    for _ in range(count):
        rig.sample(REST, [0.0, 0.0], tau)


@pytest.mark.parametrize("happened", ["raised", "cleared"])
@pytest.mark.parametrize("state", [NORMAL, UNACKNOWLEDGED, RETURNED])
def test_the_table_says_for_every_state_and_happening_what_comes_next(state: str, happened: str) -> None:
    # Core moves of ANSI/ISA-18.2 and IEC 62682 (check-values §6), without acknowledgement.
    expected = {
        (NORMAL, "raised"): UNACKNOWLEDGED,
        (NORMAL, "cleared"): None,
        (UNACKNOWLEDGED, "raised"): None,
        (UNACKNOWLEDGED, "cleared"): RETURNED,
        (RETURNED, "raised"): UNACKNOWLEDGED,
        (RETURNED, "cleared"): None,
    }
    assert TRANSITIONS.get((state, happened)) == expected[state, happened]
    board, key, verdict = AlarmBoard(), Key("signal", "stale"), Verdict("signal", "stale")
    if state != NORMAL:
        board.raised(key, verdict, 1)
    if state == RETURNED:
        board.cleared(key)
    moved = board.raised(key, verdict, 2) if happened == "raised" else board.cleared(key)
    assert (moved.alarm.state if moved else None) == expected[state, happened]
    assert board.stands(key) == ((expected[state, happened] or state) == UNACKNOWLEDGED)
    assert set(TRANSITIONS) <= set(expected)


def test_a_board_goes_on_from_its_snapshot() -> None:
    board = AlarmBoard()
    verdict = Verdict(
        "undecided",
        "outside-band",
        "lower",
        None,
        0.4,
        ({"verdict": "contact"},),
        Size(1.0, "N m", None),
        2.0,
    )
    board.raised(Key("event", "open"), verdict, 3, "unexplained-torque")
    board.raised(Key("signal", "frozen", "upper"), Verdict("signal", "frozen", "upper"), 4)
    board.cleared(Key("signal", "frozen", "upper"))
    other = AlarmBoard()
    other.restore(msgpack.unpackb(msgpack.packb(board.snapshot())))
    assert other.snapshot() == board.snapshot()
    (alarm,) = other.standing()
    assert [alarm] == board.standing()
    moved = other.cleared(Key("event", "open"))
    assert moved is not None
    assert moved.alarm == replace(alarm, state=RETURNED)
    assert (alarm.event, alarm.verdict, alarm.kind) == (3, verdict, "unexplained-torque")


def test_an_alarm_that_stands_may_be_stated_anew_as_another_kind_and_stand_for_another_condition() -> None:
    board, first, second = AlarmBoard(), Key("event", "open"), Key("event", "lasting-0")
    assert board.restated(first, Verdict("contact", "push"), "contact") is None
    board.raised(first, Verdict("undecided", "not-yet-weighed"), 7, "unexplained-torque")
    stated = board.restated(first, Verdict("actuator", "offset"), "actuator")
    assert stated is not None
    assert (stated.alarm.state, stated.alarm.event, stated.alarm.kind) == (UNACKNOWLEDGED, 7, "actuator")
    board.moved(first, second)
    assert not board.stands(first)
    assert board.standing() == [stated.alarm]
    assert board.cleared(first) is None
    gone = board.cleared(second)
    assert gone is not None
    assert gone.alarm == replace(stated.alarm, state=RETURNED)


@pytest.fixture
def eventful(pair: Rig) -> Rig:
    """A rig that has seen a bit of everything."""
    pair.elapse(1000, pack({"utc_offset_ns": 1_700_000_000_000_000_000, "utc_uncertainty_ns": 900}), "host")
    pair.elapse(1000, pack({"loop": {"ticks": 5, "overruns": 0}}), "host")
    stand(pair, 1000)
    stand(pair, 100, WEIGHT + both(0.0, 5.0))
    stand(pair, 700)
    pair.elapse(1000, pack({"failed": "recorder", "text": "disk full"}), "host")
    pair.elapse(1000, b"\xc1")
    stand(pair, 1, [np.nan, 0.0])
    stand(pair, 500)
    pair.elapse(150_000_000)
    stand(pair, 300)
    pair.elapse(1000, pack({"recovered": "recorder"}), "host")
    for _ in range(50):
        pair.sample(REST, [0.0, 0.0], WEIGHT, tau_cmd=[0.0, 0.0])
    pair.condition(serial="P-2")
    stand(pair, 300)
    pair.condition(serial="P-1", brake=[1, 1])
    for k in range(800):
        pair.sample(REST + min(0.02, 5e-5 * max(0, k - 400)), [0.0, 0.0], WEIGHT)
    pair.condition()
    for _ in range(6000):
        pair.sample(REST + 0.02, [0.0, 0.0], WEIGHT)
    return pair


def test_every_message_has_the_documented_fields_in_their_order_and_numbers_without_a_gap(
    eventful: Rig,
) -> None:
    kinds = {body["kind"] for body in eventful.alarms()}
    # A torque that grows while nothing moves is the drive's own.
    assert set(KINDS) - kinds == {"contact", "sensor", "load", "drift"}
    for topic, fields in FIELDS.items():
        bodies = [m.body for m in eventful.messages if m.topic == topic]
        assert [body["seq"] for body in bodies] == list(range(1, len(bodies) + 1))
        assert len(bodies) >= 2
        for body in bodies:
            assert [name for name in body if name != "text"] == fields
            assert body["run"] == "a-run"
    for sent in eventful.messages:
        assert msgpack.unpackb(sent.payload) == sent.body
    for body in eventful.alarms():
        assert body["verdict"] in VERDICTS
        assert body["priority"] == KINDS[body["kind"]]
        assert body["state"] in (UNACKNOWLEDGED, RETURNED)
    assert eventful.standing() == set()


def test_each_event_has_a_number_of_its_own_from_one_on(eventful: Rig) -> None:
    stated = [body["event"] for body in eventful.alarms() if body["state"] == UNACKNOWLEDGED]
    raised = sorted(set(stated))  # an event may be stated anew, as another kind
    assert raised == list(range(1, len(raised) + 1))
    assert stated == sorted(stated)
    assert eventful.state["events"] == len(raised) == eventful.state["verdicts"].sum()
    cleared = [body["event"] for body in eventful.alarms() if body["state"] == RETURNED]
    assert sorted(cleared) == raised
    assert int(eventful.state["alarms_raised"].sum()) == len(stated) > len(raised)
    assert not eventful.state["alarms_standing"].any()


def test_an_event_and_a_disobedient_drive_in_the_same_sample_have_different_numbers(
    pair_setup: Setup,
) -> None:
    # The band is left in the very sample in which the command has differed for long enough.
    def opened(lead: int) -> Rig:
        rig = Rig(pair_setup)
        stand(rig, 1000)
        for k in range(60):
            tau = WEIGHT + both(0.0, 5.0 * (k >= lead))
            rig.sample(REST, [0.0, 0.0], tau, tau_cmd=(WEIGHT - both(0.0, 10.0)).tolist())
        return rig

    firsts = [rig.alarms()[:2] for rig in map(opened, range(40))]
    together = [alarms for alarms in firsts if len(alarms) == 2 and len({body["t"] for body in alarms}) == 1]
    assert together
    for alarms in together:
        assert {body["kind"] for body in alarms} == {"drive", "unexplained-torque"}
        assert [body["event"] for body in alarms] == [1, 2]


def test_the_stream_going_silent_is_noticed_and_robot_time_goes_on_by_ours(pair: Rig) -> None:
    stand(pair, 700)
    last = pair.t_ns
    for _ in range(100):
        pair.elapse(PERIOD_NS)
    assert pair.alarms() == []
    pair.elapse(PERIOD_NS)
    (alarm,) = pair.alarms()
    assert (alarm["kind"], alarm["detail"], alarm["state"]) == ("signal", "stale", UNACKNOWLEDGED)
    assert alarm["t"] == pytest.approx((last + 101 * PERIOD_NS) / 1e9, abs=1e-9)
    for _ in range(1000):
        pair.elapse(PERIOD_NS)
    assert len(pair.alarms()) == 1
    health = [m.body for m in pair.messages if m.topic == "health"][-1]
    assert (health["coverage"], health["reason"]) == ("blind", "no-stream")
    assert health["standing"] == [["signal", "stale", None]]
    assert health["t"] > alarm["t"]
    pair.seq += 1101
    pair.t_ns += 1101 * PERIOD_NS
    stand(pair, 600)
    assert [b["detail"] for b in pair.alarms()] == ["stale", "gap", "stale", "gap"]
    assert pair.standing() == set()


def test_a_robot_may_start_ten_seconds_after_the_monitor_but_not_stay_away(pair_setup: Setup) -> None:
    rig = Rig(pair_setup, known=False)
    for _ in range(_PATIENCE_NS // PERIOD_NS):
        rig.elapse(PERIOD_NS)
    assert rig.alarms() == []
    assert rig.outputs["reason_whole"] == 1
    for _ in range(100):
        rig.elapse(PERIOD_NS)
    (alarm,) = rig.alarms()
    assert (alarm["kind"], alarm["detail"], alarm["state"]) == ("signal", "stale", UNACKNOWLEDGED)
    stand(rig, 10)
    assert rig.alarms()[-1]["state"] == RETURNED


def test_utc_is_told_once_the_offset_is_known(pair: Rig) -> None:
    # 2023-11-14T22:13:20 is 1.7e9 s after the epoch (any calendar).
    pair.elapse(1000, b"\xc1")
    assert pair.alarms()[-1]["utc"] is None
    offset = 1_700_000_000_000_000_000 - pair.now_ns - 6_000_000_000
    pair.elapse(1000, pack({"utc_offset_ns": offset, "utc_uncertainty_ns": 900}), "host")
    pair.elapse(5_999_999_000)
    assert pair.alarms()[-1]["utc"] == "2023-11-14T22:13:20.000000Z"


def test_a_failure_of_the_daemon_is_a_system_alarm_with_its_words_until_it_recovers(pair: Rig) -> None:
    for _ in range(3):
        pair.elapse(1000, pack({"failed": "recorder", "text": "no space left"}), "host")
    (alarm,) = pair.alarms()
    assert (alarm["kind"], alarm["verdict"], alarm["detail"], alarm["text"]) == (
        "system", "system", "recorder", "no space left",
    )  # fmt: skip
    pair.elapse(1000, pack({"recovered": "recorder"}), "host")
    assert pair.standing() == set()


def test_a_snapshot_in_mid_event_goes_on_with_the_same_messages(pair_setup: Setup) -> None:
    def sent(rig: Rig, first: int, last: int) -> None:
        for k in range(first, last):
            tau = WEIGHT + both(0.0, 5.0 if 700 < k < 900 else 0.0)
            if k % 97 == 0:
                rig.seq += 1  # one that is lost
            rig.sample(REST, [0.0, 0.0], tau)

    whole, first, second = (Rig(pair_setup) for _ in range(3))
    sent(whole, 0, 1600)
    for cut in (650, 777, 776, 800, 1100):
        first, second = Rig(pair_setup), Rig(pair_setup)
        sent(first, 0, cut)
        second.pipeline.restore(first.pipeline.snapshot())
        second.seq, second.t_ns, second.now_ns = first.seq, first.t_ns, first.now_ns
        sent(second, cut, 1600)
        payloads = [m.payload for m in first.messages + second.messages]
        assert payloads == [m.payload for m in whole.messages]
        assert second.pipeline.snapshot() == whole.pipeline.snapshot()
    assert [b["kind"] for b in whole.alarms()] == ["unexplained-torque", "actuator", "actuator"]


def test_a_snapshot_of_another_robot_or_version_is_refused(pair_setup: Setup, sled_setup: Setup) -> None:
    pipeline = pair_setup.pipeline("x")
    with pytest.raises(ValueError, match="bytes; expected"):
        sled_setup.pipeline("x").restore(pipeline.snapshot())
    saved = msgpack.unpackb(pipeline.snapshot(), strict_map_key=False)
    with pytest.raises(ValueError, match="version 99"):
        pipeline.restore(msgpack.packb(saved | {"version": 99}))


def test_how_messages_fall_into_ticks_changes_no_verdict_and_no_residual(pair_setup: Setup) -> None:
    # Any split of the stream that keeps order and receive times: ticks between messages or after many.
    def run(every: int) -> tuple[bytes, list[bytes]]:
        rig = Rig(pair_setup)
        start = rig.now_ns
        for k in range(1, 1501):
            tau = WEIGHT + both(0.0, 5.0 if 900 < k < 1100 else 0.0)
            at_ns = start + k * PERIOD_NS
            rig.pipeline.feed("joints", message(k, k * PERIOD_NS, REST, [0.0, 0.0], tau), at_ns)
            if k % every == 0:
                rig.messages += rig.pipeline.tick(at_ns)
        ledger = b"".join(
            rig.state[name].tobytes() for name in ("r_fast", "r_slow", "q_fast", "stepped", "events")
        )
        return ledger, [m.payload for m in rig.messages if m.topic in ("alarm", "verdict")]

    runs = [run(every) for every in (1, 2, 10, 50)]
    assert len(runs[0][1]) >= 5
    assert runs == [runs[0]] * 4


@pytest.mark.parametrize(
    ("detail", "seq_step", "t_step_ns"),
    [("clock", 1, 1000), ("clock", 1, 1), ("clock", 1, 40_000_000), ("numbering", 0, PERIOD_NS)],
)
def test_a_clock_in_another_unit_and_a_number_that_does_not_count_are_called(
    pair_setup: Setup, detail: str, seq_step: int, t_step_ns: int
) -> None:
    rig = Rig(pair_setup)
    for k in range(3500):
        rig.elapse(PERIOD_NS, message(7 + seq_step * k, 10**9 + t_step_ns * k, REST, [0.0, 0.0], WEIGHT))
    assert ("wire", detail) in {(alarm["kind"], alarm["detail"]) for alarm in rig.alarms()}
