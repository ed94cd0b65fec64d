"""Forces of feet as nuisance: against dense linear algebra and a dense posterior."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import multivariate_normal, norm, rayleigh

from monitor.explain import foothold
from monitor.kernels import evidence, feet


def case(seed: int, n: int = 9) -> tuple[Any, Any, Any, Any]:
    """Return covariance of the noise, Jacobian of a foot, residual, and sd of its force."""
    rng = np.random.default_rng(seed)
    half = rng.normal(size=(n, n))
    return half @ half.T + np.eye(n), rng.normal(size=(3, n)), rng.normal(size=n), 30.0


def estimated(seed: int) -> tuple[Any, Any, Any, Any]:
    """Return what kernels make of a case: what rows have alone, its sd, force and its covariance."""
    R, J, r, sd = case(seed)
    n = len(r)
    feet.widen(J, sd, R)
    L, inverse, white = np.zeros((n, n)), np.zeros((n, n)), r.copy()
    evidence.factor(R, L)
    evidence.whiten(L, white)
    feet.invert(L, inverse)
    pull, alone, alone_sd = np.zeros((3, n))
    feet.pulls(inverse, white, pull, alone, alone_sd)
    f, covariance = np.zeros(3), np.zeros((3, 3))
    feet.force(J, sd, inverse, pull, np.zeros((3, n)), f, covariance)
    return alone, alone_sd, f, covariance


@pytest.mark.parametrize("seed", range(3))
def test_what_a_row_has_alone_is_its_residual_less_what_all_others_predict(seed: int) -> None:
    R, J, r, sd = case(seed)
    alone, alone_sd, _, _ = estimated(seed)
    S = R + sd**2 * J.T @ J
    for i in range(len(r)):
        others = np.delete(np.arange(len(r)), i)
        gain = np.linalg.solve(S[np.ix_(others, others)], S[others, i])
        assert alone[i] == pytest.approx(r[i] - gain @ r[others], rel=1e-9)
        assert alone_sd[i] ** 2 == pytest.approx(S[i, i] - gain @ S[others, i], rel=1e-9)


@pytest.mark.parametrize("seed", range(3))
def test_a_foot_s_force_is_the_mean_of_its_posterior(seed: int) -> None:
    R, J, r, sd = case(seed)
    _, _, f, covariance = estimated(seed)
    expected = np.linalg.inv(np.eye(3) / sd**2 + J @ np.linalg.solve(R, J.T))
    np.testing.assert_allclose(covariance, expected, rtol=1e-8)
    np.testing.assert_allclose(f, expected @ J @ np.linalg.solve(R, r), rtol=1e-8)
    squared = -2.0 * multivariate_normal.logpdf(f, np.zeros(3), expected)
    squared -= -2.0 * multivariate_normal.logpdf(np.zeros(3), np.zeros(3), expected)
    assert feet.standing_out(f, covariance) == pytest.approx(squared, rel=1e-7)


@pytest.mark.parametrize(("force", "sd"), [(0.0, 5.0), (15.0, 5.0), (60.0, 5.0), (-10.0, 8.0), (100.0, 20.0)])
def test_no_force_is_weighed_against_one_that_is_hardly_ever_small(force: float, sd: float) -> None:
    usual = 150.0

    def carries(f: float) -> float:
        return float(rayleigh.pdf(f, scale=usual) * norm.pdf(force, f, sd))

    some = quad(carries, 0.0, 8.0 * usual, points=[max(force, 0.1)], epsabs=0.0)[0]
    expected = norm.logpdf(force, 0.0, sd) - np.log(some)
    assert foothold.log_evidence(force, sd, usual) == pytest.approx(expected, rel=1e-6)
