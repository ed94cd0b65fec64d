"""Tuples ↔ an MCAP file: what the loop saw, in the order it saw it.

Layout of a session
-------------------
Straight after the MCAP header stands one Metadata record, `limbtell`: the resolved configuration, the model
files, the run, the offset to UTC and the versions, with a CRC over all of them (MCAP keeps none for
metadata). It stands outside any chunk and needs no index: a cut file still has it, any MCAP tool shows it.

Then come zstd chunks, closed by time. In them, one message per record, on channels of encoding `msgpack`:

- a tuple, on a channel named by its topic, payload as it came. `log_time` is UTC (`received_ns +
  utc_offset_ns`, modulo 2**64, hence exactly reversible), `publish_time` the robot's time where it is known,
  `sequence` the running number of tuples (modulo 2**32);
- `limbtell/snapshot`: the state block as msgpack bin; an empty one means a fresh start;
- `limbtell/gap`: `{lost, reason}`; the promise of exact replay ends there;
- `limbtell/stray`: `[topic, payload]` of a tuple whose topic cannot name a channel (see `TOPIC_LIMIT`);
- `limbtell/ticks`, the last message of every chunk: the ticks of this chunk as `{dt_ns, records}`, two arrays
  of raw little-endian int64. `dt_ns` holds the first tick's time, then differences; `records` the number of
  records between a tick and the one before it (for the first: since the chunk began). Differences, because
  they are nearly constant and compress to almost nothing. Its `sequence` is the running number of the chunk,
  so a missing chunk is noticed.

Channels that are not tuples carry the metadata key `kind`; topics alone could not tell them apart, for a
sender may use any topic.
"""

from __future__ import annotations

import contextlib
import os
import struct
import zlib
from array import array
from collections.abc import Iterator, Mapping
from io import BytesIO
from itertools import islice
from pathlib import Path
from typing import BinaryIO

import msgpack
import numpy as np
import zstandard
from mcap.data_stream import ReadDataStream
from mcap.exceptions import McapError
from mcap.opcode import Opcode
from mcap.records import Channel, Metadata
from mcap.writer import MCAP0_MAGIC, Writer

from monitor.errors import SessionError, SystemFault

TUPLE, TICK, SNAPSHOT, GAP = range(4)
_STRAY = 4

Record = tuple[int, str, bytes, int]
"""(kind, topic, payload, time_ns); ticks have neither topic nor payload, snapshots and gaps no topic."""

UTC_UNKNOWN_NS = 2**63 - 1
"""As `utc_uncertainty_ns`: this recording knows nothing of UTC."""

TOPIC_LIMIT = 1000
"""Topics that get a channel of their own; the network must not exhaust MCAP's 65535 channel numbers."""

CHUNK_BYTES = 8 * 2**20
"""A chunk is closed early at this much payload, so that a flood costs no memory."""

CHUNK_LIMIT_BYTES = 2**30
"""No chunk larger than this is unpacked; a damaged length must not ask for all the memory there is."""

FORMAT = "1"
_HEAD = "limbtell"
_KINDS = {"tick": TICK, "snapshot": SNAPSHOT, "gap": GAP, "stray": _STRAY}
_TOPICS = {
    TICK: "limbtell/ticks",
    SNAPSHOT: "limbtell/snapshot",
    GAP: "limbtell/gap",
    _STRAY: "limbtell/stray",
}
_NAMES = {kind: name for name, kind in _KINDS.items()}
_U64 = 2**64 - 1
_I63 = 2**63

_RECORD = struct.Struct("<BQ")  # opcode, length
_MESSAGE = struct.Struct("<BQHIQQ")  # opcode, length, channel, sequence, log_time, publish_time
_CHUNK = struct.Struct("<QQQII")  # first time, last time, size unpacked, CRC unpacked, length of compression
_LENGTH = struct.Struct("<Q")
_FOOTER_BYTES = _RECORD.size + 20

# All that the parsers raise on bytes which are not what was written.
_DAMAGE = (ValueError, KeyError, struct.error, zstandard.ZstdError, McapError)


class SessionWriter:
    """Writes one session; the caller tells it the time and when to flush.

    A flush hands the chunk to the operating system, `close` also waits for the disk. What was flushed stays
    readable whatever happens to the process.

    Parameters
    ----------
    path : Path
        File to create; an existing one is never overwritten.
    config_toml : str
        The resolved configuration.
    model : mapping of str to str
        Text of each model file, by name.
    run : str
        Id of the daemon's start.
    utc_offset_ns, utc_uncertainty_ns : int
        UTC minus our monotonic clock, and how wrong that may be (`UTC_UNKNOWN_NS`: not known at all).
    versions : mapping of str to str
        Versions of what wrote the session, and notes about it.

    Raises
    ------
    SystemFault
        The file cannot be created or written; it is closed then. What was flushed before stays readable.
    """

    def __init__(
        self,
        path: Path,
        *,
        config_toml: str,
        model: Mapping[str, str],
        run: str,
        utc_offset_ns: int,
        utc_uncertainty_ns: int,
        versions: Mapping[str, str],
    ) -> None:
        self.path = path
        self._offset_ns = utc_offset_ns
        self._channels: dict[tuple[int, str], int] = {}
        self._tuples = 0
        self._chunks = 0
        self._begin_chunk()
        head = {
            "format": FORMAT,
            "run": run,
            "utc_offset_ns": str(utc_offset_ns),
            "utc_uncertainty_ns": str(utc_uncertainty_ns),
            "config.toml": config_toml,
            **{f"model/{name}": text for name, text in model.items()},
            **{f"version/{name}": text for name, text in versions.items()},
        }
        try:
            self._file = path.open("xb")
        except OSError as error:
            raise self._fault(error) from error
        with self._faults():
            # Chunks are closed by flush alone: their ticks must be in them.
            self._writer = Writer(self._file, chunk_size=2**62, enable_data_crcs=True)
            self._writer.start()
            self._writer.add_metadata(_HEAD, head | {"crc32": _head_crc(head)})
            self._file.flush()

    def snapshot(self, state: bytes, tick_ns: int) -> None:
        """Write the state after the tick of `tick_ns`: a replay may start here. Empty: a fresh start."""
        self._record(SNAPSHOT, "", msgpack.packb(state), tick_ns, tick_ns + self._offset_ns)

    def tuple(self, topic: str, payload: bytes, received_ns: int, stamp_ns: int | None = None) -> None:
        """Write a tuple as it came; `stamp_ns` is the robot's time of it, where known."""
        kind = TUPLE
        if (TUPLE, topic) not in self._channels and not self._may_name_channel(topic):
            kind, payload = _STRAY, msgpack.packb([topic, payload], unicode_errors="surrogatepass")
        publish_ns = received_ns + self._offset_ns if stamp_ns is None else stamp_ns
        self._record(kind, topic, payload, received_ns, publish_ns, self._tuples)
        self._tuples += 1

    def tick(self, tick_ns: int) -> None:
        """Write that the loop ticked, after everything written so far."""
        self._tick_ns.append(tick_ns)
        self._tick_records.append(self._records)

    def gap(self, lost: int, tick_ns: int, reason: str) -> None:
        """Write that `lost` tuples could not be recorded: the promise of exact replay ends here."""
        self._record(
            GAP, "", msgpack.packb({"lost": lost, "reason": reason}), tick_ns, tick_ns + self._offset_ns
        )

    def flush(self) -> None:
        """Close the chunk in progress and hand it to the operating system."""
        if not self._records and not self._tick_ns:
            return
        time_ns = self._tick_ns[-1] if self._tick_ns else self._last_ns
        ticks = {"dt_ns": _differences(self._tick_ns), "records": _differences(self._tick_records)}
        log_ns = time_ns + self._offset_ns
        self._message(TICK, "", msgpack.packb(ticks), log_ns, log_ns, self._chunks)
        with self._faults():
            self._writer.flush()  # type: ignore[no-untyped-call]  # untyped in mcap
        self._chunks += 1
        self._begin_chunk()

    def close(self) -> None:
        """Close the chunk, write the index, wait for the disk. Does nothing when closed, or after a fault."""
        if self._file.closed:
            return
        self.flush()
        with self._faults(), self._file:
            self._writer.finish()  # type: ignore[no-untyped-call]  # untyped in mcap
            self._file.flush()
            os.fsync(self._file.fileno())

    @property
    def is_empty(self) -> bool:
        """Whether no chunk was closed yet: then nothing in the file can be replayed."""
        return self._chunks == 0

    def _begin_chunk(self) -> None:
        self._records = 0
        self._bytes = 0
        self._last_ns = 0
        self._tick_ns = array("q")
        self._tick_records = array("q")

    def _may_name_channel(self, topic: str) -> bool:
        try:
            topic.encode()
        except UnicodeEncodeError:
            return False
        return len(self._channels) < TOPIC_LIMIT

    def _record(
        self, kind: int, topic: str, payload: bytes, time_ns: int, publish_ns: int, sequence: int = 0
    ) -> None:
        self._message(kind, topic, payload, time_ns + self._offset_ns, publish_ns, sequence)
        self._records += 1
        self._last_ns = time_ns
        self._bytes += len(payload) + _MESSAGE.size
        if self._bytes > CHUNK_BYTES:
            self.flush()

    def _message(
        self, kind: int, topic: str, payload: bytes, log_ns: int, publish_ns: int, sequence: int
    ) -> None:
        key = (kind, topic if kind == TUPLE else "")
        channel = self._channels.get(key)
        if channel is None:
            metadata = {} if kind == TUPLE else {"kind": _NAMES[kind]}
            channel = self._writer.register_channel(_TOPICS.get(kind, topic), "msgpack", 0, metadata)
            self._channels[key] = channel
        self._writer.add_message(channel, log_ns & _U64, payload, publish_ns & _U64, sequence & 0xFFFFFFFF)

    @contextlib.contextmanager
    def _faults(self) -> Iterator[None]:
        """Name the file in what the system refuses, and release it: bytes after half a chunk only harm."""
        try:
            yield
        except OSError as error:
            with contextlib.suppress(OSError):
                self._file.close()
            raise self._fault(error) from error

    def _fault(self, error: OSError) -> SystemFault:
        return SystemFault(
            str(self.path),
            error.strerror or str(error),
            "a new file that can be written",
            "Free the disk, or choose another name or folder.",
        )


class Session:
    """A recording, opened for reading.

    Parameters
    ----------
    path : Path

    Attributes
    ----------
    path : Path
    config_toml, run : str
    model, versions : dict of str to str
    utc_offset_ns, utc_uncertainty_ns : int
    truncated : bool
        The file was not closed: cut, or still being written. At most its last chunk is missing.

    Raises
    ------
    SessionError
        Not an MCAP file, or not a session of ours, or its head is damaged.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        with self._open() as file:
            head = self._head(file)
            self.truncated = not _is_closed(file)
        try:
            self.config_toml = head["config.toml"]
            self.run = head["run"]
            self.utc_offset_ns = int(head["utc_offset_ns"])
            self.utc_uncertainty_ns = int(head["utc_uncertainty_ns"])
        except (KeyError, ValueError) as error:
            raise self._foreign(f"an incomplete head ({error})") from error
        self.model = _under("model/", head)
        self.versions = _under("version/", head)

    def records(self) -> Iterator[Record]:
        """Everything the writer was given, in that order.

        The payload of a gap is read with `gap_of`.

        Raises
        ------
        SessionError
            At a damaged chunk, named by its offset in the file; the chunks before it were given by then. Or
            at the end, where damage elsewhere (an index, a skipped chunk) shows in the CRC over all.
        """
        # Not through the library's StreamReader: at a cut it raises whatever its parser stumbles over, it
        # tells no offsets, and a damaged length makes it ask for that much memory. It also costs 2.8 µs a
        # tuple for its message objects alone; this costs 1.1 µs with ticks merged (7 joints, 1 kHz, 1 core).
        channels: dict[int, tuple[int, str]] = {}
        chunks = offset = 0
        with self._open() as file:
            for offset, opcode, body in self._walk(file):
                if opcode == Opcode.CHUNK:
                    try:
                        records = _records_of(_unpack(body), channels, self.utc_offset_ns, chunks)
                    except _DAMAGE as error:
                        raise self._damage(offset, f"a damaged chunk ({error})") from error
                    yield from records
                    chunks += 1
                elif opcode == Opcode.DATA_END:
                    return
        if not self.truncated:
            raise self._damage(offset, "the end of the file", "further records")

    def _open(self) -> BinaryIO:
        try:
            return self.path.open("rb")
        except OSError as error:
            raise SessionError(str(self.path), error.strerror or str(error), "a readable file") from error

    def _head(self, file: BinaryIO) -> dict[str, str]:
        if file.read(len(MCAP0_MAGIC)) != MCAP0_MAGIC:
            raise SessionError(str(self.path), "other leading bytes", "an MCAP file")
        first_two = list(islice(self._walk(file), 2))
        if [opcode for _, opcode, _ in first_two] != [Opcode.HEADER, Opcode.METADATA]:
            raise self._foreign("none of ours, or one cut before its first chunk")
        try:
            metadata = Metadata.read(ReadDataStream(BytesIO(first_two[1][2])))
        except (struct.error, UnicodeDecodeError, McapError) as error:
            raise self._foreign(f"a damaged head ({error})") from error
        head: dict[str, str] = metadata.metadata
        if metadata.name != _HEAD:
            raise self._foreign(f"metadata {metadata.name!r}")
        if head.pop("crc32", "") != _head_crc(head):
            raise self._foreign("a damaged head (its CRC differs)")
        if head.get("format") != FORMAT:
            raise self._foreign(f"session format {head.get('format')}")
        return head

    def _foreign(self, found: str) -> SessionError:
        return SessionError(
            str(self.path),
            found,
            f"a limbtell session of format {FORMAT}",
            "Bring other recordings in with `limbtell convert`.",
        )

    def _damage(self, offset: int, found: str, expected: str = "the bytes that were written") -> SessionError:
        return SessionError(
            f"{self.path}, byte {offset}", found, expected, "What lies before it can still be used."
        )

    def _walk(self, file: BinaryIO) -> Iterator[tuple[int, int, bytes]]:
        """Offset, opcode and body of each record outside chunks, up to the first that is not whole."""
        size = os.fstat(file.fileno()).st_size
        file.seek(0)
        crc = zlib.crc32(file.read(len(MCAP0_MAGIC)))
        offset = len(MCAP0_MAGIC)
        while offset + _RECORD.size <= size:
            head = file.read(_RECORD.size)
            opcode, length = _RECORD.unpack(head)
            body = file.read(min(length, size))
            if opcode == Opcode.CHUNK and not _agrees(length, body):
                # Without this, a damaged length would pass for the end of a cut file.
                raise self._damage(offset, "a damaged chunk (its lengths disagree)")
            # Opcode 0 is none: space the file system set aside before the power failed.
            if len(body) < length or opcode == 0:
                return
            if opcode == Opcode.DATA_END and body != crc.to_bytes(4, "little"):
                raise self._damage(offset, "a CRC over the file which differs")
            yield offset, opcode, body
            crc = zlib.crc32(body, zlib.crc32(head, crc))
            offset += _RECORD.size + length


def gap_of(payload: bytes) -> tuple[int, str]:
    """How many tuples were lost, and why, from the payload of a gap record."""
    gap = msgpack.unpackb(payload)
    return gap["lost"], gap["reason"]


def _head_crc(head: Mapping[str, str]) -> str:
    return f"{zlib.crc32(msgpack.packb(sorted(head.items()))):08x}"


def _under(prefix: str, head: Mapping[str, str]) -> dict[str, str]:
    return {key.removeprefix(prefix): text for key, text in head.items() if key.startswith(prefix)}


def _is_closed(file: BinaryIO) -> bool:
    """Whether the file ends in a whole footer and the closing magic."""
    size = os.fstat(file.fileno()).st_size
    tail = _FOOTER_BYTES + len(MCAP0_MAGIC)
    if size < tail:
        return False
    file.seek(size - tail)
    end: bytes = file.read()
    return end[0] == int(Opcode.FOOTER) and end.endswith(MCAP0_MAGIC)


def _agrees(length: int, body: bytes) -> bool:
    """Whether the three lengths of a chunk agree, as far as they can be seen in a cut one."""
    if len(body) < _CHUNK.size:
        return True
    name_length: int = _CHUNK.unpack_from(body)[-1]
    at = _CHUNK.size + name_length
    if len(body) < at + _LENGTH.size:
        return name_length <= len("zstd")
    packed: int = _LENGTH.unpack_from(body, at)[0]
    return at + _LENGTH.size + packed == length


def _unpack(body: bytes) -> bytes:
    """Records of a chunk, unpacked and checked; ValueError or ZstdError if damaged."""
    _, _, size, crc, name_length = _CHUNK.unpack_from(body)
    at = _CHUNK.size + name_length
    compression, packed = body[_CHUNK.size : at], body[at + _LENGTH.size :]
    if compression != b"zstd":
        raise ValueError(f"compression {compression!r}")
    if not size == zstandard.frame_content_size(packed) <= CHUNK_LIMIT_BYTES:
        raise ValueError("sizes disagree")
    data = zstandard.decompress(packed)
    if zlib.crc32(data) != crc:
        raise ValueError("its CRC differs")
    return data


def _records_of(
    data: bytes, channels: dict[int, tuple[int, str]], utc_offset_ns: int, number: int
) -> Iterator[Record]:
    """Records of chunk `number` with its ticks merged in; `channels` is added to.

    Everything is checked before the first record is given: a chunk counts as a whole or not at all.
    """
    records: list[Record] = []
    ticks: tuple[int, bytes] | None = None
    unpack, append = _MESSAGE.unpack_from, records.append
    # Adding before and taking off after the mask brings times back as signed numbers.
    shift_ns = utc_offset_ns - _I63
    at, end = 0, len(data)
    while at < end:
        opcode, length = _RECORD.unpack_from(data, at)
        following = at + _RECORD.size + length
        if following > end:
            raise ValueError("a record reaches beyond it")
        if opcode == Opcode.MESSAGE:
            _, _, channel, sequence, log_ns, _ = unpack(data, at)
            payload = data[at + _MESSAGE.size : following]
            time_ns = ((log_ns - shift_ns) & _U64) - _I63
            kind, topic = channels[channel]
            if kind == TUPLE:
                append((TUPLE, topic, payload, time_ns))
            elif kind == TICK:
                ticks = (sequence, payload)
            elif kind == SNAPSHOT:
                append((SNAPSHOT, "", msgpack.unpackb(payload), time_ns))
            elif kind == GAP:
                append((GAP, "", payload, time_ns))
            else:
                stray_topic, stray = msgpack.unpackb(payload, unicode_errors="surrogatepass")
                append((TUPLE, stray_topic, stray, time_ns))
        elif opcode == Opcode.CHANNEL:
            entry = Channel.read(ReadDataStream(BytesIO(data[at + _RECORD.size : following])))
            name = entry.metadata.get("kind")
            channels[entry.id] = (TUPLE, entry.topic) if name is None else (_KINDS[name], "")
        at = following
    if ticks is None:
        raise ValueError("it has no ticks")
    if ticks[0] != number & 0xFFFFFFFF:
        raise ValueError(f"it is number {ticks[0]}, and number {number} is missing")
    return _merged(records, *_ticks_of(ticks[1], len(records)))


def _merged(records: list[Record], tick_ns: list[int], tick_records: list[int]) -> Iterator[Record]:
    given = 0
    for time_ns, count in zip(tick_ns, tick_records, strict=True):
        if count > given:
            yield from records[given:count]
            given = count
        yield TICK, "", b"", time_ns
    yield from records[given:]


def _differences(values: array[int]) -> bytes:
    """Raw little-endian int64: the first value, then differences (modulo 2**64, hence exactly reversible)."""
    return np.diff(np.array(values, dtype="<i8"), prepend=np.int64(0)).astype("<i8").tobytes()


def _ticks_of(payload: bytes, records: int) -> tuple[list[int], list[int]]:
    """Tick times, and the number of records before each; ValueError if they cannot be."""
    ticks = msgpack.unpackb(payload)
    tick_ns, steps = (np.frombuffer(ticks[key], dtype="<i8") for key in ("dt_ns", "records"))
    if tick_ns.size != steps.size or (steps < 0).any() or steps.sum() > records:
        raise ValueError("its ticks do not fit its records")
    return np.cumsum(tick_ns).tolist(), np.cumsum(steps).tolist()
