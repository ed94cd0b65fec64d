"""The clock: ticks at a fixed rate against absolute deadlines, lateness and overruns counted.

A tick takes in what has arrived (at most so many messages), hands it to the data path, and sends what comes
out. Nothing in it waits. Time is read here and nowhere below.
"""

from __future__ import annotations

import ctypes
import gc
import os
import time
from bisect import bisect_left
from collections.abc import Callable
from typing import Protocol

from monitor.flow import wire
from monitor.flow.layout import LATENESS_EDGES_S, Block, Right
from monitor.flow.pipeline import Pipeline
from monitor.flow.step import step
from monitor.kernels.jit import compiled_versions
from monitor.setup.config import Config, RealtimeConfig

_EDGES_NS = [round(1e9 * edge) for edge in LATENESS_EDGES_S]
_SECOND_NS = 1_000_000_000
_MCL_CURRENT, _MCL_FUTURE = 1, 2
# Garbage is collected every so many ticks, when at most this share of the period is spent.
_COLLECT_EVERY = 50
_SLACK = 0.5


class Receive(Protocol):
    """The input socket."""

    def receive(self) -> tuple[str, bytes] | None:
        """Return the next message, or None."""


class Send(Protocol):
    """The output socket."""

    def send(self, topic: str, payload: bytes) -> bool:
        """Send a message; False when it was dropped."""


class Record(Protocol):
    """The feed of the recorder."""

    dropped: int

    def record(self, topic: str, payload: bytes, received_ns: int) -> None:
        """Hand over a tuple."""

    def tick(self, tick_ns: int) -> bool:
        """Hand over a tick; True when a snapshot has to follow."""

    def snapshot(self, state: bytes, tick_ns: int, utc_offset_ns: int, utc_uncertainty_ns: int) -> None:
        """Hand over a snapshot."""


class Loop:
    """The realtime loop around one pipeline.

    Parameters
    ----------
    pipeline : Pipeline
        The data path, warm.
    config : Config
        Rates and limits.
    robot, control : Receive
        Sockets for the robot's messages and for what the daemon's other processes say.
    out : Send
        Socket for alarms, verdicts, health.
    recorder : Record, optional
        Feed of the recorder.
    figures : Block
        The `loop` block, shared with the desk.
    """

    def __init__(
        self,
        pipeline: Pipeline,
        config: Config,
        robot: Receive,
        control: Receive,
        out: Send,
        recorder: Record | None,
        figures: Block,
    ) -> None:
        self._pipeline, self._robot, self._control, self._out = pipeline, robot, control, out
        self._recorder = recorder
        self._figures = figures[0]
        # What counts in every tick goes by position: by name, a structured array is ten times slower.
        self._cells = memoryview(figures.view("i8").data)
        self._at = {name: place // 8 for name, (_, place, *_) in (figures.dtype.fields or {}).items()}
        self._every_tick = tuple(self._at[name] for name in ("messages", "ticks", "tick_ns"))
        self._period_ns = round(1e9 / config.watch.loop_hz)
        self._cap = config.input.messages_per_tick
        self._publish = config.alarms.publish
        self._snapshot_ns = round(1e9 * config.record.snapshot_s)
        self._compiled = compiled_versions(step)

    def run(self, stop: Callable[[], bool]) -> None:
        """Tick until `stop()` says so. Ticks that an overrun swallowed are left out and counted."""
        f, ticks = self._figures, self._at["ticks"]
        f["pid"], f["started_ns"] = os.getpid(), time.monotonic_ns()
        gc.collect()
        gc.freeze()
        gc.disable()
        self._read_utc()
        # Before the first tick, so that a replay begins with it too.
        self._snapshot(time.monotonic_ns())
        next_second = time.monotonic_ns()
        next_snapshot = next_second + self._snapshot_ns
        deadline = time.monotonic_ns() + self._period_ns
        while not stop():
            now = time.monotonic_ns()
            if now < deadline:
                time.sleep((deadline - now) * 1e-9)
                now = time.monotonic_ns()
            self._count_lateness(now - deadline)
            if now >= next_second:
                next_second += _SECOND_NS
                self._second(now)
            wanted = self._tick(now)
            if now >= next_snapshot or wanted:
                next_snapshot = now + self._snapshot_ns
                self._snapshot(now)
            ended = time.monotonic_ns()
            self._add("busy_ns", ended - now)
            if self._cells[ticks] % _COLLECT_EVERY == 0 and ended - deadline < _SLACK * self._period_ns:
                gc.collect(1)
            missed = max(0, ended - deadline) // self._period_ns
            if missed:
                f["overruns"] += missed
            # One tick begins late at once; deadlines before that one are left out.
            deadline += self._period_ns * max(1, missed)
        gc.enable()

    def _add(self, name: str, amount: int) -> None:
        self._cells[self._at[name]] += amount

    def _tick(self, tick_ns: int) -> bool:
        """Take in, step, send; True when the recorder wants a snapshot."""
        feed, receive, recorder = self._pipeline.feed, self._robot.receive, self._recorder
        taken = 0
        while taken < self._cap:
            message = receive()
            if message is None:
                break
            taken += 1
            topic, payload = message
            now = time.monotonic_ns()
            if recorder is not None:
                recorder.record(topic, payload, now)
            feed(topic, payload, now)
        else:
            self._add("full_ticks", 1)
        out = self._pipeline.tick(tick_ns)
        cells, (messages, ticks, heartbeat) = self._cells, self._every_tick
        cells[messages] += taken
        cells[ticks] += 1
        cells[heartbeat] = tick_ns
        wanted = recorder is not None and recorder.tick(tick_ns)
        for topic, payload, _ in out:
            if self._publish or topic == "health":
                sent = self._out.send(topic, payload)
                self._add("published" if sent else "publish_dropped", 1)
        return wanted

    def _second(self, now: int) -> None:
        """Once a second: what the other processes say, the clock's offset, our own figures, into the path."""
        while (message := self._control.receive()) is not None:
            self._host(message[1])
        self._read_utc()
        f = self._figures
        f["late_compilations"] = compiled_versions(step) - self._compiled
        f["record_dropped"] = self._recorder.dropped if self._recorder is not None else 0
        names = ("ticks", "overruns", "lateness_max_ns", "full_ticks", "publish_dropped", "record_dropped")
        figures = {name: int(f[name]) for name in (*names, "late_compilations")}
        self._host(
            wire.pack(
                {
                    "loop": figures,
                    "utc_offset_ns": int(f["utc_offset_ns"]),
                    "utc_uncertainty_ns": int(f["utc_uncertainty_ns"]),
                }
            )
        )

    def _read_utc(self) -> None:
        before = time.monotonic_ns()
        utc = time.time_ns()
        after = time.monotonic_ns()
        f = self._figures
        f["utc_offset_ns"], f["utc_uncertainty_ns"] = utc - (before + after) // 2, (after - before + 1) // 2

    def _host(self, payload: bytes) -> None:
        now = time.monotonic_ns()
        self._pipeline.feed("host", payload, now)
        if self._recorder is not None:
            self._recorder.record("host", payload, now)

    def _snapshot(self, now: int) -> None:
        if self._recorder is not None:
            f = self._figures
            state = self._pipeline.snapshot()
            self._recorder.snapshot(state, now, int(f["utc_offset_ns"]), int(f["utc_uncertainty_ns"]))

    def _count_lateness(self, late_ns: int) -> None:
        self._cells[self._at["lateness"] + bisect_left(_EDGES_NS, late_ns)] += 1
        self._add("lateness_sum_ns", max(0, late_ns))
        worst = self._at["lateness_max_ns"]
        self._cells[worst] = max(self._cells[worst], late_ns)


def ask_rights(realtime: RealtimeConfig, figures: Block) -> list[str]:
    """Ask the machine for the rights of `[realtime]`; return what was granted or refused, in words."""
    f = figures[0]
    said: list[str] = []
    if realtime.cpu:
        f["right_cpu"] = _ask(
            said, f"processors {list(realtime.cpu)}", lambda: os.sched_setaffinity(0, realtime.cpu)
        )
    if realtime.priority:
        parameter = os.sched_param(realtime.priority)
        f["right_priority"] = _ask(
            said,
            f"realtime priority {realtime.priority}",
            lambda: os.sched_setscheduler(0, os.SCHED_FIFO, parameter),
        )
    if realtime.lock_memory:
        f["right_memory"] = _ask(said, "locked memory", _lock_memory)
    return said


def _ask(said: list[str], what: str, ask: Callable[[], None]) -> Right:
    try:
        ask()
    except (OSError, ValueError) as error:
        said.append(f"{what}: refused ({error})")
        return Right.REFUSED
    said.append(f"{what}: granted")
    return Right.GRANTED


def _lock_memory() -> None:
    libc = ctypes.CDLL(None, use_errno=True)
    if libc.mlockall(_MCL_CURRENT | _MCL_FUTURE) != 0:
        code = ctypes.get_errno()
        raise OSError(code, os.strerror(code))
