"""The black box: the loop's own tuples, ticks and snapshots, written to sessions by a process of its own.

The loop hands over batches on a local socket and never waits; what does not fit is dropped and counted, and
the next batch says how much. The recorder begins a session at a snapshot, so that each replays alone.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from typing import Any

import msgpack
import zmq

from monitor.errors import SystemFault, WireError
from monitor.flow import wire
from monitor.session import SessionWriter
from monitor.setup.config import Config

_BATCH_NS = 20_000_000
_BATCH_RECORDS = 200
_RETRY_S = 10.0
_OWN_FILES = "????????T??????Z-????????-*.mcap"


class RecordFeed:
    """The loop's end: collects records and sends them in batches.

    A batch is `[lost, records]`; a record is a tick time, `[topic, payload, received_ns]`, or
    `[snapshot, tick_ns, utc_offset_ns, utc_uncertainty_ns]`.
    """

    def __init__(self, context: zmq.Context[zmq.Socket[bytes]], address: str, config: Config) -> None:
        self._socket = context.socket(zmq.PUSH)
        self._socket.set(zmq.SNDHWM, queued_batches(config))
        self._socket.set(zmq.LINGER, 500)
        self._socket.set(zmq.IMMEDIATE, 1)
        self._socket.connect(address)
        self._records: list[Any] = []
        self._sent_ns = 0
        self._lost = 0
        self.dropped = 0

    def record(self, topic: str, payload: bytes, received_ns: int) -> None:
        """Hand over one tuple."""
        self._records.append((topic, payload, received_ns))

    def tick(self, tick_ns: int) -> bool:
        """Hand over one tick; True when records were lost and a snapshot has to follow."""
        self._records.append(tick_ns)
        self._sent_ns = self._sent_ns or tick_ns  # leaves the socket a moment to connect
        if tick_ns - self._sent_ns >= _BATCH_NS or len(self._records) >= _BATCH_RECORDS:
            self._sent_ns = tick_ns
            return self._flush()
        return False

    def snapshot(self, state: bytes, tick_ns: int, utc_offset_ns: int, utc_uncertainty_ns: int) -> None:
        """Hand over a snapshot: a replay may start after it."""
        self._records.append((state, tick_ns, utc_offset_ns, utc_uncertainty_ns))

    def _flush(self) -> bool:
        records, self._records = self._records, []
        try:
            self._socket.send(msgpack.packb((self._lost, records)), zmq.NOBLOCK)
        except zmq.Again:
            self._lost += len(records)
            self.dropped += len(records)
            return False
        lost, self._lost = self._lost, 0
        return lost > 0

    def close(self) -> None:
        """Send what is left and close."""
        self._flush()
        self._socket.close()


def queued_batches(config: Config) -> int:
    """Return how many batches hold `record.queue` records."""
    records = (config.input.rate_hz + config.watch.loop_hz) * _BATCH_NS * 1e-9
    return max(2, round(config.record.queue / min(records, _BATCH_RECORDS)))


class Recorder:
    """The recorder's end: batches in, session files out.

    Parameters
    ----------
    config : Config
        Folder, times and limits are in `[record]`.
    run : str
        Id of the daemon's start.
    versions : dict
        Versions written into each session.
    tell : callable
        Takes a message for the data path's topic `host` (failures, recoveries).
    """

    def __init__(
        self, config: Config, run: str, versions: dict[str, str], tell: Callable[[dict[str, Any]], None]
    ) -> None:
        self._config, self._run, self._versions, self._tell = config, run, versions, tell
        self._writer: SessionWriter | None = None
        self._path: Path | None = None
        self._begun_s = 0.0
        self._flushed_s = 0.0
        self._failed_s: float | None = None
        self._number = 0

    def batch(self, payload: bytes) -> None:
        """Write one batch of the loop; a failure of the disk is told once and tried again later."""
        lost, records = msgpack.unpackb(payload)
        try:
            if lost and self._writer is not None:
                self._writer.gap(lost, _time_of(records), "the recorder did not keep up")
            for record in records:
                self._record(record)
            self._flush_by_time()
        except SystemFault as fault:
            self._fail(fault)

    def _record(self, record: Any) -> None:
        if type(record) is int:
            if self._writer is not None:
                self._writer.tick(record)
        elif type(record[0]) is bytes:
            self._snapshot(*record)
        elif self._writer is not None:
            topic, payload, received_ns = record
            self._writer.tuple(topic, payload, received_ns, _robot_time(topic, payload))

    def _snapshot(self, state: bytes, tick_ns: int, offset_ns: int, uncertainty_ns: int) -> None:
        now_s = time.monotonic()
        if self._writer is not None and now_s - self._begun_s > self._config.record.max_session_s:
            self._end()
        if self._writer is None:
            if self._failed_s is not None and now_s - self._failed_s < _RETRY_S:
                return
            self._begin(tick_ns, offset_ns, uncertainty_ns)
        assert self._writer is not None
        self._writer.snapshot(state, tick_ns)

    def _begin(self, tick_ns: int, offset_ns: int, uncertainty_ns: int) -> None:
        folder = self._config.record_folder
        try:
            folder.mkdir(parents=True, exist_ok=True)
            self._make_room(folder)
            start = time.strftime("%Y%m%dT%H%M%SZ", time.gmtime((tick_ns + offset_ns) / 1e9))
            self._path = self._free_name(folder, f"{start}-{self._run[:8]}")
        except OSError as error:
            raise SystemFault(str(folder), error.strerror or str(error), "a folder for sessions") from error
        self._begun_s = self._flushed_s = time.monotonic()
        self._writer = SessionWriter(
            self._path,
            config_toml=self._config.source_toml,
            model=self._config.model_files(),
            run=self._run,
            utc_offset_ns=offset_ns,
            utc_uncertainty_ns=uncertainty_ns,
            versions=self._versions,
        )

    def _free_name(self, folder: Path, begin: str) -> Path:
        # The second alone does not do: clocks are set back.
        while True:
            self._number += 1
            path = folder / f"{begin}-{self._number}.mcap"
            if not path.exists():
                return path

    def _make_room(self, folder: Path) -> None:
        """Remove the oldest of our own sessions beyond the limit; what else lies there is left alone."""
        sessions = sorted(folder.glob(_OWN_FILES), key=lambda path: path.stat().st_mtime)
        excess = sum(path.stat().st_size for path in sessions) - self._config.record.keep_gib * 2**30
        for path in sessions:
            if excess <= 0:
                return
            excess -= path.stat().st_size
            path.unlink()

    def _flush_by_time(self) -> None:
        now_s = time.monotonic()
        if self._writer is not None and now_s - self._flushed_s >= self._config.record.flush_s:
            self._writer.flush()
            self._flushed_s = now_s
            # Not before: on a full disk a file can still be begun.
            if self._failed_s is not None:
                self._failed_s = None
                self._tell({"recovered": "recorder"})

    def _fail(self, fault: SystemFault) -> None:
        if self._path is not None and (self._writer is None or self._writer.is_empty):
            # Nothing to replay is in it; a full disk must not fill with such files.
            with suppress(OSError):
                self._path.unlink()
        self._writer = self._path = None
        first = self._failed_s is None
        self._failed_s = time.monotonic()
        if first:
            self._tell({"failed": "recorder", "text": str(fault)})

    def _end(self) -> None:
        if self._writer is not None:
            writer, self._writer, self._path = self._writer, None, None
            writer.close()

    def close(self) -> None:
        """Close the session on the disk."""
        try:
            self._end()
        except SystemFault as fault:
            self._fail(fault)


def _robot_time(topic: str, payload: bytes) -> int | None:
    """Return the robot's time of a joint sample where it has one."""
    if topic != "joints":
        return None
    try:
        t_ns = wire.unpack(payload, topic).get("t_ns")
    except WireError:
        return None
    return t_ns if type(t_ns) is int and t_ns >= 0 else None


def _time_of(records: list[Any]) -> int:
    """Return the first tick time in a batch."""
    return next((record for record in records if type(record) is int), 0)
