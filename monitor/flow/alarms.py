"""When people hear of it: alarms and their states in the words of ANSI/ISA-18.2 and IEC 62682.

An alarm stands for one condition (kind, detail, joint). It is raised, and it clears; acknowledging is a
later addition, so that a cleared alarm stays `returned-to-normal-unacknowledged`. The alarm of an event may
be stated anew while it stands, as another kind, when more is known.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, NamedTuple

from monitor.flow.verdict import Size, Verdict

NORMAL, UNACKNOWLEDGED = "normal", "unacknowledged"
RETURNED = "returned-to-normal-unacknowledged"

# (state, what happened) → next state; what is not listed changes nothing.
TRANSITIONS = {
    (NORMAL, "raised"): UNACKNOWLEDGED,
    (UNACKNOWLEDGED, "cleared"): RETURNED,
    (RETURNED, "raised"): UNACKNOWLEDGED,
}


class Key(NamedTuple):
    """Which condition an alarm is about."""

    kind: str
    detail: str
    joint: str | None = None


@dataclass
class Alarm:
    """The standing of one condition."""

    state: str
    event: int
    verdict: Verdict
    kind: str


class Transition(NamedTuple):
    """An alarm went from one state to another."""

    key: Key
    alarm: Alarm


class AlarmBoard:
    """All alarms that are not in their normal state."""

    def __init__(self) -> None:
        self._alarms: dict[Key, Alarm] = {}

    def stands(self, key: Key) -> bool:
        """Whether the condition is present."""
        alarm = self._alarms.get(key)
        return alarm is not None and alarm.state == UNACKNOWLEDGED

    def standing(self) -> list[Alarm]:
        """Return the alarms whose condition is present."""
        return [alarm for alarm in self._alarms.values() if alarm.state == UNACKNOWLEDGED]

    def raised(self, key: Key, verdict: Verdict, event: int, kind: str = "") -> Transition | None:
        """The condition came; None where it stands already. Its kind is the key's, if none is given."""
        before = self._alarms.get(key)
        after = TRANSITIONS.get((before.state if before else NORMAL, "raised"))
        if after is None:
            return None
        self._alarms[key] = Alarm(after, event, verdict, kind or key.kind)
        return Transition(key, self._alarms[key])

    def restated(self, key: Key, verdict: Verdict, kind: str) -> Transition | None:
        """More is known of a condition that stands, else None: state and event stay."""
        if not self.stands(key):
            return None
        alarm = self._alarms[key]
        self._alarms[key] = Alarm(alarm.state, alarm.event, verdict, kind)
        return Transition(key, self._alarms[key])

    def moved(self, key: Key, to: Key) -> None:
        """Let the alarm stand for another condition from now on."""
        self._alarms[to] = self._alarms.pop(key)

    def cleared(self, key: Key, verdict: Verdict | None = None) -> Transition | None:
        """The condition went; `verdict` says what is known of it by now."""
        alarm = self._alarms.get(key)
        if alarm is None:
            return None
        after = TRANSITIONS.get((alarm.state, "cleared"))
        if after is None:
            return None
        self._alarms[key] = Alarm(after, alarm.event, verdict or alarm.verdict, alarm.kind)
        return Transition(key, self._alarms[key])

    def snapshot(self) -> list[Any]:
        """Return what is needed to go on elsewhere; plain values."""
        return [
            [list(key), alarm.state, alarm.event, _plain(alarm.verdict), alarm.kind]
            for key, alarm in self._alarms.items()
        ]

    def restore(self, saved: list[Any]) -> None:
        """Go on from a snapshot."""
        self._alarms = {
            Key(*key): Alarm(state, event, _verdict(verdict), kind)
            for key, state, event, verdict, kind in saved
        }


def _plain(verdict: Verdict) -> dict[str, Any]:
    return verdict._asdict() | {"size": verdict.size and list(verdict.size)}


def _verdict(saved: dict[str, Any]) -> Verdict:
    size = saved["size"] and Size(*saved["size"])
    return Verdict(**saved | {"size": size, "alternatives": tuple(saved["alternatives"])})


def in_words(body: Mapping[str, Any]) -> str:
    """Return an alarm message as one line for a person: both clocks, state, what, where, how large."""
    size = body["size"]
    how = f" {size_in_words(size)}" if size else ""
    where = f" at {body['joint'] or body['link']}" if body["joint"] or body["link"] else ""
    sure = f", probability {body['probability']:.3f}" if body["probability"] is not None else ""
    text = f": {body['text']}" if body.get("text") else ""
    what = f"{body['kind']} ({body['verdict']}, {body['detail']})"
    utc = body["utc"] or "UTC not known"
    return f"{utc} ({body['t']:.3f} s)  {body['state']:<34} {what}{where}{how}{sure}{text}"


def size_in_words(size: Mapping[str, Any]) -> str:
    """Return a size with its uncertainty, one standard deviation, and its unit."""
    unit = "" if size["unit"] == "1" else f" {size['unit']}"
    sd = "" if size["sd"] is None else f" ± {size['sd']:.2g}"
    return f"{size['value']:.3g}{sd}{unit}"
