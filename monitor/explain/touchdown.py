"""A foot that meets ground although it is not planned to: `r = J' f` where it does, its force smooth in time.

Ground pushes and does not pull, and more along its normal than sideways. The normal is taken to be up,
against gravity: nobody says how the ground slopes.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from monitor.explain.outline import Candidate, Explanation, Outline
from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

NAME = "touchdown"
# Standard deviations of the force as shares of the weight: normal, sideways.
NORMAL_SD, SIDEWAYS_SD = 0.4, 0.15
# How fast the force comes, in a step that is meant or in a stumble; the normal one wavers by so much of its
# variance.
TIMES_S, SETTLED = (0.1, 0.03, 0.008), 0.3


def explanations(outline: Outline) -> list[Explanation]:
    """Return a touchdown for each foot."""
    rate = outline.rates[NAME] / max(len(outline.feet), 1)
    sd = (NORMAL_SD * outline.weight, SIDEWAYS_SD * outline.weight, SIDEWAYS_SD * outline.weight)
    return [
        Explanation("touchdown", None, foot, rate, tuple(_way(i, sd, time_s) for time_s in TIMES_S))
        for i, foot in enumerate(outline.feet)
    ]


def _way(foot: int, sd: tuple[float, ...], time_s: float) -> Candidate:
    return Candidate(
        NAME, foot, "unplanned", sd, "N", 1.0 / len(TIMES_S), time_s, 1, SETTLED, lasts_s=1.0, one_sided=True
    )  # fmt: skip


@kernel
def rows(
    axis: int, point: Floats, radius: float, up: Floats, parent: Ints, dof: Ints,
    S: Floats, R: Floats, p: Floats, H: Floats,
) -> None:  # fmt: skip
    """Fill H (n, >= 3) with torque per unit of force up and along two level axes, on a foot.

    It acts `radius` below the point (3) of the body of an axis, given in the body frame. up (3) is a unit
    vector; twists S (N,6) and poses R (N+1,3,3), p (N+1,3) are from one origin.
    """
    for i in range(H.shape[0]):
        for j in range(3):
            H[i, j] = 0.0
    x = p[axis, 0] + R[axis, 0, 0] * point[0] + R[axis, 0, 1] * point[1] + R[axis, 0, 2] * point[2]
    y = p[axis, 1] + R[axis, 1, 0] * point[0] + R[axis, 1, 1] * point[1] + R[axis, 1, 2] * point[2]
    z = p[axis, 2] + R[axis, 2, 0] * point[0] + R[axis, 2, 1] * point[1] + R[axis, 2, 2] * point[2]
    x, y, z = x - radius * up[0], y - radius * up[1], z - radius * up[2]
    # Two axes beside up: any will do, since the prior is the same for both.
    if abs(up[0]) < 0.7:
        a0, a1, a2 = 0.0, up[2], -up[1]
    else:
        a0, a1, a2 = up[2], 0.0, -up[0]
    scale = 1.0 / (a0 * a0 + a1 * a1 + a2 * a2) ** 0.5
    a0, a1, a2 = scale * a0, scale * a1, scale * a2
    b0, b1, b2 = up[1] * a2 - up[2] * a1, up[2] * a0 - up[0] * a2, up[0] * a1 - up[1] * a0
    i = axis
    while i >= 0:
        v0 = S[i, 3] + S[i, 1] * z - S[i, 2] * y
        v1 = S[i, 4] + S[i, 2] * x - S[i, 0] * z
        v2 = S[i, 5] + S[i, 0] * y - S[i, 1] * x
        H[dof[i], 0] += up[0] * v0 + up[1] * v1 + up[2] * v2
        H[dof[i], 1] += a0 * v0 + a1 * v1 + a2 * v2
        H[dof[i], 2] += b0 * v0 + b1 * v1 + b2 * v2
        i = parent[i]
