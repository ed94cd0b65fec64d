"""Starts the real daemon, plays the robot before it, listens to what it says, and looks at its processes."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
import urllib.request
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any, NamedTuple

import msgpack
import tomlkit
import zmq
from prometheus_client.parser import text_string_to_metric_families

from monitor.session import Session
from replay.demo import free_ports
from replay.run import Replay

WAIT_S = 60.0  # far beyond what anything takes
FIRST_START_S = 300.0  # compiles, on a busy machine
Message = tuple[str, bytes]


def wait_until(happened: Callable[[], Any], what: str, wait_s: float = WAIT_S) -> Any:
    """Return what `happened` returns, as soon as that is true."""
    end = time.monotonic() + wait_s
    while not (found := happened()):
        assert time.monotonic() < end, f"waited in vain: {what}"
        time.sleep(0.02)
    return found


def configure(path: Path, settings: Mapping[str, Any]) -> Path:
    """Set keys (`table.key`) of a configuration file."""
    document: Any = tomlkit.parse(path.read_text(encoding="utf-8"))
    for dotted, value in settings.items():
        table, key = dotted.split(".")
        document.setdefault(table, tomlkit.table())[key] = value
    path.write_text(tomlkit.dumps(document), encoding="utf-8")
    return path


class Process(NamedTuple):
    """What the kernel says of a process."""

    pid: int
    parent: int
    session: int
    state: str
    started: int
    cpu_s: float


def processes() -> list[Process]:
    """Return all processes that run, in the order in which they were started."""
    found = []
    for entry in Path("/proc").iterdir():
        if not entry.name.isdigit():
            continue
        try:
            text = (entry / "stat").read_text()
        except (FileNotFoundError, ProcessLookupError):
            continue
        # proc(5): fields after the name, which stands in brackets and may hold spaces.
        f = text[text.rindex(")") + 2 :].split()
        cpu_s = (int(f[11]) + int(f[12])) / os.sysconf("SC_CLK_TCK")
        found.append(Process(int(entry.name), int(f[1]), int(f[3]), f[0], int(f[19]), cpu_s))
    return sorted((p for p in found if p.state != "Z"), key=lambda p: (p.started, p.pid))


class Daemon:
    """`limbtell watch` in a process of its own, which leads a session of its own.

    Attributes
    ----------
    folder : Path
        Short and new: its sockets, its run folder, what it prints.
    input, output : str
        Addresses.
    port : int
        Of the metrics.
    """

    def __init__(self, config: Path, folder: Path, settings: Mapping[str, Any]) -> None:
        self.folder, self.port = folder, free_ports(1)[0]
        addresses = {
            "input.address": f"ipc://{folder}/robot",
            "output.address": f"ipc://{folder}/alarms",
            "desk.metrics_port": self.port,
        }
        self.config = configure(config, addresses | dict(settings))
        written: Any = tomlkit.parse(self.config.read_text(encoding="utf-8"))
        self.input, self.output = written["input"]["address"], written["output"]["address"]
        self.port = written["desk"]["metrics_port"]
        self._temporary = folder / "tmp"
        self._temporary.mkdir()
        self._out, self._err = folder / "stdout", folder / "stderr"
        with self._out.open("w") as out, self._err.open("w") as err:
            self.process = subprocess.Popen(
                [sys.executable, "-P", "-m", "monitor", "watch", str(self.config)],
                stdout=out,
                stderr=err,
                env={**os.environ, "TMPDIR": str(self._temporary)},
                start_new_session=True,
            )

    @property
    def said(self) -> str:
        """What it printed so far."""
        return self._out.read_text()

    @property
    def complaints(self) -> str:
        """What it printed on stderr so far."""
        return self._err.read_text()

    @property
    def run_folders(self) -> list[Path]:
        """Its folders for sockets and shared blocks."""
        return list(self._temporary.iterdir())

    def ready(self) -> Daemon:
        """Wait until it watches."""
        wait_until(lambda: "ready\n" in self.said or self.process.poll() is not None, "ready", FIRST_START_S)
        assert self.process.poll() is None, self.complaints
        return self

    def wait(self) -> int:
        """Wait for its end and return the exit code."""
        return self.process.wait(WAIT_S)

    def stop(self) -> int:
        """Ask it to stop, as a service manager does; return the exit code."""
        self.process.send_signal(signal.SIGTERM)
        return self.wait()

    def members(self) -> list[Process]:
        """Return all of its processes, in the order in which they were started."""
        return [p for p in processes() if p.session == self.process.pid]

    def workers(self) -> list[Process]:
        """Return loop, recorder, desk, standby of a daemon in which none was started again."""
        spawned = (p for p in self.members() if p.parent == self.process.pid)
        return [p for p in spawned if b"spawn_main" in Path(f"/proc/{p.pid}/cmdline").read_bytes()]

    def check_nothing_is_left(self) -> None:
        """No process of it runs, and its run folder is gone."""
        wait_until(lambda: not self.members(), "all processes end")
        assert self.run_folders == []

    def end(self) -> None:
        """End whatever still runs of it, at once."""
        while left := self.members():
            for process in left:
                os.kill(process.pid, signal.SIGKILL)
            time.sleep(0.02)
        self.process.wait()

    def metrics(self) -> dict[str, float]:
        """Return all metrics, as `name{label="value",...}` with labels in order of the alphabet."""
        with urllib.request.urlopen(f"http://127.0.0.1:{self.port}/metrics", timeout=10) as answer:
            text = answer.read().decode()
        found = {}
        for family in text_string_to_metric_families(text):
            for sample in family.samples:
                labels = ",".join(f'{name}="{value}"' for name, value in sorted(sample.labels.items()))
                found[f"{sample.name}{{{labels}}}" if labels else sample.name] = sample.value
        return found

    def sessions(self) -> list[Path]:
        """Return its session files, oldest first."""
        return sorted((self.config.parent / "sessions").glob("*.mcap"), key=lambda p: p.stat().st_mtime_ns)


class Listener:
    """A subscriber of the daemon's output that keeps everything.

    It connects before the daemon binds, and asks it each time it looks for something.
    """

    def __init__(self, context: zmq.Context[zmq.Socket[bytes]], address: str) -> None:
        self._socket = context.socket(zmq.SUB)
        self._socket.setsockopt(zmq.RCVHWM, 0)
        self._socket.setsockopt(zmq.LINGER, 0)
        self._socket.setsockopt(zmq.RECONNECT_IVL, 5)
        self._socket.subscribe(b"")
        self._socket.connect(address)
        self.messages: list[Message] = []

    def hear(self) -> list[Message]:
        """Take in what has come, and return everything so far."""
        while self._socket.poll(10):
            topic, payload = self._socket.recv_multipart()
            self.messages.append((topic.decode(), payload))
        return self.messages

    def bodies(self, topic: str) -> list[dict[str, Any]]:
        """Return all messages of a topic so far."""
        return [msgpack.unpackb(payload) for name, payload in self.hear() if name == topic]

    def health(self) -> dict[str, Any]:
        """Return the next health message."""
        heard = len(self.bodies("health"))
        body: dict[str, Any] = wait_until(lambda: self.bodies("health")[heard:], "health")[0]
        return body

    def alarm(self, kind: str, detail: str, state: str = "unacknowledged", since: int = 0) -> dict[str, Any]:
        """Wait for an alarm transition, and return the first whose `seq` is above `since`."""
        wanted = {"kind": kind, "detail": detail, "state": state}

        def found() -> list[dict[str, Any]]:
            return [a for a in self.bodies("alarm") if a["seq"] > since and wanted.items() <= a.items()]

        first: dict[str, Any] = wait_until(found, f"alarm {wanted}")[0]
        return first

    def numbers(self, topic: str) -> list[int]:
        """Return `seq` of all messages of a topic so far."""
        return [body["seq"] for body in self.bodies(topic)]


class Speaker:
    """The robot's end of the input: a bound publisher that knows when the daemon has subscribed."""

    def __init__(self, context: zmq.Context[zmq.Socket[bytes]], address: str) -> None:
        # XPUB is PUB, and lets us see subscriptions.
        self._socket = context.socket(zmq.XPUB)
        self._socket.setsockopt(zmq.SNDHWM, 0)
        self._socket.setsockopt(zmq.LINGER, 0)
        self._socket.bind(address)

    def wait_for_subscriber(self) -> None:
        """Wait until what is sent is also received."""
        assert self._socket.poll(int(1000 * WAIT_S)), "nobody subscribes"
        assert self._socket.recv() == b"\x01"

    def send(self, topic: str, payload: bytes) -> None:
        """Send a message of two frames."""
        self._socket.send_multipart([topic.encode(), payload])

    def send_frames(self, *frames: bytes) -> None:
        """Send frames as they are."""
        self._socket.send_multipart(frames)

    def play(self, packets: Iterable[tuple[int, str, bytes]]) -> None:
        """Send (time in ns since the begin, topic, payload), each when its time has come."""
        begin_ns = time.monotonic_ns()
        for at_ns, topic, payload in packets:
            time.sleep(max(0, begin_ns + at_ns - time.monotonic_ns()) * 1e-9)
            self.send(topic, payload)


@contextmanager
def listening(daemon: Daemon) -> Iterator[Listener]:
    """The daemon's output, entered when the daemon is ready and heard."""
    with zmq.Context() as context:
        listener = Listener(context, daemon.output)
        try:
            daemon.ready()
            listener.health()
            yield listener
        finally:
            context.destroy(linger=0)


@contextmanager
def conversation(daemon: Daemon) -> Iterator[tuple[Speaker, Listener]]:
    """Both ends of the daemon's sockets."""
    with zmq.Context() as context:
        speaker = Speaker(context, daemon.input)
        try:
            with listening(daemon) as listener:
                speaker.wait_for_subscriber()
                yield speaker, listener
        finally:
            context.destroy(linger=0)


def replayed(session: Path, start: int = 0) -> tuple[Replay, list[Message]]:
    """Replay a session from a snapshot, and return what would stand on the wire."""
    replay = Replay(Session(session), start=start)
    return replay, [(message.topic, message.payload) for message in replay]
