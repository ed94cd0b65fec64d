"""Every sample is released once and in order, whatever the network does, and all are accounted for."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import msgpack
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.flow.align import Aligner, Released
from monitor.flow.layout import Block, Sizes, state_fields, zeros
from monitor.flow.wire import JointSample
from tests.flow.fuzz import fuzz

PERIOD, WAIT = 1_000_000, 2_000_000
COUNTS = ("duplicates", "late", "lost", "restarts")


class Arrival(NamedTuple):
    seq: int
    t_ns: int
    at_ns: int


class Bench:
    """An aligner fed as the data path feeds it: each arrival, then a tick every period."""

    def __init__(self, wait_ns: int = WAIT) -> None:
        self.counts: Block = zeros(state_fields(Sizes(1, 1, 1, 1, 1, 1, 1, 1, 1, 1)))
        self.aligner = Aligner(self.counts[0], wait_ns)
        self.released: list[Released] = []

    def arrive(self, arrival: Arrival) -> None:
        sample = JointSample(arrival.seq, arrival.t_ns, b"")
        self.released += self.aligner.arrived(sample, arrival.at_ns)

    def tick(self, now_ns: int) -> None:
        self.released += self.aligner.waited(now_ns)

    def run(self, arrivals: Sequence[Arrival]) -> Bench:
        now = 0
        for arrival in arrivals:
            while now + PERIOD <= arrival.at_ns:
                now += PERIOD
                self.tick(now)
            self.arrive(arrival)
        return self

    @property
    def seqs(self) -> list[int]:
        return [released.sample.seq for released in self.released]

    def count(self, name: str) -> int:
        return int(self.counts[0][name])


def in_order(first: int, count: int, at_ns: int = 0, t_ns: int | None = None) -> list[Arrival]:
    t_ns = 10**9 + first * PERIOD if t_ns is None else t_ns
    return [Arrival(first + k, t_ns + k * PERIOD, at_ns + k * PERIOD) for k in range(count)]


@st.composite
def networks(draw: st.DrawFn) -> tuple[int, list[Arrival]]:
    """Draw what a network makes of a stream: losses, doubles, and delays of up to six periods."""
    count, first = draw(st.integers(1, 60)), draw(st.integers(100, 10**6))
    arrivals = []
    for arrival in in_order(first, count):
        for _ in range(draw(st.sampled_from([1, 1, 1, 1, 1, 0, 2, 3]))):
            delay = draw(st.sampled_from([0, 0, 0, 0, 1, 2, 3, 4, 6]))
            arrivals.append(
                arrival._replace(at_ns=arrival.at_ns + delay * PERIOD + draw(st.integers(0, 999)))
            )
    return first, sorted(arrivals, key=lambda a: a.at_ns)


@fuzz
@given(networks(), st.integers(0, 4))
def test_samples_are_released_in_order_once_each_and_all_are_accounted_for(
    network: tuple[int, list[Arrival]], periods: int
) -> None:
    bench = Bench(periods * PERIOD).run(network[1])
    seqs = bench.seqs
    assert seqs == sorted(set(seqs))
    arrived = {arrival.seq for arrival in network[1]}
    assert set(seqs) <= arrived
    left = len(seqs) + bench.count("duplicates") + bench.count("late") + len(bench.aligner.early)
    assert left == len(network[1])
    assert bench.count("restarts") == 0
    if seqs:
        assert bench.count("lost") == seqs[-1] - seqs[0] + 1 - len(seqs)
    assert not any(released.restart for released in bench.released)
    # After a long silence nothing waits any more.
    bench.tick(10**12)
    assert not bench.aligner.early
    assert len(bench.seqs) + bench.count("duplicates") + bench.count("late") == len(network[1])
    assert bench.count("lost") == (bench.seqs[-1] - bench.seqs[0] + 1 - len(bench.seqs) if network[1] else 0)


@fuzz
@given(networks())
def test_what_arrives_within_the_wait_is_not_lost(network: tuple[int, list[Arrival]]) -> None:
    # All delays are at most six periods; nothing overtakes the sample that comes ahead of all.
    first, arrivals = network
    ahead = Arrival(first - 1, 10**9 + (first - 1) * PERIOD, 0)
    bench = Bench(8 * PERIOD).run([ahead, *arrivals])
    bench.tick(10**12)
    assert bench.seqs == sorted({arrival.seq for arrival in arrivals} | {ahead.seq})
    assert bench.count("late") == 0


@fuzz
@given(networks(), st.integers(0, 60))
def test_a_snapshot_in_the_middle_goes_on_as_if_nothing_had_been(
    network: tuple[int, list[Arrival]], cut: int
) -> None:
    whole = Bench().run(network[1])
    first, second = Bench().run(network[1][:cut]), Bench()
    second.aligner.restore(msgpack.unpackb(msgpack.packb(first.aligner.snapshot()), strict_map_key=False))
    second.counts[:] = first.counts
    # The ticks go on from where they were.
    now = network[1][:cut][-1].at_ns // PERIOD * PERIOD if cut and network[1] else 0
    for arrival in network[1][cut:]:
        while now + PERIOD <= arrival.at_ns:
            now += PERIOD
            second.tick(now)
        second.arrive(arrival)
    assert first.seqs + second.seqs == whole.seqs
    assert second.counts.tobytes() == whole.counts.tobytes()
    assert second.aligner.snapshot() == whole.aligner.snapshot()


def test_an_overtaken_sample_is_waited_for_and_put_in_its_place() -> None:
    bench = Bench()
    a, b, c, d = in_order(5, 4)
    for arrival in (a, c, d):
        bench.arrive(arrival._replace(at_ns=c.at_ns))
    assert bench.seqs == [5]
    bench.arrive(b._replace(at_ns=c.at_ns + WAIT - 1))
    assert bench.seqs == [5, 6, 7, 8]
    assert [bench.count(name) for name in COUNTS] == [0, 0, 0, 0]


def test_a_missing_sample_is_given_up_two_periods_after_it_was_overtaken_and_counted_once() -> None:
    bench = Bench()
    a, _, c, d = in_order(5, 4)
    bench.arrive(a)
    bench.arrive(c)
    bench.tick(c.at_ns + WAIT - 1)
    assert bench.seqs == [5]
    bench.tick(c.at_ns + WAIT)
    assert bench.seqs == [5, 7]
    bench.arrive(d)
    assert bench.seqs == [5, 7, 8]
    assert bench.count("lost") == 1


def test_what_comes_after_it_was_given_up_is_late_and_dropped() -> None:
    bench = Bench().run(in_order(5, 1))
    _, b, c, *_ = in_order(5, 9)
    bench.arrive(c)
    bench.tick(c.at_ns + WAIT)
    bench.arrive(b._replace(at_ns=c.at_ns + 2 * WAIT))
    assert bench.seqs == [5, 7]
    assert [bench.count(name) for name in COUNTS] == [0, 1, 1, 0]


@pytest.mark.parametrize("ran", [3, 200, 5000])
@pytest.mark.parametrize(
    ("seq", "t_ns", "pause_ns"),
    [
        (0, 0, 40_000_000),  # the controller was restarted, its clock with it, at once
        (0, 0, 20_000_000_000),  # or after a while
        (0, None, 5_000_000),  # the publisher alone: the clock goes on
        (40, 7_000_000, 2_000_000_000),
    ],
)
def test_a_robot_that_counts_from_a_new_start_is_followed_at_once(
    ran: int, seq: int, t_ns: int | None, pause_ns: int
) -> None:
    # An uptime of 50 s before we came; robot and receiver have clocks of their own.
    before = in_order(50_000, ran, t_ns=50_000_000_123)
    resumed = before[-1].at_ns + pause_ns
    t_ns = before[-1].t_ns + pause_ns if t_ns is None else t_ns
    after = in_order(seq, 300, at_ns=resumed, t_ns=t_ns)
    bench = Bench().run(before + after)
    assert bench.seqs == [a.seq for a in before + after]
    assert [released.restart for released in bench.released] == [k == ran for k in range(ran + 300)]
    assert [bench.count(name) for name in COUNTS] == [0, 0, 0, 1]


def test_a_restart_that_repeats_the_very_numbers_of_the_last_start_is_followed_after_a_second() -> None:
    # A simulated robot: seq and t_ns are the same each time it is started.
    runs = [in_order(0, 700, at_ns=begin, t_ns=0) for begin in (0, 3_000_000_000)]
    bench = Bench().run(runs[0] + runs[1])
    assert len(bench.seqs) == 1400
    assert bench.count("restarts") == 1
    assert bench.count("duplicates") == bench.count("late") == 0


def test_doubles_and_stragglers_are_not_taken_for_a_restart() -> None:
    stream = in_order(1000, 400)
    late, doubled = stream[300], stream[350]
    arrivals = [a for a in stream if a is not late]
    arrivals += [
        late._replace(at_ns=stream[-1].at_ns + PERIOD),
        doubled._replace(at_ns=stream[-1].at_ns + PERIOD),
    ]
    bench = Bench().run(arrivals)
    assert [bench.count(name) for name in COUNTS] == [1, 1, 1, 0]
    assert len(bench.seqs) == 399


def test_the_first_samples_may_come_in_any_order_without_a_restart() -> None:
    stream = in_order(1000, 10)
    arrivals = [stream[3], stream[1], stream[0], stream[2], *stream[4:]]
    bench = Bench().run([a._replace(at_ns=max(a.at_ns, stream[3].at_ns)) for a in arrivals])
    assert bench.seqs == list(range(1003, 1010))
    assert [bench.count(name) for name in COUNTS] == [0, 3, 0, 0]


def test_one_wild_number_makes_us_blind_for_a_second_at_most() -> None:
    # A second sender, or a broken one: a sample far ahead in number and in time, then the stream as before.
    stream = in_order(1000, 4000)
    for leap in (10**6, 2**62):
        wild = Arrival(stream[500].seq + leap, stream[500].t_ns + 3600 * 10**9, stream[500].at_ns + 1)
        bench = Bench().run([*stream[:501], wild, *stream[501:]])
        assert bench.seqs[-2400:] == [a.seq for a in stream[-2400:]]
        assert 0 <= bench.count("lost") <= 10**6


def test_a_new_boot_id_starts_a_new_count_and_drops_what_waits() -> None:
    bench = Bench().run(in_order(5, 3))
    bench.arrive(Arrival(20, 10**9, 4_000_000))
    bench.aligner.restart()
    bench.tick(10**10)
    bench.arrive(Arrival(12, 5, 5_000_000))
    assert bench.seqs == [5, 6, 7, 12]
    assert bench.released[-1].restart
    assert [bench.count(name) for name in COUNTS] == [0, 1, 0, 1]


def test_numbers_up_to_the_largest_can_be_counted() -> None:
    bench = Bench()
    for repeat in range(5):
        for seq in (2**63 - 2, 2**63 - 1, 0, 2**62):
            bench.arrive(Arrival(seq, repeat, repeat * 10**9))
            bench.tick(repeat * 10**9 + 10 * WAIT)
    assert 0 <= bench.count("lost") < 2**40
    state: dict[str, Any] = msgpack.unpackb(msgpack.packb(bench.aligner.snapshot()), strict_map_key=False)
    assert np.array(state["seen"]).shape[1] == 3
