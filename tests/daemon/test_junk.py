"""Whatever comes in on the input socket is counted, and the daemon goes on watching."""

from __future__ import annotations

import random

import msgpack

from tests.daemon.conftest import Start
from tests.daemon.running import Speaker, conversation
from tests.replay.rind import MS, Packet, clean, condition, samples


def send_junk(speaker: Speaker, rng: random.Random) -> int:
    """Send messages that no robot should send; return how many."""
    body = samples()[0]
    short = body | {"q": body["q"][:-8]}
    bodies = [
        short,
        body | {"tau": [0.0] * 8},
        body | {"v": 2},
        body | {"seq": -1},
        body | {"t_ns": 1e9},
        body | {"names": [f"joint{i}" for i in range(7)]},
        body | {"q": "seven"},
        {},
        [1, 2, 3],
    ]
    malformed = [[b"joints", msgpack.packb(one)] for one in bodies]
    malformed += [[b"joints", rng.randbytes(rng.randrange(200))] for _ in range(100)]
    malformed += [[b"robot", rng.randbytes(rng.randrange(1, 200))] for _ in range(20)]
    malformed += [[topic, msgpack.packb({"failed": "desk"})] for topic in (b"host", b"command", b"malformed")]
    malformed += [
        [b"joints"],
        [b"joints", msgpack.packb(body), b""],
        [b"", b"", b"", b""],
        [b"joints", bytes(3_000_000)],
        [b"robot", msgpack.packb({"brake": [0] * 6})],
        [b"host"],
    ]
    unheeded = [[b"", b""], [b"\xff\xfe", b"?"], [b"motor_temp", b"\xc1"], [b"x" * 5000, b""]]
    frames = malformed + unheeded
    rng.shuffle(frames)
    for one in frames:
        speaker.send_frames(*one)
    return len(malformed)


def test_junk_is_counted_and_the_stream_beside_it_is_watched_undisturbed(start: Start) -> None:
    daemon = start()
    with conversation(daemon) as (speaker, listener):
        speaker.play((p.at_ns, p.topic, p.payload) for p in clean(200))
        errors = send_junk(speaker, random.Random(3))
        listener.alarm("wire", "malformed")
        for kind in ("names", "version"):
            listener.alarm("wire", kind)
        later = [p._replace(at_ns=p.at_ns - 200 * MS) for p in clean(400) if p.at_ns >= 200 * MS]
        speaker.play((p.at_ns, p.topic, p.payload) for p in later)
        listener.health()
        health = listener.health()
        assert health["counts"]["wire_errors"] == errors
        assert health["counts"]["stepped"] == 400
        assert health["counts"]["lost"] == health["counts"]["bad"] == 0
        # The failure of the desk that the robot's side made up was not believed.
        assert not [alarm for alarm in listener.bodies("alarm") if alarm["kind"] == "system"]
        metrics = daemon.metrics()
        assert metrics["limbtell_wire_errors_total"] == errors
        assert metrics["limbtell_samples_stepped_total"] == 400.0
        assert daemon.stop() == 0
    assert daemon.complaints == ""


def test_another_robot_is_refused_until_the_right_one_comes(start: Start) -> None:
    daemon = start()
    with conversation(daemon) as (speaker, listener):
        other = Packet(0, "robot", condition(serial="TERRACE-3"))
        speaker.send(other.topic, other.payload)
        alarm = listener.alarm("robot", "other-serial")
        assert "TERRACE-3" in alarm["text"]
        samples_only = [p for p in clean(100) if p.topic == "joints"]
        speaker.play((p.at_ns, p.topic, p.payload) for p in samples_only)
        health = listener.health()
        assert health["counts"]["refused"] == 100
        assert health["counts"]["stepped"] == 0
        assert (health["coverage"], health["reason"]) == ("blind", "refused")
        speaker.play((p.at_ns, p.topic, p.payload) for p in clean(100))
        listener.alarm("robot", "other-serial", "returned-to-normal-unacknowledged")
        assert listener.health()["counts"]["stepped"] == 100
        assert daemon.stop() == 0
