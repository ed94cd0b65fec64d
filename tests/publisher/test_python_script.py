"""The Python publisher run as a script; that its samples equal the header's is tested beside the header."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

from tests.publisher.build import PUBLISHER, only, receive_until_exit, subscriber


def test_the_python_script_publishes_samples_without_gaps_and_the_condition(endpoint: str) -> None:
    command: list[str | Path] = [sys.executable, PUBLISHER / "publisher.py", endpoint, "200", "1.2", "3"]
    with (
        subscriber(endpoint) as socket,
        subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as process,
    ):
        messages = receive_until_exit(socket, process)
    assert process.returncode == 0
    samples = only("joints", messages)
    assert [sample["seq"] for sample in samples] == list(range(samples[0]["seq"], 240))
    assert all(len(sample[key]) == 3 for sample in samples for key in ("q", "qd", "tau"))
    conditions = only("robot", messages)
    assert len(conditions) >= 2
    assert conditions[-1]["mode"] == "work"
