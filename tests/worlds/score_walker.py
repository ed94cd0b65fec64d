"""What the monitor makes of the simulated walker, by motion: false events, pushes, footholds, faults.

    python -m tests.worlds.score_walker [--motions stand,crawl,trot,hoisted] [--robots 1] [--sessions 4]
        [--quiet 2] [--held-out]

Model, band and limits are fitted to fault-free sessions of the same robot, other ones than those judged:
hoisted, crawl and trot for the model, all motions for the band. `--quiet` is the number of fault-free
sessions of a minute per motion that are searched for false events. Without `--held-out` seeds below 1000 are
taken, those of tuning.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter, defaultdict
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import tomlkit

from monitor.commission.calibrate import calibrate
from monitor.commission.drive import Samples, ready, until
from monitor.flow import verdict as verdicts
from monitor.flow.layout import Notice
from monitor.flow.verdict import Verdict
from monitor.setup.build import Setup, build
from monitor.setup.config import Config, loads
from tests.worlds.sessions import HELD_OUT_FROM
from tests.worlds.walker import MOTIONS, WalkerSession, WalkerTruth, walker_session

MONTH_S = 30.0 * 24.0 * 3600.0
SECONDS = 60.0
_FOR_MODEL = (("hoisted", 11), ("crawl", 11), ("trot", 11))
_FOR_BAND = (("hoisted", 12), ("crawl", 12), ("trot", 12), ("stand", 12), ("crawl", 13), ("trot", 13))
_LATE_S = 0.35  # an event may open so long after what made it
_PROMPT_S = 0.06
_BITS = int(
    Notice.EVENT_OPENED | Notice.EVENT_ENDED | Notice.WEIGHED | Notice.BAD_SAMPLE | Notice.FAULT_CONFIRMED
)


@dataclass
class Event:
    """One event as it was told; times in seconds of the session, `said` each change of verdict or place."""

    opened_s: float
    ended_s: float = np.inf
    said: list[tuple[float, Verdict]] = field(default_factory=list)

    @property
    def last(self) -> Verdict | None:
        """The last word on it."""
        return self.said[-1][1] if self.said else None


@dataclass
class Tally:
    """Counts of one motion."""

    seconds: float = 0.0
    quiet_s: float = 0.0
    false_quiet: list[str] = field(default_factory=list)
    false_busy: list[str] = field(default_factory=list)
    standard: list[bool] = field(default_factory=list)
    pushes: list[bool] = field(default_factory=list)
    delays_s: dict[str, list[float]] = field(default_factory=lambda: defaultdict(list))
    prompt: dict[str, Counter[str]] = field(default_factory=lambda: defaultdict(Counter))
    confusion: dict[str, Counter[str]] = field(default_factory=lambda: defaultdict(Counter))
    places: dict[str, list[bool]] = field(default_factory=lambda: defaultdict(list))


def config_of(session: WalkerSession) -> Config:
    """Return the configuration a maker's datasheet would give for the robot of a session."""
    robot = {
        "urdf": "robot.urdf",
        "base": "floating",
        "joint": [dict(joint) for joint in session.joints],
        "foot": [dict(foot) for foot in session.feet],
    }
    text = tomlkit.dumps({"schema": 1, "robot": robot, "watch": WATCH})
    return loads(text, "robot.toml", {"robot.urdf": session.urdf})


WATCH: dict[str, Any] = {"slow_walk": 0.3}


def samples_of(session: WalkerSession) -> Samples:
    """Return a session as the step takes it."""
    t_ns = np.round(session.t * 1e9).astype(np.int64) + 1_000_000_000
    base = np.hstack([session.base_p, session.base_quat, session.base_v, session.base_w])
    q, qd, tau, base = (
        np.ascontiguousarray(x, dtype=float) for x in (session.q, session.qd, session.tau, base)
    )
    feet, hoisted = session.planned.astype(np.int64), session.support == "hoisted"
    return Samples(t_ns, q, qd, tau, base, feet, hoisted=hoisted)


def prepared(robot: int, first: int) -> Setup:
    """Return a robot fitted to its own fault-free motion."""

    def quiet(which: Sequence[tuple[str, int]]) -> list[WalkerSession]:
        return [walker_session(motion, robot, first + seed, SECONDS, False) for motion, seed in which]

    for_model, for_band = quiet(_FOR_MODEL), quiet(_FOR_BAND)
    config = config_of(for_model[0])
    calibration, _ = calibrate(
        config, [samples_of(one) for one in for_model], [samples_of(one) for one in for_band], MONTH_S
    )
    return build(config, calibration)


def played(setup: Setup, samples: Samples) -> list[Event]:
    """Return the events of a session in order."""
    blocks = ready(setup, samples)
    state, out = blocks.state[0], blocks.outputs[0]
    events: list[Event] = []
    k, current = 0, None
    while k < len(samples.t_ns):
        k = until(blocks, samples, k, _BITS)
        notice, t = int(out["notice"]), float(samples.t_ns[k - 1] - samples.t_ns[0]) * 1e-9
        if notice & Notice.EVENT_OPENED:
            current = Event(t)
            events.append(current)
        told = notice & (Notice.WEIGHED | Notice.FAULT_CONFIRMED) and state["weighed"] >= verdicts.LEAST_STEPS
        if current is not None and told:
            now = verdicts.of_event(setup.facts, blocks)
            was = current.last
            if was is None or (was.verdict, was.joint, was.link) != (now.verdict, now.joint, now.link):
                current.said.append((t, now))
            else:
                current.said[-1] = (current.said[-1][0], now)
        if current is not None and not state["event_open"]:
            current.ended_s, current = t, None
    return events


def judge(tally: Tally, session: WalkerSession, events: Sequence[Event]) -> None:
    """Add what was said of a session to the tally of its motion."""
    tally.seconds += float(session.t[-1])
    for truth in session.truths:
        opened = [e for e in events if _explains(truth, e)]
        running = [e for e in events if e.opened_s < truth.start_s < e.ended_s]
        if truth.kind == "contact":
            name = "trunk push" if truth.link == "trunk" else f"leg push in {truth.phase}"
            noticed = bool(opened or running)
            if truth.link == "trunk" and truth.during is None:
                (tally.standard if _is_standard(truth) else tally.pushes).append(noticed)
        elif truth.kind == "actuator":
            name = f"actuator in {truth.phase}"
        else:
            name = truth.kind
            tally.prompt[name][_promptly(truth, opened)] += 1
        if truth.during is not None:
            name += ", during a fault"
        elif opened:
            tally.delays_s[name].append(opened[0].opened_s - truth.start_s)
        _confuse(tally, name, truth, opened)
    for event in events:
        if not any(_explains(truth, event) for truth in session.truths):
            tally.false_busy.append(_word(event))


def _is_standard(truth: WalkerTruth) -> bool:
    return abs(truth.size - 40.0) < 1e-6 and abs(truth.end_s - truth.start_s - 0.1) < 2e-3


def _promptly(truth: WalkerTruth, opened: Sequence[Event]) -> str:
    """Return what was said of a foot within the time allowed."""
    by = truth.start_s + _PROMPT_S
    if not any(e.opened_s <= by for e in opened):
        return "noticed too late" if opened else "missed"
    named = [
        v for e in opened for t, v in e.said if t <= by and v.verdict == truth.kind and v.link == truth.foot
    ]
    if named:
        return "named in time"
    late = any(v.verdict == truth.kind and v.link == truth.foot for e in opened for _, v in e.said)
    return "noticed in time, named later" if late else "noticed in time, not named"


def _explains(truth: WalkerTruth, event: Event) -> bool:
    return truth.start_s - 0.02 <= event.opened_s <= truth.end_s + _LATE_S


def _word(event: Event) -> str:
    return event.last.verdict if event.last else "not weighed"


def _confuse(tally: Tally, name: str, truth: WalkerTruth, opened: Sequence[Event]) -> None:
    weighed = [event for event in opened if event.last is not None]
    if not weighed:
        tally.confusion[name]["missed" if not opened else "not weighed"] += 1
        return
    event = max(weighed, key=lambda e: min(e.ended_s, truth.end_s) - e.opened_s)
    if truth.during is not None:
        event = next((e for e in weighed if _word(e) == truth.kind), event)
    said = event.last
    assert said is not None
    tally.confusion[name][said.verdict] += 1
    if said.verdict == truth.kind == "actuator":
        tally.places[name].append(said.joint == truth.joint)
    elif said.verdict == truth.kind == "contact":
        tally.places[name].append(said.link == truth.link)
    elif said.verdict == truth.kind:
        tally.places[name].append(said.link == truth.foot)


def lines(motion: str, tally: Tally) -> Iterator[str]:
    """Yield the report of one motion."""
    yield f"{motion}: {tally.seconds / 60.0:.1f} min with happenings, {tally.quiet_s / 60.0:.1f} min without"
    yield f"  false events without happenings: {len(tally.false_quiet)} {_counted(tally.false_quiet)}"
    yield f"  events without a cause beside happenings: {len(tally.false_busy)} {_counted(tally.false_busy)}"
    for name, noticed in (("40 N for 100 ms", tally.standard), ("others", tally.pushes)):
        yield f"  pushes on the trunk, {name}: noticed {sum(noticed)} of {len(noticed)}"
    for name, told in sorted(tally.prompt.items()):
        yield f"  {name} within 60 ms: " + ", ".join(f"{word} {count}" for word, count in told.most_common())
    for name, row in sorted(tally.confusion.items()):
        delays = 1e3 * np.array(tally.delays_s.get(name) or [np.nan])
        right = tally.places.get(name, [])
        yield (
            f"  {name:>28}: "
            + ", ".join(f"{word} {count}" for word, count in row.most_common())
            + (f"; place right {sum(right)} of {len(right)}" if right else "")
            + f"; delay median {np.median(delays):.0f} ms, 90 % {np.quantile(delays, 0.9):.0f} ms"
        )


def _counted(words: Sequence[str]) -> str:
    return ", ".join(f"{word} {count}" for word, count in Counter(words).most_common())


def main(arguments: Sequence[str]) -> None:
    """Run the command of the head of this file."""
    parser = argparse.ArgumentParser(prog="python -m tests.worlds.score_walker")
    parser.add_argument("--motions", default=",".join(MOTIONS))
    parser.add_argument("--robots", type=int, default=1)
    parser.add_argument("--sessions", type=int, default=4)
    parser.add_argument("--quiet", type=int, default=2)
    parser.add_argument("--held-out", action="store_true")
    chosen: Any = parser.parse_args(arguments)
    first = HELD_OUT_FROM if chosen.held_out else 0
    setups = {first + r: prepared(first + r, first) for r in range(1, chosen.robots + 1)}
    for motion in chosen.motions.split(","):
        tally = Tally()
        for robot, setup in setups.items():
            for seed in range(chosen.sessions):
                session = walker_session(motion, robot, first + 101 + seed, SECONDS)
                judge(tally, session, played(setup, samples_of(session)))
            for seed in range(chosen.quiet):
                session = walker_session(motion, robot, first + 51 + seed, SECONDS, False)
                tally.quiet_s += float(session.t[-1])
                tally.false_quiet += [_word(event) for event in played(setup, samples_of(session))]
        for line in lines(motion, tally):
            sys.stdout.write(line + "\n")
        sys.stdout.flush()


if __name__ == "__main__":
    main(sys.argv[1:])
