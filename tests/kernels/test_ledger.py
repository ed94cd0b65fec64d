"""The residual's filters against closed forms, and the gains against iteration of the filter's covariance."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from monitor.kernels import ledger
from monitor.setup.build import riccati_gain

Floats = NDArray[np.float64]

# The configuration's defaults: encoder step 5e-5 rad, velocity noise 0.005 rad/s, walks 6 and 1.
POSITION_SD, VELOCITY_SD, FAST, SLOW = 5e-5 / math.sqrt(12.0), 0.005, 6.0, 1.0


def first_order_steps(pole: float, steps: Floats, torque: float = 3.0) -> Floats:
    """Return the residual (T) after each Δt of `steps` (T), for a torque that acts from time zero on."""
    r, p, nothing, values = np.zeros(1), np.zeros(1), np.zeros(1), []
    for dt in steps:
        p_last, p = p, p + torque * dt
        ledger.first_order(p, p_last, nothing, nothing, pole, float(dt), r)
        values.append(r[0])
    return np.array(values)


def second_order_steps(pole: float, dt: float, count: int, torque: float = 3.0) -> Floats:
    r, p, p_hat, nothing, values = np.zeros(1), np.zeros(1), np.zeros(1), np.zeros(1), []
    for _ in range(count):
        p = p + torque * dt
        ledger.second_order(p, nothing, nothing, pole, dt, p_hat, r)
        values.append(r[0])
    return np.array(values)


def joint_space_steps(walk: float, dt: float, count: int) -> Floats:
    """Return the estimate (T) of an unexplained acceleration of 1 from time zero on, noise-free signals."""
    gain = riccati_gain(POSITION_SD, VELOCITY_SD, walk, dt).reshape(1, 3, 2)
    q_hat, v_hat, e_hat, values = np.zeros(1), np.zeros(1), np.zeros(1), []
    for k in range(1, count + 1):
        t = k * dt
        ledger.joint_space(
            0, np.array([0.5 * t * t]), np.array([t]), np.zeros(1), dt, gain, q_hat, v_hat, e_hat
        )
        values.append(e_hat[0])
    return np.array(values)


@pytest.mark.parametrize(("share", "milliseconds"), [(0.2, 4.46), (0.5, 13.86), (1.0 - math.exp(-1.0), 20.0)])
def test_the_first_order_residual_of_a_step_reaches_each_share_when_the_closed_form_says(
    share: float, milliseconds: float
) -> None:
    # check-values §3: -ln(1 - share) / K with K = 50/s.
    dt = 1e-5
    r = first_order_steps(50.0, np.full(4000, dt)) / 3.0
    reached = np.argmax(r >= share - 1e-12) + 1
    assert reached * dt == pytest.approx(-math.log(1.0 - share) / 50.0, abs=1.01 * dt)
    assert reached * dt * 1e3 == pytest.approx(milliseconds, abs=0.011)


def test_the_first_order_residual_lies_on_the_closed_form_whatever_the_steps_of_time() -> None:
    steps = np.random.default_rng(1).uniform(2e-4, 9e-3, 200)
    expected = 3.0 * (1.0 - np.exp(-60.0 * np.cumsum(steps)))
    np.testing.assert_allclose(first_order_steps(60.0, steps), expected, rtol=1e-12)


def test_white_noise_of_torque_passes_the_first_order_form_by_the_textbook_factor() -> None:
    # check-values §1: K = 50/s at 1 ms gives the pole .9512 and the factor sqrt((1 - a)/(1 + a)) = .158.
    rng, dt, pole = np.random.default_rng(2), 1e-3, 50.0
    r, zero, values = np.zeros(400), np.zeros(400), []
    keep = math.exp(-pole * dt)
    for _ in range(2000):
        w = rng.standard_normal(400)
        ledger.first_order(w * dt, zero, zero, zero, pole, dt, r)
        values.append(r.copy())
    assert keep == pytest.approx(0.9512, abs=5e-5)
    assert np.std(values[300:]) == pytest.approx(0.158, rel=0.01)


def test_the_second_order_residual_follows_the_continuous_step_response_with_damping_root_half() -> None:
    # λ²/(s² + √2 λ s + λ²): 1 - exp(-x) (cos x + sin x), x = λ t / √2; sampling shifts it by a sample.
    pole = 2.0 * math.pi * 30.0
    errors = []
    for dt in (1e-4, 5e-5):
        x = pole * dt * np.arange(1, round(0.05 / dt) + 1) / math.sqrt(2.0)
        expected = 1.0 - np.exp(-x) * (np.cos(x) + np.sin(x))
        errors.append(np.abs(second_order_steps(pole, dt, len(x)) / 3.0 - expected).max())
    assert errors[0] < pole * 1e-4
    assert errors[1] < 0.55 * errors[0]


@pytest.mark.parametrize("dt", [2e-4, 1e-3, 1e-2, 0.2])
def test_the_second_order_error_has_its_poles_exactly_where_they_are_said_to_be(dt: float) -> None:
    pole = 2.0 * math.pi * 30.0
    x = pole * dt * math.sqrt(0.5)
    error = 3.0 - second_order_steps(pole, dt, 12)
    next_one = 2.0 * math.exp(-x) * math.cos(x) * error[1:-1] - math.exp(-2.0 * x) * error[:-2]
    np.testing.assert_allclose(error[2:], next_one, atol=1e-10)


def test_no_form_diverges_where_forward_euler_does() -> None:
    # check-values §3: forward Euler at K = 250/s and 10 ms has the pole 1 - K dt = -1.5.
    dt, pole = 0.01, 250.0
    assert abs(1.0 - pole * dt) > 1.0
    first, second = first_order_steps(pole, np.full(100, dt)), second_order_steps(pole, dt, 100)
    assert first[-1] == pytest.approx(3.0, abs=1e-9)
    assert second[-1] == pytest.approx(3.0, abs=1e-9)
    assert max(np.abs(first).max(), np.abs(second).max()) < 2.0 * 3.0
    third = joint_space_steps(FAST, 0.02, 200)
    assert third[-1] == pytest.approx(1.0, abs=1e-9)
    assert np.abs(third).max() < 2.0


@pytest.mark.parametrize(("walk", "expected"), [(FAST, 7e-3), (SLOW, 16e-3)])
def test_half_of_a_step_is_there_after_the_stated_time_in_joint_space(walk: float, expected: float) -> None:
    # Methods §3: "half of a step after about 7 ms; slow: 1, 16 ms".
    r = joint_space_steps(walk, 1e-3, 400)
    after = np.interp(0.5, r[: np.argmax(r > 0.6)], 1e-3 * np.arange(1, np.argmax(r > 0.6) + 1))
    assert after == pytest.approx(expected, rel=0.25)
    assert r[-1] == pytest.approx(1.0, abs=1e-6)


def iterated_gain(position_sd: float, velocity_sd: float, walk: float, dt: float) -> Floats:
    """Return the gain the plain recursion of the covariance settles to (any textbook on Kalman filters)."""
    A = np.array([[1.0, dt, dt * dt / 2.0], [0.0, 1.0, dt], [0.0, 0.0, 1.0]])
    H = np.eye(3)[:2]
    # The step of the random walk is spread evenly over dt, as the docstring of riccati_gain says.
    g = np.array([dt * dt / 6.0, dt / 2.0, 1.0])
    Q = walk**2 * dt * np.outer(g, g)
    R = np.diag([position_sd**2, velocity_sd**2])
    P: Floats = np.diag([position_sd**2, velocity_sd**2, (30.0 * walk) ** 2])
    K: Floats = np.zeros((3, 2))
    for _ in range(20_000):
        K = np.asarray(np.linalg.solve(H @ P @ H.T + R, H @ P).T, np.float64)
        P = np.asarray((np.eye(3) - K @ H) @ P, np.float64)
        P = np.asarray(A @ (0.5 * (P + P.T)) @ A.T + Q, np.float64)
    return K


@pytest.mark.parametrize("dt", [1.25e-4, 1e-3, 8e-3, 2e-2])
@pytest.mark.parametrize("walk", [FAST, SLOW])
def test_the_gains_are_where_the_covariance_of_the_filter_settles(walk: float, dt: float) -> None:
    mine, settled = (
        riccati_gain(POSITION_SD, VELOCITY_SD, walk, dt),
        iterated_gain(POSITION_SD, VELOCITY_SD, walk, dt),
    )
    np.testing.assert_allclose(mine, settled, rtol=1e-7)


@pytest.mark.parametrize("step_m", [1e-4, 1e-6, 1e-8])
def test_the_gains_are_right_for_fine_and_coarse_encoders(step_m: float) -> None:
    sd = step_m / math.sqrt(12.0)
    np.testing.assert_allclose(
        riccati_gain(sd, VELOCITY_SD, SLOW, 1e-3), iterated_gain(sd, VELOCITY_SD, SLOW, 1e-3), rtol=1e-7
    )


def test_turning_the_base_by_small_steps_is_the_exponential_map() -> None:
    # Judge: scipy's rotations.
    from scipy.spatial.transform import Rotation

    rng = np.random.default_rng(3)
    for size in (0.0, 1e-9, 9e-4, 1.1e-3, 0.3, 3.0):
        start, turn = Rotation.random(random_state=rng), size * rng.standard_normal(3)
        q = np.concatenate([np.zeros(3), start.as_quat(scalar_first=True)])
        ledger.turn_quaternion(turn[0], turn[1], turn[2], q)
        error = (start * Rotation.from_rotvec(turn)).inv() * Rotation.from_quat(q[3:], scalar_first=True)
        assert error.magnitude() < 1e-14
        assert np.linalg.norm(q[3:]) == pytest.approx(1.0, abs=1e-15)
