"""A mass that the carrying link has gained or lost: `r = -Y pi`, constant mass and first moment.

Inverse dynamics is linear in a body's pseudo-inertia E: with A the field of accelerations `a(r) = A [r; 1]`,
gravity taken off, the torque at joint i is `tr(hat(S_i) E A')` (upper three rows of both). A point mass m at
c has `E = m [c;1][c;1]'`; its first moment is taken about the link's centre, second moments are neglected.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from monitor.explain.outline import Candidate, Explanation, Outline
from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

NAME = "load"
TAKING_S = (0.006, 0.03, 0.12)  # how fast a load is taken up or lost
ARM_SD = 0.15  # m: how far from the carrying link's centre a load may sit


def explanations(outline: Outline) -> list[Explanation]:
    """Return a change of load at the carrying link."""
    if not outline.carrier:
        return []
    ways = []
    for mass in (outline.payload, 0.3 * outline.payload):
        sd = (mass,) + 3 * (mass * ARM_SD,)
        ways += [
            Candidate(NAME, 0, "load-change", sd, "kg", 1.0 / 6.0, time_s, settles=4) for time_s in TAKING_S
        ]
    return [Explanation("load", None, outline.carrier, outline.rates[NAME], tuple(ways))]


@kernel
def rows(
    axis: int, centre: Floats, parent: Ints, dof: Ints, S: Floats, V: Floats, Vd: Floats,
    R: Floats, p: Floats, H: Floats,
) -> None:  # fmt: skip
    """Fill H (n,4): torque per unit of mass at `centre` (3, body frame) and of first moment (body axes).

    V, Vd (N,6): twists and their rates, gravity taken off Vd; poses R, p from the same origin.
    """
    for i in range(H.shape[0]):
        for j in range(4):
            H[i, j] = 0.0
    w0, w1, w2 = V[axis, 0], V[axis, 1], V[axis, 2]
    for c in range(4):
        # A point and its weight: the centre itself, or a unit step along a body axis (first moment).
        if c == 0:
            r0 = (
                p[axis, 0] + R[axis, 0, 0] * centre[0] + R[axis, 0, 1] * centre[1] + R[axis, 0, 2] * centre[2]
            )
            r1 = (
                p[axis, 1] + R[axis, 1, 0] * centre[0] + R[axis, 1, 1] * centre[1] + R[axis, 1, 2] * centre[2]
            )
            r2 = (
                p[axis, 2] + R[axis, 2, 0] * centre[0] + R[axis, 2, 1] * centre[1] + R[axis, 2, 2] * centre[2]
            )
        # Acceleration of the point: u' + w' x r + w x (u + w x r).
        v0 = V[axis, 3] + w1 * r2 - w2 * r1
        v1 = V[axis, 4] + w2 * r0 - w0 * r2
        v2 = V[axis, 5] + w0 * r1 - w1 * r0
        a0 = Vd[axis, 3] + Vd[axis, 1] * r2 - Vd[axis, 2] * r1 + w1 * v2 - w2 * v1
        a1 = Vd[axis, 4] + Vd[axis, 2] * r0 - Vd[axis, 0] * r2 + w2 * v0 - w0 * v2
        a2 = Vd[axis, 5] + Vd[axis, 0] * r1 - Vd[axis, 1] * r0 + w0 * v1 - w1 * v0
        if c == 0:
            b0, b1, b2 = a0, a1, a2
            m0, m1, m2 = r1 * a2 - r2 * a1, r2 * a0 - r0 * a2, r0 * a1 - r1 * a0
            f0, f1, f2 = a0, a1, a2
        else:
            # d/dh of the torque of a mass at centre + h: (h x a(centre)) + centre x (A h) and A h.
            h0, h1, h2 = R[axis, 0, c - 1], R[axis, 1, c - 1], R[axis, 2, c - 1]
            x0, x1, x2 = w1 * h2 - w2 * h1, w2 * h0 - w0 * h2, w0 * h1 - w1 * h0
            f0 = Vd[axis, 1] * h2 - Vd[axis, 2] * h1 + w1 * x2 - w2 * x1
            f1 = Vd[axis, 2] * h0 - Vd[axis, 0] * h2 + w2 * x0 - w0 * x2
            f2 = Vd[axis, 0] * h1 - Vd[axis, 1] * h0 + w0 * x1 - w1 * x0
            m0 = h1 * b2 - h2 * b1 + r1 * f2 - r2 * f1
            m1 = h2 * b0 - h0 * b2 + r2 * f0 - r0 * f2
            m2 = h0 * b1 - h1 * b0 + r0 * f1 - r1 * f0
        i = axis
        while i >= 0:
            H[dof[i], c] -= S[i, 0] * m0 + S[i, 1] * m1 + S[i, 2] * m2
            H[dof[i], c] -= S[i, 3] * f0 + S[i, 4] * f1 + S[i, 5] * f2
            i = parent[i]
