"""How large residuals are while all is well: causes, correlation, slow share, and limits for a wanted rate.

The squared residual of each row is explained by non-negative weights on its causes (kernels/band.py), by
least squares weighted with the inverse square of the variance and repeated. Limits come from the tails of
what opens events, see `tail`.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar, nnls

from monitor.commission.drive import SLOW_LATE_S, Samples, Trace, free_rows, run
from monitor.errors import SessionError
from monitor.kernels.band import BLIND, FLOOR, INERTIA, NOISE, SHAKEN, STANDS, STANDS_SQUARED
from monitor.setup.build import Setup
from monitor.setup.calibration import Band
from monitor.setup.weighing import SLOW_S

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

_EVERY = 8  # samples between those looked at: as long as the residual remembers
_ROUNDS, _CLIP_FROM, _CLIP = 8, 3, 4.0  # rounds of weighting; from which on, and at how many sd, r is clipped
_LEAST_SAMPLES = 2000  # a row with fewer keeps its band
_LEAST_FLOOR = 0.0008  # of rated, sd
_STANDING = 0.1  # share of standing from which on the sums leave a row out
_LAG_S = 0.016  # the fast part of the noise has died away
_LEAST_LASTING = 0.002  # of rated
_UNLIMITED = 1e9
_LEAST_ROW, _LEAST_CUSUM = 5.0, 6.0
_BLOCK_S, _LEAST_BLOCKS = 1.0, 60
_BEYOND = 0.1  # share of the blocks that make the tail
_SHAPE_SD, _LARGEST_SHAPE = 0.1, 0.3
# Causes of a joint that stands or reverses; when none does; and how their weights grow, see `_widening`.
_REVERSALS = [STANDS, STANDS_SQUARED, SHAKEN]
_CALM, _TOLERANCE, _LARGEST_WIDENING, _REFERENCE_BLOCKS = 0.02, 1.15, 64.0, 2000.0
_WIDENING_EVERY = 4
# Causes of a base, which has neither drives nor friction (the floor comes first, see `_causes`).
_OF_BASE = [FLOOR, NOISE, INERTIA]
# Least weights of its sensors' noise, fast and slow: legs that stand may seem to explain all of a residual.
# And the share of slow noise: what lasts is what legs hide.
_BASE_NOISE, _BASE_SLOW = (0.5, 0.05), 0.05
# Statistics that open events; each gets its share of the wanted rate.
_STATISTICS = ("row", "slow", "body", "sums", "slow_body", "foot")


@dataclass(frozen=True)
class Tail:
    """The tail of a statistic: clusters of blocks beyond a threshold, generalised Pareto.

    Attributes
    ----------
    threshold, shape, scale : float
        A cluster's maximum exceeds x >= threshold with `(1 + shape (x - threshold) / scale)^(-1/shape)`.
    clusters, blocks : int
        How many clusters there were, in so many blocks.
    """

    threshold: float
    shape: float
    scale: float
    clusters: int
    blocks: int

    def level(self, blocks: float) -> float:
        """Return the level that one cluster in so many blocks exceeds."""
        expected = self.clusters * blocks / self.blocks
        if expected <= 1.0:
            return self.threshold
        grown = math.log(expected)
        return self.threshold + self.scale * (
            math.expm1(self.shape * grown) / self.shape if self.shape else grown
        )


class BandFit(NamedTuple):
    """A fitted band, and what its limits rest on.

    band : Band
        The band with limits for one false alarm per `wanted_s` of motion.
    tails : mapping of str to Tail
        Of the square of the largest row, fast and slow (`row`, `slow`), of all rows together (`body`), of the
        sums (`sums`) and, for walkers, of all rows' slow residual (`slow_body`) and of feet (`foot`), by
        blocks of a second.
    judged_s, wanted_s : float
        Time that was judged, and the mean time between false alarms that the limits are for [s].
    """

    band: Band
    tails: Mapping[str, Tail]
    judged_s: float
    wanted_s: float

    @property
    def shown_s(self) -> float:
        """Mean time between false alarms that recordings without any would show, at 95 % confidence [s].

        Zero events in time T bound the rate by 3/T.
        """
        return self.judged_s / 3.0

    def in_words(self) -> str:
        """Return what the limits rest on."""
        clusters = " and ".join(f"{one.clusters} ({name})" for name, one in self.tails.items())
        text = (
            f"limits for one false alarm in {self.wanted_s:.4g} s rest on {self.judged_s:.4g} s of motion, "
            f"their tails on {clusters} clusters"
        )
        if self.wanted_s <= self.shown_s:
            return text
        return (
            f"{text}; that is {self.wanted_s / self.judged_s:.3g} times what was recorded, so the limits "
            f"are extrapolated: without an alarm, such recordings show at best one in {self.shown_s:.4g} s"
        )


def fit_band(setup: Setup, recordings: Sequence[Samples], wanted_s: float) -> BandFit:
    """Return the band of fault-free recordings, with limits for one false alarm per `wanted_s`.

    Parameters
    ----------
    setup : Setup
        The robot with its fitted model and any band.
    recordings : sequence of Samples
        Other ones than the model was fitted on.
    wanted_s : float
        Mean time between false alarms [s of motion].

    Raises
    ------
    SessionError
        If the recordings are too short for any limit.
    """
    band = without_limits(setup.band)
    for _ in range(2):
        # Tracked friction depends a little on the band, so once more.
        band = _shape(
            setup, band, recordings, [run(setup.with_band(band), one, judge_base=False) for one in recordings]
        )
    standing = [one for one in recordings if not one.hoisted]
    if setup.sizes.base and standing:
        band = _base_floor(setup, band, standing)
    return limited(setup, band, recordings, wanted_s)


def without_limits(band: Band) -> Band:
    """Return the band with limits that open no event: during one, friction would not be tracked."""
    far = _UNLIMITED
    return replace(
        band,
        row_limit=far,
        slow_limit=far,
        body_limit=far,
        cusum_limit=far,
        slow_body_limit=far,
        foot_limit=far,
    )


class _Seen(NamedTuple):
    """What a trace shows: residuals with what friction explains taken off, all (T,n) but cause (T,n,C).

    `known` is the part of the variance that is no cause, and of the slow residual's; `counted` says which
    rows count, `counted_slow` the same of the slow one.
    """

    cause: Floats
    fast: Floats
    slow: Floats
    known: Floats
    known_slow: Floats
    counted: Bools
    counted_slow: Bools


def _seen(setup: Setup, samples: Samples, trace: Trace) -> _Seen:
    explained, known = trace.explained, trace.variance[:, 2]
    settled = (trace.settling == 0)[:, None]
    counted = settled & (trace.free != 0)
    slow = settled & (free_rows(setup, samples, SLOW_LATE_S) != 0)
    return _Seen(trace.cause, trace.r_fast - explained, trace.r_slow - explained, known, known, counted, slow)


def _base_seen(seen: _Seen, setup: Setup, trace: Trace, hoisted: bool) -> _Seen:
    """Return the same for the rows of a base that stands: what its legs do not explain of their residuals.

    How far the legs themselves are off is known by then, from the time they swing or hang.
    """
    b = setup.sizes.base
    if not b or hoisted:
        return seen
    blind = BLIND * setup.params["rated"][0, :b] ** 2
    fast, slow, known, known_slow = (one.copy() for one in seen[1:5])
    counted, counted_slow = seen.counted.copy(), seen.counted_slow.copy()
    fast[:, :b], slow[:, :b] = trace.alone[:, 0, :b], trace.alone[:, 2, :b]
    lasting = setup.params["cusum_sd"][0, :b] ** 2
    for k, (one, more) in enumerate(((known, 0.0), (known_slow, lasting))):
        own = blind + trace.variance[:, k, :b] + more
        one[:, :b] = np.maximum(trace.alone[:, 2 * k + 1, :b] ** 2 - own, 0.0)
    counted[:, :b] = counted_slow[:, :b] = (trace.settling == 0)[:, None]
    return _Seen(seen.cause, fast, slow, known, known_slow, counted, counted_slow)


def _base_floor(setup: Setup, band: Band, recordings: Sequence[Samples]) -> Band:
    """Return the band with the floors of a base's rows raised to what these have beyond all other rows.

    What legs that stand hide is no independent noise of six rows; each row is to be as wide as it is seen to
    be.
    """
    fast, slow = band.fast.copy(), band.slow.copy()
    for _ in range(2):
        traces = [run(setup.with_band(replace(band, fast=fast, slow=slow)), one) for one in recordings]
        taken = [(trace.settling == 0) & (trace.alone[:, 3, 0] > 0.0) for trace in traces]
        for k, weight in enumerate((fast, slow)):
            alone, sd = (
                np.concatenate(
                    [t.alone[m, 2 * k + j, : setup.sizes.base] for t, m in zip(traces, taken, strict=True)]
                )
                for j in range(2)
            )
            excess = np.minimum(alone**2, _CLIP**2 * sd**2) - sd**2
            weight[: setup.sizes.base, FLOOR] += np.maximum(excess.mean(axis=0), 0.0)
    return replace(band, fast=fast, slow=slow)


def _shape(setup: Setup, band: Band, recordings: Sequence[Samples], traces: Sequence[Trace]) -> Band:
    """Return the band with all but its limits fitted to traces in which no event was opened."""
    rated = setup.params["rated"][0]
    seen = [
        _base_seen(_seen(setup, samples, trace), setup, trace, samples.hoisted)
        for trace, samples in zip(traces, recordings, strict=True)
    ]
    dt_s = 1e-9 * float(setup.params["period_ns"][0])
    fast, slow = band.fast.copy(), band.slow.copy()
    for i in range(len(rated)):
        allowed = slice(None) if i >= setup.sizes.base else _OF_BASE
        for weight, name, no_cause, which in (
            (fast, "fast", "known", "counted"), (slow, "slow", "known_slow", "counted_slow"),
        ):  # fmt: skip
            taken = [np.flatnonzero(getattr(one, which)[:, i])[::_EVERY] for one in seen]
            if sum(map(len, taken)) < _LEAST_SAMPLES:
                continue
            cause, r, known = (
                np.concatenate([x[k, i] for x, k in zip(parts, taken, strict=True)])
                for parts in zip(
                    *((one.cause, getattr(one, name), getattr(one, no_cause)) for one in seen), strict=True
                )
            )
            weight[i] = 0.0
            weight[i, allowed] = _causes(cause[:, allowed], r, known, (_LEAST_FLOOR * rated[i]) ** 2)
        if i < setup.sizes.base:
            fast[i, NOISE], slow[i, NOISE] = (
                max(fast[i, NOISE], _BASE_NOISE[0]),
                max(slow[i, NOISE], _BASE_NOISE[1]),
            )
            continue
        fast[i, _REVERSALS] *= _widening(seen, i, fast[i], round(_BLOCK_S / dt_s))
        if setup.sizes.base:
            # A leg stands long where it cannot be looked at, and a joint that stands hides friction both
            # ways.
            hidden = setup.model.coulomb[i] ** 2 / 3.0
            for weight in (fast, slow):
                weight[i, STANDS_SQUARED] += max(hidden - weight[i, [STANDS, STANDS_SQUARED]].sum(), 0.0)
    z = [_normalised(one, fast) for one in seen]
    lasting = _lasting(seen, int(setup.params["cusum_samples"][0]))
    return replace(
        band,
        fast=fast,
        slow=slow,
        rho=_own(_correlation(np.concatenate(z)[::_EVERY]), setup.sizes.base),
        slow_share=np.where(np.arange(len(rated)) < setup.sizes.base, _BASE_SLOW, _slow_share(z, dt_s)),
        cusum_sd=np.maximum(lasting, _LEAST_LASTING * rated),
    )


def _normalised(seen: _Seen, weights: Floats) -> Floats:
    """Return residual over sd (T,n), clipped; nan where a row does not count."""
    sd = np.sqrt(np.einsum("tic,ic->ti", seen.cause, weights) + seen.known)
    return np.where(seen.counted, np.clip(seen.fast / sd, -_CLIP, _CLIP), np.nan)


def _lasting(seen: Sequence[_Seen], length: int) -> Floats:
    """Return the root mean square (n,) of the means of moving joints' slow residuals over so many samples."""
    moving = [np.where(x.counted_slow & (x.cause[:, :, STANDS] < _STANDING), x.slow, 0.0) for x in seen]
    means = np.concatenate([_block_means(one, length) for one in moving])
    return np.asarray(np.sqrt(np.mean(means**2, axis=0)))


def _widening(seen: Sequence[_Seen], row: int, weight: Floats, length: int) -> float:
    """Return by how much the causes of a reversal have to count more, for their tail to be no heavier.

    Most reversals are harmless, but where a drive breaks loose, crosses its backlash and shakes its
    neighbours a few are far from it. Least squares finds their mean; a limit that has to hold for all of them
    would blind the robot in motion. So the variance around a reversal grows until the largest normalised
    residual of a block is as large as that of the time in which no joint stands.
    """
    plain = np.delete(np.arange(len(weight)), _REVERSALS)
    squares, steady, turning, calm = [], [], [], []
    for one in seen:
        counts = one.counted[::_WIDENING_EVERY, row]
        cause = one.cause[::_WIDENING_EVERY]
        squares.append(np.where(counts, one.fast[::_WIDENING_EVERY, row] ** 2, 0.0))
        steady.append(cause[:, row, plain] @ weight[plain] + one.known[::_WIDENING_EVERY, row])
        turning.append(cause[:, row, _REVERSALS] @ weight[_REVERSALS])
        calm.append(counts & (cause[:, :, STANDS].max(axis=1) < _CALM))
    length //= _WIDENING_EVERY

    def level(factor: float, among: Sequence[Bools] | None = None) -> float:
        maxima = []
        for k, (square, variance, more) in enumerate(zip(squares, steady, turning, strict=True)):
            z2 = square / (variance + factor * more)
            maxima.append(_block_maxima(z2 if among is None else np.where(among[k], z2, 0.0), length))
        return tail(maxima).level(_REFERENCE_BLOCKS)

    if sum(int(np.count_nonzero(one)) for one in calm) < _LEAST_BLOCKS * length:
        return 1.0  # something always stands: there is nothing to compare with
    wanted, factor = _TOLERANCE * level(1.0, calm), 1.0
    while factor < _LARGEST_WIDENING and level(factor) > wanted:
        factor *= 2.0
    return factor


def _causes(cause: Floats, r: Floats, known: Floats, floor: float) -> Floats:
    """Return non-negative weights (C) with `r² = cause weight + known` in the mean.

    cause (T,C), r and what is known of its variance (T); the weight of the floor is at least `floor`.
    """
    scale = np.maximum(cause.max(axis=0), 1e-300)
    X = cause / scale
    variance = np.full(len(r), max(float(np.mean(r**2)), floor))
    for k in range(_ROUNDS):
        square = np.minimum(r**2, _CLIP**2 * variance) if k >= _CLIP_FROM else r**2
        R = np.asarray(np.linalg.qr(np.column_stack([X, square - known]) / variance[:, None], mode="r"))
        found, _ = nnls(R[:-1, :-1], R[:-1, -1])
        variance = np.maximum(X @ found, floor) + known
    weight: Floats = found / scale
    weight[FLOOR] = max(weight[FLOOR], floor)
    return weight


def _correlation(z: Floats) -> Floats:
    """Return the correlation matrix of z (T,n; nan where not judged), drawn a tenth towards none."""
    z = np.nan_to_num(z)
    power = np.maximum((z**2).sum(axis=0), 1e-12)
    rho: Floats = 0.9 * (z.T @ z) / np.sqrt(np.outer(power, power))
    np.fill_diagonal(rho, 1.0)
    return 0.5 * (rho + rho.T)


def _own(rho: Floats, base: int) -> Floats:
    """Return the correlation without that of a base, whose rows share what legs that stand do not know."""
    rho[:base], rho[:, :base] = 0.0, 0.0
    rho[range(base), range(base)] = 1.0
    return rho


def _slow_share(z: Sequence[Floats], dt_s: float) -> Floats:
    """Return the share of slow noise, from the autocorrelation at a lag the fast part does not reach."""
    lag = max(1, round(_LAG_S / dt_s))
    both, alone = np.zeros((2, z[0].shape[1]))
    for one in z:
        products = one[lag:] * one[:-lag]
        both += np.nansum(products, axis=0)
        alone += np.where(np.isnan(products), 0.0, one[lag:] ** 2).sum(axis=0)
    share = np.divide(both, alone, out=np.zeros_like(both), where=alone > 0.0)
    return np.clip(share / math.exp(-_LAG_S / SLOW_S), 0.05, 0.9)


def _block_means(x: Floats, length: int) -> Floats:
    """Return the means of whole blocks along the first axis."""
    whole = len(x) // length
    return np.asarray(x[: whole * length].reshape(whole, length, *x.shape[1:]).mean(axis=1))


def _block_maxima(x: Floats, length: int) -> Floats:
    """Return the maxima of whole blocks along the first axis."""
    whole = len(x) // length
    return np.asarray(x[: whole * length].reshape(whole, length, *x.shape[1:]).max(axis=1))


def limited(setup: Setup, band: Band, recordings: Sequence[Samples], wanted_s: float) -> BandFit:
    """Return the band with limits of its statistics for one false alarm per `wanted_s`, as many by each.

    Raises
    ------
    SessionError
        If the recordings are too short for any limit.
    """
    traces = [run(setup.with_band(without_limits(band)), one) for one in recordings]
    length = round(_BLOCK_S / (1e-9 * setup.params["period_ns"][0]))
    blocks = [_maxima(trace, length) for trace in traces]
    count = sum(map(len, blocks))
    if count < _LEAST_BLOCKS:
        raise SessionError(
            "recordings for the band",
            f"{count} whole seconds that can be judged",
            f"at least {_LEAST_BLOCKS}",
            "Record longer: limits rest on what is rare.",
        )
    names = _STATISTICS if setup.sizes.base and setup.sizes.F else _STATISTICS[:4]
    tails = {name: tail([one[:, k] for one in blocks]) for k, name in enumerate(names)}
    row, slow, body, sums, *foot = (one.level(len(names) * wanted_s / _BLOCK_S) for one in tails.values())
    limits = replace(
        band,
        row_limit=max(math.sqrt(row), _LEAST_ROW),
        slow_limit=max(math.sqrt(slow), _LEAST_ROW),
        body_limit=body,
        cusum_limit=max(sums, _LEAST_CUSUM),
        slow_body_limit=foot[0] if foot else band.slow_body_limit,
        foot_limit=foot[1] if foot else band.foot_limit,
    )
    return BandFit(limits, tails, count * _BLOCK_S, wanted_s)


def _maxima(trace: Trace, length: int) -> Floats:
    """Return the largest of each statistic (blocks,6) over blocks that are settled and judged all through.

    The trace is one without limits. The square of a row is taken: of normal noise it has an exponential tail,
    as the others.
    """
    row, slow = (
        np.where(trace.judged != 0, _UNLIMITED * ratio, 0.0).max(axis=1)
        for ratio in (trace.ratio, trace.slow_ratio)
    )
    statistics = np.column_stack(
        [row**2, slow**2, _UNLIMITED * trace.body_ratio, trace.cusum, *(_UNLIMITED * trace.foot.T)]
    )
    counted = trace.settling == 0
    kept = _block_maxima(~counted, length) == 0
    return np.asarray(_block_maxima(statistics, length)[kept])


def tail(maxima: Sequence[Floats]) -> Tail:
    """Return the tail of a statistic from series of its block maxima.

    The threshold is their 90 % quantile; neighbouring blocks beyond it are one cluster, as they are an event.
    What the clusters exceed it by is generalised Pareto ("Statistical inference using extreme order
    statistics", Annals of Statistics 1975, doi 10.1214/aos/1176343003). Its shape decides how far away a rare
    level is and is hardly known from a few clusters, so it has a prior: normal about 0, an exponential tail,
    with sd 0.1 and never below 0 nor above 0.3. A bounded tail would promise that nothing larger ever comes.
    """
    every = np.concatenate(maxima)
    threshold = float(np.quantile(every, 1.0 - _BEYOND))
    beyond = np.array([top for one in maxima for top in _cluster_maxima(one, threshold)]) - threshold
    if not len(beyond):
        return Tail(threshold, 0.0, 0.0, 0, len(every))
    shapes = np.linspace(0.0, _LARGEST_SHAPE, 61)
    fits = [_best_scale(beyond, float(shape)) for shape in shapes]
    costs = [cost + 0.5 * (shape / _SHAPE_SD) ** 2 for (_, cost), shape in zip(fits, shapes, strict=True)]
    best = int(np.argmin(costs))
    return Tail(threshold, float(shapes[best]), fits[best][0], len(beyond), len(every))


def _cluster_maxima(x: Floats, threshold: float) -> Floats:
    """Return the maximum of each run of neighbours beyond the threshold."""
    beyond = np.concatenate([[False], x > threshold, [False]])
    edges = np.flatnonzero(beyond[1:] != beyond[:-1]).reshape(-1, 2)
    return np.array([x[first:end].max() for first, end in edges])


def _best_scale(beyond: Floats, shape: float) -> tuple[float, float]:
    """Return the likeliest scale of a generalised Pareto distribution of that shape, and -log likelihood."""
    mean = float(beyond.mean())

    def cost(log_scale: float) -> float:
        y = beyond / math.exp(log_scale)
        falls = y.sum() if shape == 0.0 else (1.0 / shape + 1.0) * np.log1p(shape * y).sum()
        return float(len(beyond) * log_scale + falls)

    found = minimize_scalar(cost, bounds=(math.log(mean) - 3.0, math.log(mean) + 1.0), method="bounded")
    return math.exp(found.x), float(found.fun)
