"""The loop alone, with a clock and sockets that do as they are told."""

from __future__ import annotations

import gc
from bisect import bisect_left
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from typing import Any

import msgpack
import pytest

from monitor.flow.layout import LATENESS_EDGES_S, loop_fields, zeros
from monitor.loop import Loop
from monitor.setup.build import Setup
from monitor.setup.config import Config
from tests.replay.rind import MS, clean

PERIOD_NS = MS
Message = tuple[str, bytes]


class Clock:
    """Takes the place of the module `time`: it stands still unless someone sleeps or works."""

    def __init__(self) -> None:
        self.now_ns = 5_000_000_000
        self.oversleep_ns: Iterator[int] = iter(())

    def monotonic_ns(self) -> int:
        return self.now_ns

    def time_ns(self) -> int:
        return self.now_ns + 10**18

    def sleep(self, seconds: float) -> None:
        self.now_ns += round(seconds * 1e9) + next(self.oversleep_ns, 0)


class Source:
    """An input socket; each message may cost time."""

    def __init__(self, clock: Clock, messages: list[Message], cost_ns: Callable[[], int] = lambda: 0) -> None:
        self._clock, self._waiting, self._cost_ns = clock, deque(messages), cost_ns

    def receive(self) -> Message | None:
        self._clock.now_ns += self._cost_ns()
        return self._waiting.popleft() if self._waiting else None


class Out:
    """An output socket."""

    def __init__(self) -> None:
        self.sent: list[Message] = []

    def send(self, topic: str, payload: bytes) -> bool:
        self.sent.append((topic, payload))
        return True


class Feed:
    """A recorder's feed that keeps everything, and once says that it lost something."""

    dropped = 0

    def __init__(self, loses_at: int = -1) -> None:
        self.records: list[Any] = []
        self._loses_at = loses_at

    def record(self, topic: str, payload: bytes, received_ns: int) -> None:
        self.records.append((topic, payload))

    def tick(self, tick_ns: int) -> bool:
        self.records.append(tick_ns)
        return sum(type(record) is int for record in self.records) == self._loses_at

    def snapshot(self, state: bytes, tick_ns: int, utc_offset_ns: int, utc_uncertainty_ns: int) -> None:
        self.records.append("snapshot")


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> Iterator[Clock]:
    clock = Clock()
    monkeypatch.setattr("monitor.loop.time", clock)
    yield clock
    gc.unfreeze()


class Run:
    """A loop that ticks so many times.

    Attributes
    ----------
    loop : np.void
        What it counted of itself.
    state : np.void
        The data path's.
    """

    def __init__(
        self,
        setup: Setup,
        clock: Clock,
        ticks: int,
        messages: Sequence[Message] = (),
        control: Sequence[Message] = (),
        cost_ns: Callable[[], int] = lambda: 0,
        feed: Feed | None = None,
        config: Config | None = None,
    ) -> None:
        figures, blocks = zeros(loop_fields()), setup.blocks()
        self.out = Out()
        self.loop, self.state = figures[0], blocks.state[0]
        loop = Loop(
            setup.pipeline("run", blocks),
            config or setup.config,
            Source(clock, list(messages), cost_ns),
            Source(clock, list(control)),
            self.out,
            feed,
            figures,
        )
        loop.run(lambda: self.loop["ticks"] == ticks)


def stream(count: int) -> list[Message]:
    return [(p.topic, p.payload) for p in clean(count)]


def test_a_tick_takes_in_no_more_messages_than_it_may_and_the_rest_later(
    rind_setup: Setup, clock: Clock
) -> None:
    cap = rind_setup.config.input.messages_per_tick
    messages = stream(3 * cap + 5)[: 3 * cap + 5]
    feed = Feed()
    run = Run(rind_setup, clock, 6, messages, feed=feed)
    taken, counts = 0, []
    for record in feed.records:
        if type(record) is int:
            counts.append(taken)
            taken = 0
        elif record[0] in ("joints", "robot"):
            taken += 1
    assert counts == [cap, cap, cap, 5, 0, 0]
    assert run.loop["messages"] == len(messages)
    assert run.loop["full_ticks"] == 3
    assert run.state["received"] == sum(topic == "joints" for topic, _ in messages)


@pytest.mark.parametrize(("cost_periods", "overruns"), [(0.4, 0), (0.99, 0), (1.5, 1), (2.5, 2), (7.2, 7)])
def test_deadlines_that_pass_while_a_tick_is_busy_are_counted_and_no_later_tick_is_shifted(
    rind_setup: Setup, clock: Clock, cost_periods: float, overruns: int
) -> None:
    costs = iter([0, 0, round(cost_periods * PERIOD_NS)])
    feed = Feed()
    run = Run(rind_setup, clock, 10, cost_ns=lambda: next(costs, 0), feed=feed)
    assert run.loop["overruns"] == overruns
    begun = [record for record in feed.records if type(record) is int]
    # One tick makes up for all that were missed; the next ones are on the old grid.
    grid = [(at - begun[0]) / PERIOD_NS for at in begun]
    late = max(3.0, 2.0 + cost_periods)
    assert grid[:4] == pytest.approx([0.0, 1.0, 2.0, late])
    following = 2 + max(1, overruns) + 1
    assert grid[4:] == [following + k for k in range(6)]


def test_lateness_is_counted_for_every_tick(rind_setup: Setup, clock: Clock) -> None:
    late_ns = [0, 49_999, 50_000, 50_001, 120_000, 400_000, 7_000, 600_000]
    clock.oversleep_ns = iter(late_ns)
    run = Run(rind_setup, clock, len(late_ns))
    expected = [0] * (len(LATENESS_EDGES_S) + 1)
    for late in late_ns:
        expected[bisect_left(LATENESS_EDGES_S, late / 1e9)] += 1
    assert run.loop["lateness"].tolist() == expected
    assert run.loop["lateness"].sum() == run.loop["ticks"] == len(late_ns)
    assert run.loop["lateness_sum_ns"] == sum(late_ns)
    assert run.loop["lateness_max_ns"] == max(late_ns)


def test_busy_time_is_what_the_ticks_took(rind_setup: Setup, clock: Clock) -> None:
    run = Run(rind_setup, clock, 20, cost_ns=lambda: 100_000)
    assert run.loop["busy_ns"] == 20 * 100_000


def test_nothing_compiles_after_the_start(rind_setup: Setup, clock: Clock) -> None:
    # Two seconds, so that the figures of the loop are brought up to date.
    run = Run(rind_setup, clock, 2001, stream(500))
    assert run.state["stepped"] == 500
    assert run.loop["late_compilations"] == 0


def test_the_record_begins_with_the_state_before_the_first_tick(rind_setup: Setup, clock: Clock) -> None:
    feed = Feed()
    told = msgpack.packb({"failed": "desk", "text": "gone"})
    Run(rind_setup, clock, 2, stream(3), [("host", told)], feed=feed)
    kinds = [r if type(r) is not tuple else r[0] for r in feed.records]
    assert kinds[0] == "snapshot"
    assert kinds.index("host") < kinds.index("joints")
    assert feed.records[1] == ("host", told)


def test_a_snapshot_follows_where_the_recorder_lost_something(rind_setup: Setup, clock: Clock) -> None:
    feed = Feed(loses_at=3)
    Run(rind_setup, clock, 6, feed=feed)
    kinds = ["tick" if type(r) is int else r if type(r) is str else r[0] for r in feed.records]
    third = [i for i, kind in enumerate(kinds) if kind == "tick"][2]
    assert kinds[third + 1] == "snapshot"
    assert kinds.count("snapshot") == 2


@pytest.mark.parametrize("publish", [True, False])
def test_alarms_are_sent_where_the_configuration_says_so_and_health_in_any_case(
    rind_setup: Setup, clock: Clock, publish: bool
) -> None:
    alarms = rind_setup.config.alarms.model_copy(update={"publish": publish})
    config = rind_setup.config.model_copy(update={"alarms": alarms})
    told = [("host", msgpack.packb({"failed": "desk", "text": "gone"}))]
    run = Run(rind_setup, clock, 5, control=told, config=config)
    topics = {topic for topic, _ in run.out.sent}
    assert topics == ({"alarm", "health"} if publish else {"health"})
    assert run.loop["published"] == len(run.out.sent)
    assert gc.isenabled()
