"""When people hear of it: alarms and their states in the words of ANSI/ISA-18.2 and IEC 62682.

An alarm stands for one condition (kind, detail, joint). It is raised, and it clears; acknowledging is a later
addition, so that a cleared alarm stays `returned-to-normal-unacknowledged`.
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

    def standing(self) -> list[Key]:
        """Return the conditions that are present."""
        return [key for key in self._alarms if self.stands(key)]

    def raised(self, key: Key, verdict: Verdict, event: int) -> Transition | None:
        """The condition came; None where it stands already."""
        alarm = self._alarms.get(key) or Alarm(NORMAL, event, verdict)
        after = TRANSITIONS.get((alarm.state, "raised"))
        if after is None:
            return None
        self._alarms[key] = Alarm(after, event, verdict)
        return Transition(key, self._alarms[key])

    def cleared(self, key: Key, verdict: Verdict | None = None) -> Transition | None:
        """The condition went; `verdict` says what is known of it by now."""
        alarm = self._alarms.get(key)
        if alarm is None:
            return None
        after = TRANSITIONS.get((alarm.state, "cleared"))
        if after is None:
            return None
        self._alarms[key] = Alarm(after, alarm.event, verdict or alarm.verdict)
        return Transition(key, self._alarms[key])

    def snapshot(self) -> list[Any]:
        """Return what is needed to go on elsewhere; plain values."""
        return [
            [list(key), alarm.state, alarm.event, _plain(alarm.verdict)]
            for key, alarm in self._alarms.items()
        ]

    def restore(self, saved: list[Any]) -> None:
        """Go on from a snapshot."""
        self._alarms = {
            Key(*key): Alarm(state, event, _verdict(verdict)) for key, state, event, verdict in saved
        }


def _plain(verdict: Verdict) -> dict[str, Any]:
    return verdict._asdict() | {"size": verdict.size and list(verdict.size)}


def _verdict(saved: dict[str, Any]) -> Verdict:
    size = saved["size"] and Size(*saved["size"])
    return Verdict(**saved | {"size": size, "alternatives": tuple(saved["alternatives"])})


def in_words(body: Mapping[str, Any]) -> str:
    """Return an alarm message as one line for a person: both clocks, state, what, where, how large."""
    size = body["size"]
    how = f" {size['value']:+.1f} {size['unit']}" if size else ""
    where = f" at {body['joint']}" if body["joint"] else ""
    text = f": {body['text']}" if body.get("text") else ""
    what = f"{body['kind']} ({body['verdict']}, {body['detail']})"
    utc = body["utc"] or "UTC not known"
    return f"{utc} ({body['t']:.3f} s)  {body['state']:<34} {what}{where}{how}{text}"
