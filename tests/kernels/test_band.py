"""Run lengths against published tables, causes of the band against scipy's filters and closed forms."""

from __future__ import annotations

import math
from functools import cache

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.signal import lfilter

from monitor.kernels import band
from monitor.kernels.jit import kernel
from monitor.kernels.ledger import WIDTHS

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

SAMPLES = 4_000_000
DT, POLE, HOLD_S = 1e-3, 100.0, 0.0305


@kernel
def alarms(z: Floats, reference: float, limit: float, head: float, sides: int) -> int:
    """Return how often a sum passed the limit on samples z, both begun anew at `head` each time."""
    sums, count = np.full(2, head), 0
    for i in range(z.shape[0]):
        band.cusum(z[i], reference, sums)
        if sums[0] > limit or (sides == 2 and sums[1] > limit):
            count += 1
            sums[:] = head
    return count


@kernel
def lengths(z: Floats, reference: float, limit: float, out: Ints) -> None:
    """Fill out (K) with the run length of the two-sided sums on each row of z (K,T), T where it is longer."""
    for k in range(z.shape[0]):
        sums = np.zeros(2)
        out[k] = z.shape[1]
        for i in range(z.shape[1]):
            band.cusum(z[k, i], reference, sums)
            if max(sums[0], sums[1]) > limit:
                out[k] = i + 1
                break


@cache
def white() -> Floats:
    return np.random.default_rng(1).standard_normal(SAMPLES)


# check-values §1. Two-sided, h = 4, with and without head start: Technometrics 24 (1982) p. 199, Table 1; the
# columns h = 5 and one-sided ones: NIST/SEMATECH e-Handbook §6.3.2.3.1 and recomputed; one-sided h = 3:
# Biometrika 59 (1972) p. 539 and Technometrics 28 (1986) p. 61.
TABLE = [
    # sides, shift, h, head start, run length
    (2, 0.0, 4.0, 0.0, 167.684),
    (2, 0.5, 4.0, 0.0, 26.630),
    (2, 1.0, 4.0, 0.0, 8.3831),
    (2, 2.0, 4.0, 0.0, 3.3428),
    (2, 0.0, 4.0, 2.0, 148.696),
    (2, 0.5, 4.0, 2.0, 20.064),
    (2, 1.0, 4.0, 2.0, 5.2869),
    (2, 2.0, 4.0, 2.0, 2.0144),
    (2, 0.0, 5.0, 0.0, 465.444),
    (2, 1.0, 5.0, 0.0, 10.376),
    (2, 0.0, 5.0, 2.5, 430.391),
    (2, 1.0, 5.0, 2.5, 6.347),
    (1, 0.0, 4.0, 0.0, 335.368),
    (1, 0.5, 4.0, 0.0, 26.679),
    (1, 2.0, 4.0, 0.0, 3.343),
    (1, 0.0, 5.0, 0.0, 930.887),
    (1, 0.5, 5.0, 0.0, 38.010),
    (1, 1.0, 5.0, 0.0, 10.376),
    (1, 0.0, 3.0, 0.0, 117.5957),
    (1, 1.5, 3.0, 0.0, 3.7491),
]


@pytest.mark.parametrize(("sides", "shift", "limit", "head", "expected"), TABLE)
def test_sums_of_independent_samples_run_as_long_as_the_tables_say(
    sides: int, shift: float, limit: float, head: float, expected: float
) -> None:
    count = alarms(white() + shift, 0.5, limit, head, sides)
    # Run lengths scatter at most as exponential ones do: four standard deviations of their mean.
    assert count / SAMPLES == pytest.approx(1.0 / expected, rel=4.0 / math.sqrt(count))


def test_the_downward_sum_is_the_mirror_of_the_upward_one() -> None:
    up, down = np.zeros(2), np.zeros(2)
    for z in white()[:500]:
        band.cusum(z, 0.5, up)
        band.cusum(-z, 0.5, down)
        np.testing.assert_array_equal(up, down[::-1])


@cache
def coloured(pole: float, runs: int, length: int) -> Floats:
    """Return `runs` stretches of an AR(1) process of unit variance, each begun where it is stationary."""
    noise = np.random.default_rng(2).standard_normal((runs, length))
    noise[:, 1:] *= math.sqrt(1.0 - pole**2)
    samples: Floats = lfilter([1.0], [1.0, -pole], noise, axis=1)
    return samples


@pytest.mark.parametrize(("pole", "expected"), [(0.5, 52.0), (0.9, 29.0), (0.951, 31.5), (0.99, 48.0)])
def test_textbook_run_lengths_do_not_hold_for_samples_that_depend_on_each_other(
    pole: float, expected: float
) -> None:
    # check-values §1, autocorrelation trap, k = .5 and h = 5: 465 without correlation.
    out = np.zeros(4000, np.int64)
    lengths(coloured(pole, 4000, 1000), 0.5, 5.0, out)
    scatter = 4.0 * float(np.std(out)) / math.sqrt(len(out))
    assert np.mean(out) == pytest.approx(expected, abs=0.02 * expected + scatter)


def test_means_of_blocks_in_units_of_single_samples_run_longer_than_the_textbook_says() -> None:
    # What the step sums: means of 0.1 s, here of 100 samples of a residual with the pole of 50/s at 1 ms.
    # They still depend on each other, so that scaled to unit variance they would cry wolf twice as often; as
    # they are, the variance of a mean, (1 + a)/(1 - a)/100 of a sample's, more than makes up for it.
    z = coloured(0.951, 4, SAMPLES // 2).reshape(4, -1, 100).mean(axis=2).ravel()
    assert z.var() == pytest.approx(1.951 / 0.049 / 100.0, rel=0.3)
    textbook = z.size / 465.444
    assert 1.5 * textbook < alarms(z / z.std(), 0.5, 5.0, 0.0, 2) < 3.0 * textbook
    assert alarms(z, 0.5, 5.0, 0.0, 2) < 0.1 * textbook


def test_standing_or_reversing_is_held_for_a_while_and_then_forgotten() -> None:
    # Judge: scipy's lfilter on the closed form of D = 1 - tanh² that is held, then falls at the same pole.
    v0, steps, keep = 0.004, 200, math.exp(-POLE * DT)
    v = np.where(np.arange(steps) < 50, 0.0, 5.0)
    held_for = 50 + math.ceil(HOLD_S / DT)
    D = np.where(np.arange(steps) < held_for, 1.0, keep ** (np.arange(steps) - held_for + 1.0))
    cause = caused(v[:, None], np.zeros((steps, 1)), np.zeros((steps, 1)), np.eye(1), np.array([v0]))
    low_pass = [1.0 - keep], [1.0, -keep]
    np.testing.assert_allclose(cause[:, 0, band.STANDS], lfilter(*low_pass, D), rtol=1e-9)
    np.testing.assert_allclose(cause[:, 0, band.STANDS_SQUARED], lfilter(*low_pass, D * D), rtol=1e-9)


def caused(v: Floats, a: Floats, tau: Floats, M: Floats, v0: Floats) -> Floats:
    """Return all causes (T,n,CAUSES) along a motion, M (n,n) constant, noise of e of variance 4 and 9 …"""
    steps, n = v.shape
    held, left, cause = np.zeros(n), np.zeros(n), np.zeros((n, band.CAUSES))
    e_variance, found = np.arange(2.0, n + 2.0) ** 2, []
    for k in range(steps):
        band.causes(
            M,
            a[k],
            v[k],
            tau[k],
            v0,
            np.arange(1.0, n + 1.0),
            e_variance,
            DT,
            POLE,
            HOLD_S,
            held,
            left,
            cause,
        )
        found.append(cause.copy())
    return np.array(found)


def test_each_cause_is_its_square_through_the_low_pass() -> None:
    # Judge: scipy's lfilter. Speeds far above v0, so that no friction hides.
    rng = np.random.default_rng(3)
    v, a, tau = 1.0 + rng.uniform(size=(60, 3)), rng.normal(size=(60, 3)), 5.0 * rng.normal(size=(60, 3))
    A = rng.normal(size=(3, 3))
    M = A @ A.T
    cause = caused(v, a, tau, M, np.full(3, 1e-3))
    keep = math.exp(-POLE * DT)
    squares = {
        band.FLOOR: np.full((60, 3), math.nan),
        band.NOISE: np.tile((M**2) @ np.array([4.0, 9.0, 16.0]), (60, 1)),
        band.STANDS: np.zeros((60, 3)),
        band.STANDS_SQUARED: np.zeros((60, 3)),
        band.TORQUE: tau**2,
        band.VELOCITY: v**2,
        band.INERTIA: (a @ M) ** 2,
    }
    for number, square in squares.items():
        if number == band.FLOOR:
            np.testing.assert_array_equal(cause[:, :, number], 1.0)
        else:
            expected = lfilter([1.0 - keep], [1.0, -keep], square, axis=0)
            np.testing.assert_allclose(cause[:, :, number], expected, rtol=1e-9, atol=1e-12)


def test_friction_of_other_joints_that_stand_shakes_a_row_through_the_mass_matrix() -> None:
    # A torque Coulomb_j on joint j alone accelerates it by Coulomb_j / M_jj; joint i feels M_ij of that.
    M = np.array([[2.0, 0.5, 0.1], [0.5, 1.0, 0.2], [0.1, 0.2, 0.4]])
    v = np.tile([0.0, 1.0, 0.0], (400, 1))
    cause = caused(v, np.zeros((400, 3)), np.zeros((400, 3)), M, np.full(3, 1e-3))[-1, :, band.SHAKEN]
    stand = np.array([1.0, 0.0, 3.0])  # Coulomb friction of those that stand
    torque = M / np.diag(M) * stand
    np.fill_diagonal(torque, 0.0)
    np.testing.assert_allclose(cause, (torque**2).sum(axis=1), rtol=1e-9)


def test_low_speed_counts_in_proportion_to_what_is_left_of_each_width() -> None:
    v0, v = np.array([0.004]), np.array([0.0, 0.02, 0.04, 0.1, 0.2, 1.0])
    for speed in v:
        cause = caused(np.full((400, 1), speed), np.zeros((400, 1)), np.zeros((400, 1)), np.eye(1), v0)[-1, 0]
        for number, width in zip((band.CREEPS, band.CRAWLS), WIDTHS, strict=True):
            assert cause[number] == pytest.approx(1.0 / math.cosh(speed / (width * v0[0])) ** 2, abs=1e-12)


def test_the_variance_is_the_weighted_sum_of_the_causes() -> None:
    rng = np.random.default_rng(4)
    cause, weight = rng.uniform(size=(5, band.CAUSES)), rng.uniform(size=(5, band.CAUSES))
    out = np.full(5, math.nan)
    band.variance(cause, weight, out)
    np.testing.assert_allclose(out, np.diag(cause @ weight.T), rtol=1e-14)


def test_the_part_of_the_variance_that_stays_as_it_is_is_that_of_joints_which_stand() -> None:
    rng = np.random.default_rng(5)
    cause, weight = rng.uniform(size=(4, band.CAUSES)), rng.uniform(size=(4, band.CAUSES))
    part, whole, rest = np.full(4, math.nan), np.full(4, math.nan), np.full(4, math.nan)
    band.standing(cause, weight, part)
    band.variance(cause, weight, whole)
    weight[:, [band.STANDS, band.STANDS_SQUARED]] = 0.0
    band.variance(cause, weight, rest)
    np.testing.assert_allclose(part, whole - rest, rtol=1e-12)


@pytest.mark.parametrize("seed", range(5))
def test_the_covariance_is_positive_definite_and_has_variances_and_correlations_as_given(seed: int) -> None:
    rng = np.random.default_rng(seed)
    A = rng.normal(size=(7, 9))
    rho = A @ A.T
    rho /= np.sqrt(np.outer(np.diag(rho), np.diag(rho)))
    variance, extra = 10.0 ** rng.uniform(-4, 4, 7), 10.0 ** rng.uniform(-4, 4, 7)
    R = np.full((7, 7), math.nan)
    band.covariance(variance, rho, extra, R)
    sd = np.sqrt(variance)
    np.testing.assert_allclose(R, np.diag(sd) @ rho @ np.diag(sd) + np.diag(extra), rtol=1e-12)
    scale = np.sqrt(np.diag(R))
    assert np.linalg.eigvalsh(R / np.outer(scale, scale))[0] > 0.0


def test_the_largest_ratio_is_that_of_a_row_that_is_judged() -> None:
    ratio = np.array([0.3, 5.0, 1.2, 0.9])
    assert band.largest(ratio, np.array([1, 0, 1, 1])) == 2
    assert band.largest(ratio, np.array([1, 1, 1, 1])) == 1
    assert band.largest(ratio, np.zeros(4, np.int64)) == -1
