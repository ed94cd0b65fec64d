"""Decides what late, doubled and missing mean, so that every sample is stepped once, in the robot's order.

Samples are released in order of `seq`. A missing one is waited for, at most a set time after the first sample
that overtook it arrived; then it is lost. What comes later than that is dropped. All of it is counted. The
only times used are the receive times and tick times handed in, so that replay decides the same.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any, NamedTuple

from monitor.flow.layout import Block
from monitor.flow.wire import JointSample

# What was released is remembered for so many samples and so long, to tell late or doubled from a restart.
_MEMORY = 1024
_MEMORY_NS = 1_000_000_000
# Before the oldest one remembered, so far back a sample may still be late; further back a new count began.
_REACH = 64
# A leap this far ahead is no loss but another count.
_LEAP = 1 << 32


class Released(NamedTuple):
    """A sample whose turn has come; `restart` says that the robot began to count anew."""

    sample: JointSample
    restart: bool


class Aligner:
    """Puts joint samples in the robot's order.

    Parameters
    ----------
    counts : Block
        The `state` block, whose counters `duplicates`, `late`, `lost`, `restarts` are kept here.
    wait_ns : int
        Longest wait for a missing sample.
    """

    def __init__(self, counts: Block, wait_ns: int) -> None:
        self._counts = counts
        self._wait_ns = wait_ns
        self._next: int | None = None  # seq whose turn it is; None: whatever comes first
        # (seq, t_ns, receive time) of the last released samples, at the place seq modulo the memory's length
        self._seen: list[tuple[int, int, int] | None] = [None] * _MEMORY
        self.early: dict[int, tuple[JointSample, int]] = {}  # overtook a missing one; with receive time
        self._restart = False

    def restart(self) -> None:
        """Forget the numbering: the robot said that it was powered up anew."""
        self._counts["restarts"] += 1
        self._forget()

    def _forget(self) -> None:
        self._counts["late"] += len(self.early)
        self._next = None
        self._seen = [None] * _MEMORY
        self.early.clear()
        self._restart = True

    def follows(self, sample: JointSample, received_ns: int) -> bool:
        """Release a sample that simply is the next; False for any other, which has to go to `arrived`."""
        seq, t_ns, _ = sample
        if seq != self._next or self.early or self._restart:
            return False
        self._next = seq + 1
        self._seen[seq % _MEMORY] = (seq, t_ns, received_ns)
        return True

    def arrived(self, sample: JointSample, received_ns: int) -> Iterator[Released]:
        """Yield the samples whose turn has come now that this one arrived."""
        if self._next is not None and not self._next <= sample.seq < self._next + _LEAP:
            if not self._is_restart(sample, received_ns):
                return
            self._counts["restarts"] += 1
            self._forget()
        if self._next is None or sample.seq == self._next:
            yield self._release(sample, received_ns)
            yield from self._in_turn()
        elif sample.seq in self.early:
            self._counts["duplicates"] += 1
        else:
            self.early[sample.seq] = (sample, received_ns)
            yield from self.waited(received_ns)

    def waited(self, now_ns: int) -> Iterator[Released]:
        """Yield what needs wait no longer, because the missing ones took too long."""
        while self.early and now_ns - min(at for _, at in self.early.values()) >= self._wait_ns:
            first = min(self.early)
            assert self._next is not None
            self._counts["lost"] += first - self._next
            self._next = first
            yield from self._in_turn()

    def _in_turn(self) -> Iterator[Released]:
        while self.early and self._next in self.early:
            yield self._release(*self.early.pop(self._next))

    def _release(self, sample: JointSample, received_ns: int) -> Released:
        restart, self._restart = self._restart, False
        self._next = sample.seq + 1
        self._seen[sample.seq % _MEMORY] = (sample.seq, sample.t_ns, received_ns)
        return Released(sample, restart)

    def _is_restart(self, sample: JointSample, received_ns: int) -> bool:
        """Count a sample out of turn as doubled or late; True when it belongs to a new count.

        It is doubled when we just stepped this `seq` with this time, late when its time fits between those of
        its neighbours. Otherwise the robot counts from a new start (publisher or power), whatever its clock
        does. To take a late one for a restart costs a pause, the other way round would leave us blind.
        """
        seen = [one for one in self._seen if one is not None]
        recent = {seq: t for seq, t, at in seen if received_ns - at <= _MEMORY_NS}
        if sample.seq in recent:
            doubled = recent[sample.seq] == sample.t_ns
            self._counts["duplicates"] += doubled
            return not doubled
        before = [t for seq, t in recent.items() if seq < sample.seq]
        after = [t for seq, t in recent.items() if seq > sample.seq]
        near = bool(before) or sample.seq >= min(recent, default=sample.seq) - _REACH
        if near and after and max(before, default=-1) < sample.t_ns < min(after):
            self._counts["late"] += 1
            return False
        return True

    def snapshot(self) -> dict[str, Any]:
        """Return what is needed to go on elsewhere; plain values."""
        return {
            "next": self._next,
            "seen": [one for one in self._seen if one is not None],
            "early": [[s.seq, s.t_ns, s.body, at] for s, at in self.early.values()],
            "restart": self._restart,
        }

    def restore(self, saved: dict[str, Any]) -> None:
        """Go on from a snapshot."""
        self._next = saved["next"]
        self._seen = [None] * _MEMORY
        for seq, t_ns, at in saved["seen"]:
            self._seen[seq % _MEMORY] = (seq, t_ns, at)
        self.early = {seq: (JointSample(seq, t_ns, body), at) for seq, t_ns, body, at in saved["early"]}
        self._restart = saved["restart"]
