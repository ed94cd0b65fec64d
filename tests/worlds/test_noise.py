"""Sensor noise on recordings."""

from __future__ import annotations

import math

import numpy as np

from tests.worlds.arm import Recording
from tests.worlds.noise import quantised, with_noise

STEP = 2.0 * math.pi / 2**17


def still(samples: int = 20_000) -> Recording:
    def rows(value: float) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
        return np.full((samples, 2), value)

    t = np.arange(samples, dtype=np.float64)
    values = (0.123, 0.5, 0.0, 3.0, 1.0, -1.0, 2.0)
    return Recording(("a", "b"), t, *(rows(value) for value in values))


def test_an_encoder_reads_multiples_of_its_step_and_is_at_most_half_a_step_off() -> None:
    q = np.random.default_rng(3).uniform(-3.0, 3.0, (500, 2))
    read = quantised(q, [STEP, 0.0])
    np.testing.assert_allclose(read[:, 0] / STEP, np.round(read[:, 0] / STEP), atol=1e-6)
    assert np.abs(read[:, 0] - q[:, 0]).max() <= 0.5 * STEP * (1 + 1e-9)
    assert (read[:, 1] == q[:, 1]).all()


def test_noise_has_the_stated_spread_per_joint_and_no_offset() -> None:
    rows = with_noise(still(), 1, velocity_sd=[0.007, 0.0], torque_sd=[0.0, 0.4], link_torque_sd=[0.2, 0.0])
    # Standard error of a standard deviation of 20000 samples: 0.5 %; of the mean: sd / 141.
    np.testing.assert_allclose((rows.qd - 0.5).std(axis=0), [0.007, 0.0], rtol=0.03)
    np.testing.assert_allclose((rows.tau - 3.0).std(axis=0), [0.0, 0.4], rtol=0.03)
    np.testing.assert_allclose((rows.tau_link - 2.0).std(axis=0), [0.2, 0.0], rtol=0.03)
    assert abs((rows.tau - 3.0)[:, 1].mean()) < 5 * 0.4 / 141


def test_noise_is_decided_by_its_seed_and_leaves_the_truth_alone() -> None:
    clean = still(100)
    first, again, other = (with_noise(clean, seed, STEP, 0.007, 0.4) for seed in (1, 1, 2))
    assert first.tau.tobytes() == again.tau.tobytes()
    assert first.tau.tobytes() != other.tau.tobytes()
    for name in ("t", "qdd", "tau_ext", "friction"):
        assert getattr(first, name) is getattr(clean, name)
