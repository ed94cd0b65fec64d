"""What becomes of an event from its notice to its last word: statements, and the alarm that goes with them.

The open event holds one alarm, whose kind follows its verdict. A fault that lasts keeps the alarm of the
event that found it until it ceases, and later events may open beside it. What happens while a hand guides the
robot is stated, not alarmed.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any, NamedTuple

from monitor.flow import verdict as verdicts
from monitor.flow.alarms import AlarmBoard, Key, Transition
from monitor.flow.layout import FAULTS, VERDICTS, Blocks, Facts, Notice
from monitor.flow.verdict import Touch, Verdict

OPEN = Key("event", "open")
_KINDS = {
    "contact": "contact",
    "touchdown": "contact",
    "foothold-lost": "contact",
    "actuator": "actuator",
    "position-sensor": "sensor",
    "torque-sensor": "sensor",
    "load": "load",
    "undecided": "unexplained-torque",
}
# An event that began so shortly before a change of condition may be the change itself, announced late.
_GUARD_NS = 200_000_000
# A probability that moved by so much is said again, but not more often than that.
_MOVED, _PAUSE_NS = 0.05, 100_000_000


def lasting(slot: int) -> Key:
    """Return the key of the alarm of the lasting fault in a slot."""
    return Key("event", f"lasting-{slot}")


class Statement(NamedTuple):
    """What is said of an event; `alarm` where its alarm came, went or changed."""

    event: int
    verdict: Verdict
    open: bool  # it goes on, or the fault it became does
    lasting: bool = False  # it became a fault that lasts
    continues: int | None = None  # event of the lasting fault that has only changed
    explanations: tuple[dict[str, object], ...] = ()
    touch: Touch | None = None  # of a contact
    alarm: Transition | None = None


@dataclass
class _Course:
    """What was said so far of the open event."""

    guided: bool
    since_start: bool
    weighed: int = 0  # evidence steps
    verdict: str = "undecided"
    joint: str | None = None
    link: str | None = None
    probability: float = 0.0
    said_ns: int = 0  # robot clock
    announced: str = "undecided"  # the last decided verdict the alarm was raised with


class Events:
    """Follows the step's notices of events.

    Parameters
    ----------
    facts : Facts
    blocks : Blocks
        Reads `state` and `outputs`; writes the numbers of events and their tally.
    board : AlarmBoard
    """

    def __init__(self, facts: Facts, blocks: Blocks, board: AlarmBoard) -> None:
        self._facts, self._blocks, self._board = facts, blocks, board
        self._state, self._outputs = blocks.state[0], blocks.outputs[0]
        self._course: _Course | None = None

    @property
    def since_start(self) -> bool:
        """Whether an event is open that was there when the judgement began."""
        return self._course is not None and self._course.since_start

    def after_step(self, notice: int, guided: bool) -> list[Statement]:
        """Return what is to be said after a step with these notices; `guided`: by hand."""
        said = []
        if notice & Notice.EVENT_OPENED:
            said.append(self._opened(guided))
        course = self._course
        if course is not None:
            if notice & Notice.WEIGHED:
                said += self._weighed(course)
            if not self._state["event_open"]:
                said.append(self._over(course, notice))
        if notice & Notice.FAULT_CEASED:
            said += self._ceased()
        return said

    def _opened(self, guided: bool) -> Statement:
        s = self._state
        s["events"] += 1
        s["event_number"] = s["events"]
        course = _Course(guided, bool(s["event_onset_ns"] <= s["start_settled_ns"]))
        if course.since_start:
            s["concluded"] = 1  # nothing to compare it with: no evidence is taken
        self._course = course
        verdict = self._held(course)
        return self._statement(verdict, alarm=None if guided else self._raised(verdict))

    def _weighed(self, course: _Course) -> list[Statement]:
        """Say what changed with the last evidence step: a verdict at once, probabilities now and then."""
        course.weighed = int(self._state["weighed"])
        if course.weighed < verdicts.LEAST_STEPS:
            return []
        now = verdicts.leading(self._facts, self._blocks)
        now_ns = int(self._state["at_ns"])
        same = (now.verdict, now.joint, now.link) == (course.verdict, course.joint, course.link)
        moved = abs(now.probability - course.probability) > _MOVED
        if same and not (moved and now_ns - course.said_ns >= _PAUSE_NS):
            return []
        course.verdict, course.joint, course.link = now.verdict, now.joint, now.link
        course.probability, course.said_ns = now.probability, now_ns
        verdict = verdicts.of_event(self._facts, self._blocks)
        alarm = None
        if now.verdict not in ("undecided", course.announced):
            course.announced = now.verdict
            if not course.guided:
                alarm = self._board.restated(OPEN, verdict, _KINDS[verdict.verdict])
        return [self._statement(verdict, alarm=alarm)]

    def _over(self, course: _Course, notice: int) -> Statement:
        """State the last word on the event that was open; a fault that lasts takes its alarm along."""
        verdict = self._held(course)
        if notice & Notice.EVENT_ENDED and self._outputs["settling"]:
            # Cut off by a new start: what began just before is not told apart from the change.
            began_ns = int(self._state["at_ns"] - self._state["event_onset_ns"])
            if began_ns < _GUARD_NS:
                verdict = verdicts.undecided(self._facts, self._blocks, "condition-changed")
        self._tally(verdict)
        said = self._statement(verdict, open_=False)
        self._course = None
        if notice & Notice.FAULT_CONFIRMED:
            slot = self._slot_of_event(said.event)
            alarm = self._raised(verdict) if course.guided else None
            self._board.moved(OPEN, lasting(slot))
            said = said._replace(open=True, lasting=True, alarm=alarm)
        else:
            if not notice & Notice.EVENT_ENDED:
                said = said._replace(continues=self._absorbed_by())
            said = said._replace(alarm=self._board.cleared(OPEN, verdict))
        self._state["event_number"] = 0
        return said

    def _ceased(self) -> list[Statement]:
        """Clear the alarms of lasting faults that are gone."""
        said = []
        for slot in range(FAULTS):
            if self._state["fault_of"][slot] == 0:
                alarm = self._board.cleared(lasting(slot))
                if alarm is not None:
                    one = alarm.alarm
                    said.append(Statement(one.event, one.verdict, open=False, lasting=True, alarm=alarm))
        return said

    def _held(self, course: _Course) -> Verdict:
        """Return what the open event is held to be now."""
        if course.since_start:
            return verdicts.undecided(self._facts, self._blocks, "since-start")
        if course.weighed < verdicts.LEAST_STEPS:
            return verdicts.undecided(self._facts, self._blocks, "not-yet-weighed")
        return verdicts.of_event(self._facts, self._blocks)

    def _statement(self, verdict: Verdict, open_: bool = True, alarm: Transition | None = None) -> Statement:
        weighed = verdict.probability is not None
        explanations = verdicts.table(self._facts, self._blocks) if weighed else ()
        touch = verdicts.touch(self._facts, self._blocks) if verdict.verdict == "contact" else None
        number = int(self._state["event_number"])
        return Statement(number, verdict, open_, explanations=explanations, touch=touch, alarm=alarm)

    def _raised(self, verdict: Verdict) -> Transition | None:
        return self._board.raised(OPEN, verdict, int(self._state["event_number"]), _KINDS[verdict.verdict])

    def _slot_of_event(self, event: int) -> int:
        s = self._state
        return next(f for f in range(FAULTS) if s["fault_of"][f] and s["fault_event"][f] == event)

    def _absorbed_by(self) -> int:
        """Return the event of the lasting fault that the last event turned out to be."""
        s = self._state
        best = verdicts.likeliest(self._blocks)
        return next(int(s["fault_event"][f]) for f in range(FAULTS) if s["fault_of"][f] == best + 1)

    def _tally(self, verdict: Verdict) -> None:
        self._state["verdicts"][VERDICTS.index(verdict.verdict)] += 1

    def snapshot(self) -> dict[str, Any] | None:
        """Return what is needed to go on elsewhere; plain values (the blocks are saved by their owner)."""
        return None if self._course is None else asdict(self._course)

    def restore(self, saved: dict[str, Any] | None) -> None:
        """Go on from a snapshot."""
        self._course = None if saved is None else _Course(**saved)
