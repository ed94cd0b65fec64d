"""What stood on the output socket is what the recording replays to, byte for byte."""

from __future__ import annotations

import random

from tests.daemon.conftest import Start
from tests.daemon.running import conversation, replayed
from tests.replay.rind import MS, SAMPLES, WATCH, Packet, clean
from tests.replay.test_same_bytes import change, double, lose, restart, shuffle, spoil, stall

RECORD = {"record.snapshot_s": 0.2, "record.flush_s": 0.1}


def hold_back(packets: list[Packet], at: int, length: int, rng: random.Random) -> list[Packet]:
    """Let them come long after they were given up."""
    held = [p._replace(at_ns=p.at_ns + 30 * MS) for p in packets[at : at + length]]
    return packets[:at] + held + packets[at + length :]


def mess(packets: list[Packet], seed: int) -> list[Packet]:
    """Lose, double, delay and spoil; let the stream stall and the robot change and restart; add junk."""
    rng = random.Random(seed)
    # Both pushes of the samples are left in peace, so that they raise alarms.
    for disturb, at, length in (
        (double, 20, 12),
        (shuffle, 40, 40),
        (lose, 85, 3),
        (hold_back, 225, 2),
        (spoil, 250, 4),
        (stall, 270, 45),
        (lose, 330, 40),
        (change, 360, 30),
        (restart, 640, 1),
        (shuffle, 680, 60),
    ):
        packets = disturb(packets, at, length, rng)
    junk = [Packet(MS * rng.randrange(SAMPLES), "joints", rng.randbytes(30)) for _ in range(5)]
    return sorted((*packets, *junk, Packet(10 * MS, "motor_temp", b"\x80")), key=lambda packet: packet.at_ns)


def test_the_recording_of_a_disturbed_stream_replays_to_the_bytes_that_were_sent(start: Start) -> None:
    daemon = start(RECORD, WATCH)
    with conversation(daemon) as (speaker, listener):
        speaker.play((p.at_ns, p.topic, p.payload) for p in mess(clean(), seed=1))
        listener.alarm("signal", "stale")
        listener.health()
        assert daemon.stop() == 0
        live = listener.hear()
        alarms = listener.bodies("alarm")

    assert {"unexplained-torque", "signal", "wire"} <= {alarm["kind"] for alarm in alarms}
    (session,) = daemon.sessions()
    replay, messages = replayed(session)
    counters = replay.counters
    for name in ("lost", "late", "duplicates", "restarts", "wire_errors"):
        assert counters[name] > 0, name
    # A subscriber may join a moment late; from then on there is no difference.
    joined = messages.index(live[0])
    assert messages[joined:] == live
    assert replay.gaps == []
    assert replay.confirmed >= 4

    for start_at in range(1, replay.confirmed + 1, 2):
        later, messages = replayed(session, start_at)
        assert messages == live[len(live) - len(messages) :]
        assert later.confirmed == replay.confirmed - start_at
