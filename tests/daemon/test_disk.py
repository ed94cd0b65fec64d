"""A disk that refuses stops the recorder with an alarm, never the loop."""

from __future__ import annotations

import random
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.daemon.conftest import Start
from tests.daemon.running import conversation, replayed
from tests.replay.rind import clean

RECORD = {"record.snapshot_s": 0.5, "record.flush_s": 0.1}
RETURNED = "returned-to-normal-unacknowledged"


def test_a_folder_that_cannot_be_is_an_alarm_and_the_loop_goes_on(start: Start, tmp_path: Path) -> None:
    (tmp_path / "sessions").write_text("no folder")
    daemon = start(RECORD)
    with conversation(daemon) as (speaker, listener):
        alarm = listener.alarm("system", "recorder")
        assert str(tmp_path / "sessions") in alarm["text"]
        speaker.play((p.at_ns, p.topic, p.payload) for p in clean(200))
        assert listener.health()["counts"]["stepped"] == 200
        assert len(daemon.workers()) == 4
        # Told once, though it is tried with every snapshot.
        assert [a["kind"] for a in listener.bodies("alarm")].count("system") == 1
        assert daemon.stop() == 0
    daemon.check_nothing_is_left()
    assert daemon.complaints == ""


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of half a megabyte."""
    folder = tmp_path / "disk"
    folder.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=512k", "tmpfs", str(folder)]
    try:
        done = subprocess.run(mount, capture_output=True, text=True, check=False)
    except FileNotFoundError:
        pytest.skip("no program `mount` here")
    if done.returncode != 0:
        pytest.skip(f"a file system may not be mounted here: {done.stderr.strip()}")
    yield folder
    subprocess.run(["umount", folder], check=True)


def test_a_full_disk_is_an_alarm_until_there_is_room_again(start: Start, small_disk: Path) -> None:
    rng = random.Random(0)
    filler = small_disk / "filler"
    filler.write_bytes(bytes(300_000))
    daemon = start(RECORD | {"record.folder": str(small_disk / "sessions")})
    with conversation(daemon) as (speaker, listener):
        speaker.play((p.at_ns, p.topic, p.payload) for p in clean(200))
        for _ in range(30):
            speaker.send("noise", rng.randbytes(10_000))  # does not compress
        alarm = listener.alarm("system", "recorder")
        assert "No space left" in alarm["text"]
        filler.unlink()
        listener.alarm("system", "recorder", RETURNED)
        assert listener.health()["loop"]["record_dropped"] == 0
        assert daemon.stop() == 0
        live = listener.hear()
    assert daemon.complaints == ""

    before, after = sorted((small_disk / "sessions").iterdir(), key=lambda p: p.stat().st_mtime_ns)
    replay, messages = replayed(before)
    assert replay.gaps == []
    assert replay.session.truncated
    replay, messages = replayed(after)
    assert replay.gaps == []
    assert not replay.session.truncated
    assert messages == live[len(live) - len(messages) :]
