"""Compiles and runs the C++ publisher, and receives what it sends."""

from __future__ import annotations

import json
import os
import shutil
import struct
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, TypedDict

import msgpack
import pytest
import zmq

PUBLISHER = Path(__file__).parents[2] / "deploy" / "publisher"
FLAGS = ["-std=c++17", "-Wall", "-Wextra", "-Werror", "-O2", "-pthread", f"-I{PUBLISHER}"]
Message = tuple[str, dict[str, Any]]


class Report(TypedDict):
    """Last line of the example's output."""

    published: int
    dropped: int
    worst_publish_ns: int


def require(found: bool, reason: str) -> None:
    """Skip the test unless `found`; with LIMBTELL_REQUIRE_ALL=1 fail it: nothing is skipped unseen."""
    if found:
        return
    if os.environ.get("LIMBTELL_REQUIRE_ALL") == "1":
        pytest.fail(reason)
    pytest.skip(reason)


def require_compiler(folder: Path) -> None:
    """Skip the test without g++ or the header and library of libzmq."""
    require(shutil.which("g++") is not None, "no g++ here")
    probe = folder / "probe.cpp"
    probe.write_text("#include <zmq.h>\nint main() { return zmq_errno(); }\n")
    found = subprocess.run(["g++", probe, "-lzmq", "-o", folder / "probe"], capture_output=True, check=False)
    require(found.returncode == 0, "no zmq.h or libzmq to compile with here")


def compile_program(source: Path, folder: Path, *flags: str) -> Path:
    """Compile one source file with warnings as errors; the program lies in `folder`."""
    program = folder / source.stem
    command = ["g++", *FLAGS, *flags, str(source), "-lzmq", "-ldl", "-o", str(program)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    return program


def compile_example(folder: Path, *flags: str) -> Path:
    """Compile `deploy/publisher/example.cpp` into `folder`."""
    return compile_program(PUBLISHER / "example.cpp", folder, *flags)


def start_example(
    program: Path,
    endpoint: str,
    rate_hz: float,
    seconds: float,
    joints: int,
    *,
    burst: bool = False,
    env: dict[str, str] | None = None,
) -> subprocess.Popen[str]:
    """Start the example; it waits half a second for subscribers before its first sample."""
    command = [
        str(program),
        endpoint,
        str(rate_hz),
        str(seconds),
        str(joints),
        *(["--burst"] if burst else []),
    ]
    return subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env={**os.environ, **(env or {})}
    )


def finish(process: subprocess.Popen[str]) -> Report:
    """Wait for the example and read its report."""
    out, err = process.communicate(timeout=120)
    assert process.returncode == 0, err
    report: Report = json.loads(out.splitlines()[-1])
    return report


def run_example(
    program: Path, endpoint: str, rate_hz: float, seconds: float, joints: int, *, burst: bool = False
) -> Report:
    """Run the example to its end."""
    return finish(start_example(program, endpoint, rate_hz, seconds, joints, burst=burst))


@contextmanager
def subscriber(endpoint: str) -> Iterator[zmq.Socket[bytes]]:
    """A SUB socket without a limit on its queue, which may connect before the publisher binds."""
    with zmq.Context() as context, context.socket(zmq.SUB) as socket:
        socket.setsockopt(zmq.RCVHWM, 0)
        socket.setsockopt(zmq.LINGER, 0)
        socket.setsockopt(zmq.RECONNECT_IVL, 5)
        socket.subscribe(b"")
        socket.connect(endpoint)
        yield socket


def receive(socket: zmq.Socket[bytes]) -> Message:
    """Receive and decode one two-frame message."""
    assert socket.poll(30_000), "the publisher sent nothing"
    topic, payload = socket.recv_multipart()
    return topic.decode(), msgpack.unpackb(payload)


def receive_until_exit(socket: zmq.Socket[bytes], process: subprocess.Popen[str]) -> list[Message]:
    """Receive all that a program sends before it ends."""
    messages = []
    while True:
        ended = process.poll() is not None
        if socket.poll(200):
            messages.append(receive(socket))
        elif ended:
            return messages


def only(topic: str, messages: list[Message]) -> list[dict[str, Any]]:
    """The maps of one topic, in order."""
    return [fields for name, fields in messages if name == topic]


def doubles(raw: bytes) -> list[float]:
    """Decode an array sent as raw little-endian float64."""
    return list(struct.unpack(f"<{len(raw) // 8}d", raw))
