"""Mass and centre of mass of the trunk of a walker, from what its legs carry while it stands.

Joints of legs that swing, or hang from a hoisted robot, say nothing of the body they hang from. When the
robot stands, its legs' torques tell the forces of the feet, and the rows of the base what these leave over:
a trunk that is heavier by dm and has its first moment off by dh leaves `-dm a` and `-dh x a`, a its
acceleration without gravity. This is fitted to the slow residual, by least squares with the weights of its
own uncertainty.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from monitor.commission.drive import Samples, run
from monitor.kernels.band import BLIND
from monitor.robot.pseudo_inertia import moved, transform
from monitor.setup.build import Setup
from monitor.setup.calibration import Model

Floats = NDArray[np.float64]

# Samples between those looked at, and how many of these count as one: friction that standing joints hide
# stays.
_EVERY, _CORRELATED = 20, 50.0
# How far off a description is before, as shares: sd of mass, and of the centre of mass in units of the
# trunk's size.
_MASS_SD, _CENTRE_SD = 0.1, 0.2
_LEAST = 0.02  # of rated, sd


def weighed(setup: Setup, recordings: Sequence[Samples]) -> Model:
    """Return the model of a setup with the trunk that recordings of it standing show.

    The setup must open no event on the way (see `commission.band.without_limits`). Recordings of a hoisted
    robot are left aside.
    """
    trunk = setup.sizes.base - 1
    E = setup.model.E
    if trunk < 0 or E[trunk, 3, 3] <= 0.0:
        return setup.model
    mass, first = E[trunk, 3, 3], E[trunk, :3, 3]
    size = float(np.sqrt(np.trace(E[trunk, :3, :3]) / mass))
    information = np.diag([1.0 / (_MASS_SD * mass) ** 2, *3 * [1.0 / (_CENTRE_SD * size * mass) ** 2]])
    seen, rest = information.copy(), np.zeros(4)
    for one in recordings:
        if not one.hoisted:
            A, b = _sums(setup, one)
            seen, rest = seen + A, rest + b
    change = np.linalg.solve(seen, rest)
    grown = (mass + change[0]) / mass
    shift = (first + change[1:]) / (grown * mass) - first / mass
    bodies = E.copy()
    bodies[trunk] = grown * moved(E[trunk], transform(np.eye(3), shift))
    return setup.model._replace(E=bodies)


def _sums(setup: Setup, samples: Samples) -> tuple[Floats, Floats]:
    """Return information (4,4) of one recording, and it times the change of mass and first moment (4,)."""
    trace = run(setup, samples, judge_base=False)
    taken = np.flatnonzero((trace.settling == 0) & (trace.alone[:, 3, 0] > 0.0))[::_EVERY]
    g = np.array(setup.config.robot.gravity_vector)
    w, x, y, z = (samples.base[taken, 3:7] / np.linalg.norm(samples.base[taken, 3:7], axis=1)[:, None]).T
    up = -np.column_stack(  # R' g, against
        [
            g @ np.array([1 - 2 * (y * y + z * z), 2 * (x * y + w * z), 2 * (x * z - w * y)]),
            g @ np.array([2 * (x * y - w * z), 1 - 2 * (x * x + z * z), 2 * (y * z + w * x)]),
            g @ np.array([2 * (x * z + w * y), 2 * (y * z - w * x), 1 - 2 * (x * x + y * y)]),
        ]
    )
    r, sd = trace.alone[taken, 2, :6], trace.alone[taken, 3, :6]
    H = np.zeros((len(taken), 6, 4))
    H[:, 3:, 0] = -up
    for k in range(3):
        H[:, :3, 1 + k] = -np.cross(np.eye(3)[k], up)
    # What the legs do not know; what else the base's rows are held to be off by may be the very error looked
    # for.
    rated = setup.params["rated"][0, :6]
    own = trace.variance[taken, 1, :6] + setup.params["cusum_sd"][0, :6] ** 2
    unknown = np.maximum(sd**2 - BLIND * rated**2 - own, 0.0) + (_LEAST * rated) ** 2
    weight = 1.0 / unknown / _CORRELATED
    A = np.einsum("tia,ti,tib->ab", H, weight, H)
    b = np.einsum("tia,ti,ti->a", H, weight, r)
    return A, b
