"""Does a residual stand outside its band?"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.jit import inlined

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@inlined
def band_ratio(r_fast: Floats, r_slow: Floats, band_fast: Floats, band_slow: Floats, ratio: Floats) -> None:
    """Fill ratio (n): the larger of |residual| / band of both bandwidths; 1 is the edge of the band."""
    for i in range(ratio.shape[0]):
        ratio[i] = max(abs(r_fast[i]) / band_fast[i], abs(r_slow[i]) / band_slow[i])


@inlined
def largest(ratio: Floats, judged: Ints) -> int:
    """Return the judged row with the largest ratio, or -1 when no row is judged."""
    row = -1
    for i in range(ratio.shape[0]):
        if judged[i] != 0 and (row < 0 or ratio[i] > ratio[row]):
            row = i
    return row
