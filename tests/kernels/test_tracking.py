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
