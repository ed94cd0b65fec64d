"""Realtime rights: each is granted or refused, said so, and counted so; the kernel is the judge."""

from __future__ import annotations

import os
from pathlib import Path

from tests.daemon.conftest import Start
from tests.daemon.running import conversation


def test_each_right_that_is_asked_for_is_said_to_be_granted_or_refused(start: Start) -> None:
    asked = {"realtime.priority": 20, "realtime.cpu": [0], "realtime.lock_memory": True}
    daemon = start(asked)
    with conversation(daemon):
        loop = daemon.workers()[0].pid
        status = Path(f"/proc/{loop}/status").read_text()
        (locked,) = (int(line.split()[1]) for line in status.splitlines() if line.startswith("VmLck:"))
        has = {
            "realtime priority 20": os.sched_getscheduler(loop) == os.SCHED_FIFO
            and os.sched_getparam(loop).sched_priority == 20,
            "processors [0]": os.sched_getaffinity(loop) == {0},
            "locked memory": locked > 0,
        }
        lines = [line for line in daemon.said.splitlines() if line.startswith("rights: ")]
        assert len(lines) == len(has)
        metrics = daemon.metrics()
        for (what, granted), right in zip(has.items(), ("priority", "cpu", "memory"), strict=True):
            (line,) = (line for line in lines if what in line)
            answer, other = ("granted", "refused") if granted else ("refused", "granted")
            assert f"{what}: {answer}" in line
            assert metrics[f'limbtell_right{{answer="{answer}",right="{right}"}}'] == 1.0
            assert metrics[f'limbtell_right{{answer="{other}",right="{right}"}}'] == 0.0
        assert daemon.stop() == 0
