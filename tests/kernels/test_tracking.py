"""Tracked friction against a dense Bayesian regression whose parameters wander, in closed form (numpy)."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import pytest
from numpy.typing import NDArray

from monitor.kernels import tracking

Floats = NDArray[np.float64]

NEVER = math.inf  # no clipping
ROWS = 3


class Course(NamedTuple):
    """Residuals (T) of one row with their variances (T), features (T,3), prior sd (3) and what is kept."""

    r: Floats
    variance: Floats
    feature: Floats
    sd: Floats
    keep: float


def course(seed: int, steps: int = 40, keep: float = 0.97) -> Course:
    rng = np.random.default_rng(seed)
    feature = np.column_stack(
        [30.0 * rng.normal(size=steps), rng.uniform(-1.0, 1.0, steps), rng.normal(size=steps)]
    )
    return Course(
        rng.normal(size=steps), rng.uniform(0.05, 2.0, steps), feature, np.array([0.5, 0.2, 0.8]), keep
    )


def tracked(c: Course, row: int = 1, clip: float = NEVER) -> tuple[Floats, Floats]:
    """Return theta (ROWS,3) and P (ROWS,3,3) after the whole course on one row, begun at the prior."""
    theta, P = np.zeros((ROWS, 3)), np.tile(np.diag(c.sd**2), (ROWS, 1, 1))
    sd, feature = np.tile(c.sd, (ROWS, 1)), np.full((ROWS, c.feature.shape[1]), math.nan)
    for r, variance, x in zip(c.r, c.variance, c.feature, strict=True):
        feature[row] = x
        tracking.track(row, r, variance, feature, sd, c.keep, clip, theta, P)
    return theta, P


def dense(c: Course) -> tuple[Floats, Floats]:
    """Return mean and covariance of the parameters at the end, from one joint normal distribution.

    Parameters at steps a and b have the covariance `keep^|a - b| sd²`: they forget towards their prior, zero.
    The residual is what added friction leaves, `-(Coulomb tanh + viscous v + offset)`, with white noise.
    """
    steps = len(c.r)
    x = -np.column_stack([c.feature[:, 1:3], np.ones(steps)])
    back = np.arange(steps)[::-1]
    K = c.keep ** np.abs(np.subtract.outer(back, back)) * ((x * c.sd**2) @ x.T) + np.diag(c.variance)
    to_end = (c.keep**back)[:, None] * x * c.sd**2
    gain = np.linalg.solve(K, to_end).T
    return gain @ c.r, np.diag(c.sd**2) - gain @ to_end


@pytest.mark.parametrize("keep", [0.8, 0.97, 1.0])
@pytest.mark.parametrize("seed", range(3))
def test_tracked_friction_is_the_dense_posterior_of_parameters_that_forget(seed: int, keep: float) -> None:
    c = course(seed, keep=keep)
    theta, P = tracked(c)
    mean, covariance = dense(c)
    np.testing.assert_allclose(theta[1], mean, atol=1e-11)
    np.testing.assert_allclose(P[1], covariance, atol=1e-11)


def test_other_rows_stay_as_they_are() -> None:
    c = course(4)
    theta, P = tracked(c, row=1)
    for row in (0, 2):
        np.testing.assert_array_equal(theta[row], 0.0)
        np.testing.assert_array_equal(P[row], np.diag(c.sd**2))


def test_knowledge_fades_to_the_prior_where_nothing_is_learnt() -> None:
    c = course(5)
    learnt, P = tracked(c)
    nothing = c._replace(r=np.zeros(4000), variance=np.full(4000, 1e30), feature=np.ones((4000, 3)))
    sd, feature = np.tile(c.sd, (ROWS, 1)), np.ones((ROWS, 3))
    theta = learnt.copy()
    for _ in nothing.r:
        tracking.track(1, 0.0, 1e30, feature, sd, c.keep, NEVER, theta, P)
    np.testing.assert_allclose(theta[1], 0.0, atol=1e-12)
    np.testing.assert_allclose(P[1], np.diag(c.sd**2), rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_a_single_wild_residual_counts_as_one_of_so_many_standard_deviations(sign: float) -> None:
    clip, c = 2.5, course(6)
    learnt, covariance = dense(c)
    # What the next residual is expected to be, and its variance, from the posterior of the one before.
    x, variance = np.array([-0.4, -1.3, -1.0]), 0.3
    prior = c.keep**2 * covariance + (1.0 - c.keep**2) * np.diag(c.sd**2)
    expected, S = float(c.keep * x @ learnt), float(variance + x @ prior @ x)
    at_limit = expected + sign * clip * math.sqrt(S)

    def after(r: float, clipped_at: float) -> Floats:
        theta, P = tracked(c)
        feature, sd = np.tile([0.0, 0.4, 1.3], (ROWS, 1)), np.tile(c.sd, (ROWS, 1))
        tracking.track(1, r, variance, feature, sd, c.keep, clipped_at, theta, P)
        return np.asarray(theta[1])

    np.testing.assert_allclose(after(expected + sign * 1e6, clip), after(at_limit, NEVER), rtol=1e-9)
    within = expected + sign * 0.99 * clip * math.sqrt(S)
    np.testing.assert_array_equal(after(within, clip), after(within, NEVER))


def test_what_friction_explains_and_how_surely_follows_from_the_parameters() -> None:
    # Mean and variance of a linear function of a normal distribution (any textbook).
    rng = np.random.default_rng(7)
    feature, theta, A = rng.normal(size=(4, 3)), rng.normal(size=(4, 3)), rng.normal(size=(4, 3, 3))
    P = A @ A.transpose(0, 2, 1)
    torque, variance = np.full(4, math.nan), np.full(4, math.nan)
    tracking.explained(feature, theta, P, torque, variance)
    x = -np.column_stack([feature[:, 1:], np.ones(4)])
    np.testing.assert_allclose(torque, (x * theta).sum(axis=1), rtol=1e-12)
    np.testing.assert_allclose(variance, np.einsum("ia,iab,ib->i", x, P, x), rtol=1e-12)


def trended(c: Course, limit: Floats, lasting: float = 0.0) -> tuple[Floats, Floats]:
    """Return the trend (3) of a course on one of ROWS rows and its sd (3), in units of the limits."""
    row, limits = 1, np.tile(limit, (ROWS, 1))
    info, total = np.zeros((ROWS, 3, 3)), np.zeros((ROWS, 3))
    mean, sd, feature = np.zeros((ROWS, 3)), np.zeros((ROWS, 3)), np.full((ROWS, 3), math.nan)
    for r, variance, x in zip(c.r, c.variance, c.feature, strict=True):
        feature[row] = x
        tracking.gather(row, r, variance, feature, limits, c.keep, info, total)
    tracking.trend(row, info, total, limits, lasting, mean, sd)
    assert not mean[[0, 2]].any()
    return mean[row], sd[row]


def test_a_trend_is_the_weighted_least_squares_fit_of_what_is_remembered() -> None:
    # Judge: numpy's least squares on all rows at once, older ones scaled down; the prior is three rows more.
    c, limit = course(8, keep=0.95), np.array([0.3, 0.1, 0.4])
    back = np.arange(len(c.r))[::-1]
    weight = np.sqrt(c.keep**back / c.variance)
    x = -np.column_stack([c.feature[:, 1:3], np.ones(len(c.r))]) * limit
    rows = np.vstack([weight[:, None] * x, np.eye(3) / tracking.TREND_SD])
    expected = np.linalg.lstsq(rows, np.append(weight * c.r, np.zeros(3)), rcond=None)[0]
    mean, sd = trended(c, limit)
    np.testing.assert_allclose(mean, expected, rtol=1e-9)
    np.testing.assert_allclose(sd, np.sqrt(np.diag(np.linalg.inv(rows.T @ rows))), rtol=1e-9)


def test_an_error_that_lasts_does_not_average_out_of_a_trend() -> None:
    # An offset alone, every residual off by one common error: the variance of the mean is V/N + lasting².
    steps, variance, lasting, limit = 5000, 0.5, 0.2, np.array([0.1, 0.1, 0.4])
    still = np.tile([3.0, 0.0, 0.0], (steps, 1))
    c = Course(np.full(steps, -0.6), np.full(steps, variance), still, np.ones(3), 1.0)
    mean, sd = trended(c, limit, lasting)
    assert mean[2] == pytest.approx(0.6 / 0.4, rel=0.01)
    assert sd[2] == pytest.approx(math.sqrt(variance / steps + lasting**2) / 0.4, rel=0.01)
    # Of friction, which this joint never felt, nothing is known.
    np.testing.assert_allclose(sd[:2], tracking.TREND_SD)


def test_a_trend_is_not_drawn_back_as_tracked_friction_is() -> None:
    rng, steps, true = np.random.default_rng(9), 4000, np.array([0.3, 0.1, -0.2])
    speed = np.repeat(rng.uniform(-1.0, 1.0, steps // 200), 200)
    feature = np.column_stack([np.zeros(steps), np.tanh(speed / 0.01), speed])
    x = -np.column_stack([feature[:, 1:], np.ones(steps)])
    r = x @ true + 0.3 * rng.standard_normal(steps)
    c = Course(r, np.full(steps, 20.0 * 0.3**2), feature, 0.03 * np.ones(3), math.exp(-0.004 / 120.0))
    assert abs(tracked(c)[0][1, 0] - 0.3) > 0.1
    mean, sd = trended(c, np.full(3, 0.15))
    assert sd.max() < 1.0
    np.testing.assert_array_less(np.abs(0.15 * mean - true), 0.15 * sd)
