"""Evidence against dense normal distributions (scipy): every sample of every row in one covariance matrix."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np
import pytest
import scipy.linalg
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.special import log_ndtr
from scipy.stats import multivariate_normal, norm

from monitor.kernels import evidence as ev

Floats = NDArray[np.float64]

NEAR, SETTLED = 0.1, 0.02


class Case(NamedTuple):
    """Residuals r (T,n) and what is said of them: R (T,n,n), D (T,n), columns H (T,n,d), `keep`."""

    r: Floats
    R: Floats
    D: Floats
    H: Floats
    keep: float


def case(seed: int, n: int = 3, d: int = 2, steps: int = 9) -> Case:
    """Return a case whose noise is correlated and another at each step, as it is on a moving robot."""
    rng = np.random.default_rng([seed, n, d])
    A = rng.normal(size=(steps, n, n))
    return Case(
        r=2.0 * rng.normal(size=(steps, n)),
        R=A @ A.transpose(0, 2, 1) + 0.3 * np.eye(n),
        D=rng.uniform(0.2, 1.5, (steps, n)),
        H=rng.normal(size=(steps, n, d)),
        keep=float(rng.uniform(0.7, 0.99)),
    )


CASES = [case(0, n=1, d=1), case(1, n=2, d=1), case(2), case(3, n=7, d=6, steps=5), case(4, steps=25)]


class Filters:
    """The kernels in the order in which an evidence step calls them."""

    def __init__(self, c: Case) -> None:
        n, d = c.H.shape[1:]
        self.keep, self.d = c.keep, d
        self.s, self.P = np.zeros(n), np.eye(n)
        self.columns, self.A, self.b = np.zeros((d, n)), np.zeros((d, d)), np.zeros(d)
        self.null, self.constant, self.log_det = 0.0, 0.0, 0.0
        self.mean, self.sd = np.zeros(d), math.nan

    def whitened(self, r: Floats, R: Floats, D: Floats, H: Floats) -> tuple[Floats, Floats, Floats]:
        n = len(r)
        L, G, y, columns = np.full((n, n), math.nan), np.full((n, n), math.nan), r.copy(), H.copy()
        self.log_det += ev.factor(R, L)
        ev.whiten(L, y)
        ev.whiten_columns(L, columns, H.shape[1])
        ev.whiten_slow(L, D, G)
        return y, G, columns

    def step(self, r: Floats, R: Floats, D: Floats, H: Floats) -> None:
        n, d = H.shape
        y, G, columns = self.whitened(r, R, D, H)
        gain, innovation, spread = np.full((n, n), math.nan), np.full(n, math.nan), np.full(n, math.nan)
        self.null += ev.null_step(y, G, self.keep, self.s, self.P, gain, innovation, spread)
        ev.constant_step(columns, d, G, self.keep, gain, innovation, spread, self.columns, self.A, self.b)
        L = np.full((d, d), math.nan)
        self.constant = ev.constant_evidence(self.A, self.b, d, L, self.mean)
        self.sd = ev.first_sd(L, d)


def constants(c: Case) -> Filters:
    filters = Filters(c)
    for row in zip(c.r, c.R, c.D, c.H, strict=True):
        filters.step(*row)
    return filters


def smooth(c: Case, dt_T: float, settles: int = 0, before: int = 0) -> tuple[float, float]:
    """Return log evidence, whitened, and misfit of smooth components that begin after `before` steps."""
    n, d = c.H.shape[1:]
    known = constants(c._replace(r=c.r[:before], R=c.R[:before], D=c.D[:before], H=c.H[:before]))
    m = n + 2 * d + settles
    x, P, u = np.full(m, math.nan), np.full((m, m), math.nan), np.full(m, math.nan)
    ev.smooth_start(d, NEAR, known.s, known.P, x, P)
    log_evidence, misfit = 0.0, 0.0
    for row in list(zip(c.r, c.R, c.D, c.H, strict=True))[before:]:
        y, G, columns = known.whitened(*row)
        step = ev.smooth_step(columns, y, G, d, settles, c.keep, *times_and_moves(dt_T, d, settles), x, P, u)
        log_evidence, misfit = log_evidence + step[0], misfit + step[1]
    return log_evidence, misfit


def times_and_moves(dt_T: float, d: int, settles: int) -> tuple[Floats, Floats]:
    """Return a time of its own for each component, and how it goes on: the last of several fades."""
    moves = np.where(np.arange(d) < settles, SETTLED, 1.0)
    moves[d - 1] *= d == 1 or settles == d
    return dt_T * (1.0 + 0.5 * np.arange(d)), moves


def noise(c: Case) -> Floats:
    """Return the covariance (T n, T n) of white and slow noise: `keep` to the lag, between rows D alone."""
    steps, n = c.r.shape
    apart = np.abs(np.subtract.outer(np.arange(steps), np.arange(steps)))
    slow = np.einsum("ab,ai,bi,ij->aibj", c.keep**apart, c.D, c.D, np.eye(n))
    return np.asarray(slow.reshape(steps * n, -1) + scipy.linalg.block_diag(*c.R))


def stacked(c: Case) -> Floats:
    """Return the columns of all steps, one below the other (T n, d)."""
    return c.H.reshape(-1, c.H.shape[2])


def moving(c: Case, dt_T: float, settles: int, before: int = 0) -> Floats:
    """Return the covariance (T n, T n) of what smooth components make that begin after `before` steps.

    Matérn 3/2, `k(t) = (1 + t/T) exp(-t/T)` (Gaussian Processes for Machine Learning, eq. 4.17). From a value
    a and a rate b [1/T] it goes on as `a k(t) + b t exp(-t)`, and what comes in addition has the covariance
    that is left of k. About a value of its own the same holds for the distance from that value.
    """
    steps, n, d = c.H.shape
    K = np.zeros((d, steps, steps))
    for i, (step, moves) in enumerate(zip(*times_and_moves(dt_T, d, settles), strict=True)):
        t = np.where(np.arange(steps) < before, np.nan, step * (np.arange(steps) + 1.0 - before))
        at, rate = (1.0 + t) * np.exp(-t), t * np.exp(-t)
        apart = np.abs(np.subtract.outer(t, t))
        fresh = (1.0 + apart) * np.exp(-apart) - np.outer(at, at) - np.outer(rate, rate)
        K[i] = NEAR**2 * np.outer(at, at) + np.outer(rate, rate) + moves * fresh
        if i < settles:
            K[i] += np.outer(1.0 - at, 1.0 - at)
    K = np.nan_to_num(K)
    return np.asarray(np.einsum("iab,api,bqi->apbq", K, c.H, c.H).reshape(steps * n, steps * n))


def log_density(r: Floats, covariance: Floats) -> float:
    return float(multivariate_normal(np.zeros(r.size), covariance).logpdf(r.ravel()))


def test_the_factor_and_its_determinant_are_those_of_numpy() -> None:
    R, L = case(5, n=6).R[0], np.zeros((6, 6))
    log_det = ev.factor(R, L)
    np.testing.assert_allclose(L, np.linalg.cholesky(R), atol=1e-13)
    assert log_det == pytest.approx(np.linalg.slogdet(R)[1], rel=1e-12)


def test_whitening_divides_by_the_factor() -> None:
    c = case(6, n=5, d=3)
    y, G, H = Filters(c).whitened(c.r[0], c.R[0], c.D[0], c.H[0])
    L = np.linalg.cholesky(c.R[0])
    for ours, given_ in ((y, c.r[0]), (H, c.H[0]), (G, np.diag(c.D[0]))):
        np.testing.assert_allclose(ours, scipy.linalg.solve_triangular(L, given_, lower=True), atol=1e-12)


def test_whitening_leaves_the_columns_beyond_the_first_d_alone() -> None:
    c = case(7, n=4, d=6)
    L, H = np.linalg.cholesky(c.R[0]), c.H[0].copy()
    ev.whiten_columns(L, H, 2)
    np.testing.assert_array_equal(H[:, 2:], c.H[0, :, 2:])


@pytest.mark.parametrize("c", CASES)
def test_the_evidence_of_noise_alone_is_its_dense_normal_density(c: Case) -> None:
    filters = constants(c)
    density = filters.null - 0.5 * (filters.log_det + c.r.size * math.log(2.0 * math.pi))
    assert density == pytest.approx(log_density(c.r, noise(c)), abs=1e-9)


@pytest.mark.parametrize("c", CASES)
def test_the_evidence_of_constants_is_the_ratio_of_two_dense_normal_densities(c: Case) -> None:
    S, H = noise(c), stacked(c)
    ratio = log_density(c.r, S + H @ H.T) - log_density(c.r, S)
    assert constants(c).constant == pytest.approx(ratio, abs=1e-9)


@pytest.mark.parametrize("c", CASES)
def test_constants_and_their_uncertainty_are_those_of_the_dense_posterior(c: Case) -> None:
    # Conditioning the joint normal distribution of constants and residuals (any textbook).
    S, H = noise(c), stacked(c)
    gain = np.linalg.solve(S + H @ H.T, H).T
    filters = constants(c)
    np.testing.assert_allclose(filters.mean, gain @ c.r.ravel(), atol=1e-10)
    assert filters.sd == pytest.approx(math.sqrt(1.0 - gain[0] @ H[:, 0]), rel=1e-9)


@pytest.mark.parametrize("one_sided", [False, True])
@pytest.mark.parametrize("least", [0.0, 0.1, 0.7])
@pytest.mark.parametrize(("mean", "sd"), [(0.8, 0.3), (-0.4, 0.5), (-1.5, 0.4), (0.02, 0.9)])
def test_a_constant_that_must_be_worth_naming_has_the_evidence_of_what_is_left_of_its_prior(
    mean: float, sd: float, least: float, one_sided: bool
) -> None:
    # Judge: quadrature of likelihood times prior, the prior cut off below `least` and raised to an area of 1.
    # A posterior (mean, sd) of a unit prior comes from a likelihood of precision 1/sd² - 1.
    precision = 1.0 / sd**2 - 1.0
    peak = mean / sd**2 / precision

    def area(function: Callable[[float], float], low: float, high: float) -> float:
        inner = [x for x in (0.0, mean) if low < x < high]
        return float(quad(function, low, high, epsabs=1e-13, limit=200, points=inner or None)[0])

    def weighted(x: float) -> float:
        return float(norm.pdf(x) * np.exp(-0.5 * precision * (x - peak) ** 2))

    sides = [(least, 9.0)] if one_sided else [(least, 9.0), (-9.0, -least)]
    cut = sum(area(weighted, *side) for side in sides) / sum(area(norm.pdf, *side) for side in sides)
    expected = math.log(cut / area(weighted, -9.0, 9.0))
    assert ev.worth(mean, sd, least, int(one_sided)) == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize("x", [6.0, 0.0, -3.0, -7.999, -8.001, -20.0, -300.0])
def test_a_constant_far_on_the_wrong_side_has_no_evidence_and_a_finite_logarithm_of_it(x: float) -> None:
    assert ev.worth(x, 1.0, 0.0, 1) == pytest.approx(math.log(2.0) + log_ndtr(x), abs=0.02)


@pytest.mark.parametrize("dt_T", [0.04, 0.3])
@pytest.mark.parametrize("settling", ["none", "first", "all"])
@pytest.mark.parametrize("c", CASES)
def test_the_evidence_of_smooth_causes_is_that_of_a_dense_gaussian_process(
    c: Case, settling: str, dt_T: float
) -> None:
    settles = {"none": 0, "first": 1, "all": c.H.shape[2]}[settling]
    S = noise(c)
    ours, misfit = smooth(c, dt_T, settles)
    ratio = log_density(c.r, S + moving(c, dt_T, settles)) - log_density(c.r, S)
    assert ours - constants(c).null == pytest.approx(ratio, abs=1e-8)
    # Squared innovations add up to the squared normalised residual of the whole.
    whole = c.r.ravel() @ np.linalg.solve(S + moving(c, dt_T, settles), c.r.ravel())
    assert misfit == pytest.approx(whole, rel=1e-9)


@pytest.mark.parametrize("settles", [0, 1])
def test_slow_noise_that_was_there_before_is_not_taken_for_the_cause(settles: int) -> None:
    # The density of what came after, given what was before: a ratio of two dense densities.
    c, before = case(8, steps=14), 6
    S = noise(c)
    size = before * c.r.shape[1]
    ours, _ = smooth(c, 0.1, settles, before)
    first = c._replace(r=c.r[:before], R=c.R[:before], D=c.D[:before], H=c.H[:before])
    given_ = log_density(c.r, S + moving(c, 0.1, settles, before)) - log_density(first.r, S[:size, :size])
    nothing = log_density(c.r, S) - log_density(first.r, S[:size, :size])
    null = constants(c).null - constants(first).null
    assert ours - null == pytest.approx(given_ - nothing, abs=1e-8)


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10**6), n=st.integers(1, 6), d=st.integers(1, 4), data=st.data())
def test_the_order_of_rows_changes_no_evidence(seed: int, n: int, d: int, data: st.DataObject) -> None:
    c = case(seed, n, d, steps=4)
    order = np.array(data.draw(st.permutations(range(n))))
    turned = Case(c.r[:, order], c.R[:, order][:, :, order], c.D[:, order], c.H[:, order], c.keep)
    one, other = constants(c), constants(turned)
    assert other.null == pytest.approx(one.null, abs=1e-8)
    assert other.constant == pytest.approx(one.constant, abs=1e-8)
    np.testing.assert_allclose(other.mean, one.mean, atol=1e-8)
    for settles in (0, d):
        np.testing.assert_allclose(smooth(turned, 0.1, settles), smooth(c, 0.1, settles), atol=1e-8)


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10**6), powers=st.lists(st.integers(-20, 20), min_size=3, max_size=3))
def test_other_units_of_the_rows_change_all_log_evidences_by_the_same_constant(
    seed: int, powers: list[int]
) -> None:
    c, unit = case(seed, steps=4), 2.0 ** np.array(powers)
    scaled = Case(unit * c.r, unit[:, None] * unit * c.R, unit * c.D, unit[:, None] * c.H, c.keep)
    one, other = constants(c), constants(scaled)
    # The density of a scaled quantity is smaller by the scale.
    shift = other.null - 0.5 * other.log_det - (one.null - 0.5 * one.log_det)
    assert shift == pytest.approx(-len(c.r) * np.log(unit).sum(), abs=1e-8)
    assert other.constant == pytest.approx(one.constant, abs=1e-8)
    for settles in (0, 1):
        mine, theirs = smooth(c, 0.1, settles)[0] - one.null, smooth(scaled, 0.1, settles)[0] - other.null
        assert theirs == pytest.approx(mine, abs=1e-8)
