"""What explanations have to know of a robot, and what each declares of its candidates."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Outline:
    """A robot as explanations see it; rows are those of v.

    Attributes
    ----------
    joints : tuple of str
        Names of the joint rows, after the `base` rows of the base (6 or 0).
    units : tuple of str
        N m or N, by joint row.
    rated, coulomb, viscous : (joints,)
        Rated torque, normal friction [N m, N m, N m s/rad].
    silent : tuple of str
        Joints on whose position neither gravity nor inertia depends.
    bodies : tuple of str
        Links a contact may be on.
    radius : (bodies,)
        Distance of the surface from the body's centre, root mean square [m].
    telling : (bodies,)
        Force that loads some joint with its rated torque, arm outstretched [N].
    feet : tuple of str
        Names of the feet.
    sensed : tuple of int
        Joints with a torque sensor at the link side: their motor sides are rows after all others.
    weight : float
        Of the whole robot [N].
    carrier, payload : str, float
        Link that carries loads ("" for none), largest expected load [kg].
    rates : mapping of str to float
        How often things of each family happen, per hour of motion.
    """

    joints: tuple[str, ...]
    units: tuple[str, ...]
    base: int
    rated: Floats
    coulomb: Floats
    viscous: Floats
    silent: tuple[str, ...]
    bodies: tuple[str, ...]
    radius: Floats
    telling: Floats
    feet: tuple[str, ...]
    weight: float
    carrier: str
    payload: float
    rates: dict[str, float]
    sensed: tuple[int, ...] = ()

    def drive_row(self, joint: int) -> int:
        """Return the row in which the drive of a joint is seen: that of the joint, or of its motor side."""
        if joint in self.sensed:
            return self.base + len(self.joints) + self.sensed.index(joint)
        return self.base + joint


class Candidate(NamedTuple):
    """One way an explanation may look: so many columns, their prior standard deviations, how they move.

    `number` is what `rows` of the family gets. `time_s` is None for constants, else the time of a Matérn 3/2
    process, one for all columns or one each: about zero or, for the first `settles` columns, about a value of
    their own, with the share `settled` of the prior's variance. The last `fades` columns rise once and fade.
    `share` is the part of the explanation's rate; it ends by chance within `lasts_s` or so. A `one_sided`
    constant cannot be negative.
    """

    family: str
    number: int
    detail: str
    sd: tuple[float, ...]
    unit: str
    share: float
    time_s: float | tuple[float, ...] | None = None
    settles: int = 0
    settled: float = 0.003
    fades: int = 0
    lasts_s: float = 60.0
    one_sided: bool = False

    @property
    def times_s(self) -> tuple[float, ...]:
        """Time constants, one for each column; of a smooth candidate."""
        if isinstance(self.time_s, tuple):
            return self.time_s
        return (self.time_s or 0.0,) * len(self.sd)

    @property
    def moves(self) -> tuple[float, ...]:
        """Share of the prior's variance with which each column goes on moving."""
        going = len(self.sd) - self.settles - self.fades
        return (self.settled,) * self.settles + (1.0,) * going + (0.0,) * self.fades


class Explanation(NamedTuple):
    """One thing that may have happened, told in as many ways as it has candidates."""

    verdict: str
    joint: str | None
    link: str | None
    rate_per_h: float
    candidates: tuple[Candidate, ...]
