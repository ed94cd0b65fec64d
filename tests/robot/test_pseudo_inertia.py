"""Pseudo-inertias against moments of bodies from any mechanics handbook and against clouds of points."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from monitor.robot.pseudo_inertia import (
    flaw,
    moved,
    parameters,
    principal_moments,
    pseudo_inertia,
    rotation,
    transform,
)

Floats = NDArray[np.float64]

MASS = 3.0
ORIGIN = (0.0, 0.0, 0.0)
# Handbook moments beside the second moments of mass that integration over the same body gives.
BODIES = {
    "box .2 x .3 x .5, m(b²+c²)/12": (
        MASS / 12.0 * np.array([0.3**2 + 0.5**2, 0.2**2 + 0.5**2, 0.2**2 + 0.3**2]),
        MASS / 12.0 * np.array([0.2**2, 0.3**2, 0.5**2]),
    ),
    "solid cylinder r .2 h .7, m(3r²+h²)/12 and m r²/2": (
        MASS * np.array([(3 * 0.2**2 + 0.7**2) / 12.0, (3 * 0.2**2 + 0.7**2) / 12.0, 0.2**2 / 2.0]),
        MASS * np.array([0.2**2 / 4.0, 0.2**2 / 4.0, 0.7**2 / 12.0]),
    ),
    "sphere r .4, 2mr²/5": (
        2.0 * MASS * 0.4**2 / 5.0 * np.ones(3),
        MASS * 0.4**2 / 5.0 * np.ones(3),
    ),
    "rod L .9 along x, mL²/12": (
        MASS * 0.9**2 / 12.0 * np.array([0.0, 1.0, 1.0]),
        MASS * 0.9**2 / 12.0 * np.array([1.0, 0.0, 0.0]),
    ),
}


def _cloud(seed: int) -> tuple[Floats, Floats]:
    rng = np.random.default_rng(seed)
    return rng.uniform(0.1, 1.0, 7), rng.normal(size=(7, 3))


def _integral(masses: Floats, points: Floats) -> Floats:
    """Return the sum of m [r;1][r;1]ᵀ: the definition of the pseudo-inertia."""
    ones = np.column_stack([points, np.ones(len(points))])
    return (ones.T * masses) @ ones


@pytest.mark.parametrize(("moments", "second"), BODIES.values(), ids=BODIES)
def test_handbook_moments_become_the_second_moments_of_the_body(moments: Floats, second: Floats) -> None:
    E = pseudo_inertia(MASS, ORIGIN, np.diag(moments))
    assert np.allclose(E, np.diag([*second, MASS]), rtol=0.0, atol=1e-15)


def test_moments_of_a_rod_about_its_end_follow_from_moving_it() -> None:
    """A thin rod about its end: mL²/3 (handbook)."""
    rod = pseudo_inertia(MASS, ORIGIN, MASS * 0.9**2 / 12.0 * np.diag([0.0, 1.0, 1.0]))
    at_end = moved(rod, transform(np.eye(3), (0.45, 0.0, 0.0)))
    Sigma = at_end[:3, :3]
    assert np.allclose(np.trace(Sigma) * np.eye(3) - Sigma, MASS * 0.9**2 / 3.0 * np.diag([0.0, 1.0, 1.0]))


@pytest.mark.parametrize("seed", range(5))
def test_parameters_of_a_cloud_of_points_are_read_back(seed: int) -> None:
    masses, points = _cloud(seed)
    mass, com, inertia = parameters(_integral(masses, points))
    arms = points - masses @ points / masses.sum()
    expected = sum(m * (r @ r * np.eye(3) - np.outer(r, r)) for m, r in zip(masses, arms, strict=True))
    assert mass == pytest.approx(masses.sum())
    assert np.allclose(com, masses @ points / masses.sum())
    assert np.allclose(inertia, expected)
    assert np.allclose(pseudo_inertia(mass, com, inertia), _integral(masses, points))


@pytest.mark.parametrize("seed", range(5))
def test_moving_a_pseudo_inertia_moves_its_points(seed: int) -> None:
    masses, points = _cloud(seed)
    R, p = Rotation.random(rng=seed).as_matrix(), np.array([0.3, -2.0, 0.7])
    E = moved(_integral(masses, points), transform(R, p))
    assert np.allclose(E, _integral(masses, points @ R.T + p))


def test_an_inertia_in_turned_axes_is_turned_back() -> None:
    R = rotation((0.3, -0.5, 1.1))
    E = pseudo_inertia(2.0, (0.1, 0.2, 0.3), np.diag([0.3, 0.4, 0.5]), R)
    assert np.allclose(parameters(E)[2], R @ np.diag([0.3, 0.4, 0.5]) @ R.T)


@given(st.tuples(*[st.floats(-7.0, 7.0)] * 3))
def test_roll_pitch_yaw_turn_about_fixed_axes_in_that_order(rpy: tuple[float, float, float]) -> None:
    assert np.allclose(rotation(rpy), Rotation.from_euler("xyz", rpy).as_matrix(), atol=1e-14)


def test_principal_moments_do_not_depend_on_the_axes() -> None:
    R = rotation((1.0, 2.0, 3.0))
    assert np.allclose(principal_moments(R @ np.diag([0.5, 0.3, 0.4]) @ R.T), [0.3, 0.4, 0.5])


@pytest.mark.parametrize("seed", range(5))
def test_a_cloud_of_points_has_no_flaw(seed: int) -> None:
    assert flaw(_integral(*_cloud(seed))) == ""


@pytest.mark.parametrize("seed", range(40))
def test_a_flaw_is_found_exactly_where_the_matrix_is_not_positive_definite(seed: int) -> None:
    rng = np.random.default_rng(seed)
    A = rng.normal(size=(3, 3))
    inertia = A @ A.T + rng.uniform(-0.5, 1.0) * np.eye(3)
    E = pseudo_inertia(rng.uniform(-0.3, 1.0), rng.normal(size=3), inertia)
    assert (flaw(E) == "") == (np.linalg.eigvalsh(E).min() > 0.0)


def test_a_matrix_that_is_positive_definite_yet_impossible_is_refused() -> None:
    """A small body whose largest principal moment exceeds the sum of the others by 5.75e-6 kg m²."""
    inertia = [[1.15e-4, 5.2e-5, 2.5e-5], [5.2e-5, 1.53e-4, 3.4e-5], [2.5e-5, 3.4e-5, 1.9e-4]]
    moments = principal_moments(inertia)
    assert moments.min() > 0.0
    assert moments[2] - moments[1] - moments[0] == pytest.approx(5.75e-6, abs=5e-9)
    text = flaw(pseudo_inertia(0.1, ORIGIN, inertia))
    assert "violates the triangle inequality by 5.7" in text
    for moment in moments:
        assert f"{moment:.6g}" in text


@pytest.mark.parametrize(
    ("mass", "moments", "words"),
    [
        (0.0, (1.0, 1.0, 1.0), "mass 0 kg is not positive"),
        (-2.0, (1.0, 1.0, 1.0), "mass -2 kg is not positive"),
        (1.0, (-0.1, 1.0, 1.0), "not positive definite (principal moments -0.1, 1, 1 kg m²)"),
        (1.0, (0.0, 0.0, 0.0), "not positive definite"),
        (1.0, (0.5, 0.5, 1.0), "violates the triangle inequality by 0 kg m²"),
        (1.0, (0.2, 0.3, 1.0), "violates the triangle inequality by 0.5 kg m²"),
    ],
)
def test_the_failed_condition_is_named(mass: float, moments: tuple[float, ...], words: str) -> None:
    assert words in flaw(pseudo_inertia(mass, ORIGIN, np.diag(moments)))


def test_a_massless_body_has_no_parameters_to_read() -> None:
    with pytest.raises(ValueError, match="massless"):
        parameters(np.zeros((4, 4)))
