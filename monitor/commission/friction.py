"""How friction bends at low speed: what is left of the slow residual, against velocity, joint by joint.

The fit of the model knows Coulomb and viscous friction only, and leaves out the windows in which a joint is
slow. Here `r = -(c0 tanh(v/v0) + c1 tanh(v/(w1 v0)) + c2 tanh(v/(w2 v0)) + d v)` is fitted to the slow
residual of all moving samples, by least squares with large residuals held back.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from monitor.commission.drive import SLOW_LATE_S, Samples, free_rows, run
from monitor.kernels.ledger import WIDTHS
from monitor.setup.build import Setup
from monitor.setup.calibration import Model

Floats = NDArray[np.float64]

_EVERY, _ROUNDS, _HUBER = 4, 6, 2.0
_MOVES = 3.0  # times v0
# A bend smaller than that share of rated torque is none.
_WORTH = 0.002


def bent(setup: Setup, recordings: Sequence[Samples]) -> Model:
    """Return the model of a setup with the friction that fault-free recordings show at low speed.

    The setup must open no event on the way (see `commission.band.without_limits`).
    """
    traces = [run(setup, one) for one in recordings]
    unloaded = [free_rows(setup, one, SLOW_LATE_S) for one in recordings]
    v0, rated = setup.params["friction_velocity"][0], setup.params["rated"][0]
    model, rows = setup.model, np.arange(setup.sizes.n)
    rows[setup.params["link_row"][0]] = np.arange(setup.sizes.n, setup.sizes.rows)  # where friction is seen
    coulomb, viscous, bend = model.coulomb.copy(), model.viscous.copy(), model.bend.copy()
    for i in range(setup.sizes.base, setup.sizes.n):
        free = [(t.settling == 0) & (one[:, i] != 0) for t, one in zip(traces, unloaded, strict=True)]
        v = np.concatenate([t.feature[k, i, 2][::_EVERY] for t, k in zip(traces, free, strict=True)])
        r = np.concatenate([t.r_slow[k, rows[i]][::_EVERY] for t, k in zip(traces, free, strict=True)])
        moves = np.abs(v) > _MOVES * v0[i]
        if np.count_nonzero(moves) < 1000:
            continue
        change = _fitted(v[moves], r[moves], v0[i])
        grown = coulomb[i] + change[0]
        if np.abs(change[1:3]).max() < _WORTH * rated[i] or grown < 0.0:
            continue
        coulomb[i], viscous[i] = grown, max(viscous[i] + change[3], 0.0)
        bend[i] += change[1:3]
    return model._replace(coulomb=coulomb, viscous=viscous, bend=bend)


def _fitted(v: Floats, r: Floats, v0: float) -> Floats:
    """Return c0, c1, c2 and d of the head of this file, and an offset that is not used."""
    X = np.column_stack([np.tanh(v / v0), *(np.tanh(v / (w * v0)) for w in WIDTHS), v, np.ones_like(v)])
    weight = np.ones_like(r)
    for _ in range(_ROUNDS):
        A = X * weight[:, None]
        found = np.linalg.lstsq(A, -r * weight, rcond=None)[0]
        left = np.abs(r + X @ found)
        scale = 1.4826 * float(np.median(left))
        weight = np.sqrt(np.minimum(1.0, _HUBER * scale / np.maximum(left, 1e-12)))
    return np.asarray(found, dtype=np.float64)
