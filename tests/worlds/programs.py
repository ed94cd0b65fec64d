"""What arms do at work: moves with pauses between them and continuous paths, as piecewise polynomials."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BPoly, CubicSpline, PPoly

from tests.worlds.robots import HALF_RANGE, HOME, JOINTS

Floats = NDArray[np.float64]

TOP_ACCELERATION = 6.0
REST_S = 0.6
_DEGREE = 5
# A quintic from rest to rest over one radian and one second: top speed and top acceleration.
_QUINTIC_SPEED, _QUINTIC_ACCELERATION = 1.875, 5.7735


class Program:
    """A motion of all joints: call it with times (K,) for positions (K,n), or with a derivative's order."""

    def __init__(self, pieces: list[tuple[float, Floats]]) -> None:
        durations, coefficients = zip(*pieces, strict=True)
        self._path = PPoly(
            np.stack(coefficients, axis=1), np.concatenate([[0.0], np.cumsum(durations)]), extrapolate=True
        )
        self._derivatives = [self._path, self._path.derivative(1), self._path.derivative(2)]
        self.seconds = float(self._path.x[-1])

    def __call__(self, t: Floats, order: int = 0) -> Floats:
        """Return position, velocity or acceleration; before its start and after its end the arm rests."""
        values: Floats = self._derivatives[order](np.clip(t, 0.0, self.seconds - 1e-9))
        return values


def work(rng: np.random.Generator, seconds: float, steady: bool = False) -> Program:
    """Return a program of at least so many seconds; top speed of each move between 1 and 2 rad/s.

    Acceleration steps where a continuous path begins and ends, unless it is `steady`: a stiff arm follows it
    at once, an elastic one swings.
    """
    here = _somewhere(rng)
    pieces = [_rest(here, REST_S)]
    total = REST_S
    while total < seconds:
        if rng.random() < 0.2:
            stretch, here = _flow(here, rng, steady)
        else:
            there = _somewhere(rng)
            if rng.random() < 0.4:  # some joints only
                still = rng.random(JOINTS) < 0.5
                there[still] = here[still]
            stretch, here = [_move(here, there, rng.uniform(1.0, 2.0))], there
            if rng.random() < 0.8:
                stretch.append(_rest(here, rng.uniform(0.2, 1.0)))
        pieces += stretch
        total += sum(duration for duration, _ in stretch)
    pieces.append(_rest(here, REST_S))
    return Program(pieces)


def _somewhere(rng: np.random.Generator) -> Floats:
    place: Floats = HOME + HALF_RANGE * rng.uniform(-1.0, 1.0, JOINTS)
    return place


def _rest(here: Floats, seconds: float) -> tuple[float, Floats]:
    coefficients = np.zeros((_DEGREE + 1, JOINTS))
    coefficients[-1] = here
    return seconds, coefficients


def _move(here: Floats, there: Floats, speed: float) -> tuple[float, Floats]:
    """Return the quintic from rest to rest whose fastest joint reaches `speed` [rad/s], given room."""
    away = there - here
    far = np.abs(away).max()
    T = max(_QUINTIC_SPEED * far / speed, np.sqrt(_QUINTIC_ACCELERATION * far / TOP_ACCELERATION), 0.3)
    zero = np.zeros(JOINTS)
    return T, np.stack([6.0 * away / T**5, -15.0 * away / T**4, 10.0 * away / T**3, zero, zero, here])


def _flow(here: Floats, rng: np.random.Generator, steady: bool) -> tuple[list[tuple[float, Floats]], Floats]:
    """Return a smooth path through several points without a stop, and where it ends."""
    points = [here]
    for _ in range(rng.integers(4, 9)):
        points.append(points[-1] + 0.5 * (_somewhere(rng) - points[-1]))
    spans = rng.uniform(0.7, 1.3, len(points) - 1)
    knots = np.concatenate([[0.0], np.cumsum(spans)])
    dense = np.linspace(0.0, knots[-1], 400)
    unit = _through(knots, points, steady)
    slower = max(
        np.abs(unit(dense, 1)).max() / rng.uniform(1.0, 2.0),
        np.sqrt(np.abs(unit(dense, 2)).max() / TOP_ACCELERATION),
    )
    path = _through(slower * knots, points, steady)
    padding = np.zeros((_DEGREE + 1 - len(path.c), JOINTS))
    pieces = [(float(slower * spans[k]), np.vstack([padding, path.c[:, k]])) for k in range(len(spans))]
    return pieces, points[-1]


def _through(knots: Floats, points: list[Floats], steady: bool) -> PPoly:
    """Return the smooth path through points (K,n) that rests at both ends."""
    path = CubicSpline(knots, points, bc_type="clamped")
    if not steady:
        return path
    acceleration = path(knots, 2)
    acceleration[[0, -1]] = 0.0
    at_knots = np.stack([points, path(knots, 1), acceleration], axis=1)
    return PPoly.from_bernstein_basis(BPoly.from_derivatives(knots, at_knots))
