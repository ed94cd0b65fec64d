"""The recorder's end, without processes: what a failing disk may cost, and what it may not."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import msgpack
import pytest

from monitor.edges.record import Recorder
from monitor.errors import SystemFault
from monitor.session import TUPLE, Session, SessionWriter
from monitor.setup.config import Config, loads

SECOND_NS = 1_000_000_000


@pytest.fixture
def config(rind_config: Config, tmp_path: Path) -> Config:
    return loads(rind_config.source_toml, str(tmp_path / "rind.toml"), rind_config.model_files())


def test_a_session_that_cannot_be_closed_stays_where_it_is(
    config: Config, monkeypatch: pytest.MonkeyPatch
) -> None:
    told: list[dict[str, Any]] = []
    recorder = Recorder(config, "0123456789", {}, told.append)
    recorder.batch(msgpack.packb((0, [(b"", SECOND_NS, 0, 0), ("joints", b"\x80", SECOND_NS), SECOND_NS])))
    assert recorder._writer is not None
    recorder._writer.flush()

    close = SessionWriter.close

    def fail(writer: SessionWriter) -> None:
        close(writer)
        raise SystemFault("disk", "no space left", "room")

    monkeypatch.setattr(SessionWriter, "close", fail)
    recorder.close()
    assert [message.get("failed") for message in told] == ["recorder"]
    (path,) = config.record_folder.glob("*.mcap")
    assert [record[1] for record in Session(path).records() if record[0] == TUPLE] == ["joints"]


def test_only_our_own_sessions_make_room(config: Config) -> None:
    config.record_folder.mkdir()
    others = [config.record_folder / name for name in ("mine.mcap", "20260101T000000Z.mcap")]
    own = config.record_folder / "20260101T000000Z-01234567-1.mcap"
    for path in (*others, own):
        with path.open("wb") as file:
            file.truncate(round(config.record.keep_gib * 2**30))  # takes no room: a file with a hole
    recorder = Recorder(config, "0123456789", {}, lambda message: None)
    recorder.batch(msgpack.packb((0, [(b"", SECOND_NS, 0, 0)])))
    recorder.close()
    assert all(path.exists() for path in others)
    assert own.exists(), "within the limit"
    with own.open("r+b") as file:
        file.truncate(round(config.record.keep_gib * 2**30) + 1)
    recorder.batch(msgpack.packb((0, [(b"", SECOND_NS, 0, 0)])))
    recorder.close()
    assert all(path.exists() for path in others)
    assert not own.exists()
