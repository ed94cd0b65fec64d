"""A foot that carries nothing although it is planned to stand: its hold is lost.

It leaves no residual, since forces of planned feet are unknown beforehand, and so has no rows. What tells it is
the estimate of the foot's force, see `log_evidence`.
"""

from __future__ import annotations

import math

from monitor.explain.outline import Candidate, Explanation, Outline
from monitor.kernels.jit import kernel

NAME = "foothold-lost"


def explanations(outline: Outline) -> list[Explanation]:
    """Return a lost foothold for each foot."""
    rate = outline.rates[NAME] / max(len(outline.feet), 1)
    return [
        Explanation("foothold-lost", None, foot, rate, (Candidate(NAME, i, "no-force", (), "N", 1.0),))
        for i, foot in enumerate(outline.feet)
    ]


@kernel
def log_evidence(force: float, sd: float, usual: float) -> float:
    """Return the log evidence of no force over that of a foot that carries.

    force and its standard deviation sd are the estimate along the ground's normal. A foot that carries pushes with
    a half-normal force of scale `usual`; one that has lost its hold does not push.
    """
    carries = usual * usual + sd * sd
    # Density of half-normal plus normal: 2 N(force; 0, carries) Phi(force usual / (sd sqrt(carries))).
    tail = 0.5 * math.erfc(-force * usual / (sd * math.sqrt(2.0 * carries)))
    none = -0.5 * force * force / (sd * sd) - math.log(sd)
    some = -0.5 * force * force / carries - 0.5 * math.log(carries) + math.log(2.0 * max(tail, 1e-300))
    return none - some
