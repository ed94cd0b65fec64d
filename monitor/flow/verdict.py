"""What an event is held to be: the posterior of all explanations, put into one statement.

Explanations are first added up by what they mean (a contact with any link, a fault of any actuator, ...).
Where one meaning is certain enough it is the verdict, told by the likeliest of its explanations; else the
verdict is *undecided* and names what competes.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from monitor.explain import actuator
from monitor.explain.outline import Candidate, Explanation
from monitor.flow.layout import Blocks, Facts
from monitor.robot.shape import contact_point

NOTHING, OTHER = 0, 1  # places in `outputs.probability` before the explanations
# Evidence steps before more is said than "undecided"; what is less likely is left out of the alternatives,
# and of the full table.
LEAST_STEPS, _LEAST_PROBABILITY, _LEAST_SHOWN = 3, 0.01, 0.001
# By how much the log evidence must be above that of the next meaning ("decisive": "Bayes Factors", JASA 1995,
# doi 10.1080/01621459.1995.10476572), and the share of an evidence that may be model error.
TOLD_BY, _NOT_RIGHT = 5.0, 0.01
_SUSPECTED = 5  # share of the time after which a position that stands is frozen
_OPEN_CIRCUIT = 0.9  # lost share of torque from which on nothing is left


class Size(NamedTuple):
    """How large; `sd` is None where no uncertainty was derived."""

    value: float
    unit: str
    sd: float | None


class Touch(NamedTuple):
    """Line of action of a contact when its force was largest, in axes and about the origin of the link."""

    force: list[float]  # N, on the link
    moment: list[float]  # N m
    point: (
        list[float] | None
    )  # m: of the link's surface; None where its shape is not known or the line misses


class Verdict(NamedTuple):
    """One statement about one event, as it stands on the wire and in alarms."""

    verdict: str
    detail: str
    joint: str | None = None
    link: str | None = None
    probability: float | None = None
    alternatives: tuple[dict[str, object], ...] = ()
    size: Size | None = None
    onset_t: float | None = None  # s, robot clock


class Leading(NamedTuple):
    """The verdict in short."""

    verdict: str  # `undecided` where none is certain enough
    joint: str | None
    link: str | None
    probability: float  # of the likeliest meaning
    meaning: str  # a verdict, `nothing` or `something-else`
    explanation: int  # number of the likeliest explanation of that meaning, -1 if it has none


def leading(facts: Facts, blocks: Blocks) -> Leading:
    """Return the likeliest meaning: explanations of one meaning are added up, the likeliest speaks for it."""
    p = blocks.outputs[0]["probability"].tolist()
    total = {"nothing": p[NOTHING], "something-else": p[OTHER]}
    best = {"nothing": -1, "something-else": -1}
    for i, explanation in enumerate(facts.explanations):
        meaning = explanation.verdict
        total[meaning] = total.get(meaning, 0.0) + p[2 + i]
        if meaning not in best or p[2 + i] > p[2 + best[meaning]]:
            best[meaning] = i
    meaning = max(total, key=total.__getitem__)
    k = best[meaning]
    certain = k >= 0 and total[meaning] >= facts.certainty and _told(facts, blocks, meaning)
    if not certain or _suspected(blocks) or _has_a_twin(facts, blocks, k):
        return Leading("undecided", None, None, total[meaning], meaning, k)
    one = facts.explanations[k]
    return Leading(one.verdict, one.joint, one.link, total[meaning], meaning, k)


def _suspected(blocks: Blocks) -> bool:
    """Whether the signal itself may be all there is to it.

    A reading was not credible when the event began or soon after, or a position has stood for a while
    although its velocity says it moves, and may soon be called frozen.
    """
    s = blocks.state[0]
    stands = s["still_ns"].max() > blocks.params[0]["frozen_ns"] // _SUSPECTED
    return bool(s["event_doubtful"] or stands)


def _has_a_twin(facts: Facts, blocks: Blocks, k: int) -> bool:
    """Whether another explanation makes the very same data: a force that loads one joint, and that drive.

    Only a drive that follows its own law (in proportion to torque, against the motion) gives itself away.
    """
    one = facts.explanations[k]
    if _senses(facts, blocks, one.joint or facts.twins.get(one.link or "")):
        return False
    if one.verdict == "contact":
        return one.link in facts.twins
    if one.verdict != "actuator" or one.joint not in facts.twins.values():
        return False
    return best_candidate(blocks, facts, k)[1].number % 8 in (actuator.OFFSET, actuator.VARYING)


def _senses(facts: Facts, blocks: Blocks, joint: str | None) -> bool:
    """Whether a torque sensor at the link side of a joint reads: it tells drive and world apart."""
    if joint is None:
        return False
    place = facts.joints.index(joint)
    return place in facts.link_torque and not blocks.state[0]["unsensed"][place]


def _told(facts: Facts, blocks: Blocks, likeliest: str) -> bool:
    """Whether it is the data that tell the likeliest meaning from the next, not the rates alone.

    A force on the first link and a fault of its drive can be nearly the same data; that contacts are the
    commoner does not decide it. Nor does a small part of a large evidence: what the model does not get right
    of it is of that size.
    """
    log = _evidence(facts, blocks)
    best = log.pop(likeliest)
    if likeliest == "touchdown":
        # Ground that meets a foot pushes just as something on its shank would: there the rates decide.
        log.pop("contact")
    return best - max(log.values()) > TOLD_BY + _NOT_RIGHT * max(best - log.get("nothing", best), 0.0)


def _evidence(facts: Facts, blocks: Blocks) -> dict[str, float]:
    """Return the log evidence of every meaning: that of its explanations by their share of its rate."""
    c, s = blocks.params[0], blocks.state[0]
    log = np.full(len(facts.explanations), -np.inf)
    for name in ("constant", "smooth"):
        np.logaddexp.at(log, c[f"{name}_of"], s[f"{name}_log"] + c[f"{name}_share"])
    np.logaddexp.at(log, c["foothold_of"], s["null_log"] + s["foothold_log"])
    weighted, rate = log + c["log_rate"][2:], c["log_rate"][2:]
    found = {"nothing": float(s["null_log"]), "something-else": float(s["other_log"])}
    verdicts = np.array([one.verdict for one in facts.explanations])
    for verdict in dict.fromkeys(verdicts.tolist()):
        of = verdicts == verdict
        found[verdict] = float(np.logaddexp.reduce(weighted[of]) - np.logaddexp.reduce(rate[of]))
    return found


def of_event(facts: Facts, blocks: Blocks) -> Verdict:
    """Return the verdict on an event that was weighed, from the posterior as it stands."""
    now = leading(facts, blocks)
    if now.verdict == "undecided":
        detail = {"nothing": "outside-band", "something-else": "none-fits"}.get(now.meaning, "several-fit")
        if _suspected(blocks):
            detail = "bad-signal"
        others = alternatives(facts, blocks, None)
        return undecided(facts, blocks, detail)._replace(probability=now.probability, alternatives=others)
    number, one, smooth = best_candidate(blocks, facts, now.explanation)
    size = size_of(blocks, number, one, smooth)
    return Verdict(
        now.verdict,
        _detail(one, size),
        now.joint,
        now.link,
        now.probability,
        alternatives(facts, blocks, now.explanation),
        size,
        int(blocks.state[0]["event_onset_ns"]) / 1e9,
    )


def undecided(facts: Facts, blocks: Blocks, detail: str) -> Verdict:
    """Return the verdict on an event of which only the largest residual is known."""
    s = blocks.state[0]
    row = int(s["event_row"])
    size = Size(float(s["event_size"]), facts.units[row], None)
    return Verdict(
        "undecided", detail, joint_of(facts, blocks, row), size=size, onset_t=int(s["event_onset_ns"]) / 1e9
    )


def joint_of(facts: Facts, blocks: Blocks, row: int) -> str:
    """Return the name of a row that is judged; of a motor side, that of its joint."""
    n = len(blocks.state[0]["r_fast"])
    return facts.rows[row if row < n else int(blocks.params[0]["link_row"][row - n])]


def touch(facts: Facts, blocks: Blocks) -> Touch:
    """Return where and how the contact acts that is held to be the cause.

    The line may pass beside the shape by its own uncertainty: that of the force, relative, times the lever
    arm its prior allows.
    """
    c, s = blocks.params[0], blocks.state[0]
    k, one, _ = best_candidate(blocks, facts, leading(facts, blocks).explanation)
    axis, centre = int(c["body_axis"][one.number]), c["body_centre"][one.number]
    force, about_centre = s["smooth_peak"][k, :3], s["smooth_peak"][k, 3:]
    moment = about_centre + np.cross(centre, force)
    size = float(s["smooth_peak_size"][k])
    unsure = float(s["smooth_peak_sd"][k]) / size if size > 0.0 else 1.0
    radius = one.sd[3] / one.sd[0]
    met = contact_point(facts.tree, axis, force, moment, radius * min(unsure, 1.0))
    point = None if met is None or met.point is None else met.point.tolist()
    return Touch(force.tolist(), moment.tolist(), point)


def likeliest(blocks: Blocks) -> int:
    """Return the number of the likeliest explanation."""
    return int(np.argmax(blocks.outputs[0]["probability"][2:]))


def alternatives(facts: Facts, blocks: Blocks, chosen: int | None) -> tuple[dict[str, object], ...]:
    """Return the other explanations by falling probability, as they stand in alarms."""
    p = blocks.outputs[0]["probability"]
    return tuple(
        _named(facts, int(place)) | {"probability": float(p[place])}
        for place in np.argsort(-p, kind="stable")[:6]
        if p[place] >= _LEAST_PROBABILITY and place - 2 != chosen
    )


def table(facts: Facts, blocks: Blocks) -> tuple[dict[str, object], ...]:
    """Return every explanation that is worth a word, by falling probability, with its likeliest detail."""
    p = blocks.outputs[0]["probability"]
    rows: list[dict[str, object]] = []
    for place in np.argsort(-p, kind="stable").tolist():
        if p[place] < _LEAST_SHOWN:
            break
        detail = best_candidate(blocks, facts, place - 2)[1].detail if place >= 2 else None
        rows.append(_named(facts, place) | {"detail": detail, "probability": float(p[place])})
    return tuple(rows)


def _named(facts: Facts, place: int) -> dict[str, object]:
    """Return verdict, joint and link of a place in `outputs.probability`."""
    if place < 2:
        return {"verdict": ("nothing", "something-else")[place], "joint": None, "link": None}
    one = facts.explanations[place - 2]
    return {"verdict": one.verdict, "joint": one.joint, "link": one.link}


def best_candidate(blocks: Blocks, facts: Facts, explanation: int) -> tuple[int, Candidate, bool]:
    """Return number, declaration and kind (smooth or constant) of the likeliest way an explanation looks."""
    c, s = blocks.params[0], blocks.state[0]
    ways: list[tuple[float, int, bool]] = []
    for smooth, name in ((False, "constant"), (True, "smooth")):
        for k in np.flatnonzero(c[f"{name}_of"] == explanation).tolist():
            ways.append((float(s[f"{name}_log"][k] + c[f"{name}_share"][k]), k, smooth))
    if not ways:  # told by other means than evidence of the residual
        return -1, facts.explanations[explanation].candidates[0], False
    _, best, smooth = max(ways)
    return best, _declared(blocks, facts.explanations[explanation], best, smooth), smooth


def _declared(blocks: Blocks, explanation: Explanation, k: int, smooth: bool) -> Candidate:
    """Return what the explanation declared of candidate k: they stand in the blocks in its order."""
    name = "smooth" if smooth else "constant"
    of = blocks.params[0][f"{name}_of"]
    place = int(np.count_nonzero(of[:k] == of[k]))
    same = [one for one in explanation.candidates if (one.time_s is not None) == smooth]
    return same[place]


def size_of(blocks: Blocks, k: int, one: Candidate, smooth: bool) -> Size:
    """Return the size of a candidate: what was largest of a smooth one, the mean of a constant."""
    s = blocks.state[0]
    if k < 0:
        force, sd = s["foothold_force"][one.number].tolist()
        return Size(force, one.unit, sd)
    if smooth:
        return Size(float(s["smooth_peak_size"][k]), one.unit, float(s["smooth_peak_sd"][k]))
    return Size(float(s["constant_size"][k]), one.unit, float(s["constant_size_sd"][k]))


def _detail(one: Candidate, size: Size) -> str:
    """Return the detail of a candidate; a drive that lost all its torque is an open circuit."""
    if one.detail == actuator.DETAILS[actuator.TORQUE] and size.value > _OPEN_CIRCUIT:
        return "open-circuit"
    return one.detail
