"""A torque sensor at a link that reads wrong: `+x` on the joint's motor side, `-x` on its link side.

Constants: an offset, and the share of the torque by which the reading is too large (-1: nothing is left of
it); each is there at once or comes within tenths of a second. An error that is smooth in time stands for a
loose strain gauge, a frozen reading and whatever else.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from monitor.explain.outline import Candidate, Explanation, Outline
from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

NAME = "torque-sensor"
DETAILS = ("offset", "scale")
OFFSET, SCALE, VARYING = 0, 1, 2
OFFSET_SD, SCALE_SD = 0.12, 0.4  # of rated; share of the torque
COMES_S = 0.08
SHARE = 1.0 / 7.0  # of the rate, for each way
FREE = ((0.4, 0.05), (0.1, 0.15), (0.1, 0.5))  # sd as a share of rated, time constant in s


def explanations(outline: Outline) -> list[Explanation]:
    """Return one fault for each sensor, with all the ways it may look."""
    rate = outline.rates[NAME] / max(len(outline.sensed), 1)
    found = []
    for j, i in enumerate(outline.sensed):
        rated, unit = float(outline.rated[i]), outline.units[i]
        candidates = []
        for kind, (sd, unit_) in enumerate(((OFFSET_SD * rated, unit), (SCALE_SD, "1"))):
            index, detail = 8 * j + kind, DETAILS[kind]
            candidates += [
                Candidate(NAME, index, detail, (sd,), unit_, SHARE),
                Candidate(NAME, index, detail, (sd,), unit_, SHARE, COMES_S, settles=1),
            ]
        candidates += [
            Candidate(NAME, 8 * j + VARYING, "varying", (share * rated,), unit, SHARE, time_s)
            for share, time_s in FREE
        ]
        found.append(Explanation(NAME, outline.joints[i], None, rate, tuple(candidates)))
    return found


@kernel
def rows(index: int, link_row: Ints, feature: Floats, H: Floats) -> None:
    """Fill the first column of H (n + T, >= 1): torque per unit of the constant, or of the free error.

    index is 8 * sensor + kind; link_row (T) are the sensors' link rows, where feature (n + T, >= 1) is the
    torque that should pass the sensor, through the residual's own filter.
    """
    j, kind = index // 8, index % 8
    for i in range(H.shape[0]):
        H[i, 0] = 0.0
    _both(j, 0, feature[link_row[j], 0] if kind == SCALE else 1.0, link_row, H)


@kernel
def columns(j: int, link_row: Ints, feature: Floats, H: Floats) -> None:
    """Fill the first two columns of H (n + T, >= 2): offset and scale at once, of a fault that lasts."""
    for i in range(H.shape[0]):
        H[i, 0], H[i, 1] = 0.0, 0.0
    _both(j, OFFSET, 1.0, link_row, H)
    _both(j, SCALE, feature[link_row[j], 0], link_row, H)


@kernel
def _both(j: int, column: int, torque: float, link_row: Ints, H: Floats) -> None:
    H[H.shape[0] - link_row.shape[0] + j, column] = torque
    H[link_row[j], column] = -torque
