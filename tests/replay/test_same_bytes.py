"""Replay says what the live run said, byte for byte, whatever the network did to the robot's messages.

Judge: the live side itself, a pipeline fed in-process; the ground rule is that of `monitor.flow.pipeline`.
"""

from __future__ import annotations

import random
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.flow.layout import Coverage, Reason
from monitor.flow.pipeline import Message, Pipeline
from monitor.session import Session
from monitor.setup.build import Setup
from replay.run import Replay
from tests.replay.rind import (
    BEGIN_NS,
    MS,
    Live,
    Packet,
    clean,
    condition,
    quick_setup,
    wire,
)

Mess = Callable[[list[Packet], int, int, random.Random], list[Packet]]
"""Takes packets, the place and length [packets] of a disturbance, and chance; returns packets."""

POINT_MASS = {"m": 2.0, "c": [0.0, 0.0, 0.1]}
CONDITIONS: tuple[dict[str, Any], ...] = (
    {"brake": [1] * 7, "mode": "stopped", "stop": "door-open"},
    {"drive": [1, 1, 0, 1, 1, 1, 1]},
    {"mode": "guided"},
    {"payload": ...},
    {"payload": POINT_MASS},
    {"payload": POINT_MASS | {"m": -1.0}},
    {"serial": "another"},
    {"boot": "b"},
    {"drive": ..., "brake": ...},
    {"mode": 7},
)


def lose(packets: list[Packet], at: int, length: int, rng: random.Random) -> list[Packet]:
    return packets[:at] + packets[at + length :]


def double(packets: list[Packet], at: int, length: int, rng: random.Random) -> list[Packet]:
    again = [p._replace(at_ns=p.at_ns + rng.randrange(5 * MS)) for p in packets[at : at + length]]
    return packets + again


def shuffle(packets: list[Packet], at: int, length: int, rng: random.Random) -> list[Packet]:
    """Delay each a little: order changes, some come too late."""
    late = [p._replace(at_ns=p.at_ns + rng.randrange(4 * MS)) for p in packets[at : at + length]]
    return packets[:at] + late + packets[at + length :]


def stall(packets: list[Packet], at: int, length: int, rng: random.Random) -> list[Packet]:
    """Nothing for a while, then all at once."""
    end = packets[min(at + length, len(packets)) - 1].at_ns
    return [p._replace(at_ns=end) if at <= i < at + length else p for i, p in enumerate(packets)]


def spoil(packets: list[Packet], at: int, length: int, rng: random.Random) -> list[Packet]:
    """Turn a byte of each over."""
    spoilt = []
    for p in packets[at : at + min(length, 5)]:
        payload = bytearray(p.payload or b"?")
        payload[rng.randrange(len(payload))] ^= rng.randrange(1, 256)
        spoilt.append(p._replace(body=bytes(payload)))
    return packets[:at] + spoilt + packets[at + len(spoilt) :]


def restart(packets: list[Packet], at: int, length: int, rng: random.Random) -> list[Packet]:
    """The robot counts from zero again; its clock too, every other time."""
    first = next((p.body for p in packets[at:] if isinstance(p.body, dict) and "seq" in p.body), None)
    if first is None:
        return packets
    shift = {"seq": first["seq"], "t_ns": rng.choice((0, first["t_ns"] - 5 * MS))}

    def anew(p: Packet) -> Packet:
        if not isinstance(p.body, dict) or "seq" not in p.body:
            return p
        return p._replace(body=p.body | {key: max(0, p.body[key] - by) for key, by in shift.items()})

    return packets[:at] + [anew(p) for p in packets[at:]]


def change(packets: list[Packet], at: int, length: int, rng: random.Random) -> list[Packet]:
    """The robot's condition changes for a while."""
    begin, end = packets[at].at_ns, packets[min(at + length, len(packets) - 1)].at_ns
    changed = condition(**rng.choice(CONDITIONS))
    back = [Packet(end, "robot", condition())] if rng.random() < 0.7 else []
    return [*packets, Packet(begin, "robot", changed), *back]


def say(packets: list[Packet], at: int, length: int, rng: random.Random) -> list[Packet]:
    """The daemon tells of itself, and topics of nobody come."""
    at_ns = packets[at].at_ns
    host: list[dict[str, Any]] = [
        {"utc_offset_ns": 10**18 + rng.randrange(10**9), "utc_uncertainty_ns": 50, "loop": {"ticks": at}},
        {"failed": "recorder", "text": "no room"},
        {"recovered": "recorder"},
    ]
    return [
        *packets,
        Packet(at_ns, "host", rng.choice(host)),
        Packet(at_ns, rng.choice(("motor_temp", "\udcff", "")), rng.randbytes(8)),
    ]


MESSES: tuple[Mess, ...] = (lose, double, shuffle, stall, spoil, restart, change, say)


def disturbed(disturbances: list[tuple[int, int, int]], rng: random.Random) -> list[Packet]:
    packets = clean()
    for kind, at, length in disturbances:
        packets = MESSES[kind](packets, min(at, len(packets) - 1), length, rng)
    return packets


@pytest.fixture(scope="session")
def setup(tmp_path_factory: pytest.TempPathFactory) -> Setup:
    return quick_setup(tmp_path_factory.mktemp("rind"))


def check_replays(live: Live) -> list[Message]:
    """From the begin and from every snapshot, the replay's messages are the live ones from there on."""
    session = Session(live.writer.path)
    for k, mark in enumerate(live.marks):
        replay = Replay(session, start=k)
        assert wire(replay) == wire(live.sent[mark:])
        # Each further snapshot in the recording holds the very state the replay had reached.
        assert replay.gaps == []
        assert replay.confirmed == len(live.marks) - 1 - k
    return live.sent


def test_an_undisturbed_run_replays_to_the_same_bytes(setup: Setup, tmp_path: Path) -> None:
    live = Live(setup, tmp_path / "a.mcap").run(clean(), snapshots=(150, 480))
    sent = check_replays(live)
    topics = [message.topic for message in sent]
    verdicts = [message.body for message in sent if message.topic == "verdict"]
    # Both pushes, opened and ended, and what was found in between.
    assert [body["event"] for body in verdicts if not body["open"]] == [1, 2]
    assert {body["verdict"] for body in verdicts} == {"undecided", "contact"}
    assert {"alarm", "health"} < set(topics)


def test_every_kind_of_disturbance_happens_and_replays_to_the_same_bytes(
    setup: Setup, tmp_path: Path
) -> None:
    places = ((0, 60, 40), (1, 130, 20), (2, 200, 30), (3, 300, 60), (4, 420, 5), (6, 500, 60), (7, 600, 1))
    packets = [*disturbed([*places, (5, 700, 1)], random.Random(4)), Packet(650 * MS, "joints", b"\xc1")]
    live = Live(setup, tmp_path / "a.mcap").run(packets, snapshots=range(50, 850, 100), jitter=3)
    sent = check_replays(live)
    replay = Replay(Session(tmp_path / "a.mcap"))
    assert len(list(replay)) == len(sent)
    for name in ("received", "stepped", "lost", "late", "duplicates", "wire_errors", "restarts", "rebased"):
        assert replay.counters[name] == live.pipeline.blocks.state[name][0] > 0, name
    details = {message.body["detail"] for message in sent if message.topic == "alarm"}
    assert {"gap", "stale", "malformed", "not-yet-weighed"} <= details


@settings(max_examples=40, deadline=None)
@given(
    disturbances=st.lists(
        st.tuples(st.integers(0, len(MESSES) - 1), st.integers(0, 799), st.integers(1, 80)),
        min_size=1,
        max_size=6,
    ),
    chance=st.integers(0, 1000),
    snapshots=st.sets(st.integers(1, 800), max_size=3),
)
def test_whatever_the_network_does_replay_has_the_same_bytes(
    setup: Setup,
    tmp_path_factory: pytest.TempPathFactory,
    disturbances: list[tuple[int, int, int]],
    chance: int,
    snapshots: set[int],
) -> None:
    path = tmp_path_factory.mktemp("mess") / "a.mcap"
    packets = disturbed(disturbances, random.Random(chance))
    check_replays(Live(setup, path).run(packets, snapshots, jitter=chance))


def without_health(messages: list[Message]) -> list[tuple[str, bytes]]:
    return [one for one in wire(messages) if one[0] != "health"]


def split_run(setup: Setup, ticks_ns: set[int], end_ns: int) -> tuple[Pipeline, list[Message]]:
    """Feed the undisturbed stream with ticks at these times [ns since the begin] only."""
    pipeline = setup.pipeline("run")
    said: list[Message] = []
    due = sorted({*ticks_ns, end_ns})
    for packet in [*clean(700), Packet(end_ns, "", b"")]:
        while due and due[0] <= packet.at_ns:
            said += pipeline.tick(BEGIN_NS + due.pop(0))
        pipeline.feed(packet.topic, packet.payload, BEGIN_NS + packet.at_ns)
    return pipeline, said


@settings(max_examples=25, deadline=None)
@given(ticks=st.sets(st.integers(1, 700 * MS), max_size=60))
def test_where_the_stream_is_split_by_ticks_does_not_matter(setup: Setup, ticks: set[int]) -> None:
    # Health and the account of coverage are of the ticks themselves; everything else is of the samples.
    end_ns = 700 * MS
    one, said = split_run(setup, ticks, end_ns)
    other, also = split_run(setup, set(), end_ns)
    assert all(a == b for a, b in zip(*(without_health(one) for one in (said, also)), strict=True))
    assert {m.body["event"] for m in said if m.topic == "verdict"} == {1, 2}
    assert one.blocks.outputs.tobytes() == other.blocks.outputs.tobytes()
    for name in one.blocks.state.dtype.names or ():
        if name not in ("coverage_ns", "health_seq", "ratio_peak"):
            np.testing.assert_array_equal(one.blocks.state[name], other.blocks.state[name], name)


def test_a_payload_that_is_no_longer_known_is_noticed_and_replays(setup: Setup, tmp_path: Path) -> None:
    packets = [*clean(390), Packet(210 * MS, "robot", condition(payload=...))]
    live = Live(setup, tmp_path / "a.mcap").run(packets, snapshots=(250,))
    check_replays(live)
    replay = Replay(Session(tmp_path / "a.mcap"))
    list(replay)
    unknown_s = replay.counters["coverage_ns"][Coverage.CONDITIONAL, Reason.PAYLOAD_UNKNOWN] / 1e9
    assert 0.10 < unknown_s < 0.24  # from 0.21 s to the end, less the time to settle


def test_two_runs_of_the_same_recording_say_the_same(setup: Setup, tmp_path: Path) -> None:
    packets = disturbed([(2, 100, 60), (0, 300, 30)], random.Random(1))
    Live(setup, tmp_path / "a.mcap").run(packets, snapshots=(400,))
    first, second = (list(Replay(Session(tmp_path / "a.mcap"))) for _ in range(2))
    assert wire(first) == wire(second)
    assert len(first) > 5
