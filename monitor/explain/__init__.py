"""What could have caused a residual: one file per explanation, each with its rows, priors and words."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from monitor.explain import actuator, contact, foothold, load, position_sensor, torque_sensor, touchdown
from monitor.explain.outline import Explanation, Outline
from monitor.kernels.jit import kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# The registry: number of a family = its place here; `fill` has a branch for each.
FAMILIES: tuple[tuple[str, Callable[[Outline], list[Explanation]]], ...] = (
    (contact.NAME, contact.explanations),
    (actuator.NAME, actuator.explanations),
    (position_sensor.NAME, position_sensor.explanations),
    (load.NAME, load.explanations),
    (touchdown.NAME, touchdown.explanations),
    (torque_sensor.NAME, torque_sensor.explanations),
    (foothold.NAME, foothold.explanations),
)
NAMES = tuple(name for name, _ in FAMILIES)
CONTACT, ACTUATOR, SENSOR, LOAD, TOUCHDOWN, TORQUE_SENSOR, FOOTHOLD = range(len(FAMILIES))


def explanations(outline: Outline) -> list[Explanation]:
    """Return all that may have happened to a robot, beside `something else` and `nothing`."""
    return [one for _, of in FAMILIES for one in of(outline)]


@kernel
def fill(
    family: int, index: int, feature: Floats, slope: Floats, M: Floats,
    body_axis: Ints, body_centre: Floats, foot_axis: Ints, foot_point: Floats, foot_radius: Floats,
    up: Floats, load_axis: int, load_centre: Floats, parent: Ints, dof: Ints,
    S: Floats, V: Floats, Vd: Floats,
    R: Floats, p: Floats, link_row: Ints, armature: Floats, H: Floats,
) -> None:  # fmt: skip
    """Fill the columns H (rows,6) of a candidate: torque per unit of its parameters, as many as it has.

    family is a place in `FAMILIES`, index what `Candidate.number` says; the other arrays are described at the
    `rows` of each family.
    """
    if family == CONTACT:
        contact.rows(body_axis[index], body_centre[index], parent, dof, S, R, p, H)
    elif family == ACTUATOR:
        actuator.rows(index, feature, H)
    elif family == SENSOR:
        position_sensor.rows(index, slope, M, feature, link_row, armature, H)
    elif family == LOAD:
        load.rows(load_axis, load_centre, parent, dof, S, V, Vd, R, p, H)
    elif family == TORQUE_SENSOR:
        torque_sensor.rows(index, link_row, feature, H)
    elif family == TOUCHDOWN:
        touchdown.rows(foot_axis[index], foot_point[index], foot_radius[index], up, parent, dof, S, R, p, H)
