"""`limbtell convert`: recordings in `.npz` or `.csv` become sessions.

Columns, in SI units: `t` [s, robot clock], `q`, `qd`, `tau`, and optionally `t_rx` [s, when it was received],
`tau_cmd`, `tau_link`, `motor_temp` [°C], `feet` (or `planned_contact`; 0 or 1); for a floating base also
`base_pos`, `base_quat` (w x y z), `base_vel` (world axes) and `base_omega` (body axes). In an `.npz` each is
one array with one row per sample, joints in configured order. In a `.csv` each is one column per joint, named
`q.NAME`; feet by their names, vectors by `.x .y .z`, the quaternion by `.w .x .y .z`.

Rows are delivered in their order. Without `t_rx` a sample counts as received when it was taken, except that
the clock of the receiver never goes back (see `_Player`). What the rows say is passed on as it is, also where
`t` repeats or goes back and where values are not numbers: judging that is the monitor's work.

Such files know nothing of the robot's condition: mode `work` is assumed, drives on and brakes open. Its
payload stays unknown. They tell nothing about UTC either.
"""

from __future__ import annotations

import csv
import hashlib
import io
import json
import uuid
import zipfile
import zlib
from collections.abc import Callable, Iterator, Sequence
from contextlib import closing, suppress
from dataclasses import dataclass
from importlib.metadata import version
from itertools import islice
from pathlib import Path
from typing import Annotated, Any, NamedTuple

import msgpack
import numpy as np
import typer
from numpy.typing import NDArray
from rich.console import Console
from rich.progress import Progress

from monitor.errors import SessionError, SystemFault
from monitor.session import UTC_UNKNOWN_NS, SessionWriter
from monitor.setup.config import Config, load

Floats = NDArray[np.float64]
Block = dict[str, Floats]
"""Consecutive rows of a recording, by group: (rows, width of the group)."""

BLOCK_ROWS = 4096
ASSUMED = "mode work, drives on, brakes open; payload unknown"

# Other units of time are off by a thousand; a robot that sends this much faster or slower is not this one.
RATE_FACTOR = 100.0
NS_PER_S = 10**9
LONGEST_PAUSE_NS = 3600 * NS_PER_S
# A clock that goes back further than this was restarted; less is a sample that came late.
RESTART_NS = NS_PER_S


class Group(NamedTuple):
    """A quantity of the recording: its axes (joints, feet, x y z), and whether it must be there."""

    name: str
    axes: tuple[str, ...]
    required: bool
    alias: str = ""

    def column(self, axis: str) -> str:
        """Name of a csv column."""
        return f"{self.name}.{axis}" if axis else self.name


@dataclass
class Summary:
    """What a conversion did; times in seconds of the robot's clock."""

    source: str
    session: str
    run: str
    joints: list[str]
    columns: list[str]
    ignored: list[str]
    samples: int = 0
    ticks: int = 0
    first_t: float = 0.0
    last_t: float = 0.0
    assumed: str = ASSUMED


class Source(NamedTuple):
    """An opened recording: the groups found in it, columns of no use, and its rows with the share read."""

    groups: list[Group]
    ignored: list[str]
    blocks: Iterator[tuple[Block, float]]


def command(
    recording: Annotated[Path, typer.Argument(metavar="IN", help="Recording: .npz or .csv.")],
    config: Annotated[Path, typer.Option("--config", help="Configuration of the robot it was made on.")],
    out: Annotated[
        Path, typer.Option("--out", "-o", help="Session to write (.mcap); replaced if it exists.")
    ],
    as_json: Annotated[bool, typer.Option("--json", help="Summary as JSON.")] = False,
) -> None:
    """Bring a recording from elsewhere in, as a session that `limbtell review` replays."""
    with Progress(console=Console(stderr=True), transient=True, disable=as_json) as progress:
        task = progress.add_task(f"converting {recording.name}", total=1.0)
        summary = convert(recording, load(config), out, lambda share: progress.update(task, completed=share))
    typer.echo(json.dumps(vars(summary)) if as_json else _words(summary))


def convert(
    recording: Path, config: Config, out: Path, progress: Callable[[float], None] = lambda share: None
) -> Summary:
    """Write the session of a recording.

    Parameters
    ----------
    recording : Path
        `.npz` or `.csv`, see the top of this file.
    config : Config
        The robot it was made on.
    out : Path
        The session; it appears under this name when it is whole, and replaces what was there.
    progress : callable
        Is told the share that is done, 0 to 1.

    Returns
    -------
    Summary

    Raises
    ------
    SessionError
        The recording is not readable, or does not fit the configuration.
    SystemFault
        The session cannot be written.
    """
    source = _open(recording, _groups(config))
    summary = Summary(
        source=str(recording),
        session=str(out),
        run=_run(recording, config),
        joints=[joint.name for joint in config.robot.joint],
        columns=[group.name for group in source.groups],
        ignored=source.ignored,
    )
    partial = out.with_name(out.name + ".part")
    try:
        partial.unlink(missing_ok=True)
        with closing(_writer(partial, recording, config, summary)) as writer:
            player = _Player(recording, config, writer, summary)
            for block, share in source.blocks:
                player.play(block)
                progress(share)
            player.finish()
        partial.replace(out)
    except OSError as error:
        raise SystemFault(str(out), error.strerror or str(error), "a file that can be written") from error
    finally:
        with suppress(OSError):
            partial.unlink(missing_ok=True)
    return summary


def _groups(config: Config) -> list[Group]:
    joints = tuple(joint.name for joint in config.robot.joint)
    feet = tuple(foot.name for foot in config.robot.foot)
    groups = [
        Group("t", ("",), True),
        Group("q", joints, True),
        Group("qd", joints, True),
        Group("tau", joints, True),
        Group("t_rx", ("",), False),
        Group("tau_cmd", joints, False),
        Group("tau_link", joints, False),
        Group("motor_temp", joints, False),
    ]
    if feet:
        groups.append(Group("feet", feet, False, alias="planned_contact"))
    if config.robot.base == "floating":
        groups += [
            Group("base_pos", ("x", "y", "z"), True),
            Group("base_quat", ("w", "x", "y", "z"), True),
            Group("base_vel", ("x", "y", "z"), True),
            Group("base_omega", ("x", "y", "z"), True),
        ]
    return groups


def _run(recording: Path, config: Config) -> str:
    """Same recording and same configuration, same run: a conversion repeats to the byte."""
    with recording.open("rb") as file:
        content = hashlib.file_digest(file, "sha256").hexdigest()
    return str(uuid.uuid5(uuid.NAMESPACE_OID, content + config.source_toml))


def _writer(path: Path, recording: Path, config: Config, summary: Summary) -> SessionWriter:
    return SessionWriter(
        path,
        config_toml=config.source_toml,
        model=config.model_files(),
        run=summary.run,
        utc_offset_ns=0,
        utc_uncertainty_ns=UTC_UNKNOWN_NS,
        versions={
            "limbtell": version("limbtell"),
            "converted_from": recording.name,
            "assumed": summary.assumed,
        },
    )


def _words(summary: Summary) -> str:
    lines = [
        f"{summary.session}: {summary.samples} samples of {len(summary.joints)} joints, "
        f"{summary.last_t - summary.first_t:.3f} s, from {', '.join(summary.columns)}",
        f"Nothing is known of the robot's condition; assumed: {summary.assumed}.",
    ]
    if summary.ignored:
        lines.append(f"Not used: {', '.join(summary.ignored)}.")
    return "\n".join(lines)


class _Player:
    """Plays rows as a loop would have seen them: tuples as they came in, and ticks of fixed rate."""

    def __init__(self, recording: Path, config: Config, writer: SessionWriter, summary: Summary) -> None:
        self._recording, self._writer, self._summary = recording, writer, summary
        self._joints = len(config.robot.joint)
        self._rate_hz = config.input.rate_hz
        self._tick_period_ns = round(NS_PER_S / config.watch.loop_hz)
        self._latest_ns = 0  # newest receive time
        self._shift_ns = 0  # receiver's clock minus robot's, where receive times are not known
        self._tick_ns = 0  # next tick
        self._flush_ns = 0
        self._condition_ns = 0
        self._celsius = b""

    def play(self, block: Block) -> None:
        """Write the tuples of these rows, and the ticks before each."""
        first_row = self._summary.samples + 1
        stamps_ns = _nanoseconds(block["t"], self._where("t"), first_row)
        arrivals_ns = _nanoseconds(block["t_rx"], self._where("t_rx"), first_row) if "t_rx" in block else None
        if "feet" in block:
            self._check_feet(block["feet"], first_row)
        if self._summary.samples == 0:
            self._begin(stamps_ns, stamps_ns[0] if arrivals_ns is None else arrivals_ns[0])
        payload_of = _payloads(block)
        celsius = block.get("motor_temp")
        for row, stamp_ns in enumerate(stamps_ns):
            at_ns = self._arrival(stamp_ns) if arrivals_ns is None else arrivals_ns[row]
            self._tick_until(at_ns)
            if at_ns >= self._condition_ns:
                self._condition(stamp_ns, at_ns)
            self._writer.tuple("joints", payload_of(row, self._summary.samples, stamp_ns), at_ns, stamp_ns)
            if celsius is not None:
                self._temperature(celsius[row].tobytes(), stamp_ns, at_ns)
            self._summary.samples += 1
        self._summary.last_t = stamps_ns[-1] / NS_PER_S

    def finish(self) -> None:
        """Tick once more, or nobody would look at the last sample."""
        if self._summary.samples == 0:
            raise SessionError(str(self._recording), "no samples", "at least one row")
        self._tick()

    def _where(self, column: str) -> str:
        return f"{self._recording}, column {column!r}"

    def _begin(self, stamps_ns: Sequence[int], first_ns: int) -> None:
        self._check_rate(stamps_ns)
        self._summary.first_t = stamps_ns[0] / NS_PER_S
        self._latest_ns = self._tick_ns = self._condition_ns = first_ns
        self._flush_ns = first_ns + NS_PER_S
        # An empty snapshot: the replay starts afresh.
        self._writer.snapshot(b"", first_ns)

    def _arrival(self, stamp_ns: int) -> int:
        """When the receiver would have had it, by a clock that goes on where the robot's is restarted."""
        if stamp_ns + self._shift_ns < self._latest_ns - RESTART_NS:
            self._shift_ns = self._latest_ns + round(NS_PER_S / self._rate_hz) - stamp_ns
        return max(stamp_ns + self._shift_ns, self._latest_ns)

    def _check_rate(self, stamps_ns: Sequence[int]) -> None:
        steps = np.diff(np.array(stamps_ns))
        if not (steps > 0).any():
            return
        rate_hz = NS_PER_S / float(np.median(steps[steps > 0]))
        if not 1 / RATE_FACTOR < rate_hz / self._rate_hz < RATE_FACTOR:
            raise SessionError(
                self._where("t"),
                f"{rate_hz:.4g} samples a second",
                f"about input.rate_hz = {self._rate_hz:g}",
                "`t` is in seconds; otherwise correct input.rate_hz.",
            )

    def _check_feet(self, feet: Floats, first_row: int) -> None:
        wrong = (feet != 0.0) & (feet != 1.0)
        if wrong.any():
            row, foot = np.argwhere(wrong)[0]
            raise SessionError(
                f"{self._where('feet')}, foot {foot + 1}, row {first_row + row}",
                f"{feet[row, foot]}",
                "0 or 1",
            )

    def _tick_until(self, at_ns: int) -> None:
        """All ticks before `at_ns`."""
        step_ns = at_ns - self._latest_ns
        if not -RESTART_NS <= step_ns <= LONGEST_PAUSE_NS:
            raise SessionError(
                f"{self._recording}, row {self._summary.samples + 1}",
                f"a step of {step_ns / NS_PER_S:.0f} s in the time of receipt",
                f"{-RESTART_NS // NS_PER_S} to {LONGEST_PAUSE_NS // NS_PER_S} s",
                "Times are in seconds; a recording with longer pauses should become several.",
            )
        while self._tick_ns < at_ns:
            self._tick()
        self._latest_ns = max(self._latest_ns, at_ns)

    def _tick(self) -> None:
        self._writer.tick(self._tick_ns)
        self._summary.ticks += 1
        self._tick_ns += self._tick_period_ns
        if self._tick_ns >= self._flush_ns:
            self._writer.flush()
            self._flush_ns += NS_PER_S

    def _condition(self, stamp_ns: int, at_ns: int) -> None:
        """Once a second what is assumed of the robot."""
        condition = {
            "v": 1,
            "t_ns": stamp_ns,
            "boot": self._summary.run,
            "mode": "work",
            "drive": [1] * self._joints,
            "brake": [0] * self._joints,
            "stop": None,
        }
        self._writer.tuple("robot", msgpack.packb(condition), at_ns, stamp_ns)
        self._condition_ns = at_ns + NS_PER_S

    def _temperature(self, celsius: bytes, stamp_ns: int, at_ns: int) -> None:
        """Temperatures creep: only changes are worth a tuple."""
        if celsius != self._celsius:
            payload = msgpack.packb({"v": 1, "t_ns": stamp_ns, "celsius": celsius})
            self._writer.tuple("motor_temp", payload, at_ns, stamp_ns)
            self._celsius = celsius


def _payloads(block: Block) -> Callable[[int, int, int], bytes]:
    """Wire form of a row of the block, as a function of (row, seq, stamp_ns)."""
    names = [name for name in ("q", "qd", "tau", "tau_cmd", "tau_link") if name in block]
    raw = {name: block[name].astype("<f8") for name in names}
    parts = {"p": "base_pos", "quat": "base_quat", "v": "base_vel", "w": "base_omega"}
    base = {key: block[name].tolist() for key, name in parts.items() if name in block}
    feet = block["feet"].astype(int).tolist() if "feet" in block else None

    def payload_of(row: int, seq: int, stamp_ns: int) -> bytes:
        message: dict[str, Any] = {"v": 1, "seq": seq, "t_ns": stamp_ns}
        for name, values in raw.items():
            message[name] = values[row].tobytes()
        if base:
            message["base"] = {key: values[row] for key, values in base.items()}
        if feet is not None:
            message["feet"] = feet[row]
        return msgpack.packb(message)  # type: ignore[no-any-return]

    return payload_of


def _nanoseconds(column: Floats, where: str, first_row: int) -> list[int]:
    seconds = column[:, 0]
    # Beyond this the nanoseconds leave 64 bits; NaN fails the comparison too.
    wrong = ~(np.abs(seconds) < 9.2e9)
    if wrong.any():
        row = int(np.argmax(wrong))
        raise SessionError(f"{where}, row {first_row + row}", f"{seconds[row]}", "a finite time in seconds")
    stamps: list[int] = np.rint(seconds * NS_PER_S).astype(np.int64).tolist()
    return stamps


def _open(path: Path, groups: list[Group]) -> Source:
    readers = {".npz": _open_npz, ".csv": _open_csv}
    reader = readers.get(path.suffix.lower())
    if reader is None:
        raise SessionError(str(path), f"a file {path.suffix or 'without suffix'}", " or ".join(readers))
    try:
        return reader(path, groups)
    except OSError as error:
        raise SessionError(str(path), error.strerror or str(error), "a readable file") from error


# --- npz


def _open_npz(path: Path, groups: list[Group]) -> Source:
    wanted = {name for group in groups for name in (group.name, group.alias)}
    arrays, ignored = _load_npz(path, wanted)
    found: list[Group] = []
    columns: Block = {}
    for group in groups:
        name = group.name if group.name in arrays else group.alias
        if name in arrays:
            columns[group.name] = _column(path, name, group, arrays[name])
            found.append(group)
        elif group.required:
            raise SessionError(f"{path}, array {group.name!r}", "nothing", _shape(group))
    rows = len(columns["t"])
    for name, values in columns.items():
        if len(values) != rows:
            raise SessionError(
                f"{path}, array {name!r}", f"{len(values)} rows", f"{rows} rows, as many as `t` has"
            )
    return Source(found, ignored, _slices(columns, rows))


def _load_npz(path: Path, wanted: set[str]) -> tuple[dict[str, NDArray[Any]], list[str]]:
    """The wanted arrays, and the names of the others."""
    try:
        with path.open("rb") as file:
            if not zipfile.is_zipfile(file):
                raise ValueError("no zip archive")
            file.seek(0)
            with np.load(file, allow_pickle=False) as archive:
                names = set(archive.files)
                return {name: archive[name] for name in names & wanted}, sorted(names - wanted)
    except (ValueError, EOFError, NotImplementedError, zipfile.BadZipFile, zlib.error) as error:
        raise SessionError(
            str(path),
            f"no readable arrays ({error})",
            "an .npz archive of numbers, as numpy.savez writes it",
            "Pickled objects are refused: they can run code.",
        ) from error


def _column(path: Path, name: str, group: Group, values: NDArray[Any]) -> Floats:
    """Array of a group as (rows, width) doubles."""
    where = f"{path}, array {name!r}"
    if values.dtype.kind not in "biuf":
        raise SessionError(where, f"values of type {values.dtype}", "numbers")
    if values.ndim == 1 and group.axes == ("",):
        values = values[:, None]
    if values.ndim != 2 or values.shape[1] != len(group.axes):
        raise SessionError(where, f"shape {values.shape}", _shape(group))
    return values.astype(np.float64)


def _shape(group: Group) -> str:
    if group.axes == ("",):
        return "shape (rows,)"
    return f"shape (rows, {len(group.axes)}) for {', '.join(group.axes)}"


def _slices(columns: Block, rows: int) -> Iterator[tuple[Block, float]]:
    for start in range(0, rows, BLOCK_ROWS):
        stop = min(start + BLOCK_ROWS, rows)
        yield {name: values[start:stop] for name, values in columns.items()}, stop / rows


# --- csv


def _open_csv(path: Path, groups: list[Group]) -> Source:
    with path.open(encoding="utf-8-sig", newline="") as file:
        header = next(_rows(path, file), [])
    places = _places(path, header)
    found: list[Group] = []
    at: dict[str, list[int]] = {}
    for group in groups:
        named = group if _has(places, group.name) else group._replace(name=group.alias or group.name)
        if not group.required and not _has(places, named.name):
            continue
        missing = [axis for axis in group.axes if named.column(axis) not in places]
        if missing:
            raise SessionError(
                f"{path}, column {named.column(missing[0])!r}", "nothing", "this column, one for every name"
            )
        _refuse_unknown(path, named, places)
        at[group.name] = [places.pop(named.column(axis)) for axis in group.axes]
        found.append(group)
    return Source(found, sorted(places), _csv_blocks(path, header, at))


def _places(path: Path, header: list[str]) -> dict[str, int]:
    names = [name.strip() for name in header]
    if not any(names):
        raise SessionError(str(path), "no header line", "a first line with the names of the columns")
    doubled = sorted({name for name in names if names.count(name) > 1})
    if doubled:
        raise SessionError(f"{path}, column {doubled[0]!r}", "it more than once", "every column once")
    return {name: place for place, name in enumerate(names)}


def _has(places: dict[str, int], name: str) -> bool:
    return any(column == name or column.startswith(f"{name}.") for column in places)


def _refuse_unknown(path: Path, group: Group, places: dict[str, int]) -> None:
    known = {group.column(axis) for axis in group.axes}
    unknown = [name for name in places if name.startswith(f"{group.name}.") and name not in known]
    if unknown:
        raise SessionError(
            f"{path}, column {unknown[0]!r}", "a name that the configuration does not have", ", ".join(known)
        )


def _rows(path: Path, file: io.TextIOBase) -> Iterator[list[str]]:
    """Lines that are not empty."""
    try:
        yield from filter(None, csv.reader(file))
    except (csv.Error, UnicodeDecodeError, OSError) as error:
        raise SessionError(str(path), f"no readable line ({error})", "comma-separated UTF-8 text") from error


def _csv_blocks(path: Path, header: list[str], at: dict[str, list[int]]) -> Iterator[tuple[Block, float]]:
    """The rows in blocks, so that a recording of hours needs no more memory than one of seconds."""
    size = path.stat().st_size
    used = [place for places in at.values() for place in places]
    ends = np.cumsum([len(places) for places in at.values()])[:-1]
    with path.open("rb") as raw, io.TextIOWrapper(raw, encoding="utf-8-sig", newline="") as file:
        rows = _rows(path, file)
        next(rows)
        done = 0
        while cells := list(islice(rows, BLOCK_ROWS)):
            numbers = _numbers(path, header, cells, used, done)
            yield dict(zip(at, np.split(numbers, ends, axis=1), strict=True)), raw.tell() / size
            done += len(cells)


def _numbers(path: Path, header: list[str], cells: list[list[str]], used: list[int], done: int) -> Floats:
    """The used columns of these rows; an error names the first cell that is no number."""
    for row, line in enumerate(cells, done + 1):
        if len(line) != len(header):
            raise SessionError(f"{path}, row {row}", f"{len(line)} cells", f"{len(header)}, as in the header")
    try:
        return np.array([[float(line[place]) for place in used] for line in cells])
    except ValueError:
        row, place = next(
            (row, place) for row, line in enumerate(cells) for place in used if not _is_number(line[place])
        )
        where = f"{path}, column {header[place].strip()!r}, row {done + row + 1}"
        raise SessionError(
            where, repr(cells[row][place]), "a number", "Write nan where none is known."
        ) from None


def _is_number(cell: str) -> bool:
    try:
        float(cell)
    except ValueError:
        return False
    return True
