"""What is said of an event from its notice to its last word, and what becomes of its alarm."""

from __future__ import annotations

import math
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from numpy.typing import ArrayLike

from monitor.flow.alarms import RETURNED, UNACKNOWLEDGED, AlarmBoard
from monitor.flow.events import Events, Statement
from monitor.flow.layout import VERDICTS, Coverage, Notice, Reason
from monitor.flow.verdict import touch
from monitor.setup.build import Setup
from tests.flow.rig import PAIR, PAIR_JOINTS, Mover, Rig, both, made

REST = np.array([0.3, 1.0])  # both joints bear weight
WEIGHT = Mover(PAIR, (0.3, 0.1)).gravity_torque(REST)


def stand(rig: Rig, count: int, tau: ArrayLike = WEIGHT) -> None:
    for _ in range(count):
        rig.sample(REST, [0.0, 0.0], tau)


def off(by: float) -> Any:
    """Return the torques at rest where the lower drive believes so much more than it gives."""
    return WEIGHT + both(0.0, by)


def said(rig: Rig) -> list[dict[str, Any]]:
    return [m.body for m in rig.messages if m.topic == "verdict"]


def test_a_verdict_is_said_when_it_changes_and_not_with_every_evidence_step(pair: Rig) -> None:
    stand(pair, 1000)
    stand(pair, 700, off(5.0))
    stand(pair, 700)
    bodies = said(pair)
    assert (bodies[0]["verdict"], bodies[0]["detail"], bodies[0]["open"]) == (
        "undecided", "not-yet-weighed", True,
    )  # fmt: skip
    assert (bodies[0]["probability"], bodies[0]["explanations"]) == (None, [])
    assert (bodies[-1]["verdict"], bodies[-1]["joint"], bodies[-1]["open"]) == ("actuator", "lower", False)
    for one, other in pairwise(bodies[1:-1]):
        changed = any(one[name] != other[name] for name in ("verdict", "joint", "link"))
        assert changed or other["t"] - one["t"] > 0.099
    for body in bodies[1:]:
        shown = [one["probability"] for one in body["explanations"]]
        assert shown == sorted(shown, reverse=True)
        assert min(shown) >= 0.001
        assert 0.95 < sum(shown) <= 1.0 + 1e-9
    held = dict(zip(VERDICTS, pair.state["verdicts"].tolist(), strict=True))
    assert held == dict.fromkeys(VERDICTS, 0) | {"actuator": 1}


def test_a_fault_that_lasts_is_said_to_and_keeps_its_alarm(pair: Rig) -> None:
    stand(pair, 1000)
    stand(pair, 4000, off(5.0))
    lasting = said(pair)[-1]
    assert (lasting["verdict"], lasting["joint"], lasting["lasting"], lasting["open"]) == (
        "actuator", "lower", True, True,
    )  # fmt: skip
    assert {body["event"] for body in pair.alarms()} == {1}
    assert {(kind, joint) for kind, _, joint in pair.standing()} == {("actuator", "lower")}
    assert pair.state["fault_event"].tolist() == [1, 0]
    assert pair.state["event_open"] == 0


class Told:
    """What follows an event is told what the step would have noticed: no arithmetic here."""

    def __init__(self, setup: Setup) -> None:
        self.blocks, self.board = setup.blocks(), AlarmBoard()
        self.state = self.blocks.state[0]
        self.events = Events(setup.facts, self.blocks, self.board)
        found = setup.facts.explanations
        self.fault = next(i for i, x in enumerate(found) if (x.verdict, x.joint) == ("actuator", "lower"))
        self.state["start_settled_ns"] = 10**9
        self.state["at_ns"] = self.state["event_onset_ns"] = 2 * 10**9
        self.said: list[Statement] = []

    def notice(self, notice: int, open_: bool, probability: float = 0.0) -> list[Statement]:
        """A step has noticed something, and holds the fault of the lower actuator for so likely."""
        self.state["at_ns"] += 4_000_000
        self.state["event_open"] = open_
        self.state["weighed"] += bool(notice & Notice.WEIGHED)
        p = self.blocks.outputs[0]["probability"]
        p[:] = 0.0
        p[0], p[2 + self.fault] = 1.0 - probability, probability
        of = self.blocks.params[0]["constant_of"]
        self.state["constant_log"][of == self.fault] = 100.0 * probability
        said = self.events.after_step(notice, guided=False)
        self.said += said
        return said

    def kinds(self) -> list[tuple[str, int]]:
        """Return kind and event of the alarms that stand."""
        return [(alarm.kind, alarm.event) for alarm in self.board.standing()]


def test_a_lasting_fault_keeps_its_alarm_until_it_ceases_and_its_changes_refer_to_it(
    pair_setup: Setup,
) -> None:
    told = Told(pair_setup)
    told.notice(Notice.EVENT_OPENED, True)
    for _ in range(5):
        told.notice(Notice.WEIGHED, True, 0.99)
    assert told.kinds() == [("actuator", 1)]
    told.state["fault_of"][1], told.state["fault_event"][1] = told.fault + 1, told.state["event_number"]
    (lasting,) = told.notice(Notice.WEIGHED | Notice.FAULT_CONFIRMED, False, 0.999)
    assert (lasting.open, lasting.lasting, lasting.continues, lasting.alarm) == (True, True, None, None)
    assert told.kinds() == [("actuator", 1)]
    # Another event turns out to be the same fault.
    told.state["weighed"] = 0
    told.notice(Notice.EVENT_OPENED, True)
    assert told.kinds() == [("actuator", 1), ("unexplained-torque", 2)]
    for _ in range(5):
        told.notice(Notice.WEIGHED, True, 0.99)
    *_, same = told.notice(Notice.WEIGHED, False, 0.99)
    assert (same.event, same.open, same.lasting, same.continues) == (2, False, False, 1)
    assert same.alarm is not None
    assert same.alarm.alarm.state == RETURNED
    assert told.kinds() == [("actuator", 1)]
    # And it ceases.
    told.state["fault_of"][1] = 0
    (gone,) = told.notice(Notice.FAULT_CEASED, False)
    assert (gone.event, gone.open, gone.lasting, gone.verdict.joint) == (1, False, True, "lower")
    assert gone.alarm is not None
    assert gone.alarm.alarm.state == RETURNED
    assert told.kinds() == []
    assert told.state["verdicts"][VERDICTS.index("actuator")] == told.state["verdicts"].sum() == 2


def test_the_alarm_follows_the_class_of_the_verdict_and_keeps_it_through_doubt(pair_setup: Setup) -> None:
    told = Told(pair_setup)
    told.notice(Notice.EVENT_OPENED, True)
    for probability in (0.5, 0.5, 0.5, 0.99, 0.5, 0.99):
        told.notice(Notice.WEIGHED, True, probability)
    stated = [one.alarm.alarm.kind for one in told.said if one.alarm is not None]
    assert stated == ["unexplained-torque", "actuator"]
    assert [one.verdict.verdict for one in told.said] == [
        "undecided", "undecided", "actuator", "undecided", "actuator",
    ]  # fmt: skip
    told.notice(Notice.WEIGHED, True, 0.5)
    (last,) = told.notice(Notice.EVENT_ENDED, False, 0.5)
    assert last.alarm is not None
    assert (last.alarm.alarm.kind, last.verdict.verdict) == ("actuator", "undecided")


def test_what_happens_while_a_hand_guides_the_robot_is_stated_without_an_alarm(pair: Rig) -> None:
    stand(pair, 700)
    pair.condition(mode="guided")
    stand(pair, 700)
    stand(pair, 300, off(5.0))
    stand(pair, 800)
    bodies = said(pair)
    assert [body["open"] for body in bodies] == [True] * (len(bodies) - 1) + [False]
    assert len(bodies) >= 2
    assert {body["event"] for body in bodies} == {1}
    assert pair.alarms() == []
    assert pair.outputs["reason_whole"] == Reason.GUIDED


def test_a_fault_that_lasts_is_alarmed_even_while_a_hand_guides(pair: Rig) -> None:
    stand(pair, 700)
    pair.condition(mode="guided")
    stand(pair, 700)
    stand(pair, 4000, off(5.0))
    (alarm,) = pair.alarms()
    assert (alarm["kind"], alarm["joint"], alarm["state"]) == ("actuator", "lower", UNACKNOWLEDGED)
    assert said(pair)[-1]["lasting"]


def test_what_was_there_at_the_start_makes_coverage_conditional_and_is_never_a_fault(
    pair_setup: Setup,
) -> None:
    rig = Rig(pair_setup)
    stand(rig, 5000, off(5.0))
    assert {body["event"] for body in rig.alarms()} == {1}
    (body,) = said(rig)
    assert (body["verdict"], body["detail"], body["open"]) == ("undecided", "since-start", True)
    whole = Coverage.CONDITIONAL, Reason.SINCE_START
    assert (rig.outputs["coverage_whole"], rig.outputs["reason_whole"]) == whole
    assert rig.outputs["reason"].tolist() == [Reason.SINCE_START] * 2
    assert not rig.state["fault_of"].any()
    stand(rig, 1500)
    assert (said(rig)[-1]["detail"], said(rig)[-1]["open"]) == ("since-start", False)
    assert rig.standing() == set()
    assert rig.outputs["coverage_whole"] == Coverage.WATCHING
    # From now on it counts.
    stand(rig, 400, off(5.0))
    assert rig.alarms()[-1]["verdict"] == "actuator"


@pytest.mark.parametrize(("lead", "detail"), [(100, "condition-changed"), (600, None)])
def test_an_event_that_began_just_before_a_change_of_condition_is_not_told_apart_from_it(
    pair: Rig, lead: int, detail: str | None
) -> None:
    stand(pair, 1000)
    stand(pair, lead, off(5.0))
    pair.condition(payload={"m": 1.0})
    stand(pair, 5, off(5.0))
    last = said(pair)[-1]
    assert not last["open"]
    if detail:
        assert (last["verdict"], last["detail"]) == ("undecided", detail)
    else:
        assert last["verdict"] == "actuator"
    assert pair.alarms()[-1]["state"] == RETURNED
    assert pair.alarms()[-1]["verdict"] == last["verdict"]


SHAPE = '<collision><origin xyz="0 0 0.15"/><geometry><box size="0.06 0.08 0.3"/></geometry></collision>'


def test_the_line_of_action_and_the_point_of_a_contact_are_told_in_axes_of_the_link() -> None:
    # Judge: by hand. A force (3, -4, 0) N at (0.03, 0.01, 0.2) of the blade's box, which it enters there.
    urdf = PAIR.replace('<link name="blade">', f'<link name="blade">{SHAPE}')
    setup = made(urdf, PAIR_JOINTS, {"serial": "P-1", "tool_link": "tip"})
    blocks = setup.blocks()
    force, point = np.array([-3.0, 0.4, 0.0]), np.array([0.03, 0.01, 0.2])
    blade = next(i for i, one in enumerate(setup.facts.explanations) if one.link == "blade")
    c, s = blocks.params[0], blocks.state[0]
    ways = np.flatnonzero(c["smooth_of"] == blade)
    blocks.outputs["probability"][0, 2 + blade] = 1.0
    s["smooth_log"] = -50.0
    s["smooth_log"][ways[1]] = 0.0
    index = setup.facts.explanations[blade].candidates[0].number
    centre = c["body_centre"][index]
    s["smooth_peak"][ways[1]] = [*force, *np.cross(point - centre, force)]
    s["smooth_peak_size"][ways[1]], s["smooth_peak_sd"][ways[1]] = math.hypot(*force), 0.01
    found = touch(setup.facts, blocks)
    assert found.force == pytest.approx(force)
    assert found.moment == pytest.approx(np.cross(point, force))
    assert found.point == pytest.approx(point)
    # A line that misses by more than its uncertainty meets nothing; by less, the nearest place is told.
    s["smooth_peak"][ways[1], 3:] = np.cross(np.array([0.0, 0.05, 0.15]) - centre, [0.0, 0.0, -3.0])
    s["smooth_peak"][ways[1], :3] = 0.0, 0.0, -3.0
    assert touch(setup.facts, blocks).point is None
    s["smooth_peak_sd"][ways[1]] = 1.0
    near = touch(setup.facts, blocks).point
    assert near is not None
    assert near[1] == pytest.approx(0.04)
