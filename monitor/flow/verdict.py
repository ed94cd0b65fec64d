"""What an event is held to be: today the honest minimum, *undecided*.

A residual outside a constant band says that something is unexplained, not what. No probability is stated,
because no explanations were weighed.
"""

from __future__ import annotations

from typing import NamedTuple

from monitor.flow.layout import Block, Facts


class Size(NamedTuple):
    """How large; `sd` is None where no uncertainty was derived."""

    value: float
    unit: str
    sd: float | None


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


def of_event(facts: Facts, state: Block) -> Verdict:
    """Return the verdict on the event in `state`: the row that left its band furthest, and by what torque."""
    row = int(state["event_row"])
    return Verdict(
        verdict="undecided",
        detail="outside-band",
        joint=facts.rows[row],
        size=Size(float(state["event_size"]), facts.units[row], None),
        onset_t=int(state["event_onset_ns"]) / 1e9,
    )
