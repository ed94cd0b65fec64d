"""`limbtell review`: what happened in a session, by the same data path that watched it live.

Writes `alarms.jsonl`, one line for each alarm that came or went, and `summary.json`. Both depend on the
session (and the configuration) alone, so that a review repeats to the byte. Numbers of events and messages
are those of the live run; counts, coverage and times in the summary are those of the reviewed stretch.
"""

from __future__ import annotations

import json
import sys
from bisect import bisect_right
from collections.abc import Callable, Mapping, Sequence
from contextlib import suppress
from dataclasses import asdict
from datetime import datetime, timedelta
from importlib.metadata import version
from pathlib import Path
from typing import Annotated, Any, NamedTuple

import typer
from rich.console import Console
from rich.markup import escape
from rich.progress import Progress, SpinnerColumn, TextColumn, TimeElapsedColumn
from rich.table import Table

from monitor.errors import SessionError, SystemFault
from monitor.flow.alarms import UNACKNOWLEDGED, size_in_words
from monitor.flow.layout import Coverage, Reason, Signal
from monitor.session import UTC_UNKNOWN_NS, Session
from monitor.setup.config import Config, load
from replay.run import Replay, snapshot_times

ALARMS, SUMMARY = "alarms.jsonl", "summary.json"
DAMAGED = 1
"""Exit code: a session is damaged; what lies before the damage was reviewed and written."""

CAUTION = (
    "limbtell is a monitoring aid, not a safety function: it has no performance level, is never to be used "
    "as a protective stop, and does not say whether restarting is safe."
)
_FIELDS = (
    "t", "utc", "run", "event", "state", "kind", "priority", "verdict", "detail", "joint", "link",
    "probability", "alternatives", "size", "onset_t", "seq", "text",
)  # fmt: skip
_ALARMED = ("kind", "priority")
_STATED = ("verdict", "detail", "joint", "link", "probability", "onset_t", "size")
_STATED_ONLY = ("lasting", "continues", "contact")
_SERIES = ("t", "open", "verdict", "joint", "link", "probability")
_TOP = 5  # explanations per point of the series
_PART = ".part"
_OURS = {name + end for name in (ALARMS, SUMMARY) for end in ("", _PART)}
_SHOWN_EVENTS = 20


class Review(NamedTuple):
    """A reviewed session: the bodies of its alarm messages in their order, and its summary."""

    alarms: list[dict[str, Any]]
    summary: dict[str, Any]


def command(
    sessions: Annotated[list[Path], typer.Argument(metavar="SESSION...", help="Recordings (.mcap).")],
    out: Annotated[Path, typer.Option("--out", help="Folder for the reports; several sessions: one each.")],
    config: Annotated[
        Path | None, typer.Option("--config", help="Another configuration than the session's own.")
    ] = None,
    from_s: Annotated[
        float,
        typer.Option(
            "--from", min=0.0, metavar="SECONDS", help="Begin at the last snapshot before this time."
        ),
    ] = 0.0,
    as_json: Annotated[bool, typer.Option("--json", help="Summary as JSON.")] = False,
) -> None:
    """Replay sessions exactly and report what was noticed. Exit code 1: one is damaged (in part reported)."""
    folders = _folders(sessions, out)
    other = None if config is None else load(config)
    opened = [Session(path) for path in sessions]
    console = Console(stderr=True)
    columns = (SpinnerColumn(), TextColumn("{task.description}"), TimeElapsedColumn())
    summaries = []
    with Progress(*columns, console=console, transient=True, disable=not console.is_terminal) as progress:
        for session, folder in zip(opened, folders, strict=True):
            task = progress.add_task(session.path.name, total=None)

            def show(seconds: float, task: Any = task, name: str = session.path.name) -> None:
                progress.update(task, description=f"{name}: {seconds:.0f} s replayed")

            found = review(session, other, from_s, show)
            write(found, folder)
            summaries.append(found.summary)
    if as_json:
        typer.echo(json.dumps(summaries if len(summaries) > 1 else summaries[0], allow_nan=False))
    else:
        for summary, folder in zip(summaries, folders, strict=True):
            _show(Console(file=sys.stdout), summary, folder)
    if any(summary["damaged"] for summary in summaries):
        raise typer.Exit(DAMAGED)


def review(
    session: Session,
    config: Config | None = None,
    from_s: float = 0.0,
    progress: Callable[[float], None] = lambda seconds: None,
) -> Review:
    """Replay a session and sum up what was noticed.

    Parameters
    ----------
    session : Session
    config : Config, optional
        Another configuration than the session's own; then the replay starts afresh.
    from_s : float
        Begin at the last snapshot that was taken at most so many seconds after the session's begin.
    progress : callable
        Is told the seconds that are done.

    Raises
    ------
    SessionError
        There is nothing to replay, or no state to begin at. Damage further on ends the review instead, and is
        told in the summary.
    ConfigError, ModelError
        The configuration is refused.
    """
    replay = Replay(session, config, _number_of(session, from_s) if from_s else 0)
    said: list[dict[str, Any]] = []
    damaged = None
    try:
        for message in replay:
            if message.topic in ("alarm", "verdict"):
                said.append(message.body)
            progress((replay.end_ns - replay.start_ns) / 1e9)
    except SessionError as error:
        if not replay.begun:
            raise
        damaged = str(error)
    alarms = [body for body in said if "state" in body]
    return Review(alarms, _summary(replay, config, alarms, said, damaged))


def write(found: Review, folder: Path) -> None:
    """Write both files into the folder; they appear under their names when they are whole.

    Raises
    ------
    SystemFault
        The folder cannot be made or written.
    """
    lines = (json.dumps(_line(alarm), allow_nan=False) + "\n" for alarm in found.alarms)
    summary = json.dumps(found.summary, allow_nan=False, indent=2) + "\n"
    parts = {folder / (ALARMS + _PART): "".join(lines), folder / (SUMMARY + _PART): summary}
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for part, text in parts.items():
            part.write_text(text, encoding="utf-8")
        for part in parts:
            part.replace(part.with_suffix(""))
    except OSError as error:
        raise SystemFault(
            str(folder), error.strerror or str(error), "a folder that can be written"
        ) from error
    finally:
        for part in parts:
            with suppress(OSError):
                part.unlink()


def _line(alarm: Mapping[str, Any]) -> dict[str, Any]:
    return {name: alarm[name] for name in _FIELDS if name in alarm}


def _folders(sessions: Sequence[Path], out: Path) -> list[Path]:
    """Where each session's report goes; refuses what would mix reports with other files."""
    stems = [path.stem for path in sessions]
    doubled = next((stem for stem in stems if stems.count(stem) > 1), None)
    if doubled is not None:
        raise SessionError(
            ", ".join(str(path) for path in sessions if path.stem == doubled),
            f"the name {doubled!r} more than once",
            "sessions of different names, for each gets a folder of its name",
            "Review them one by one.",
        )
    foreign = _foreign(out)
    if foreign is not None:
        raise SystemFault(
            str(out),
            f"{foreign.name!r} in it",
            "an empty folder, or one of an earlier review",
            "Name another.",
        )
    return [out / stem for stem in stems] if len(stems) > 1 else [out]


def _foreign(folder: Path, deep: bool = True) -> Path | None:
    """Return something in the folder that no review wrote, if there is: reports, or folders of reports."""
    try:
        entries = sorted(folder.iterdir())
    except FileNotFoundError:
        return None
    except OSError as error:
        raise SystemFault(str(folder), error.strerror or str(error), "a folder for the reports") from error
    for entry in entries:
        if entry.is_dir():
            if not deep or _foreign(entry, deep=False) is not None:
                return entry
        elif entry.name not in _OURS:
            return entry
    return None


def _number_of(session: Session, from_s: float) -> int:
    """Number of the last snapshot at or before so many seconds after the session's begin."""
    times = snapshot_times(session)
    return max(0, bisect_right(times, times[0] + from_s * 1e9) - 1) if times else 0


def _summary(
    replay: Replay,
    config: Config | None,
    alarms: list[dict[str, Any]],
    said: list[dict[str, Any]],
    damaged: str | None,
) -> dict[str, Any]:
    session = replay.session
    return {
        "session": str(session.path),
        "run": session.run,
        "versions": session.versions,
        "reviewed_with": version("limbtell"),
        "config": "the session's own" if config is None else str(config.path),
        "begin_utc": _utc(session, replay.begin_ns),
        "from_s": (replay.start_ns - replay.begin_ns) / 1e9,
        "duration_s": (replay.end_ns - replay.start_ns) / 1e9,
        "exact": not (replay.gaps or damaged or config),
        "confirmed_snapshots": replay.confirmed,
        "samples": _samples(replay),
        "coverage_s": _coverage(replay),
        "alarms": _tally(alarms),
        "events": _events(said),
        "gaps": [asdict(gap) for gap in replay.gaps],
        "truncated": session.truncated,
        "damaged": damaged,
        "notes": _notes(replay, config, damaged),
        "caution": CAUTION,
    }


def _samples(replay: Replay) -> dict[str, Any]:
    """Every counter of the data path, by name."""
    counters = replay.counters
    samples: dict[str, Any] = {name: int(value) for name, value in counters.items() if value.ndim == 0}
    samples["bad"] = {_word(signal): int(counters["bad"][signal]) for signal in Signal if signal != Signal.OK}
    joints = replay.setup.facts.joints
    samples["at_limit"] = dict(zip(joints, counters["at_limit"].tolist(), strict=True))
    return samples


def _coverage(replay: Replay) -> dict[str, dict[str, float]]:
    """Seconds by coverage and reason."""
    seconds = replay.counters["coverage_ns"] / 1e9
    return {
        _word(coverage): {
            _word(reason): float(seconds[coverage, reason]) for reason in Reason if seconds[coverage, reason]
        }
        for coverage in Coverage
    }


def _word(value: Coverage | Reason | Signal) -> str:
    return value.name.lower().replace("_", "-")


def _tally(alarms: list[dict[str, Any]]) -> dict[str, dict[str, int]]:
    """How often alarms of each kind went into each state."""
    tally: dict[str, dict[str, int]] = {}
    for alarm in alarms:
        states = tally.setdefault(alarm["kind"], {})
        states[alarm["state"]] = states.get(alarm["state"], 0) + 1
    return tally


def _events(bodies: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """One entry for each event, as last stated, by number.

    Null is what came or went outside the reviewed stretch, and the alarm of what was only stated. `series` is
    how the probabilities of the likeliest explanations went.
    """
    events: dict[int, dict[str, Any]] = {}
    for said in bodies:
        event = events.setdefault(said["event"], _unseen(said["event"]))
        event |= {name: said[name] for name in _STATED}
        if "state" in said:
            came = said["state"] == UNACKNOWLEDGED
            if came and event["raised_t"] is None:
                event |= {"raised_t": said["t"], "raised_utc": said["utc"]}
            event |= {"cleared_t": None if came else said["t"], "cleared_utc": None if came else said["utc"]}
            event |= {name: said[name] for name in _ALARMED}
        else:
            event |= {name: said[name] for name in _STATED_ONLY}
            top = said["explanations"][:_TOP]
            event["series"].append({name: said[name] for name in _SERIES} | {"explanations": top})
    return [events[number] for number in sorted(events)]


def _unseen(number: int) -> dict[str, Any]:
    times = ("raised_t", "raised_utc", "cleared_t", "cleared_utc")
    return (
        {"event": number}
        | dict.fromkeys((*times, *_ALARMED))
        | {"lasting": False, "continues": None, "contact": None, "series": []}
    )


def _notes(replay: Replay, config: Config | None, damaged: str | None) -> list[str]:
    """What a reader has to know before trusting the numbers."""
    session = replay.session
    notes = []
    if config is not None:
        notes.append("Another configuration was given: begun afresh, and not what the live run saw.")
    for gap in replay.gaps if config is None else ():
        goes_on = (
            "nothing after it is replayed" if gap.resumed_s is None else f"goes on at {gap.resumed_s:.3f} s"
        )
        notes.append(f"Exact replay ends at {gap.at_s:.3f} s and {goes_on}: {gap.reason}.")
    if session.versions.get("limbtell", version("limbtell")) != version("limbtell"):
        notes.append("Another version recorded this: decisions are the same where the methods are.")
    if "assumed" in session.versions:
        notes.append(f"Converted; assumed of the robot: {session.versions['assumed']}.")
    if session.truncated:
        notes.append(
            "The session was cut: after a crash at most its last chunk is missing, else all after it."
        )
    if replay.counters["received"] and not replay.counters["stepped"]:
        notes.append("No sample of the session fits this configuration.")
    if damaged is not None:
        notes.append("The session is damaged: only what lies before the damage was reviewed.")
    return notes


def _utc(session: Session, time_ns: int) -> str | None:
    if session.utc_uncertainty_ns == UTC_UNKNOWN_NS:
        return None
    moment = datetime(1970, 1, 1) + timedelta(microseconds=(time_ns + session.utc_offset_ns) // 1000)
    return moment.isoformat(timespec="microseconds") + "Z"


def _show(console: Console, summary: Mapping[str, Any], folder: Path) -> None:
    """Show a person the summary."""
    samples = summary["samples"]
    watched = ", ".join(
        f"{coverage} {seconds:.1f} s" + ("" if reason == "none" else f" ({reason})")
        for coverage, reasons in summary["coverage_s"].items()
        for reason, seconds in reasons.items()
    )
    figures = Table(title=escape(summary["session"]), show_header=False, title_justify="left")
    figures.add_row("time", f"{summary['duration_s']:.3f} s from {summary['from_s']:.3f} s")
    figures.add_row(
        "samples",
        f"{samples['received']} received, {samples['stepped']} stepped, {samples['lost']} lost, "
        f"{samples['late']} late, {sum(samples['bad'].values())} not credible, {samples['refused']} refused, "
        f"{samples['wire_errors']} not understood",
    )
    figures.add_row("coverage", watched)
    figures.add_row("exact replay", "yes" if summary["exact"] else "no")
    figures.add_row("events", str(len(summary["events"])))
    figures.add_row("reports", escape(str(folder)))
    console.print(figures)
    if summary["events"]:
        console.print(_event_table(summary["events"]))
    for note in (*summary["notes"], summary["damaged"], summary["caution"]):
        if note:
            console.print(note, markup=False)


def _when(event: Mapping[str, Any]) -> str:
    """Return when it was raised by both clocks: UTC, and seconds of the robot's own."""
    if event["raised_t"] is None:
        return "before" if event["kind"] else "no alarm"
    utc = event["raised_utc"] or "UTC not known"
    return f"{utc}\nrobot clock {event['raised_t']:.3f} s"


def _lasted(event: Mapping[str, Any]) -> str:
    if None in (event["raised_t"], event["cleared_t"]):
        return "" if event["cleared_t"] is not None else "stands"
    return f"{event['cleared_t'] - event['raised_t']:.3f} s"


def _event_table(events: Sequence[Mapping[str, Any]]) -> Table:
    table = Table("event", "verdict", "probability", "where", "raised", "lasted", "size")
    for event in events[:_SHOWN_EVENTS]:
        size, probability = event["size"], event["probability"]
        table.add_row(
            str(event["event"]),
            f"{event['verdict']}: {event['detail']}",
            "" if probability is None else f"{probability:.3f}",
            escape(event["joint"] or event["link"] or ""),
            _when(event),
            _lasted(event),
            "" if size is None else size_in_words(size),
        )
    if len(events) > _SHOWN_EVENTS:
        table.caption = f"The first {_SHOWN_EVENTS} of {len(events)}; all are in {SUMMARY}."
    return table
