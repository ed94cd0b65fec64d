"""The processes of `limbtell watch`: a small parent that starts loop, desk and recorder, and restarts them.

The loop has a standby that is built and warm and waits; when the loop dies or hangs, the standby goes on at
once. Losing the desk or the recorder does not touch the loop. On SIGTERM or SIGINT everything stops in order:
loop, recorder (which closes the session), desk.
"""

from __future__ import annotations

import multiprocessing
import os
import platform
import shutil
import signal
import sys
import tempfile
import time
import uuid
import warnings
from collections.abc import Callable, Mapping
from contextlib import suppress
from dataclasses import dataclass, field
from importlib import metadata
from multiprocessing import resource_tracker
from multiprocessing.connection import Connection, wait
from multiprocessing.context import SpawnProcess
from pathlib import Path
from types import FrameType
from typing import Any

import zmq

from monitor.edges import metrics
from monitor.edges.publish import Publisher
from monitor.edges.record import Recorder, RecordFeed, queued_batches
from monitor.edges.subscribe import Subscriber
from monitor.errors import LimbtellError, SystemFault
from monitor.flow import wire
from monitor.flow.alarms import in_words
from monitor.loop import Loop, ask_rights
from monitor.robot.urdf import ModelWarning
from monitor.setup.build import Setup, build
from monitor.setup.config import Config, loads
from monitor.setup.shared import Shared, attach

STOPPED, DIED = 0, 3  # exit codes; 2 is "failed to start", by the command line

_HANG_NS = 2_000_000_000  # a loop whose heartbeat is older is taken for dead
_START_S = 120.0  # the first start on a machine compiles the kernels
_STOP_S = 5.0
_RESTART_PAUSE_S = 1.0  # doubled with every death within a minute
_LONGEST_PAUSE_S = 60.0
_MOST_DEATHS = 5  # of the loop within a minute: give up
_SPAWN = multiprocessing.get_context("spawn")


@dataclass(frozen=True)
class Brief:
    """What every process is told: the configuration as the parent read it, and where to meet the others."""

    toml: str
    where: str
    files: Mapping[str, str]
    folder: Path
    run: str
    parent: int

    def setup(self) -> Setup:
        """Return the configuration made ready; all processes have the same, whatever happens to the file."""
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", ModelWarning)  # the parent has shown them
            return build(self.config())

    def config(self) -> Config:
        """Return the configuration."""
        return loads(self.toml, self.where, self.files)

    def shared(self, setup: Setup) -> Shared:
        """Map the loop's blocks."""
        return attach(self.folder / "blocks", setup.sizes)

    @property
    def record_address(self) -> str:
        """Where the loop hands its tuples to the recorder."""
        return f"ipc://{self.folder}/record"

    @property
    def control_address(self) -> str:
        """Where the other processes tell the loop what happened."""
        return f"ipc://{self.folder}/control"


class _Stop:
    """Set by SIGTERM; also when the parent is gone."""

    def __init__(self, parent: int) -> None:
        self._set = False
        self._parent = parent
        self._looked_s = 0.0
        signal.signal(signal.SIGTERM, self._signal)

    def _signal(self, number: int, frame: FrameType | None) -> None:
        self._set = True

    def __call__(self) -> bool:
        now_s = time.monotonic()
        if now_s - self._looked_s > 0.5:
            self._looked_s = now_s
            self._set = self._set or os.getppid() != self._parent
        return self._set


class Control:
    """The loop's end of the control socket: messages for the data path's topic `host`."""

    def __init__(self, context: zmq.Context[zmq.Socket[bytes]], address: str) -> None:
        self._socket = context.socket(zmq.PULL)
        self._socket.bind(address)

    def receive(self) -> tuple[str, bytes] | None:
        """Return the next message, or None."""
        try:
            return "host", self._socket.recv(zmq.NOBLOCK)
        except zmq.Again:
            return None


def versions() -> dict[str, str]:
    """Return the versions that decide whether a replay gives the same bytes."""
    return {
        "limbtell": metadata.version("limbtell"),
        "numpy": metadata.version("numpy"),
        "numba": metadata.version("numba"),
        "python": platform.python_version(),
        "machine": platform.machine(),
    }


def loop_process(brief: Brief, ready: Connection) -> None:
    """The realtime process. It is built and warm before it waits for the word to go on."""
    setup = brief.setup()
    shared = brief.shared(setup)
    blocks = setup.blocks()._replace(state=shared.state, outputs=shared.outputs)
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    setup.warm()
    # Until here SIGTERM ends the process at once: a compilation is not worth waiting for.
    stop = _Stop(brief.parent)
    _report(ready, "warm")
    while not ready.poll(0.2):
        if stop():
            return
    try:
        numbers = ready.recv()
    except EOFError:  # the parent is gone
        return
    shared.state.view("u1")[:] = 0
    shared.outputs.view("u1")[:] = 0
    for name, value in numbers.items():
        shared.state[name] = value
    config = setup.config
    with _told(ready):
        said = ask_rights(config.realtime, shared.loop)
        control = Control(context, brief.control_address)
        robot, out = Subscriber(context, config), Publisher(context, config)
    recorder = None
    if config.record.enabled:
        recorder = RecordFeed(context, brief.record_address, config)
    loop = Loop(setup.pipeline(brief.run, blocks), config, robot, control, out, recorder, shared.loop)
    shared.loop["tick_ns"] = time.monotonic_ns()
    _report(ready, said)
    loop.run(stop)
    if recorder is not None:
        recorder.close()
    robot.close()
    out.close()
    context.destroy()


def recorder_process(brief: Brief, ready: Connection) -> None:
    """The black box."""
    stop = _Stop(brief.parent)
    config = brief.config()
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    batches = context.socket(zmq.PULL)
    batches.set(zmq.RCVHWM, queued_batches(config))
    batches.bind(brief.record_address)
    control = context.socket(zmq.PUSH)
    control.set(zmq.LINGER, 200)
    control.connect(brief.control_address)
    recorder = Recorder(config, brief.run, versions(), lambda message: control.send(wire.pack(message)))
    _report(ready, [])
    while True:
        # After the word to stop, what the loop has sent is still written.
        if batches.poll(200):
            recorder.batch(batches.recv())
        elif stop():
            break
    recorder.close()
    context.destroy(linger=200)


def desk_process(brief: Brief, ready: Connection) -> None:
    """Everything that only looks: today the metrics."""
    stop = _Stop(brief.parent)
    setup = brief.setup()
    desk = setup.config.desk
    with _told(ready):
        collector = metrics.Collector(setup, brief.shared(setup), brief.run, versions()["limbtell"])
        server = metrics.serve(collector, desk.metrics_host, desk.metrics_port)
    _report(ready, [])
    while not stop():
        time.sleep(0.1)
    server.close()


def _report(ready: Connection, said: object) -> None:
    # A parent that is gone is noticed by `_Stop`.
    with suppress(BrokenPipeError):
        ready.send(said)


class _told:
    """Tell the parent about an expected error instead of printing a traceback, and end the process."""

    def __init__(self, parent: Connection) -> None:
        self._parent = parent

    def __enter__(self) -> None:
        """Nothing to prepare."""

    def __exit__(self, kind: object, error: BaseException | None, trace: object) -> None:
        """Send the error on."""
        if isinstance(error, LimbtellError):
            self._parent.send(error)
            sys.exit(2)


class _AskedToStop(Exception):
    """The word to stop came while something was waited for."""


@dataclass
class _Child:
    """One process, as the parent sees it."""

    name: str
    target: Callable[[Brief, Connection], None]
    process: SpawnProcess | None = None
    pipe: Connection | None = None
    deaths_s: list[float] = field(default_factory=list)
    again_s: float | None = None  # it died: when to start it again
    is_ready: bool = False
    error: LimbtellError | None = None  # what it could not do

    def start(self, brief: Brief) -> None:
        """Start the process; it reports on its pipe."""
        self.pipe, theirs = _SPAWN.Pipe()
        self.process = _SPAWN.Process(target=self.target, args=(brief, theirs), name=f"limbtell {self.name}")
        self.again_s, self.is_ready, self.error = None, False, None
        # Ctrl-C reaches the whole group, but the parent decides the order of stopping: the child inherits
        # that SIGINT is blocked. The tracker would unblock it when it starts, so it has to run before.
        resource_tracker.ensure_running()
        before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
        try:
            self.process.start()
        finally:
            signal.pthread_sigmask(signal.SIG_SETMASK, before)
        theirs.close()

    def become(self, other: _Child) -> None:
        """Be the process that was the other."""
        self.process, self.pipe, self.is_ready = other.process, other.pipe, other.is_ready
        self.error = None
        other.process = other.pipe = None

    @property
    def is_over(self) -> bool:
        """Whether it was started and has ended."""
        return self.process is not None and not self.process.is_alive()

    def report(self, is_asked_to_stop: Callable[[], bool]) -> Any:
        """Wait for the next report; raise what the process could not do."""
        assert self.pipe is not None
        latest_s = time.monotonic() + _START_S
        while not self.pipe.poll(0.1):
            if is_asked_to_stop():
                raise _AskedToStop
            if time.monotonic() > latest_s:
                raise SystemFault(
                    f"process {self.name}", f"no word for {_START_S:g} s", "a start in that time"
                )
        said = self.heard()
        if said is None:
            end = self.last_words()
            raise self.error or SystemFault(f"process {self.name}", end, "a process that starts")
        self.is_ready = True
        return said

    def heard(self) -> Any:
        """Return what it reports now, None when it does not; what it could not do is kept as `error`."""
        assert self.pipe is not None
        try:
            said = self.pipe.recv() if self.pipe.poll() else None
        except (EOFError, ConnectionResetError):
            return None
        if isinstance(said, LimbtellError):
            self.error = said
            return None
        return said

    def last_words(self) -> str:
        """Return why it ended, as far as it is known."""
        assert self.process is not None
        self.process.join(1.0)
        self.heard()
        return str(self.error or f"an end with code {self.process.exitcode}")

    def stop(self) -> None:
        """Ask the process to stop, and make sure."""
        if self.process is None or not self.process.is_alive():
            return
        self.process.terminate()
        self.process.join(_STOP_S)
        self.kill()

    def kill(self) -> None:
        """End the process without asking."""
        assert self.process is not None
        self.process.kill()
        self.process.join()

    def died(self) -> int:
        """Count a death; return how many there were within a minute."""
        now_s = time.monotonic()
        self.deaths_s = [s for s in self.deaths_s if now_s - s < 60.0] + [now_s]
        return len(self.deaths_s)


class _Heart:
    """Tells whether the loop's ticks stand still, by the watch of one who is awake.

    Where the whole daemon was stopped (Ctrl-Z), the parent has not looked either; then the time counts anew.
    """

    def __init__(self) -> None:
        self._tick_ns = self._since_ns = self._looked_ns = 0

    def stands_still(self, tick_ns: int) -> bool:
        """Look at the time of the last tick."""
        now = time.monotonic_ns()
        if tick_ns != self._tick_ns or now - self._looked_ns > _HANG_NS // 2:
            self._tick_ns, self._since_ns = tick_ns, now
        self._looked_ns = now
        return now - self._since_ns > _HANG_NS


class Parent:
    """Starts and watches the processes.

    Parameters
    ----------
    config : Config
        The configuration.
    say : callable
        Takes a line for the person at the terminal.
    """

    def __init__(self, config: Config, say: Callable[[str], None]) -> None:
        self._config, self._say = config, say
        # In memory where that is possible: the loop writes the shared blocks in every tick.
        memory = "/dev/shm" if os.access("/dev/shm", os.W_OK) and "TMPDIR" not in os.environ else None
        folder = Path(tempfile.mkdtemp(prefix="limbtell-", dir=memory))
        self._brief = Brief(
            config.source_toml, str(config.path), config.model_files(), folder, uuid.uuid4().hex, os.getpid()
        )
        self._loop = _Child("loop", loop_process)
        self._standby = _Child("standby", loop_process)
        self._recorder = _Child("recorder", recorder_process)
        self._desk = _Child("desk", desk_process)
        self._helpers = [self._recorder] if config.record.enabled else []
        self._helpers.append(self._desk)
        self._heart = _Heart()
        self._asked = False

    def run(self) -> int:
        """Run until asked to stop; return the exit code.

        Raises
        ------
        LimbtellError
            A process cannot do what the configuration asks: a port is in use.
        """
        for number in (signal.SIGTERM, signal.SIGINT, signal.SIGHUP):
            signal.signal(number, self._signal)
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._tell = self._context.socket(zmq.PUSH)
        self._tell.set(zmq.LINGER, 0)
        self._tell.connect(self._brief.control_address)
        self._alarms = self._context.socket(zmq.SUB)
        self._alarms.subscribe(b"alarm")
        self._alarms.connect(
            self._config.output.address.replace("*", "127.0.0.1").replace("0.0.0.0", "127.0.0.1")
        )
        try:
            self._start()
            return self._watch()
        except _AskedToStop:
            return STOPPED
        finally:
            self._end()

    def _signal(self, number: int, frame: FrameType | None) -> None:
        self._asked = True

    def _is_asked_to_stop(self) -> bool:
        return self._asked

    def _start(self) -> None:
        setup = build(self._config)
        self._shared = self._brief.shared(setup)
        for child in (self._loop, *self._helpers):
            child.start(self._brief)
        for child in (self._loop, *self._helpers):
            child.report(self._is_asked_to_stop)
        self._go({})
        self._standby.start(self._brief)
        config, desk = self._config, self._config.desk
        self._say(
            f"watching {setup.facts.robot}: {len(setup.facts.joints)} joints at {config.input.address}, "
            f"{config.watch.loop_hz:g} ticks a second"
        )
        for note in setup.notes:
            self._say(f"note: {note}")
        self._say(f"alarms, verdicts and health: {config.output.address}")
        self._say(f"metrics: http://{desk.metrics_host}:{desk.metrics_port}/metrics")
        if config.record.enabled:
            self._say(f"sessions: {config.record_folder.resolve()}")
        self._say("ready")

    def _go(self, numbers: dict[str, int]) -> None:
        """Let the warm loop process go on from the running numbers of the one before."""
        assert self._loop.pipe is not None
        with suppress(BrokenPipeError):  # then there is no report either
            self._loop.pipe.send(numbers)
        for line in self._loop.report(self._is_asked_to_stop):
            self._say(f"rights: {line}")

    def _watch(self) -> int:
        while not self._is_asked_to_stop():
            children = (self._loop, self._standby, *self._helpers)
            wait([x.process.sentinel for x in children if x.process and not x.is_over], timeout=0.1)
            self._show_alarms()
            if self._is_asked_to_stop():
                break
            for child in (self._standby, *self._helpers):
                self._look_after(child)
            hung = self._heart.stands_still(int(self._shared.loop["tick_ns"][0]))
            if (self._loop.is_over or hung) and not self._take_over(hung):
                return DIED
        return STOPPED

    def _show_alarms(self) -> None:
        while self._alarms.poll(0):
            self._say(in_words(wire.unpack(self._alarms.recv_multipart()[1], "alarm")))

    def _look_after(self, child: _Child) -> None:
        """Start a dead helper again after a pause, and say when it is back. The loop goes on without it."""
        now_s = time.monotonic()
        if not child.is_over:
            if not child.is_ready and child.heard() is not None:
                child.is_ready = True
                self._host({"recovered": child.name})
        elif child.again_s is None:
            text = f"{child.name} died: {child.last_words()}"
            pause_s = min(_LONGEST_PAUSE_S, _RESTART_PAUSE_S * 2 ** (child.died() - 1))
            self._say(f"{text}; starting it again in {pause_s:g} s")
            self._host({"failed": child.name, "text": text})
            child.again_s = now_s + pause_s
        elif now_s >= child.again_s:
            child.start(self._brief)

    def _take_over(self, hung: bool) -> bool:
        """Put the standby in the place of a dead or hung loop; False when that happens too often."""
        numbers = ("alarm_seq", "verdict_seq", "health_seq", "events")
        why = "the loop hung" if hung else f"the loop died: {self._loop.last_words()}"
        self._loop.kill()
        held = {name: int(self._shared.state[name][0]) for name in numbers}
        while self._loop.died() < _MOST_DEATHS:
            if self._standby.is_over:
                self._standby.start(self._brief)
            self._loop.become(self._standby)
            try:
                if not self._loop.is_ready:
                    self._loop.report(self._is_asked_to_stop)
                self._go(held)
            except SystemFault as fault:
                self._say(str(fault))
                self._loop.kill()
                self._standby.start(self._brief)
                continue
            self._say(f"{why}; the standby took over")
            self._host({"failed": "loop", "text": why})
            self._host({"recovered": "loop"})
            self._standby.start(self._brief)
            return True
        self._say(f"{why}, for the {_MOST_DEATHS}th time within a minute; giving up")
        return False

    def _host(self, message: dict[str, str]) -> None:
        try:
            self._tell.send(wire.pack(message), zmq.NOBLOCK)
        except zmq.Again:
            self._say(f"could not tell the loop: {message}")

    def _end(self) -> None:
        """Stop in order: loop, then the recorder, which writes what the loop handed over, then the desk."""
        for child in (self._loop, self._standby, *self._helpers):
            child.stop()
        self._context.destroy(linger=0)
        shutil.rmtree(self._brief.folder, ignore_errors=True)
