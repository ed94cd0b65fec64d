"""Processes of the daemon die or hang, and the others go on."""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Iterator
from itertools import count, pairwise

import pytest

from tests.daemon.conftest import Start
from tests.daemon.running import Daemon, Listener, Process, Speaker, conversation, replayed, wait_until
from tests.replay.rind import MS, WATCH, Packet, clean, condition, samples

RETURNED = "returned-to-normal-unacknowledged"
RECORD = {"record.snapshot_s": 0.5, "record.flush_s": 0.1}


def workers(daemon: Daemon) -> list[Process]:
    """Wait until loop, recorder, desk and standby run, and return them."""
    found: list[Process] = wait_until(lambda: len(w := daemon.workers()) == 4 and w, "four processes")
    return found


def wait_for_take_over(daemon: Daemon, number: int) -> None:
    wait_until(lambda: daemon.said.count("took over") == number, "the standby takes over")


def stream(speaker: Speaker, numbers: Iterator[int], count: int = 100) -> None:
    """Send a stretch of an undisturbed stream that never repeats a `seq`; nothing happens in it."""
    packets = []
    for i in range(count):
        seq = next(numbers)
        body = samples()[0] | {"seq": seq, "t_ns": (40_000 + seq) * MS}
        if i == 0:
            packets.append(Packet(0, "robot", condition()))
        packets.append(Packet(i * MS, "joints", body))
    speaker.play((p.at_ns, p.topic, p.payload) for p in packets)


def received(listener: Listener) -> int:
    count: int = listener.health()["counts"]["received"]
    return count


def check_numbers_go_on(listener: Listener) -> None:
    """No number repeats or is left out, though messages of the moment of death may not have been sent."""
    for topic in ("alarm", "health"):
        numbers = listener.numbers(topic)
        assert all(0 < after - before <= 2 for before, after in pairwise(numbers)), numbers


@pytest.mark.parametrize(
    ("blow", "why"),
    [(signal.SIGKILL, "the loop died"), (signal.SIGSTOP, "the loop hung")],
    ids=["died", "hung"],
)
def test_the_standby_takes_over_from_a_loop_that(start: Start, blow: signal.Signals, why: str) -> None:
    daemon = start(RECORD, WATCH)
    with conversation(daemon) as (speaker, listener):
        numbers = count()
        stream(speaker, numbers)
        loop, recorder, desk, standby = workers(daemon)
        os.kill(loop.pid, blow)
        wait_for_take_over(daemon, 1)
        alarm = listener.alarm("system", "loop")
        assert alarm["verdict"] == "system"
        assert why in alarm["text"]
        listener.alarm("system", "loop", RETURNED)

        # It sees the robot again, and feels the pushes.
        speaker.play((p.at_ns, p.topic, p.payload) for p in clean())
        pushed = listener.alarm("unexplained-torque", "not-yet-weighed", since=alarm["seq"])
        assert pushed["event"] > alarm["event"]
        check_numbers_go_on(listener)
        after = {p.pid for p in daemon.workers()}
        assert loop.pid not in after
        assert {recorder.pid, desk.pid, standby.pid} < after
        assert daemon.metrics()["limbtell_late_compilations_total"] == 0.0
        assert daemon.stop() == 0
        live = listener.hear()
    daemon.check_nothing_is_left()

    # One session holds both loops: exact on either side of the death.
    (path,) = daemon.sessions()
    replay, messages = replayed(path)
    assert len(replay.gaps) == 1
    first = next(i for i, message in enumerate(messages) if message == live[0])
    assert messages[first:] == live


def test_a_daemon_that_was_suspended_as_a_whole_goes_on_with_the_same_loop(start: Start) -> None:
    daemon = start()
    with conversation(daemon) as (speaker, listener):
        before = workers(daemon)
        os.killpg(daemon.process.pid, signal.SIGSTOP)
        time.sleep(2.5)  # longer than a loop may hang
        os.killpg(daemon.process.pid, signal.SIGCONT)
        stream(speaker, count())
        assert received(listener) == 100
        assert [p.pid for p in workers(daemon)] == [p.pid for p in before]
        assert daemon.metrics()["limbtell_tick_overruns_total"] >= 2000.0
        assert daemon.stop() == 0
    assert "took over" not in daemon.said


def test_a_daemon_whose_loop_dies_again_and_again_gives_up(start: Start) -> None:
    daemon = start()
    with conversation(daemon):
        _, recorder, desk, _ = workers(daemon)
        for death in range(1, 6):
            loop, _standby = (p for p in workers(daemon) if p.pid not in (recorder.pid, desk.pid))
            os.kill(loop.pid, signal.SIGKILL)
            if death < 5:
                wait_for_take_over(daemon, death)
        assert daemon.wait() == 3
    assert "5th time within a minute" in daemon.said
    assert daemon.complaints == ""
    daemon.check_nothing_is_left()


def test_a_standby_that_died_is_replaced(start: Start) -> None:
    daemon = start().ready()
    *_, standby = workers(daemon)
    os.kill(standby.pid, signal.SIGKILL)
    wait_until(lambda: standby.pid not in {p.pid for p in workers(daemon)}, "another standby")
    assert daemon.stop() == 0


def is_serving(daemon: Daemon) -> bool:
    try:
        return "limbtell_ticks_total" in daemon.metrics()
    except OSError:
        return False


def test_the_loop_goes_on_without_recorder_and_desk(start: Start) -> None:
    daemon = start(RECORD, WATCH)
    with conversation(daemon) as (speaker, listener):
        numbers = count()
        stream(speaker, numbers)
        assert received(listener) == 100
        loop, recorder, desk, _ = workers(daemon)
        for helper in (recorder, desk):
            os.kill(helper.pid, signal.SIGKILL)
        stream(speaker, numbers)
        for name in ("recorder", "desk"):
            raised = listener.alarm("system", name)
            assert "died" in raised["text"]
            stream(speaker, numbers)
            listener.alarm("system", name, RETURNED)
        wait_until(lambda: is_serving(daemon), "metrics are served again")
        stream(speaker, numbers)
        assert received(listener) == next(numbers)
        assert daemon.metrics()["limbtell_samples_received_total"] == next(numbers) - 1
        assert workers(daemon)[0].pid == loop.pid
        assert listener.health()["counts"]["lost"] == 0
        wait_until(lambda: len(daemon.sessions()) == 2, "a new session")
        assert daemon.stop() == 0
        live = listener.hear()

    before, after = daemon.sessions()
    replay, messages = replayed(before)
    assert replay.session.truncated
    assert replay.gaps == []
    assert set(messages[1:]) <= set(live)
    replay, messages = replayed(after)
    assert not replay.session.truncated
    assert replay.gaps == []
    assert messages == live[len(live) - len(messages) :]
