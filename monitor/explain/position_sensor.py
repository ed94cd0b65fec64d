"""A position that is read with an offset: `r = (dID/dq_i) delta`, with ID the inverse dynamics.

The offset is constant, or it comes while a coupling slips. Then the reading accelerates beside the joint, and
while the joint is slow friction is taken for that of a motion which it does not make.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.explain.outline import Candidate, Explanation, Outline
from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

NAME = "position-sensor"
OFFSET_SD = 0.05  # rad or m
SLIP_S = 0.15  # how fast a coupling slips
# While it slips the reading accelerates beside the joint [rad/s² or m/s²], and jolts where that begins.
SLIP = 1.5
JOLT, JOLT_S = 10.0, 0.008
SLIPS_S = 0.5  # how long a coupling slips
MISREAD_S = 0.1
MISREAD = 1.5  # times Coulomb friction: where a joint seems to move, or to stand, that does not
SLOW = 0.15  # rad/s or m/s: a slip is not faster, so only below it friction may be misread


def explanations(outline: Outline) -> list[Explanation]:
    """Return an offset for each joint on whose position anything depends."""
    rate = outline.rates[NAME] / max(len(outline.joints), 1)
    found = []
    for i, joint in enumerate(outline.joints):
        if joint in outline.silent:
            continue
        unit, row = "rad" if outline.units[i] == "N m" else "m", outline.base + i
        misread = MISREAD * max(float(outline.coulomb[i]), 0.02 * float(outline.rated[i]))
        slips = Candidate(
            NAME, row, "offset", (OFFSET_SD, misread, SLIP, JOLT), unit, 0.5,
            (SLIP_S, MISREAD_S, SLIP_S, JOLT_S),
            settles=1, fades=1, lasts_s=SLIPS_S,
        )  # fmt: skip
        ways = (Candidate(NAME, row, "offset", (OFFSET_SD,), unit, 0.5), slips)
        found.append(Explanation("position-sensor", joint, None, rate, ways))
    return found


@kernel
def rows(
    row: int, slope: Floats, M: Floats, feature: Floats, link_row: Ints, armature: Floats, H: Floats
) -> None:
    """Fill H (n + T, >= 4): torque per unit of offset, of friction misread, and twice of acceleration.

    Row i of slope (n,n) is the change of inverse dynamics per unit of coordinate i; M (n,n) the mass matrix;
    feature (n + T, >= 3) has the velocity, through the residual's own filter, in its third column. The T
    joints in link_row have a motor side of their own: rotor (armature, n) and friction are there.
    """
    n, t = slope.shape[0], math.tanh(feature[row, 2] / SLOW)
    for i in range(n):
        H[i, 0] = slope[row, i]
        H[i, 1] = 1.0 - t * t if i == row else 0.0
        H[i, 2] = M[i, row]
        H[i, 3] = M[i, row]
    for j in range(link_row.shape[0]):
        for a in range(4):
            H[n + j, a] = 0.0
        if link_row[j] == row:
            H[n + j, 1] = H[row, 1]
            H[row, 1] = 0.0
            for a in range(2, 4):
                H[n + j, a] = armature[row]
                H[row, a] -= armature[row]
