"""A foot that meets ground although it is not planned to: `r = J' f` at the foot's point, smooth force."""

from __future__ import annotations

from monitor.explain.outline import Candidate, Explanation, Outline

NAME = "touchdown"
FORCE_SD = 0.4  # of the weight
TIME_S = 0.05


def explanations(outline: Outline) -> list[Explanation]:
    """Return a touchdown for each foot; its rows are those of a contact, force only, at the foot's point."""
    rate = outline.rates[NAME] / max(len(outline.feet), 1)
    sd = (FORCE_SD * outline.weight,) * 3
    return [
        Explanation("touchdown", None, foot, rate, (Candidate(NAME, i, "unplanned", sd, "N", 1.0, TIME_S),))
        for i, foot in enumerate(outline.feet)
    ]
