"""A short run of the simulated arm as tuples, the mess a network makes of it, and a live side in-process."""

from __future__ import annotations

import random
from collections.abc import Callable, Iterable, Mapping, Sequence
from functools import cache
from pathlib import Path
from types import MappingProxyType
from typing import Any, NamedTuple

import msgpack

from monitor.flow.pipeline import Message, Pipeline
from monitor.session import SessionWriter
from monitor.setup.build import Setup, build
from monitor.setup.config import load
from monitor.setup.template import write_config
from replay.simulate import DATASHEET, SERIAL, URDF, Push, Rind, Schedule

MS = 1_000_000
BEGIN_NS = 500 * 1000 * MS  # receiver's clock
OFFSET_NS = 1_700_000_000_000_000_000
SAMPLES = 800
RUN = "3b0e4f5a-1111-5222-8333-444455556666"
# Times short enough that alarms of every kind come and go within a second.
WATCH = {"quiet_s": 0.04, "settle_s": 0.01, "start_settle_s": 0.03, "stream_stale_s": 0.03}
PUSHES = (
    Push(0.10, 0.12, "sleeve", (60.0, 180.0, 0.0), (0.04, 0.0, 0.19)),
    Push(0.45, 0.12, "paddle", (0.0, -80.0, 40.0), (0.12, 0.0, 0.042)),
)


class Packet(NamedTuple):
    """A message on its way: when it arrives [ns since the begin], topic, and its body or the bytes of it."""

    at_ns: int
    topic: str
    body: dict[str, Any] | bytes

    @property
    def payload(self) -> bytes:
        packed: bytes = self.body if isinstance(self.body, bytes) else msgpack.packb(self.body)
        return packed


def write_rind(folder: Path, watch: Mapping[str, float] = MappingProxyType({})) -> Path:
    """Write the arm's configuration, with some keys of `[watch]` set, and return its path."""
    text = write_config(URDF, "fixed", DATASHEET, folder).replace('serial = ""', f'serial = "{SERIAL}"')
    lines = text.splitlines()
    for key, value in watch.items():
        (at,) = (i for i, line in enumerate(lines) if line.startswith(f"{key} = "))
        lines[at] = f"{key} = {value}"
    path = folder / "rind.toml"
    path.write_text("\n".join(lines), encoding="utf-8")
    return path


@cache
def quick_setup(folder: Path) -> Setup:
    """Return the arm with the short times of `WATCH`."""
    return build(load(write_rind(folder, WATCH)))


@cache
def samples() -> tuple[dict[str, Any], ...]:
    """Return the bodies of the `joints` messages, one each millisecond, with both pushes in them."""
    rind = Rind(1, Schedule(pushes=PUSHES), start_ns=40_000 * MS)
    rows = (rind.step() for _ in range(SAMPLES))
    return tuple(
        {"v": 1, "seq": seq, "t_ns": row.t_ns}
        | {name: getattr(row, name).astype("<f8").tobytes() for name in ("q", "qd", "tau")}
        for seq, row in enumerate(rows)
    )


def condition(**changes: Any) -> dict[str, Any]:
    """Return a `robot` message of the arm at work, with changes; `...` leaves a key out."""
    body = {
        "serial": SERIAL, "boot": "a", "mode": "work", "drive": [1] * 7, "brake": [0] * 7, "stop": None,
        "tool": "paddle", "payload": None, "support": "ground",
    }  # fmt: skip
    return {key: value for key, value in (body | changes).items() if value != ...}


def clean(count: int = SAMPLES) -> list[Packet]:
    """Return the undisturbed stream: a sample each millisecond and the condition every 200."""
    packets = []
    for i, body in enumerate(samples()[:count]):
        if i % 200 == 0:
            packets.append(Packet(i * MS, "robot", condition()))
        packets.append(Packet(i * MS, "joints", body))
    return packets


class Live:
    """The live side: packets in, ticks each millisecond, everything recorded as the daemon does.

    Attributes
    ----------
    sent : list of Message
        What was sent.
    marks : list of int
        For each snapshot, how many messages had been sent by then.
    """

    def __init__(self, setup: Setup, path: Path) -> None:
        config = setup.config
        self._setup = setup
        self.pipeline: Pipeline = setup.pipeline(RUN)
        self.writer = SessionWriter(
            path,
            config_toml=config.source_toml,
            model=config.model_files(),
            run=RUN,
            utc_offset_ns=OFFSET_NS,
            utc_uncertainty_ns=1000,
            versions={},
        )
        self.sent: list[Message] = []
        self.marks: list[int] = []

    def snapshot(self, tick_ns: int) -> None:
        self.writer.snapshot(self.pipeline.snapshot(), tick_ns)
        self.marks.append(len(self.sent))

    def run(
        self,
        packets: Sequence[Packet],
        snapshots: Iterable[int] = (),
        jitter: int = 0,
        before: Callable[[int], None] = lambda tick: None,
    ) -> Live:
        """Feed all packets; a snapshot after each of the named ticks, and at once; close the session.

        `before` is called with the number of each tick.
        """
        rng = random.Random(jitter)
        self.snapshot(BEGIN_NS)
        waiting = sorted(packets, key=lambda packet: packet.at_ns)
        ticks = waiting[-1].at_ns // MS + 60
        wanted, at = set(snapshots), 0
        for tick in range(1, ticks):
            before(tick)
            tick_ns = BEGIN_NS + tick * MS + rng.randrange(0, MS // 2) * bool(jitter)
            while at < len(waiting) and BEGIN_NS + waiting[at].at_ns < tick_ns:
                topic, payload = waiting[at].topic, waiting[at].payload
                received_ns = BEGIN_NS + waiting[at].at_ns
                self.writer.tuple(topic, payload, received_ns)
                self.pipeline.feed(topic, payload, received_ns)
                at += 1
            self.sent += self.pipeline.tick(tick_ns)
            self.writer.tick(tick_ns)
            if tick in wanted:
                self.snapshot(tick_ns)
            if tick % 100 == 0:
                self.writer.flush()
        self.writer.close()
        return self


def wire(messages: Iterable[Message]) -> list[tuple[str, bytes]]:
    """Return what stands on the wire."""
    return [(message.topic, message.payload) for message in messages]
