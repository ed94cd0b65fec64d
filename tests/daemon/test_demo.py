"""`limbtell demo`, as a user runs it, without a terminal."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest

from monitor.session import TUPLE, Session
from tests.daemon.running import processes, wait_until

LIMBTELL = Path(sys.executable).with_name("limbtell")


@pytest.fixture
def demo(tmp_path: Path, short_folder: Path) -> Iterator[subprocess.Popen[str]]:
    """The demo on its way, in a session of its own; whatever still runs at the end is ended."""
    process = subprocess.Popen(
        [LIMBTELL, "demo", "--seconds", "12", "--json"],
        cwd=tmp_path,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env={**os.environ, "TMPDIR": str(short_folder)},
        start_new_session=True,
    )
    yield process
    with process:
        process.kill()
    for left in ours(short_folder):
        os.kill(left, signal.SIGKILL)


def ours(temporary: Path) -> list[int]:
    """Return processes of the demo and its daemon: those with this folder for temporary files."""
    found = []
    for process in processes():
        try:
            environment = Path(f"/proc/{process.pid}/environ").read_bytes()
        except OSError:
            continue
        if f"TMPDIR={temporary}".encode() in environment.split(b"\0"):
            found.append(process.pid)
    return found


def review(session: Path, out: Path) -> list[dict[str, Any]]:
    """Return all alarms of a session by `limbtell review`."""
    subprocess.run([LIMBTELL, "review", session, "--out", out], check=True, capture_output=True, timeout=60)
    return [json.loads(line) for line in (out / "alarms.jsonl").read_text().splitlines()]


def line(session: Path) -> tuple[float, int, int]:
    """Return the longest silence [s] between samples of a session, and how many were missing and doubled."""
    got = [
        (at_ns, msgpack.unpackb(payload)["seq"])
        for kind, name, payload, at_ns in Session(session).records()
        if (kind, name) == (TUPLE, "joints")
    ]
    received_ns, seq = np.array(got).T
    missing = np.ptp(seq) + 1 - len(set(seq))
    return float(np.diff(received_ns).max()) * 1e-9, int(missing), len(seq) - len(set(seq))


def test_the_demo_feels_pushes_and_the_loss_and_leaves_the_stop_quiet(
    demo: subprocess.Popen[str], tmp_path: Path, short_folder: Path
) -> None:
    out, err = demo.communicate(timeout=120)
    assert demo.returncode == 0, err
    wait_until(lambda: not ours(short_folder), "all processes end")
    assert list(short_folder.iterdir()) == []
    assert "\x1b" not in out + err
    said = json.loads(out)
    assert {one["kind"] for one in said["felt"]} == {"push", "torque-loss", "stop"}
    wanted = {"push": "contact", "torque-loss": "actuator", "stop": None}
    for one in said["felt"]:
        assert (one["delay_ms"] is None) == (one["kind"] == "stop"), one
        assert one["verdict"] == wanted[one["kind"]], one
        if one["kind"] == "torque-loss":
            assert one["joint"] == one["where"], one
    assert said["other_alarms"] == []
    # A machine that is busy may hold the robot or the line up. What is said of that has to be true.
    silence_s, missing, doubled = line(tmp_path / said["session"])
    for alarm in said["line_alarms"]:
        truly = {
            "stale": silence_s > 0.1,
            "gap": missing > 0,
            "dropouts": missing > 0,
            "duplicates": doubled > 0,
        }
        assert truly[alarm["detail"]], (alarm, silence_s, missing, doubled)

    alarms = review(tmp_path / said["session"], tmp_path / "review")
    raised = [a for a in alarms if a["state"] == "unacknowledged"]
    truth = json.loads((tmp_path / "limbtell-demo" / "truth.json").read_text())
    for one, happened in zip(said["felt"], truth, strict=True):
        start_s = happened["start_ns"] / 1e9
        if one["delay_ms"] is not None:
            first = next(a for a in raised if a["t"] >= start_s and a["kind"] != "signal")
            last = [a for a in alarms if a["event"] == first["event"]][-1]
            assert [last[name] for name in ("verdict", "joint", "link", "probability")] == [
                one[name] for name in ("verdict", "joint", "link", "probability")
            ]
            assert round(1e3 * (first["t"] - start_s), 1) == one["delay_ms"]


def test_a_demo_that_is_stopped_leaves_no_process_behind(
    demo: subprocess.Popen[str], short_folder: Path
) -> None:
    wait_until(lambda: len(ours(short_folder)) >= 7, "demo, robot and daemon run")
    time.sleep(0.5)
    demo.send_signal(signal.SIGTERM)
    _, err = demo.communicate(timeout=60)
    assert demo.returncode != 0
    assert "Traceback" not in err
    wait_until(lambda: not ours(short_folder), "all processes end")
    assert list(short_folder.iterdir()) == []
