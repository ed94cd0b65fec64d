"""The daemon stops in order, closes its session, and leaves neither processes nor files behind."""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Callable

import pytest

from monitor.session import Session
from tests.daemon.conftest import Start
from tests.daemon.running import Daemon, conversation, replayed, wait_until
from tests.replay.rind import clean


def to_the_parent(daemon: Daemon, number: int) -> None:
    os.kill(daemon.process.pid, number)


def to_all(daemon: Daemon, number: int) -> None:
    os.killpg(daemon.process.pid, number)


@pytest.mark.parametrize(
    ("send", "number"),
    [(to_the_parent, signal.SIGTERM), (to_all, signal.SIGTERM), (to_all, signal.SIGINT)],
    ids=["SIGTERM", "SIGTERM to all", "Ctrl-C"],
)
def test_a_signal_to_stop_closes_the_session_and_leaves_nothing_behind(
    start: Start, send: Callable[[Daemon, int], None], number: int
) -> None:
    daemon = start()
    with conversation(daemon) as (speaker, listener):
        speaker.play((p.at_ns, p.topic, p.payload) for p in clean(300))
        wait_until(lambda: listener.health()["counts"]["received"] == 300, "all has come")
        send(daemon, number)
        assert daemon.wait() == 0
        live = listener.hear()
    daemon.check_nothing_is_left()
    assert daemon.complaints == ""
    (path,) = daemon.sessions()
    assert not Session(path).truncated
    replay, messages = replayed(path)
    assert replay.counters["stepped"] == 300
    assert messages[-1] == live[-1]


@pytest.mark.parametrize("after_s", [0.1, 1.0])
def test_ctrl_c_is_heeded_while_the_daemon_starts(start: Start, after_s: float) -> None:
    daemon = start()
    wait_until(lambda: daemon.run_folders, "it begins")
    # Moments of a start, which takes some seconds; where they fall in it does not matter.
    time.sleep(after_s)
    to_all(daemon, signal.SIGINT)
    assert daemon.wait() == 0
    daemon.check_nothing_is_left()
    assert daemon.complaints == ""


def test_all_processes_end_when_the_parent_is_killed(start: Start) -> None:
    daemon = start().ready()
    wait_until(lambda: len(daemon.workers()) == 4 and daemon.sessions(), "all processes are at work")
    daemon.process.kill()
    daemon.wait()
    wait_until(lambda: not daemon.members(), "all processes end")
    assert "Traceback" not in daemon.complaints
    (path,) = daemon.sessions()
    assert not Session(path).truncated
