"""A motor that does not do what its drive believes: `r_i = -x theta`, one constant at a time; or free torque.

Constants: a lost share of the torque, added Coulomb friction, added viscous friction, an offset; each is
there at once or comes within tenths of a second. A free torque, smooth in time, stands for ripple and for
whatever else one drive alone can do.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from monitor.explain.contact import BLOW_S, PUSH_S
from monitor.explain.outline import Candidate, Explanation, Outline
from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]

NAME = "actuator"
DETAILS = ("torque-loss", "coulomb-friction", "viscous-friction", "offset")
TORQUE, COULOMB, VISCOUS, OFFSET, VARYING = 0, 1, 2, 3, 4
LOSS_SD = 0.4
FRICTION_SD = 2.5  # times normal
OFFSET_SD = 0.12  # of rated
COMES_S = 0.08  # a fault is there at once, or comes within some tenths of a second
SHARE = 1.0 / 11.0  # of the rate, for each way
# Free torque: sd as a share of rated, time constant in s. The times of a blow and of a push among them: else
# the course in time alone would tell a contact that loads a single joint from a fault, which it cannot.
FREE = ((0.2, BLOW_S), (0.2, PUSH_S), (0.1, 0.5))
# Where a joint is said to have no friction, what normal would be: shares of rated torque (from memory).
COULOMB_FLOOR, VISCOUS_FLOOR = 0.02, 0.02


def explanations(outline: Outline) -> list[Explanation]:
    """Return one fault for each joint, with all the ways it may look."""
    rate = outline.rates[NAME] / max(len(outline.joints), 1)
    found = []
    for i, joint in enumerate(outline.joints):
        rated, unit = float(outline.rated[i]), outline.units[i]
        sds = (
            LOSS_SD,
            FRICTION_SD * max(float(outline.coulomb[i]), COULOMB_FLOOR * rated),
            FRICTION_SD * max(float(outline.viscous[i]), VISCOUS_FLOOR * rated),
            OFFSET_SD * rated,
        )
        row = outline.drive_row(i)
        candidates = []
        for kind, (detail, sd, unit_) in enumerate(zip(DETAILS, sds, units(unit), strict=True)):
            index = 8 * row + kind
            one_sided = kind != OFFSET
            candidates += [
                Candidate(NAME, index, detail, (sd,), unit_, SHARE, one_sided=one_sided),
                Candidate(NAME, index, detail, (sd,), unit_, SHARE, COMES_S, settles=1, one_sided=one_sided),
            ]
        candidates += [
            Candidate(NAME, 8 * row + VARYING, "varying-torque", (share * rated,), unit, SHARE, time_s)
            for share, time_s in FREE
        ]
        found.append(Explanation("actuator", joint, None, rate, tuple(candidates)))
    return found


def units(unit: str) -> tuple[str, str, str, str]:
    """Return the units of the four constants for a joint whose torque (force) is in `unit`."""
    return "1", unit, "N m s/rad" if unit == "N m" else "N s/m", unit


@kernel
def rows(index: int, feature: Floats, H: Floats) -> None:
    """Fill the first column of H (n, >= 1): torque per unit of the constant, or of the free torque.

    index is 8 * row + kind, row that of the drive; feature (n, >= 3) is tau, tanh(v/v0) and v through the
    residual's own filter.
    """
    row, kind = index // 8, index % 8
    for i in range(H.shape[0]):
        H[i, 0] = 0.0
    if kind == OFFSET:
        H[row, 0] = -1.0
    elif kind == VARYING:
        H[row, 0] = 1.0
    else:
        H[row, 0] = -feature[row, kind]
