"""A foot that carries nothing although it is planned to stand: its hold is lost.

It leaves no residual, since forces of planned feet are unknown beforehand, and so has no rows. What tells it
is the estimate of the foot's force, see `log_evidence`.
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

    force and its standard deviation sd are the estimate along the ground's normal. A foot that carries
    pushes with a force of Rayleigh distribution and scale `usual`: it hardly ever carries next to nothing.
    One that has lost its hold does not push. Both are seen with normal noise.
    """
    both = usual * usual + sd * sd
    mean, spread = force * usual * usual / both, usual * sd / math.sqrt(both)
    # Rayleigh and normal density under one integral: exp(-force²/2 both) times that of f exp(-(f - mean)²/2
    # spread²) over f > 0, over usual².
    tail = 0.5 * math.erfc(-mean / (spread * math.sqrt(2.0)))
    first = spread * spread * math.exp(-0.5 * mean * mean / (spread * spread))
    first += mean * spread * math.sqrt(2.0 * math.pi) * tail
    some = -0.5 * force * force / both + math.log(max(first, 1e-300)) - 2.0 * math.log(usual)
    return -0.5 * force * force / (sd * sd) - some
