"""When which foot is to carry, where it is to go, and the torques that bring it about.

A gait is a fixed timetable: `planned` depends on the time alone, never on what the ground does. The
controller is the common one: trunk wrench by feedback, shared out among the feet that carry, plus leg
angles by inverse kinematics followed by the drives. It sees the exact state.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import mujoco
import numpy as np
from numpy.typing import NDArray

from tests.worlds.walker_control import COMMAND, MEMORY, MODES, SENSED, SETTING, control
from tests.worlds.walker_robot import Terrace

Floats = NDArray[np.float64]

START_S = 1.5
PERIOD_S = 1e-3
LEAN = 0.65


@dataclass(frozen=True)
class Gait:
    """A timetable.

    Foot i leaves the ground at `START_S + lift_s[i]` and every `period_s` after it, for `swing_s`; it is
    raised by `clearance_m` and comes down at `landing_speed` [m/s]. `stride_m` is how far a foot advances
    in a period. With `leaning` the trunk is brought over the triangle of the other three feet before each
    step; it heaves and sways by `sway_m`. A gait without swing has `swing_s` 0; `hoisted` ones never carry.
    """

    name: str
    period_s: float
    lift_s: tuple[float, ...]
    swing_s: float
    clearance_m: float = 0.05
    landing_speed: float = 0.15
    stride_m: float = 0.0
    leaning: bool = False
    hoisted: bool = False
    sway_m: float = 0.0

    def planned(self, t: float | Floats) -> NDArray[np.bool_]:
        """Return which feet are to carry (..., 4) at time t [s]."""
        into = np.asarray(t)[..., None] - START_S - np.array(self.lift_s)
        if self.hoisted:
            return np.zeros(into.shape, dtype=bool)
        planned: NDArray[np.bool_] = (into < 0.0) | (into % self.period_s >= self.swing_s)
        return planned

    def lifts(self, foot: int, seconds: float) -> Floats:
        """Return when the foot is lifted [s], up to `seconds`."""
        if self.hoisted or not self.swing_s:
            return np.zeros(0)
        return np.arange(START_S + self.lift_s[foot], seconds, self.period_s)


def gait(motion: str, rng: np.random.Generator) -> Gait:
    """Return a timetable for `stand`, `crawl`, `trot` or `hoisted`, drawn at random."""
    if motion == "stand":
        return Gait("stand", 1.0, (0.0,) * 4, 0.0, sway_m=rng.uniform(0.008, 0.02))
    if motion == "hoisted":
        return Gait("hoisted", 1.0, (0.0,) * 4, 0.0, hoisted=True, sway_m=rng.uniform(0.03, 0.06))
    if motion == "crawl":
        step, swing = rng.uniform(1.3, 1.6), rng.uniform(0.34, 0.42)
        order = {3: 0, 1: 1, 2: 2, 0: 3}  # hind right, front right, hind left, front left
        lifts = [(order[i] + 1) * step - swing for i in range(4)]
        stride = rng.choice((0.0, rng.uniform(0.05, 0.12)))
        return Gait(
            "crawl", 4.0 * step, tuple(lifts), swing, rng.uniform(0.04, 0.06), 0.15, stride, leaning=True
        )
    if motion == "trot":
        step, duty = 1.0 / rng.uniform(1.5, 2.5), rng.uniform(0.58, 0.66)
        return Gait(
            "trot",
            step,
            (0.0, 0.5 * step, 0.5 * step, 0.0),
            (1.0 - duty) * step,
            rng.uniform(0.03, 0.05),
            0.25,
        )
    raise ValueError(f"motion {motion!r}: expected stand, crawl, trot or hoisted")


class Controller:
    """Commands at 1 kHz; `model` is the engine's, for the torque that moving the legs takes.

    `q`, `qd`, `ahead` (12,): what the drives follow until the next command: `ahead + kp (q - angle) + kd
    (qd - speed)`.
    """

    def __init__(self, robot: Terrace, gait: Gait, model: Any, rng: np.random.Generator) -> None:
        self.robot, self.kp, self.kd = robot, 5.0 * robot.rated, 0.12 * robot.rated
        self._model, self._data, self._needed = model, mujoco.MjData(model), np.zeros(model.nv)
        self._setting, self._memory = np.zeros(1, SETTING), np.zeros(1, MEMORY)
        self.sensed, self._command = np.zeros(1, SENSED), np.zeros(1, COMMAND)
        set_to, memory, legs = self._setting[0], self._memory[0], robot.legs
        set_to["mode"], set_to["start"], set_to["step"] = MODES.index(gait.name), START_S, PERIOD_S
        set_to["period"], set_to["swing"], set_to["lift"] = gait.period_s, gait.swing_s, gait.lift_s
        set_to["clearance"], set_to["landing_speed"] = gait.clearance_m, gait.landing_speed
        set_to["stride"], set_to["sway"], set_to["lean"] = gait.stride_m, gait.sway_m, LEAN
        set_to["frequency"] = rng.uniform(0.25, 0.7, (4, 3)) * (2.0 if gait.hoisted else 1.0)
        set_to["phase"] = rng.uniform(0.0, 2.0 * math.pi, (4, 3))
        set_to["mass"], set_to["radius"] = robot.mass_kg, robot.foot_radius_m
        length, width, _ = legs.hips[0]
        set_to["inertia"] = 0.8 * robot.mass_kg * np.array([width**2, length**2, length**2 + width**2])
        set_to["hips"], set_to["outward"] = legs.hips, legs.outward
        set_to["thigh"], set_to["shank"] = legs.thigh, legs.shank
        below = legs.hips + np.outer(legs.outward, (0.0, 1.0, 0.0))
        below[:, 2] = robot.foot_radius_m
        set_to["below"] = memory["anchor"] = memory["landing"] = below
        # The centre of mass, not the base origin, belongs over the middle of the feet.
        home = np.array([0.0, 0.0, robot.stance_height_m])
        to_com = self._mass_centre(home, robot.legs.angles(below - home))
        home[:2] -= to_com
        set_to["home"] = memory["lean_from"] = memory["lean_to"] = home
        set_to["to_com"], memory["slot"], memory["planned"] = to_com, -1, gait.planned(0.0)
        self.home, self.q_home = home, robot.legs.angles(below - home)
        self.q, self.qd = (self._command[name][0].reshape(12) for name in ("q", "qd"))
        self._qdd, self._carrying = (self._command[name][0].reshape(12) for name in ("qdd", "carrying"))
        self.ahead = np.zeros(12)

    def _mass_centre(self, trunk: Floats, q: Floats) -> Floats:
        """Return the way from the base origin to the centre of mass (2,), level."""
        self._data.qpos[:3], self._data.qpos[3], self._data.qpos[7:] = trunk, 1.0, q.ravel()
        mujoco.mj_kinematics(self._model, self._data)
        mujoco.mj_comPos(self._model, self._data)
        way: Floats = self._data.body("trunk").subtree_com[:2] - trunk[:2]
        return way

    def command(self, t: float, qpos: Floats, qvel: Floats) -> None:
        """Renew the command at time t [s], after `sensed` was filled; qpos, qvel are the engine's."""
        control(t, self._setting, self._memory, self.sensed, self._command)
        m, d = self._model, self._data
        # The engine's inverse dynamics of the wanted motion of the legs; the trunk keeps its speed.
        d.qpos[:7], d.qpos[7:] = qpos[:7], self.q
        d.qvel[:6], d.qvel[6:] = qvel[:6], self.qd
        d.qacc[6:] = self._qdd
        mujoco.mj_kinematics(m, d)
        mujoco.mj_comPos(m, d)
        mujoco.mj_comVel(m, d)
        mujoco.mj_rne(m, d, 1, self._needed)
        self.ahead = self._needed[6:] + self.robot.armature * self._qdd + self._carrying
