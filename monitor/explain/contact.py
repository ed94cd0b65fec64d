"""A force from the world on a link: `r = J' w`, its wrench smooth in time.

The wrench is a force and a moment at the centre of the link's shape, in world axes. That the force acts on
the surface is told by the prior of the moment: its standard deviation is that of the force times the link's
radius.
Three ways to move: a push, a blow, harder and shorter, and a lean, slower.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from monitor.explain.outline import Candidate, Explanation, Outline
from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

NAME = "contact"
# (detail, standard deviation of each force component, time constant in s, share of the rate). The force is in
# units of the robot's weight or, on links near the base, of what loads a joint with its rated torque.
PUSH_S, BLOW_S = 0.1, 0.025
WAYS = (("push", 0.16, PUSH_S, 0.5), ("blow", 0.5, BLOW_S, 0.25))
# Who leans holds a force, about: it comes within tenths of a second and wavers little, or by a fifth.
LEAN, LEAN_S, WAVERS, LEAN_SHARE = 0.16, 0.2, (0.003, 0.05), 0.125


def explanations(outline: Outline) -> list[Explanation]:
    """Return a contact for each body."""
    rate = outline.rates[NAME] / max(len(outline.bodies), 1)
    found = []
    for i, link in enumerate(outline.bodies):
        candidates = []
        scale = max(outline.weight, float(outline.telling[i]))
        for detail, share, time_s, part in WAYS:
            force = share * scale
            sd = (force,) * 3 + (force * float(outline.radius[i]),) * 3
            candidates.append(Candidate(NAME, i, detail, sd, "N", part, time_s, lasts_s=10.0 * time_s))
        sd = (LEAN * scale,) * 3 + (LEAN * scale * float(outline.radius[i]),) * 3
        candidates += [
            Candidate(NAME, i, "lean", sd, "N", LEAN_SHARE, LEAN_S, 6, wavers, lasts_s=5.0)
            for wavers in WAVERS
        ]
        found.append(Explanation("contact", None, link, rate, tuple(candidates)))
    return found


@kernel
def rows(
    axis: int, centre: Floats, parent: Ints, dof: Ints, S: Floats, R: Floats, p: Floats, H: Floats
) -> None:
    """Fill H (n,6) with torque per unit of force (3) and moment (3), world axes, on the body of an axis.

    They act at `centre` (3), given in the body frame. Joint twists S (N,6) and poses R (N+1,3,3), p (N+1,3)
    are from one origin.
    """
    for i in range(H.shape[0]):
        for j in range(6):
            H[i, j] = 0.0
    c0 = p[axis, 0] + R[axis, 0, 0] * centre[0] + R[axis, 0, 1] * centre[1] + R[axis, 0, 2] * centre[2]
    c1 = p[axis, 1] + R[axis, 1, 0] * centre[0] + R[axis, 1, 1] * centre[1] + R[axis, 1, 2] * centre[2]
    c2 = p[axis, 2] + R[axis, 2, 0] * centre[0] + R[axis, 2, 1] * centre[1] + R[axis, 2, 2] * centre[2]
    i = axis
    while i >= 0:
        d = dof[i]
        w0, w1, w2 = S[i, 0], S[i, 1], S[i, 2]
        H[d, 0] += S[i, 3] + w1 * c2 - w2 * c1
        H[d, 1] += S[i, 4] + w2 * c0 - w0 * c2
        H[d, 2] += S[i, 5] + w0 * c1 - w1 * c0
        H[d, 3] += w0
        H[d, 4] += w1
        H[d, 5] += w2
        i = parent[i]
