"""A position that is read with an offset: `r = (dID/dq_i) delta`, with ID the inverse dynamics.

The offset is constant, or it comes while a coupling slips. Then the reading also accelerates beside the
joint, and friction is taken for that of a motion which the joint does not make.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from monitor.explain.outline import Candidate, Explanation, Outline
from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

NAME = "position-sensor"
OFFSET_SD = 0.05  # rad or m
SLIP_S = 0.15  # how fast a coupling slips
SLIP_ACCELERATION = 1.5  # rad/s² or m/s²: while it slips the reading accelerates beside the joint
MISREAD = 1.5  # times Coulomb friction: where a joint seems to move, or to stand, that does not


def explanations(outline: Outline) -> list[Explanation]:
    """Return an offset for each joint."""
    rate = outline.rates[NAME] / max(len(outline.joints), 1)
    found = []
    for i, joint in enumerate(outline.joints):
        unit, row = "rad" if outline.units[i] == "N m" else "m", outline.base + i
        misread = MISREAD * max(float(outline.coulomb[i]), 0.02 * float(outline.rated[i]))
        ways = (
            Candidate(NAME, row, "offset", (OFFSET_SD,), unit, 0.5),
            Candidate(
                NAME, row, "offset", (OFFSET_SD, SLIP_ACCELERATION, misread), unit, 0.5, SLIP_S, settles=1
            ),
        )
        found.append(Explanation("position-sensor", joint, None, rate, ways))
    return found


@kernel
def rows(row: int, slope: Floats, M: Floats, link_row: Ints, armature: Floats, H: Floats) -> None:
    """Fill H (n + T, >= 3): torque per unit of offset, of its acceleration, of friction that is misjudged.

    Row i of slope (n,n) is the change of inverse dynamics per unit of coordinate i; M (n,n) the mass matrix.
    The T joints in link_row have a motor side of their own: rotor (armature, n) and friction are there.
    """
    n = slope.shape[0]
    for i in range(n):
        H[i, 0] = slope[row, i]
        H[i, 1] = M[i, row]
        H[i, 2] = 1.0 if i == row else 0.0
    for j in range(link_row.shape[0]):
        H[n + j, 0], H[n + j, 1], H[n + j, 2] = 0.0, 0.0, 0.0
        if link_row[j] == row:
            H[n + j, 1], H[n + j, 2] = armature[row], 1.0
            H[row, 1] -= armature[row]
            H[row, 2] = 0.0
