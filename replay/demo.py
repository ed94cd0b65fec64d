"""`limbtell demo`: a simulated *Rind* on one side, the real daemon on the other, and what was felt.

The robot runs in a process of its own and publishes over ZeroMQ; `limbtell watch` is started as a user would
start it. Only the schedule and the truth file know what really happened.
"""

from __future__ import annotations

import contextlib
import json
import multiprocessing
import shutil
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Any, NamedTuple

import msgpack
import typer
import zmq
from rich.console import Console
from rich.table import Table

from monitor.errors import SystemFault
from monitor.flow.alarms import UNACKNOWLEDGED, in_words
from monitor.setup.template import write_config
from replay.simulate import (
    DATASHEET,
    SERIAL,
    SHORTEST_S,
    TANH_V0,
    URDF,
    Start,
    default_schedule,
    publish,
)

_WIDTH = 110  # where there is no terminal to ask
_END_S = 10.0  # the robot writes its truth after the last sample
# Alarms that say samples came late or not at all. They are true, whatever the robot does meanwhile.
_LINE = ("stale", "gap", "dropouts", "duplicates")
_MATCH_S = 0.6  # an alarm this long after the end of a happening still belongs to it
CAUTION = "A monitoring aid, not a safety function: no performance level, never a protective stop."


class Felt(NamedTuple):
    """One thing that truly happened, and what the daemon said."""

    kind: str
    where: str
    size: float
    t_s: float  # since the robot's first sample
    peak_nm: float
    peak_joint: str
    delay_ms: float | None  # until something was noticed
    verdict: str | None  # the last word on it
    joint: str | None
    link: str | None
    probability: float | None
    named_ms: float | None  # until that verdict was first given


def command(
    seconds: Annotated[float, typer.Option(help="How long the robot works.")] = 40.0,
    out: Annotated[Path, typer.Option(help="Folder for configuration, sessions and truth.")] = Path(
        "limbtell-demo"
    ),
    seed: Annotated[int, typer.Option(help="Which robot: noise and model errors.")] = 1,
    as_json: Annotated[bool, typer.Option("--json", help="Print the summary as JSON.")] = False,
) -> None:
    """Watch a simulated arm being pushed, losing torque and stopping, with the real daemon."""
    if seconds < SHORTEST_S:
        raise SystemFault("--seconds", f"{seconds:g}", f"at least {SHORTEST_S:g}")
    for number in (signal.SIGTERM, signal.SIGHUP):
        signal.signal(number, signal.default_int_handler)  # as Ctrl-C: no process stays behind
    stream = sys.stderr if as_json else sys.stdout
    console = Console(file=stream, width=None if stream.isatty() else _WIDTH)
    folder = _fresh(out)
    config = _configuration(folder)
    console.print(f"[bold]{CAUTION}[/bold]", soft_wrap=True)
    console.print("Starting robot and daemon (the first start on a machine compiles for some seconds) …")
    # The robot first: a daemon that hears nothing for long says so, and rightly.
    with _robot(config, seconds, seed, folder / "truth.json") as robot, _daemon(config.path, console):
        alarms = _run(*robot, config, seconds, console)
    truth = json.loads((folder / "truth.json").read_text(encoding="utf-8"))
    session = max((folder / "sessions").glob("*.mcap"))
    line = [alarm for alarm in alarms if alarm["verdict"] == "signal" and alarm["detail"] in _LINE]
    felt, extra = _compare(truth, [alarm for alarm in alarms if alarm not in line])
    line = [alarm for alarm in line if alarm["state"] == UNACKNOWLEDGED]
    if as_json:
        said = {"felt": [f._asdict() for f in felt], "other_alarms": extra, "line_alarms": line}
        typer.echo(json.dumps(said | {"session": str(session)}))
    else:
        _print(felt, extra, line, session, config.path, console)


class _Config(NamedTuple):
    path: Path
    robot: str
    alarms: str


def _fresh(out: Path) -> Path:
    """Return the folder, emptied of an earlier demo but of nothing else."""
    if out.exists() and any(out.iterdir()) and not (out / "rind.toml").exists():
        raise SystemFault(
            f"--out {out}", "a folder with other files", "an empty or new folder, or an earlier demo's"
        )
    if out.exists():
        shutil.rmtree(out)
    out.mkdir(parents=True)
    return out


def _configuration(folder: Path) -> _Config:
    """Write the robot's files and a configuration as `limbtell init` does, on ports that are free."""
    for source in (URDF, DATASHEET):
        shutil.copy(source, folder / source.name)
    text = write_config(folder / URDF.name, "fixed", folder / DATASHEET.name, folder)
    ports = free_ports(3)
    robot, alarms = (f"tcp://127.0.0.1:{port}" for port in ports[:2])
    for old, new in (
        ("tcp://127.0.0.1:5555", robot),
        ("tcp://127.0.0.1:5556", alarms),
        ("metrics_port = 9637", f"metrics_port = {ports[2]}"),
        ('serial = ""', f'serial = "{SERIAL}"'),
        ("friction_velocity = 0.004", f"friction_velocity = {TANH_V0}"),
    ):
        assert old in text, old
        text = text.replace(old, new)
    path = folder / "rind.toml"
    path.write_text(text, encoding="utf-8")
    return _Config(path, robot, alarms)


def free_ports(count: int) -> list[int]:
    """Return TCP ports on loopback that nobody uses now."""
    with contextlib.ExitStack() as stack:
        sockets = [stack.enter_context(socket.socket()) for _ in range(count)]
        for one in sockets:
            one.bind(("127.0.0.1", 0))
        return [one.getsockname()[1] for one in sockets]


@contextlib.contextmanager
def _daemon(config: Path, console: Console) -> Iterator[None]:
    """Run `limbtell watch` until the block is left; its words go to the terminal."""
    process = subprocess.Popen(
        [sys.executable, "-P", "-m", "monitor", "watch", str(config)],
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        start_new_session=True,  # Ctrl-C is ours: the daemon is stopped when the robot is
    )
    assert process.stdout is not None
    rest: list[str] = []
    drain = threading.Thread(target=rest.extend, args=(process.stdout,), daemon=True)
    try:
        for line in process.stdout:
            console.print(f"  {line.rstrip()}", highlight=False, markup=False)
            if line.strip() == "ready":
                break
        else:
            raise SystemFault("limbtell watch", f"an end with code {process.wait()}", "a daemon that starts")
        drain.start()
        yield
    finally:
        process.terminate()
        try:
            process.wait(timeout=30)
        except subprocess.TimeoutExpired:
            process.kill()  # its children notice and end
            raise
        if process.returncode != 0:
            console.print("".join(rest).rstrip(), highlight=False, markup=False)


@contextlib.contextmanager
def _robot(
    config: _Config, seconds: float, seed: int, truth: Path
) -> Iterator[tuple[multiprocessing.context.SpawnProcess, Start]]:
    """Make the robot ready in a process of its own; it waits to be told to begin."""
    spawn = multiprocessing.get_context("spawn")
    start = Start(spawn.Event(), spawn.Event())
    robot = spawn.Process(
        target=publish, args=(config.robot, seconds, seed, default_schedule(seconds), truth, start)
    )
    robot.start()
    try:
        while robot.is_alive() and not start.ready.wait(0.1):
            pass
        yield robot, start
    finally:
        if robot.is_alive():
            robot.terminate()
        robot.join()


def _run(
    robot: multiprocessing.context.SpawnProcess,
    start: Start,
    config: _Config,
    seconds: float,
    console: Console,
) -> list[dict[str, Any]]:
    """Let the robot work and print what the daemon says of it; return the alarms."""
    alarms: list[dict[str, Any]] = []
    with zmq.Context() as context, context.socket(zmq.SUB) as subscriber:
        subscriber.set(zmq.LINGER, 0)
        subscriber.connect(config.alarms)
        for topic in (b"alarm", b"health"):
            subscriber.subscribe(topic)
        start.begin.set()
        begun = time.monotonic()
        while robot.is_alive():
            if not subscriber.poll(100):
                continue
            topic, payload = subscriber.recv_multipart()
            message = msgpack.unpackb(payload)
            # The robot falls silent at the end, as agreed; that is no news.
            over = time.monotonic() - begun > seconds and message.get("detail") == "stale"
            if over:
                robot.join(_END_S)
            if not robot.is_alive():
                break
            if topic == b"alarm":
                alarms.append(message)
            _say(topic.decode(), message, console)
    robot.join()
    if robot.exitcode != 0:
        raise SystemFault("the simulated robot", f"an end with code {robot.exitcode}", "a full run")
    return alarms


def _say(topic: str, message: dict[str, Any], console: Console) -> None:
    """Print one line for an alarm, and in a terminal one for each second's health."""
    if topic == "alarm":
        style = "bold red" if message["state"] == UNACKNOWLEDGED else "green"
        console.print(in_words(message), style=style, highlight=False, markup=False, soft_wrap=True)
    elif console.is_terminal:
        joint, ratio = max(message["band_ratio"].items(), key=lambda item: item[1])
        bar = "█" * min(20, round(10 * ratio))
        console.print(
            f"{message['utc']}  {message['coverage']:<11} largest residual {ratio:4.0%} of its band "
            f"at {joint:<8} {bar}",
            style="dim",
            highlight=False,
            soft_wrap=True,
        )


def _compare(
    truth: list[dict[str, Any]], alarms: list[dict[str, Any]]
) -> tuple[list[Felt], list[dict[str, Any]]]:
    """Match what happened with what was alarmed; the rest of the alarms were about nothing that happened."""
    raised = [alarm for alarm in alarms if alarm["state"] == UNACKNOWLEDGED]
    first_s = min((one["start_ns"] for one in truth), default=0) / 1e9
    felt: list[Felt] = []
    used: set[int] = set()
    for one in truth:
        start, end = one["start_ns"] / 1e9, one["end_ns"] / 1e9 + _MATCH_S
        own = [alarm for alarm in raised if start <= alarm["t"] <= end]
        used.update(alarm["event"] for alarm in own)
        # The first event of it, and what was said of that one from first to last.
        said = [alarm for alarm in alarms if own and alarm["event"] == own[0]["event"]]
        last = said[-1] if said else dict.fromkeys(("verdict", "joint", "link", "probability"))
        named = [alarm for alarm in said if alarm["verdict"] == last["verdict"]]
        joint, peak = max(one["peak_nm"].items(), key=lambda item: abs(item[1]), default=("", 0.0))
        felt.append(
            Felt(
                one["kind"],
                one["where"],
                one["size"],
                start - first_s,
                peak,
                joint,
                round(1e3 * (own[0]["t"] - start), 1) if own else None,
                last["verdict"],
                last["joint"],
                last["link"],
                last["probability"],
                round(1e3 * (named[0]["t"] - start), 1) if named else None,
            )
        )
    return felt, [alarm for alarm in raised if alarm["event"] not in used]


def _print(
    felt: list[Felt],
    extra: list[dict[str, Any]],
    line: list[dict[str, Any]],
    session: Path,
    config: Path,
    console: Console,
) -> None:
    table = Table(title="What happened, and what was noticed", title_justify="left")
    for name in ("happened", "where", "size", "peak effect", "noticed", "held to be"):
        table.add_column(name)
    for one in felt:
        unit = {"push": "N", "torque-loss": "of torque", "stop": "s braked"}[one.kind]
        rightly_quiet = one.kind == "stop"
        said = "alarm after" if rightly_quiet else "after"
        if one.delay_ms is None:
            noticed = "no alarm, rightly" if rightly_quiet else "NOT noticed"
        else:
            noticed = f"{said} {one.delay_ms:.0f} ms"
        table.add_row(
            one.kind.replace("-", " "),
            one.where,
            f"{one.size:.3g} {unit}",
            f"{one.peak_nm:+.1f} N m, {one.peak_joint}" if one.peak_nm else "none",
            noticed,
            _held(one),
        )
    console.print(table)
    console.print(f"Alarms about nothing that happened: {len(extra)}")
    for alarm in extra:
        console.print(f"  {in_words(alarm)}", highlight=False, markup=False, soft_wrap=True)
    if line:
        console.print(
            f"Alarms about samples that came late or were lost, this machine being busy: {len(line)}"
        )
    for alarm in line:
        console.print(f"  {in_words(alarm)}", highlight=False, markup=False, soft_wrap=True)
    console.print(
        f"Session: {session}\nConfiguration: {config}\n"
        f"Look at it again: {Path(sys.argv[0])} review {session} --out {config.parent / 'review'}",
        highlight=False,
        soft_wrap=True,
    )


def _held(one: Felt) -> str:
    """Return what it was held to be in the end, how surely, and how soon."""
    if one.verdict is None:
        return ""
    where = one.joint or one.link
    sure = "" if one.probability is None else f" ({one.probability:.3f}, after {one.named_ms:.0f} ms)"
    return f"{one.verdict}{f' at {where}' if where else ''}{sure}"
