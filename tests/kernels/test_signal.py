"""Parts of the signal checks, against closed forms, an outside normal distribution and simulated noise."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import multivariate_normal

from monitor.kernels import signal

MS = 1_000_000


def bends(readings: np.ndarray) -> np.ndarray:
    return np.diff(readings, 2)


def scores(readings: np.ndarray, limit: float) -> np.ndarray:
    """Return the score after each second difference."""
    found, score, last = [], 0.0, 0.0
    for bend in bends(readings):
        score = signal.noise_score(bend, last, limit, score)
        last = bend
        found.append(score)
    return np.array(found)


LIMIT = 3.5 * math.sqrt(6.0)  # for readings of unit noise


def test_pairs_beyond_the_limit_are_as_rare_as_a_normal_distribution_makes_them() -> None:
    # Neighbouring second differences of white noise: variance 6, covariance -4.
    rng, limit = np.random.default_rng(1), 2.0 * math.sqrt(6.0)
    judge = multivariate_normal([0.0, 0.0], [[6.0, -4.0], [-4.0, 6.0]])
    corner = judge.cdf([-limit, math.inf]) - judge.cdf([-limit, limit])  # one below, the other above
    found = scores(rng.standard_normal(200_000), limit)
    hits = (np.diff(found, prepend=0.0) > 0.5).mean()
    assert hits == pytest.approx(2.0 * corner, rel=0.1)


def test_gaussian_noise_as_configured_stays_far_below_the_limit() -> None:
    rng = np.random.default_rng(2)
    assert scores(rng.standard_normal(300_000), LIMIT).max() < 0.6 * signal.NOISY


@pytest.mark.parametrize(("times", "samples"), [(10.0, 30), (15.0, 22)])
def test_noise_several_times_as_strong_is_found_within_the_stated_samples(times: float, samples: int) -> None:
    rng = np.random.default_rng(3)
    found = 0
    for _ in range(300):
        readings = rng.standard_normal(20 + samples) * np.repeat([1.0, times], [20, samples])
        found += scores(readings, LIMIT).max() >= signal.NOISY
    assert found / 300 > 0.85


@given(
    velocity=st.floats(-5.0, 5.0),
    height=st.floats(0.1, 1000.0),
    width=st.floats(0.3, 40.0),
    bounce=st.floats(-1.0, 1.0),
    pause=st.integers(1, 30),
)
@settings(deadline=None, max_examples=200)
def test_a_blow_however_hard_is_no_noise(
    velocity: float, height: float, width: float, bounce: float, pause: int
) -> None:
    # A velocity that changes by `height` within `width` samples, and back by part of it.
    k = np.arange(200.0)
    readings = velocity + height * np.clip((k - 80.3) / width, 0.0, 1.0)
    readings += bounce * height * np.clip((k - 80.3 - width - pause) / width, 0.0, 1.0)
    assert scores(readings, 1e-3).max() < signal.SUSPECT


def test_ringing_of_a_structure_is_no_noise_but_at_a_third_of_the_sample_rate_it_is() -> None:
    t = np.arange(300) * 1e-3
    for frequency, noisy in ((20.0, False), (80.0, False), (340.0, True)):
        ringing = 100.0 * np.sin(2.0 * math.pi * frequency * t) * np.exp(-t / 0.05)
        assert (scores(ringing, 1.0).max() >= signal.NOISY) == noisy, frequency


def test_the_score_falls_again_when_the_noise_ends() -> None:
    rng = np.random.default_rng(4)
    readings = rng.standard_normal(400) * np.where(np.arange(400) < 200, 20.0, 1.0)
    found = scores(readings, LIMIT)
    assert found[150:198].min() > 2.0
    assert found.max() <= signal.NOISY + 2.0
    assert found[-1] < 0.2


@pytest.mark.parametrize("clock", ["even", "uneven", "uneven stamps"])
def test_steady_motion_has_no_bend_however_the_clock_runs(clock: str) -> None:
    # Δq over true times, stamped truly or evenly; or even Δq with stamps that waver.
    steps = {"even": (2.0, 2.0), "uneven": (3.0, 2.0), "uneven stamps": (2.0, 2.0)}[clock]
    stamps = {"even": (2, 2), "uneven": (3, 2), "uneven stamps": (3, 2)}[clock]
    assert signal.bend(*steps, *(MS * stamp for stamp in stamps)) == 0.0


def test_acceleration_bends_by_its_double_integral_and_a_jump_by_itself() -> None:
    # q = a t²/2 at 0, 1, 2 ms: second difference a dt².
    assert signal.bend(1.5e-6 * 40.0, 0.5e-6 * 40.0, MS, MS) == pytest.approx(40.0e-6)
    assert signal.bend(2e-3 + 0.01, 2e-3, MS, MS) == pytest.approx(0.01)
    # Where the two ways to time it disagree in direction nothing is certain.
    assert signal.bend(2.5, 2.0, 3 * MS, 2 * MS) == 0.0


@given(
    lag=st.floats(1e-4, 0.005),
    speed=st.floats(-8.0, 8.0),
    start=st.floats(-3.0, 3.0),
    hold=st.integers(1, 300),
)
@settings(deadline=None, max_examples=100)
def test_a_velocity_behind_a_low_pass_leaves_a_drift_that_its_lag_explains(
    lag: float, speed: float, start: float, hold: int
) -> None:
    # v' = (u - v) / lag for a step of u, exactly: v = u + (start - u) exp(-t / lag); q is the integral of u.
    t = np.arange(hold + 1) * 1e-3
    decay = np.exp(-t / lag)
    shown = speed + (start - speed) * decay
    position = speed * t
    drift, swing = 0.0, 0.0
    for k in range(hold):
        # Without forgetting: Δq - ∫v dt exactly.
        integral = speed * 1e-3 + (start - speed) * lag * (decay[k] - decay[k + 1])
        drift += position[k + 1] - position[k] - integral
        swing += shown[k + 1] - shown[k]
    assert signal.beyond_lag(drift, swing, 0.005) <= 1e-12
    # A velocity that is wrong by 0.2 rad/s is not explained, beyond what such a lag could have done.
    wrong = drift - 0.2e-3 * hold * math.copysign(1.0, swing)
    assert signal.beyond_lag(wrong, swing, 0.005) >= 0.2e-3 * hold - 1e-12 - 0.005 * abs(swing)


def test_a_reading_is_lively_only_by_noise_without_repetitions() -> None:
    rng, t = np.random.default_rng(5), np.arange(3000) * 1e-3
    for readings, lively in (
        (0.01 * rng.standard_normal(3000), True),
        (np.round(0.01 * rng.standard_normal(6000), 3), True),  # ten steps within a sd
        (np.round(0.01 * rng.standard_normal(3000), 2), False),  # one step
        (np.sin(20.0 * t), False),  # smooth
        (np.zeros(3000), False),
        (0.05 * (rng.random(3000) < 0.1), False),  # single steps of an encoder
    ):
        run, count, last = 0, 0, 0.0
        for change in np.diff(readings):
            run, count = signal.liveliness(change, last, 0.01, run, count)
            last = change
        assert (count >= signal.LIVELY) == lively
    # A long repetition is forgotten knowledge.
    run, count = 0, 2 * signal.LIVELY
    for _ in range(250):
        run, count = signal.liveliness(0.0, 0.0, 0.01, run, count)
    assert (run, count) == (250, 2 * signal.LIVELY)
    assert signal.liveliness(0.1, 0.0, 0.01, run, count) == (0, 1)


def test_velocities_formed_from_positions_are_recognised() -> None:
    step, last, tolerance = 7 * 5e-5, 6 * 5e-5, 1e-6
    for qd in (step / 1e-3, last / 1e-3, step / 1.05e-3):
        assert signal.differenced(qd, step, last, 1_050_000, MS, tolerance)
    for qd in (step / 1e-3 + 0.02, 0.5 * (step + last) / 1e-3):
        assert not signal.differenced(qd, step, last, 1_050_000, MS, tolerance)


def test_the_roughness_of_a_torque_is_that_of_its_noise_whatever_blows_come() -> None:
    # White noise: the second difference has six times its variance.
    rng, sd = np.random.default_rng(6), 0.3
    readings = sd * rng.standard_normal(signal.ROUGH + 2)
    total, count, largest = 0.0, 0, 0.0
    for bend in np.diff(readings, 2):
        total, count, largest = signal.roughness(bend, math.inf, total, count, largest)
    assert (total, count) == (0.0, 0)
    # Of a thousand dependent squares the mean is known to some percent.
    assert largest == pytest.approx(6.0 * sd**2, rel=0.15)
    limit, known = 3.5 * math.sqrt(largest), largest
    readings[500:502] += 100.0
    for bend in np.diff(readings, 2):
        total, count, largest = signal.roughness(bend, limit, total, count, largest)
    assert known < largest < 1.1 * known
