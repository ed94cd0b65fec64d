"""What the monitor makes of simulated arms, by world: noticed, delays, confusion, false events, reliability.

    python -m tests.worlds.score [--worlds rigid,dip,elastic,sensed] [--robots 2] [--sessions 12]
        [--held-out] [--default] [--without-link-torque]

Model, band and limits are fitted to fault-free sessions of the same robot (others than the ones judged); with
`--default` the configuration alone is used; with `--without-link-torque` the torque sensors of the sensed
world are not configured, and what they read wrong does not count. Without `--held-out` seeds below 1000 are
taken, those of tuning.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter, defaultdict
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from itertools import pairwise, product
from typing import Any

import numpy as np
import tomlkit

from monitor.commission.calibrate import calibrate
from monitor.commission.drive import Samples, until
from monitor.flow import verdict as verdicts
from monitor.flow.layout import Notice
from monitor.flow.verdict import Verdict
from monitor.setup.build import Setup, build
from monitor.setup.config import Config, loads
from tests.worlds import arms
from tests.worlds.sessions import HELD_OUT_FROM, Truth, WorldSession

MONTH_S = 30.0 * 24.0 * 3600.0
FIT_SESSIONS, BAND_SESSIONS, FIT_S = 3, 3, 120.0
_LATE_S = 0.35  # an event may open so long after what made it
_BITS = int(
    Notice.EVENT_OPENED | Notice.EVENT_ENDED | Notice.WEIGHED | Notice.BAD_SAMPLE | Notice.FAULT_CONFIRMED
)
# Effects below these shares of rated torque are not counted as misses or mistakes.
_LEAST_CONTACT, _LEAST_FAULT, _BAR_CONTACT = 0.03, 0.02, 0.05
_STANDS = 0.03  # rad/s
_BINS = (0.9, 0.95, 0.99, 0.999, 1.0 + 1e-9)


@dataclass
class Event:
    """One event as it was told; times in seconds of the session."""

    opened_s: float
    drifted: bool
    ended_s: float = np.inf
    verdict: Verdict | None = None  # the last one


@dataclass
class Tally:
    """Counts of one world."""

    seconds: float = 0.0
    noticed: list[bool] = field(default_factory=list)
    noticed_standing: list[bool] = field(default_factory=list)
    delays_s: list[float] = field(default_factory=list)
    confusion: dict[str, Counter[str]] = field(default_factory=lambda: defaultdict(Counter))
    joints_right: list[bool] = field(default_factory=list)
    links_off: list[int] = field(default_factory=list)
    forces_right: list[bool] = field(default_factory=list)
    said: list[tuple[float, bool]] = field(default_factory=list)
    false_events: int = 0


def config_of(session: WorldSession, link_torque: bool = True) -> Config:
    """Return the configuration a maker's datasheet would give for the robot of a session."""
    joints = [dict(joint) for joint in session.joints]
    if not link_torque:
        joints = [joint | {"link_torque_sensor": False} for joint in joints]
    robot = {"urdf": "robot.urdf", "joint": joints}
    text = tomlkit.dumps({"schema": 1, "robot": robot})
    return loads(text, "robot.toml", {"robot.urdf": session.urdf})


def samples_of(session: WorldSession) -> Samples:
    """Return a session as the step takes it."""
    t_ns = np.round(session.t * 1e9).astype(np.int64) + 1_000_000_000
    q, qd, tau = (np.ascontiguousarray(x, dtype=float) for x in (session.q, session.qd, session.tau))
    return Samples(t_ns, q, qd, tau, np.zeros((len(t_ns), 0)), tau_link=session.tau_link)


def prepared(world: str, robot: int, first: int, default: bool, link_torque: bool = True) -> Setup:
    """Return a robot made ready, by default alone or fitted to its own fault-free work."""
    count = 1 if default else FIT_SESSIONS + BAND_SESSIONS
    sessions = [arms.fault_free(world, robot, first + 10 + i, FIT_S) for i in range(count)]
    config = config_of(sessions[0], link_torque)
    if default:
        return build(config)
    samples = [samples_of(one) for one in sessions]
    calibration, _ = calibrate(config, samples[:FIT_SESSIONS], samples[FIT_SESSIONS:], MONTH_S)
    return build(config, calibration)


def played(setup: Setup, samples: Samples) -> tuple[list[Event], list[float]]:
    """Return the events of a session in order, and the times of bad samples."""
    blocks = setup.blocks()
    blocks.inputs["judged"], blocks.inputs["drive"] = 1, 1
    state, out = blocks.state[0], blocks.outputs[0]
    events: list[Event] = []
    bad: list[float] = []
    k, current = 0, None
    while k < len(samples.t_ns):
        k = until(blocks, samples, k, _BITS)
        notice, t = int(out["notice"]), float(samples.t_ns[k - 1] - samples.t_ns[0]) * 1e-9
        if notice & Notice.BAD_SAMPLE:
            bad.append(t)
        if notice & Notice.EVENT_OPENED:
            current = Event(t, bool(state["event_drifted"]))
            events.append(current)
        told = notice & (Notice.WEIGHED | Notice.FAULT_CONFIRMED) and state["weighed"] >= verdicts.LEAST_STEPS
        if current is not None and told:
            current.verdict = verdicts.of_event(setup.facts, blocks)
        if current is not None and not state["event_open"]:
            current.ended_s, current = t, None
    return events, bad


def judge(tally: Tally, session: WorldSession, events: Sequence[Event], bad: Sequence[float]) -> None:
    """Add what was said of a session to the tally of its world."""
    tally.seconds += float(session.t[-1])
    for i, truth in enumerate(session.truths):
        # What happens during a lasting fault is judged by itself.
        within = [other for other in session.truths if other.during == i]
        opened = [e for e in events if _explains(truth, e) and not any(_explains(t, e) for t in within)]
        running = [e for e in events if e.opened_s < truth.start_s < e.ended_s]
        spoiled = any(truth.start_s - 0.02 <= t <= truth.end_s + _LATE_S for t in bad)
        if truth.kind == "contact" and truth.during is None and (truth.effect or 0.0) >= _BAR_CONTACT:
            standing = _stands(session, truth)
            (tally.noticed_standing if standing else tally.noticed).append(bool(opened or running))
            if opened and truth.passes_s is not None:
                tally.delays_s.append(opened[0].opened_s - truth.passes_s)
        if truth.kind == "signal":
            told = "signal" if spoiled else next((_word(e) for e in opened), "missed")
            tally.confusion["signal"][told] += 1
        elif not _slight(truth):
            _confuse(tally, truth, opened)
    tally.false_events += sum(not any(_explains(truth, e) for truth in session.truths) for e in events)


def _stands(session: WorldSession, truth: Truth) -> bool:
    """Whether the joint that a contact loads most stands: friction may hide twice its Coulomb torque."""
    joint = [one["name"] for one in session.joints].index(truth.effect_joint)
    during = (session.t >= truth.start_s) & (session.t <= truth.end_s)
    return bool(np.median(np.abs(session.qd[during, joint])) < _STANDS)


def _slight(truth: Truth) -> bool:
    effect = truth.effect or 0.0
    least = {"contact": _LEAST_CONTACT, "actuator": _LEAST_FAULT, "torque-sensor": _LEAST_FAULT}
    return effect < least.get(truth.kind, 0.0)


def _word(event: Event) -> str:
    return event.verdict.verdict if event.verdict else "undecided"


def _explains(truth: Truth, event: Event) -> bool:
    return truth.start_s - 0.02 <= event.opened_s <= truth.end_s + _LATE_S


def _confuse(tally: Tally, truth: Truth, opened: Sequence[Event]) -> None:
    name = "contact in a fault" if truth.during is not None else truth.kind
    weighed = [event for event in opened if event.verdict is not None]
    if not weighed:
        tally.confusion[name]["missed"] += 1
        return
    # Of several events in a long fault the longest counts; beside a fault the first that is called a contact.
    event = max(weighed, key=lambda e: min(e.ended_s, truth.end_s) - e.opened_s)
    if truth.during is not None:
        event = next((e for e in weighed if _word(e) == "contact"), event)
    said = event.verdict
    assert said is not None
    tally.confusion[name][said.verdict] += 1
    if said.verdict == "undecided":
        return
    tally.said.append((said.probability or 0.0, said.verdict == truth.kind))
    if said.verdict == truth.kind == "actuator":
        tally.joints_right.append(said.joint == truth.joint)
    if said.verdict == truth.kind == "contact" and said.size is not None:
        tally.links_off.append(abs(_place(said.link) - _place(truth.link)))
        allowed = max(0.25 * truth.size, 2.0 * (said.size.sd or 0.0))
        tally.forces_right.append(abs(said.size.value - truth.size) <= allowed)


def _place(link: str | None) -> int:
    return int((link or "link0").removeprefix("link"))


def lines(world: str, tally: Tally) -> Iterator[str]:
    """Yield the report of one world."""
    yield f"{world}: {tally.seconds / 60.0:.1f} min"
    delays = 1e3 * np.array(tally.delays_s or [np.nan])
    yield (
        f"  contacts of 5 % of rated and more: moving: noticed {sum(tally.noticed)} of {len(tally.noticed)}, "
        f"delay from 3 %: median {np.median(delays):.1f} ms, 90 % {np.quantile(delays, 0.9):.1f} ms"
    )
    yield (
        f"  the same while that joint stands: noticed {sum(tally.noticed_standing)} "
        f"of {len(tally.noticed_standing)}"
    )
    for name, row in sorted(tally.confusion.items()):
        yield f"  {name:>20}: " + ", ".join(f"{word} {count}" for word, count in row.most_common())
    right = [good for _, good in tally.said]
    if right:
        yield f"  decided: right {np.mean(right):.3f} of {len(right)}"
    for low, high in pairwise(_BINS):
        those = [good for p, good in tally.said if low <= p < high]
        if those:
            yield f"    said {low:g} to {min(high, 1.0):g}: right {np.mean(those):.3f} of {len(those)}"
    if tally.joints_right:
        yield f"  actuator's joint right: {np.mean(tally.joints_right):.3f} of {len(tally.joints_right)}"
    if tally.links_off:
        off = np.array(tally.links_off)
        yield (
            f"  link exact {np.mean(off == 0):.2f}, within one {np.mean(off <= 1):.2f}; "
            f"force within 25 % or 2 sd {np.mean(tally.forces_right):.2f} of {len(off)}"
        )
    yield f"  events without a cause: {tally.false_events}"


def main(arguments: Sequence[str]) -> None:
    """Run the command of the head of this file."""
    parser = argparse.ArgumentParser(prog="python -m tests.worlds.score")
    parser.add_argument("--worlds", default=",".join(arms.WORLDS))
    parser.add_argument("--robots", type=int, default=2)
    parser.add_argument("--sessions", type=int, default=12)
    parser.add_argument("--held-out", action="store_true")
    parser.add_argument("--default", action="store_true")
    parser.add_argument("--without-link-torque", action="store_true")
    chosen: Any = parser.parse_args(arguments)
    first = HELD_OUT_FROM if chosen.held_out else 0
    for world in chosen.worlds.split(","):
        tally = Tally()
        sensors = not chosen.without_link_torque
        setups = {
            r: prepared(world, first + r, first, chosen.default, sensors) for r in range(1, chosen.robots + 1)
        }
        for robot, seed in product(setups, range(chosen.sessions)):
            session = arms.trial(world, first + robot, first + 100 + seed)
            if not sensors:
                seen = tuple(truth for truth in session.truths if truth.kind != "torque-sensor")
                session = replace(session, truths=seen)
            judge(tally, session, *played(setups[robot], samples_of(session)))
        for line in lines(world, tally):
            sys.stdout.write(line + "\n")
        sys.stdout.flush()


if __name__ == "__main__":
    main(sys.argv[1:])
