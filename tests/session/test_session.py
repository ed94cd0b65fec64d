"""Sessions: what is written comes back exactly, whatever happens to the file.

Judges: the public reader of the package `mcap`, and `zlib`/file offsets taken from the index it reads.
"""

from __future__ import annotations

import resource
from collections.abc import Callable, Iterable, Iterator
from contextlib import closing, contextmanager, suppress
from pathlib import Path
from typing import Any

import msgpack
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from mcap.exceptions import McapError
from mcap.reader import make_reader
from mcap.records import Chunk, Metadata
from mcap.stream_reader import StreamReader
from mcap.writer import Writer

from monitor import session
from monitor.errors import SessionError, SystemFault
from monitor.session import GAP, SNAPSHOT, TICK, TUPLE, Record, Session, SessionWriter, gap_of

UTC_OFFSET_NS = 1_772_000_000_123_456_789
CONFIG = "schema = 1\n[robot]\nname = 'Rind'\n"
MODEL = {"rind.urdf": "<robot name='rind'/>", "käse.urdf": "<robot/>"}

Call = tuple[Any, ...]


def written(path: Path, calls: Iterable[Call], utc_offset_ns: int = UTC_OFFSET_NS) -> Path:
    """A closed session of the given (method, arguments...) calls."""
    path.unlink(missing_ok=True)
    with closing(writer(path, utc_offset_ns)) as out:
        for name, *arguments in calls:
            getattr(out, name)(*arguments)
    return path


def writer(path: Path, utc_offset_ns: int = UTC_OFFSET_NS) -> SessionWriter:
    return SessionWriter(
        path,
        config_toml=CONFIG,
        model=MODEL,
        run="7d1c",
        utc_offset_ns=utc_offset_ns,
        utc_uncertainty_ns=250_000,
        versions={"limbtell": "0.1.0"},
    )


def expected(calls: Iterable[Call]) -> list[Record]:
    """What a reader must give for these calls; gaps with their payload unpacked, see `given_back`."""
    records: list[Record] = []
    for name, *a in calls:
        if name == "tuple":
            records.append((TUPLE, a[0], a[1], a[2]))
        elif name == "tick":
            records.append((TICK, "", b"", a[0]))
        elif name == "snapshot":
            records.append((SNAPSHOT, "", a[0], a[1]))
        elif name == "gap":
            records.append((GAP, "", msgpack.packb({"lost": a[0], "reason": a[2]}), a[1]))
    return records


def stream(seconds: int, start_s: int = 0) -> list[Call]:
    """A short watch at 10 Hz, one chunk a second, with everything in it that a session can hold."""
    calls: list[Call] = [("snapshot", b"state" * 40, start_s * 10**9)]
    for second in range(start_s, start_s + seconds):
        for i in range(10):
            at = second * 10**9 + i * 10**8
            calls.append(("tuple", "joints", msgpack.packb({"v": 1, "t_ns": at, "x": at % 997}), at + 71, at))
            calls.append(("tick", at + 500))
        calls.append(("tuple", "robot", b"\xc0", second * 10**9 + 999_999_999))
        if second % 3 == 2:
            calls.append(("gap", 4, second * 10**9, "the recorder was late"))
        calls.append(("flush",))
    return calls


def until_damage(path: Path) -> tuple[list[Record], SessionError | None]:
    """Records given before the reader ends or refuses."""
    records: list[Record] = []
    try:
        for record in Session(path).records():
            records.append(record)
    except SessionError as error:
        return records, error
    return records, None


def chunk_ends(path: Path) -> list[int]:
    """Offset behind each chunk, from the index that the public reader reads."""
    with path.open("rb") as file:
        summary = make_reader(file).get_summary()
    assert summary is not None
    return sorted(index.chunk_start_offset + index.chunk_length for index in summary.chunk_indexes)


def chunk_starts(path: Path) -> list[int]:
    with path.open("rb") as file:
        summary = make_reader(file).get_summary()
    assert summary is not None
    return sorted(index.chunk_start_offset for index in summary.chunk_indexes)


def records_by_chunk(calls: list[Call]) -> list[list[Record]]:
    chunks: list[list[Call]] = [[]]
    for call in calls:
        if call == ("flush",):
            chunks.append([])
        else:
            chunks[-1].append(call)
    return [expected(chunk) for chunk in chunks if chunk]


int64 = st.integers(-(2**63), 2**63 - 1)
topics = st.one_of(
    st.sampled_from(["joints", "robot", "limbtell/ticks", "limbtell/snapshot", ""]),
    st.text(st.characters(exclude_categories=()), max_size=8),
)
calls_of_a_writer = st.lists(
    st.one_of(
        st.tuples(st.just("tuple"), topics, st.binary(max_size=40), int64, st.none() | int64),
        st.tuples(st.just("tick"), int64),
        st.tuples(st.just("snapshot"), st.binary(max_size=100), int64),
        st.tuples(st.just("gap"), st.integers(0, 2**63), int64, st.text(st.characters(codec="utf-8"))),
        st.just(("flush",)),
    ),
    max_size=60,
)


@given(calls=calls_of_a_writer, utc_offset_ns=int64)
@example(calls=[("tick", -(2**63)), ("tick", 2**63 - 1)], utc_offset_ns=-1)
@example(calls=[("tuple", "\udc80", b"", 0, None), ("tuple", "limbtell/gap", b"", 0, None)], utc_offset_ns=0)
def test_any_sequence_of_calls_comes_back_exactly_and_in_order(
    tmp_path_factory: pytest.TempPathFactory, calls: list[Call], utc_offset_ns: int
) -> None:
    path = written(tmp_path_factory.getbasetemp() / "any.mcap", calls, utc_offset_ns)
    read = Session(path)
    assert list(read.records()) == expected(calls)
    assert not read.truncated


def test_records_can_be_read_more_than_once(tmp_path: Path) -> None:
    read = Session(written(tmp_path / "a.mcap", stream(3)))
    assert list(read.records()) == list(read.records())


def test_the_head_comes_back(tmp_path: Path) -> None:
    read = Session(written(tmp_path / "a.mcap", []))
    assert read.config_toml == CONFIG
    assert read.model == MODEL
    assert read.run == "7d1c"
    assert (read.utc_offset_ns, read.utc_uncertainty_ns) == (UTC_OFFSET_NS, 250_000)
    assert read.versions == {"limbtell": "0.1.0"}
    assert list(read.records()) == []


def test_a_gap_says_how_much_was_lost_and_why(tmp_path: Path) -> None:
    path = written(tmp_path / "a.mcap", [("gap", 12, 5, "the ring was full")])
    ((kind, topic, payload, time_ns),) = Session(path).records()
    assert (kind, topic, time_ns) == (GAP, "", 5)
    assert gap_of(payload) == (12, "the ring was full")


def test_the_public_reader_sees_topics_encodings_times_and_payloads(tmp_path: Path) -> None:
    calls = stream(4)
    path = written(tmp_path / "a.mcap", calls)
    with path.open("rb") as file:
        reader = make_reader(file, validate_crcs=True)
        messages = list(reader.iter_messages(log_time_order=False))
        summary = reader.get_summary()
    tuples = [call for call in calls if call[0] == "tuple"]
    of_robot = [(c, m) for _, c, m in messages if not c.topic.startswith("limbtell/")]
    assert [(c.topic, m.data, m.log_time) for c, m in of_robot] == [
        (topic, payload, received_ns + UTC_OFFSET_NS) for _, topic, payload, received_ns, *_ in tuples
    ]
    assert [m.publish_time for c, m in of_robot if c.topic == "joints"] == [
        call[4] for call in tuples if call[1] == "joints"
    ]
    assert [m.sequence for _, m in of_robot] == list(range(len(tuples)))
    assert {c.message_encoding for _, c, _ in messages} == {"msgpack"}
    assert {schema for schema, _, _ in messages} == {None}
    assert summary is not None
    assert {c.topic for c in summary.channels.values()} == {
        "joints",
        "robot",
        "limbtell/ticks",
        "limbtell/snapshot",
        "limbtell/gap",
    }
    assert {index.compression for index in summary.chunk_indexes} == {"zstd"}
    with path.open("rb") as file:
        assert sum(1 for _ in StreamReader(file, validate_crcs=True).records) > len(messages)


def test_the_public_reader_sees_the_head_in_a_file_cut_before_its_first_chunk(tmp_path: Path) -> None:
    path = written(tmp_path / "a.mcap", stream(1))
    path.write_bytes(path.read_bytes()[: chunk_starts(path)[0]])
    metadata: dict[str, str] = {}
    with path.open("rb") as file, suppress(McapError):
        for record in StreamReader(file).records:
            if isinstance(record, Metadata):
                metadata = record.metadata
    assert metadata["config.toml"] == CONFIG
    assert metadata["model/rind.urdf"] == MODEL["rind.urdf"]
    assert metadata["run"] == "7d1c"


def test_what_was_flushed_is_readable_while_the_session_is_being_written(tmp_path: Path) -> None:
    calls = stream(2)
    with closing(writer(tmp_path / "a.mcap")) as out:
        for name, *arguments in calls:
            getattr(out, name)(*arguments)
        out.tick(3 * 10**9)
        read = Session(out.path)
        assert read.truncated
        assert list(read.records()) == expected(calls)
    assert not Session(out.path).truncated


def test_a_file_cut_at_any_byte_loses_at_most_its_last_chunk(tmp_path: Path) -> None:
    calls = stream(4)
    whole = written(tmp_path / "whole.mcap", calls).read_bytes()
    ends, head_end = chunk_ends(tmp_path / "whole.mcap"), chunk_starts(tmp_path / "whole.mcap")[0]
    chunks = records_by_chunk(calls)
    assert len(ends) == len(chunks)
    cut = tmp_path / "cut.mcap"
    for size in range(head_end, len(whole)):
        cut.write_bytes(whole[:size])
        read = Session(cut)
        kept = [record for end, chunk in zip(ends, chunks, strict=True) if end <= size for record in chunk]
        assert read.truncated, size
        assert list(read.records()) == kept, size


def test_a_file_cut_within_its_head_is_refused(tmp_path: Path) -> None:
    whole = written(tmp_path / "whole.mcap", stream(1)).read_bytes()
    cut = tmp_path / "cut.mcap"
    for size in range(chunk_starts(tmp_path / "whole.mcap")[0]):
        cut.write_bytes(whole[:size])
        with pytest.raises(SessionError, match=r"cut\.mcap"):
            Session(cut)


def test_a_flipped_byte_in_a_chunk_gives_the_chunks_before_it_and_then_an_error(tmp_path: Path) -> None:
    path = written(tmp_path / "whole.mcap", stream(3))
    whole = path.read_bytes()
    chunks = records_by_chunk(stream(3))
    everything = [record for chunk in chunks for record in chunk]
    flipped = tmp_path / "flipped.mcap"
    for number, (start, end) in enumerate(zip(chunk_starts(path), chunk_ends(path), strict=True)):
        before = [record for chunk in chunks[:number] for record in chunk]
        for offset in range(start, end):
            damaged = bytearray(whole)
            damaged[offset] ^= 1 << (offset % 8)
            flipped.write_bytes(damaged)
            records, error = until_damage(flipped)
            assert error is not None, offset
            assert str(flipped) in error.where
            # Bits without effect (spare ones of zstd, times in the chunk's own head) show only at the end.
            assert records in (before, everything), offset
            # The records start behind the chunk's head (MCAP specification, section Chunk).
            if records == before and offset >= start + 53:
                assert f"byte {start}" in error.where


def test_a_flipped_byte_elsewhere_never_changes_a_record(tmp_path: Path) -> None:
    path = written(tmp_path / "whole.mcap", stream(2))
    whole, starts, ends = path.read_bytes(), chunk_starts(path), chunk_ends(path)
    inside = {offset for start, end in zip(starts, ends, strict=True) for offset in range(start, end)}
    flipped = tmp_path / "flipped.mcap"
    for offset in set(range(len(whole))) - inside:
        damaged = bytearray(whole)
        damaged[offset] ^= 1 << (offset % 8)
        flipped.write_bytes(damaged)
        records, error = until_damage(flipped)
        assert records == expected(stream(2))[: len(records)]
        assert error is not None or records == expected(stream(2))


def test_a_missing_chunk_is_noticed(tmp_path: Path) -> None:
    path = written(tmp_path / "whole.mcap", stream(3))
    whole, starts = path.read_bytes(), chunk_starts(path)
    path.write_bytes(whole[: starts[1]] + whole[starts[2] :])
    records, error = until_damage(path)
    assert records == records_by_chunk(stream(3))[0]
    assert error is not None
    assert "number 1 is missing" in error.found


def test_zeros_left_by_a_power_failure_count_as_a_cut(tmp_path: Path) -> None:
    path = written(tmp_path / "a.mcap", stream(2))
    path.write_bytes(path.read_bytes()[: chunk_starts(path)[1]] + bytes(4096))
    read = Session(path)
    assert read.truncated
    assert list(read.records()) == records_by_chunk(stream(2))[0]


@pytest.mark.parametrize("content", [b"", b"\x89MCAP", b"t,q\n0,0\n", b"\x89MCAP0\r\n", bytes(500)])
def test_a_file_that_is_no_mcap_is_refused(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "a.mcap"
    path.write_bytes(content)
    with pytest.raises(SessionError, match=r"a\.mcap"):
        Session(path)


def test_a_foreign_mcap_file_is_refused_with_the_way_to_bring_it_in(tmp_path: Path) -> None:
    path = tmp_path / "foreign.mcap"
    with path.open("wb") as file:
        out = Writer(file)
        out.start()
        out.add_metadata("journey", {"place": "cellar"})
        out.finish()  # type: ignore[no-untyped-call]  # untyped in mcap
    with pytest.raises(SessionError, match="limbtell convert"):
        Session(path)


def test_a_missing_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(SessionError, match=r"nowhere\.mcap: found No such file"):
        Session(tmp_path / "nowhere.mcap")


def test_an_existing_file_is_never_overwritten(tmp_path: Path) -> None:
    path = written(tmp_path / "a.mcap", stream(1))
    before = path.read_bytes()
    with pytest.raises(SystemFault, match=r"a\.mcap: found File exists"):
        writer(path)
    assert path.read_bytes() == before


def test_more_topics_than_channels_still_come_back(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(session, "TOPIC_LIMIT", 3)
    calls: list[Call] = [("tuple", f"topic {i % 7}", b"%d" % i, i) for i in range(50)]
    path = written(tmp_path / "a.mcap", calls)
    assert list(Session(path).records()) == expected(calls)
    with path.open("rb") as file:
        summary = make_reader(file).get_summary()
    assert summary is not None
    assert len(summary.channels) == 5  # three topics, the others together, the ticks


def test_a_flood_closes_the_chunk_early(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(session, "CHUNK_BYTES", 10_000)
    calls = [call for call in stream(100) if call != ("flush",)]
    path = written(tmp_path / "a.mcap", calls)
    with path.open("rb") as file:
        sizes = [
            r.uncompressed_size for r in StreamReader(file, emit_chunks=True).records if isinstance(r, Chunk)
        ]
    assert len(sizes) > 5
    assert max(sizes) < 15_000
    assert list(Session(path).records()) == expected(calls)


@contextmanager
def no_file_above(size: int) -> Iterator[None]:
    """The system refuses writes beyond `size`, as a full disk does."""
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))


def test_a_full_disk_is_a_fault_with_the_path_and_keeps_what_was_flushed(tmp_path: Path) -> None:
    first, second = records_by_chunk(stream(2))[0], stream(1, start_s=1)
    out = writer(tmp_path / "a.mcap")
    for name, *arguments in stream(1):
        getattr(out, name)(*arguments)
    with no_file_above(out.path.stat().st_size + 100):
        for name, *arguments in second[:-1]:
            getattr(out, name)(*arguments)
        with pytest.raises(SystemFault, match=r"a\.mcap: found File too large"):
            out.flush()
    out.close()
    read = Session(out.path)
    assert read.truncated
    assert list(read.records()) == first


@settings(max_examples=300)
@given(
    damage=st.lists(
        st.tuples(st.integers(0, 3000), st.sampled_from(["set", "cut", "double"]), st.integers(0, 255)),
        min_size=1,
        max_size=4,
    )
)
def test_any_bytes_give_records_or_a_session_error(
    tmp_path_factory: pytest.TempPathFactory, damage: list[tuple[int, str, int]]
) -> None:
    """Fuzz: nothing but `SessionError` ever leaves the reader, and no record that was not written."""
    calls = stream(2)
    base = tmp_path_factory.getbasetemp()
    content = bytearray(written(base / "fuzz.mcap", calls).read_bytes())
    edit: dict[str, Callable[[int, int], None]] = {
        "set": content.__setitem__,
        "cut": lambda at, value: content.__delitem__(slice(at, at + value)),
        "double": lambda at, value: content.__setitem__(slice(at, at), content[at : at + value]),
    }
    for at, action, value in damage:
        if content:
            edit[action](at % len(content), value)
    (base / "fuzz.mcap").write_bytes(content)
    records, _ = until_damage(base / "fuzz.mcap")
    assert records == expected(calls)[: len(records)]
