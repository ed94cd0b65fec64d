"""A torque sensor at a link that reads wrong: `+x` on the joint's motor side, `-x` on its link side.

Constants: an offset, and the share of the torque by which the reading is too large (-1: nothing is left of
it); each is there at once or comes within tenths of a second. Both at once are a reading that stands still.
A quick error without a law stands for a loose contact. A slow one would be taken for whoever leans on the
robot while friction hides what the motor side has to say.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from monitor.explain.outline import Candidate, Explanation, Outline
from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

NAME = "torque-sensor"
OFFSET, SCALE, FROZEN, NOISE = 0, 1, 2, 3
OFFSET_SD, SCALE_SD = 0.12, 0.4  # of rated; share of the torque
STANDS_SD = (0.4, 1.0)  # of rated, of the torque: what a reading that stands still is off by
COMES_S = 0.08
SHARE = 1.0 / 7.0  # of the rate, for each way
NOISE_SD, NOISE_S = (0.4, 0.1), 0.05  # of rated


def explanations(outline: Outline) -> list[Explanation]:
    """Return one fault for each sensor, with all the ways it may look."""
    rate = outline.rates[NAME] / max(len(outline.sensed), 1)
    found = []
    for j, i in enumerate(outline.sensed):
        rated, unit = float(outline.rated[i]), outline.units[i]
        candidates = []
        for kind, detail, sd, unit_ in (
            (OFFSET, "offset", OFFSET_SD * rated, unit),
            (SCALE, "scale", SCALE_SD, "1"),
        ):
            index = 8 * j + kind
            candidates += [
                Candidate(NAME, index, detail, (sd,), unit_, SHARE),
                Candidate(NAME, index, detail, (sd,), unit_, SHARE, COMES_S, settles=1),
            ]
        stands = (STANDS_SD[0] * rated, STANDS_SD[1])
        candidates.append(Candidate(NAME, 8 * j + FROZEN, "frozen", stands, unit, SHARE, COMES_S, settles=2))
        candidates += [
            Candidate(NAME, 8 * j + NOISE, "noise", (share * rated,), unit, SHARE, NOISE_S)
            for share in NOISE_SD
        ]
        found.append(Explanation(NAME, outline.joints[i], None, rate, tuple(candidates)))
    return found


@kernel
def rows(index: int, link_row: Ints, feature: Floats, H: Floats) -> None:
    """Fill the columns of H (n + T, >= 1): torque per unit of the constants, or of the free error.

    index is 8 * sensor + kind; link_row (T) are the sensors' link rows, where feature (n + T, >= 1) is the
    torque that should pass the sensor, through the residual's own filter.
    """
    j, kind = index // 8, index % 8
    if kind == FROZEN:
        columns(j, link_row, feature, H)
        return
    for i in range(H.shape[0]):
        H[i, 0] = 0.0
    _both(j, 0, feature[link_row[j], 0] if kind == SCALE else 1.0, link_row, H)


@kernel
def columns(j: int, link_row: Ints, feature: Floats, H: Floats) -> None:
    """Fill the first two columns of H (n + T, >= 2): offset and scale at once."""
    for i in range(H.shape[0]):
        H[i, 0], H[i, 1] = 0.0, 0.0
    _both(j, OFFSET, 1.0, link_row, H)
    _both(j, SCALE, feature[link_row[j], 0], link_row, H)


@kernel
def _both(j: int, column: int, torque: float, link_row: Ints, H: Floats) -> None:
    H[H.shape[0] - link_row.shape[0] + j, column] = torque
    H[link_row[j], column] = -torque
