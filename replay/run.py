"""A session through the data path again: the messages that the live loop sent, byte for byte.

A snapshot holds the state after a tick. The replay begins at the first one, or a later one of choice; an
empty one is a fresh start. At every snapshot after that it compares its own state with the recorded one, so
that a recording proves its own replay. After a gap, and where the states differ, exact replay ends and goes
on from the recorded state; both are kept in `Replay.gaps`.

With another configuration the recorded states mean nothing: the replay starts afresh and takes gaps as the
robot's silence.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import suppress
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from monitor.errors import SessionError
from monitor.flow.pipeline import Message, Pipeline
from monitor.session import GAP, SNAPSHOT, TICK, TUPLE, Session, gap_of
from monitor.setup.build import build
from monitor.setup.config import Config, loads

COUNTERS = (
    "received", "stepped", "lost", "late", "duplicates", "refused", "wire_errors", "restarts", "rebased",
    "bad", "at_limit",
)  # fmt: skip
"""Fields of the `state` block that count samples."""

DIFFERENT = "the recorded state is another: the loop was started anew, or on a machine that rounds otherwise"


@dataclass
class Gap:
    """Where exact replay ended; times in seconds since the session's begin."""

    at_s: float
    lost: int  # records the recorder did not get
    reason: str
    skipped: int = 0  # tuples that were recorded, but before there was a state to go on from
    resumed_s: float | None = None  # None: no snapshot followed


class Replay:
    """Replays a session when iterated, once.

    Parameters
    ----------
    session : Session
        Carries its own configuration and model.
    config : Config, optional
        Another configuration to replay with.
    start : int
        Number of the snapshot to begin at, from 0.

    Attributes
    ----------
    setup : Setup
        The configuration made ready.
    pipeline : Pipeline or None
        The data path, as it is after the last message; None where there is no state to go on from.
    gaps : list of Gap
        Where exact replay ended.
    begun : bool
        Whether the snapshot to begin at was reached.
    confirmed : int
        Snapshots met on the way that hold exactly the state of the replay.
    begin_ns, start_ns, end_ns : int
        Time of the first record of the session, of the snapshot it was begun at, and of the last record.

    Raises
    ------
    ConfigError, ModelError
        The configuration is refused.
    """

    def __init__(self, session: Session, config: Config | None = None, start: int = 0) -> None:
        self.session, self.start = session, start
        self.own = config is None
        self.setup = build(config or loads(session.config_toml, str(session.path), session.model))
        self.pipeline: Pipeline | None = None
        self.gaps: list[Gap] = []
        self.begun = False
        self.confirmed = 0
        self.begin_ns = self.start_ns = self.end_ns = 0
        self._snapshots = 0
        self._tick_ns = 0
        self._counted = _counters(self.setup.pipeline(session.run), 0)
        self._before = self._counted

    def __iter__(self) -> Iterator[Message]:
        """Yield the messages of each tick.

        Raises
        ------
        SessionError
            The session is damaged, which shows where the damage is reached; or it has no snapshot to begin
            at, or one this version cannot go on from.
        """
        for kind, topic, payload, time_ns in self.session.records():
            self.end_ns = time_ns
            if kind == TUPLE:
                if self.pipeline is not None:
                    self.pipeline.feed(topic, payload, time_ns)
                elif self.gaps:
                    self.gaps[-1].skipped += 1
            elif kind == TICK:
                if self.pipeline is not None:
                    self._tick_ns = time_ns
                    yield from self.pipeline.tick(time_ns)
            elif kind == SNAPSHOT:
                self._snapshot(payload, time_ns)
            elif kind == GAP:
                self._gap(payload, time_ns)
        if not self.begun:
            raise SessionError(
                str(self.session.path),
                f"{self._snapshots} snapshots",
                f"at least {self.start + 1} to begin at",
            )

    @property
    def counters(self) -> dict[str, NDArray[np.int64]]:
        """How far each of `COUNTERS`, and `coverage_ns`, counted here; skipped stretches do not count."""
        if self.pipeline is None:
            return self._counted
        now = _counters(self.pipeline, self._tick_ns)
        return {name: self._counted[name] + now[name] - self._before[name] for name in now}

    def _snapshot(self, state: bytes, time_ns: int) -> None:
        number, self._snapshots = self._snapshots, self._snapshots + 1
        if number == 0:
            self.begin_ns = time_ns
        if number < self.start:
            return
        if number == self.start:
            self.start_ns = time_ns
            self._go_on(state, time_ns)
        elif not self.own:
            return
        elif self.pipeline is None:
            self._go_on(state, time_ns)
            for gap in self.gaps:
                gap.resumed_s = gap.resumed_s or self._since_begin(time_ns)
        elif self.pipeline.snapshot() == state:
            self.confirmed += 1
        else:
            at_s = self._since_begin(time_ns)
            self.gaps.append(Gap(at_s, 0, DIFFERENT, resumed_s=at_s))
            self._go_on(state, time_ns)

    def _go_on(self, state: bytes, time_ns: int) -> None:
        """Go on from a recorded state, or afresh if it is empty or of another configuration."""
        pipeline = self.setup.pipeline(self.session.run)
        try:
            pipeline.restore(state if self.own else b"")
        except ValueError as error:
            raise SessionError(
                f"{self.session.path}, snapshot at {self._since_begin(time_ns):.3f} s",
                str(error),
                "a state this version can go on from",
                "Use the version that recorded it, or start afresh with --config.",
            ) from error
        self._counted = self.counters
        self.pipeline, self.begun = pipeline, True
        self._tick_ns = time_ns
        self._before = _counters(pipeline, time_ns)

    def _gap(self, payload: bytes, time_ns: int) -> None:
        if not self.begun:
            return
        gap = Gap(self._since_begin(time_ns), *gap_of(payload))
        self.gaps.append(gap)
        if self.own:
            self._counted = self.counters
            self.pipeline = None
        else:
            gap.resumed_s = gap.at_s

    def _since_begin(self, time_ns: int) -> float:
        return (time_ns - self.begin_ns) / 1e9


def snapshot_times(session: Session) -> list[int]:
    """Return the receiver's time [ns] of every snapshot, in order; a damaged session shows those before."""
    times: list[int] = []
    with suppress(SessionError):
        for kind, _, _, time_ns in session.records():
            if kind == SNAPSHOT:
                times.append(time_ns)
    return times


def _counters(pipeline: Pipeline, now_ns: int) -> dict[str, NDArray[np.int64]]:
    state = pipeline.blocks.state[0]
    counters = {name: np.array(state[name], dtype=np.int64) for name in COUNTERS}
    return counters | {"coverage_ns": pipeline.coverage_ns(now_ns)}
