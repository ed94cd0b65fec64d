"""The walker *Terrace* in an independent physics engine (`mujoco`): motion, happenings, truth.

Two layers. `simulate` gives a `WalkerRecording`: exact rows of one instant each, no sensors.
`walker_session` draws motion and happenings from seeds, simulates, and adds what sensors and the state
estimator make of it; it keeps its sessions on disk. Robot and session seeds below 1000 are for tuning, from
1000 on held out.

Time: physics step 0.5 ms, semi-implicit Euler without implicit damping. Drives follow angle, speed and
torque ahead at every physics step; the controller renews these at 1 kHz, at the instants of the rows. So
motor torque between two rows is a ramp, plus the small jump of a new command at the row itself, whose
torque is the new one. Positions and velocities of a row are apart by half a physics step, 0.25 ms. Each row
fulfils, to 1e-4 Nm (the contact solver's end), `M a + C v + g = Sᵀ tau + friction + Σ J_footᵀ f + harness +
unexplained`.

Generalised forces are in the product's convention: moment and force on the base, base axes at the base
origin, then the joints.

Ground: a plane of its own under each foot, of one grip. It is even to a millimetre or two: its height
changes a little from step to step while the foot is in the air (`ROUGHNESS_M`), which spreads touchdown
over about 10 ms as it is on any floor. Holes and steps are larger changes of the same height. Contacts are
soft: time constant 8 ms, critically damped. Joint friction is the engine's own dry friction, which really
sticks, and differs from the data sheet by robot, by day and with temperature.
"""

from __future__ import annotations

import hashlib
import json
import math
import os
from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

import mujoco
import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from tests.worlds.arm import Push
from tests.worlds.noise import quantised
from tests.worlds.sessions import FOLDER_VARIABLE, Truth
from tests.worlds.walker_gait import PERIOD_S, START_S, Controller, Gait, gait
from tests.worlds.walker_robot import (
    ENCODER_STEP,
    FEET,
    JOINTS,
    LINKS,
    TORQUE_SD_SHARE,
    VELOCITY_SD,
    Terrace,
    terrace,
)

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

VERSION = "1"
SUBSTEPS = 2
ROUGHNESS_M = 0.001
TOUCH_N = 1.0
MOTIONS = ("stand", "crawl", "trot", "hoisted")
APART_S = 4.0
_HARNESS = {"stiffness": 900.0, "damping": 90.0, "turning": 60.0, "turning_damping": 9.0, "lift_m": 0.35}


@dataclass(frozen=True)
class Defect:
    """A drive that does not give what it believes, from `start_s` to `end_s`.

    `kind` and `size`: `torque-loss` (share of its torque), `open-circuit` (size 1: all of it), `offset` [Nm],
    `coulomb-friction` and `viscous-friction` (times the joint's own, added to it).
    """

    joint: int
    kind: str
    size: float
    start_s: float
    end_s: float


@dataclass(frozen=True)
class Ground:
    """Between two times the ground under one foot is at another height [m]."""

    foot: int
    start_s: float
    end_s: float
    height_m: float


@dataclass(frozen=True)
class Happenings:
    """All that befalls the walker in a session."""

    pushes: tuple[Push, ...] = ()
    defects: tuple[Defect, ...] = ()
    grounds: tuple[Ground, ...] = ()


@dataclass(frozen=True)
class WalkerRecording:
    """Exact samples at 1 kHz; rows as at the head of this file.

    Attributes
    ----------
    t : (T,)
        Time [s].
    q, qd, tau : (T,12)
        Angles, speeds, and motor torque as the drives believe it.
    base_p, base_quat, base_v, base_w : (T,3), (T,4), (T,3), (T,3)
        Position, attitude w-x-y-z, velocity in world axes, angular rate in base axes.
    a : (T,18)
        Time derivative of v = (base_w, base velocity in base axes, qd).
    friction : (T,12)
        Torque of healthy joint friction, against the speed.
    foot_force, foot_point : (T,4,3)
        Force of the ground on each foot and where it acts, world axes; the point is NaN without contact.
    harness : (T,6)
        Wrench of what holds a hoisted walker, generalised force on the base.
    unexplained : (T,18)
        Generalised force of pushes and defects.
    planned : (T,4)
        Whether the timetable wants the foot to carry.
    fell_s : float or None
        When it fell, which ended the recording.
    """

    t: Floats
    q: Floats
    qd: Floats
    tau: Floats
    base_p: Floats
    base_quat: Floats
    base_v: Floats
    base_w: Floats
    a: Floats
    friction: Floats
    foot_force: Floats
    foot_point: Floats
    harness: Floats
    unexplained: Floats
    planned: Bools
    fell_s: float | None

    @property
    def contact(self) -> Bools:
        """Which feet (T,4) the ground pushes with more than `TOUCH_N`."""
        touching: Bools = np.linalg.norm(self.foot_force, axis=2) > TOUCH_N
        return touching


def compiled(robot: Terrace) -> Any:
    """Return the engine's model: the walker and, under each foot, a ground of its own."""
    spec = mujoco.MjSpec.from_string(robot.urdf)
    spec.compiler.fusestatic = False
    spec.option.timestep = PERIOD_S / SUBSTEPS
    spec.option.cone = mujoco.mjtCone.mjCONE_ELLIPTIC
    spec.option.impratio = 10.0
    spec.option.tolerance = 1e-11
    spec.option.disableflags = int(mujoco.mjtDisableBit.mjDSBL_EULERDAMP)
    spec.body("trunk").add_freejoint()
    for name, armature, coulomb, viscous in zip(
        JOINTS, robot.armature, robot.coulomb, robot.viscous, strict=True
    ):
        joint = spec.joint(name)
        joint.limited = mujoco.mjtLimited.mjLIMITED_FALSE
        joint.armature, joint.frictionloss, joint.damping = armature, coulomb, [viscous, 0.0, 0.0]
        # Stiff enough that dry friction is whole at 0.02 rad/s.
        joint.solref_friction, joint.solimp_friction = [0.002, 1.0], [0.98, 0.99, 0.001, 0.5, 2.0]
    for i, foot in enumerate(FEET):
        ball = spec.geom(foot)
        ball.contype, ball.conaffinity, ball.friction[0], ball.solref = 0, 1 << i, robot.grip, [0.008, 1.0]
        # A body of its own: it will be moved; what belongs to the world itself is sorted once and for all.
        spec.worldbody.add_body(name=f"ground_{foot}").add_geom(
            type=mujoco.mjtGeom.mjGEOM_PLANE,
            size=[0.0, 0.0, 1.0],
            contype=1 << i,
            conaffinity=0,
            friction=[robot.grip, 0.005, 0.0001],
            solref=[0.008, 1.0],
        )
    return spec.compile()


class _World:
    """The engine, stepped; owns all that is applied to the walker from outside the controller."""

    def __init__(
        self, robot: Terrace, timetable: Gait, happenings: Happenings, rng: np.random.Generator
    ) -> None:
        self.robot, self.gait, self.happenings = robot, timetable, happenings
        self.model = compiled(robot)
        self.data = mujoco.MjData(self.model)
        self.controller = Controller(robot, timetable, self.model, rng)
        self._trunk = self.model.body("trunk").id
        self._feet = np.array([self.model.geom(foot).id for foot in FEET])
        self._grounds = np.array([self.model.body(f"ground_{foot}").id for foot in FEET])
        self._foot_of = np.full(self.model.ngeom, -1)
        self._foot_of[self._feet] = np.arange(4)
        self._seen = self.controller.sensed[0]
        self._home = self.controller.home.copy()
        self._home[2] += _HARNESS["lift_m"] if timetable.hoisted else 0.0
        self.data.qpos[:3], self.data.qpos[3], self.data.qpos[7:] = (
            self._home,
            1.0,
            self.controller.q_home.ravel(),
        )
        self._day, self._rng = 1.0 + rng.uniform(-0.1, 0.1, 12), rng
        self._warming, self._warm_s = rng.uniform(-0.1, 0.02), rng.uniform(40.0, 120.0)
        self._rough = np.zeros(4)
        self._planned = timetable.planned(0.0)
        self.harness = np.zeros(6)
        self.force, self.point = np.zeros((4, 3)), np.full((4, 3), np.nan)
        self._friction_share, self._damping_share = np.ones(12), np.ones(12)

    def command(self, t: float) -> None:
        """Let the controller see the exact state, and renew its command."""
        d, s = self.data, self._seen
        s["planned"], s["touching"] = self._planned, self.force[:, 2] > TOUCH_N
        s["position"], s["velocity"], s["omega"] = d.qpos[:3], d.qvel[:3], d.qvel[3:6]
        s["R_WB"], s["com"] = d.xmat[self._trunk].reshape(3, 3), d.subtree_com[self._trunk]
        s["q"] = d.qpos[7:].reshape(4, 3)
        self.controller.command(t, d.qpos, d.qvel)

    def prepare(self, t: float, planned: Bools) -> None:
        """Set what changes slowly or at the turn of a step: heights of the ground, friction of the joints."""
        lifted = self._planned & ~planned
        if lifted.any() and not self.gait.hoisted:
            drawn = np.clip(ROUGHNESS_M * self._rng.standard_normal(4), -2.0 * ROUGHNESS_M, 2.0 * ROUGHNESS_M)
            self._rough[lifted] = drawn[lifted]
        self._planned = planned
        height = self._rough.copy()
        for ground in self.happenings.grounds:
            if ground.start_s <= t < ground.end_s:
                height[ground.foot] = ground.height_m
        # The roughness of a new step appears once the foot is well off the old one.
        heights = self.model.body_pos[self._grounds, 2]
        self.model.body_pos[self._grounds, 2] = np.where(planned | self._high(t), height, heights)
        warmth = self._day * (1.0 + self._warming * (1.0 - math.exp(-t / self._warm_s)))
        dry, wet = np.ones(12), np.ones(12)
        for defect in self._active(t):
            if defect.kind == "coulomb-friction":
                dry[defect.joint] += defect.size
            elif defect.kind == "viscous-friction":
                wet[defect.joint] += defect.size
        self.model.dof_frictionloss[6:] = self.robot.coulomb * warmth * dry
        self.model.dof_damping[6:] = self.robot.viscous * warmth * wet
        self._friction_share, self._damping_share = 1.0 / dry, 1.0 / wet

    def _high(self, t: float) -> Bools:
        """Return which feet are in the middle of their swing (4,)."""
        into = (t - START_S - np.array(self.gait.lift_s)) % self.gait.period_s
        return (t > START_S) & (into > 0.3 * self.gait.swing_s) & (into < 0.7 * self.gait.swing_s)

    def _active(self, t: float) -> list[Defect]:
        return [d for d in self.happenings.defects if d.start_s <= t < d.end_s]

    def apply(self, t: float, tau: Floats) -> Floats:
        """Apply motor torque (12,) and all that is wrong; return the latter (18,), engine's convention."""
        wrong = np.zeros(18)
        for defect in self._active(t):
            j = defect.joint
            if defect.kind in ("torque-loss", "open-circuit"):
                wrong[6 + j] -= defect.size * tau[j]
            elif defect.kind == "offset":
                wrong[6 + j] += defect.size
        for push in self.happenings.pushes:
            if push.start_s < t < push.start_s + push.duration_s:
                body = self.data.body(push.link)
                point = body.xpos + body.xmat.reshape(3, 3) @ np.array(push.point_m)
                mujoco.mj_applyFT(self.model, self.data, push.force_at(t), np.zeros(3), point, body.id, wrong)
        applied = self.data.qfrc_applied
        applied[:] = wrong
        applied[6:] += tau
        if self.gait.hoisted:
            self.harness = self._held()
            applied[:6] += self.harness
        return wrong

    def _held(self) -> Floats:
        """Return force (world axes) and moment (base axes) of a soft harness (6,)."""
        d = self.data
        force = -_HARNESS["stiffness"] * (d.qpos[:3] - self._home) - _HARNESS["damping"] * d.qvel[:3]
        force[2] += self.robot.mass_kg * 9.81
        turned = 2.0 * math.copysign(1.0, d.qpos[3]) * d.qpos[4:7]
        moment = -_HARNESS["turning"] * turned - _HARNESS["turning_damping"] * d.qvel[3:6]
        return np.concatenate((force, moment))

    def feel(self) -> None:
        """Read the forces of the ground from the engine's contacts."""
        d = self.data
        self.force[:], self.point[:] = 0.0, np.nan
        if d.ncon:
            contact = d.contact
            there = contact.efc_address >= 0
            feet, start = self._foot_of[contact.geom[there, 1]], contact.efc_address[there]
            axes = contact.frame[there].reshape(-1, 3, 3)
            # One ball on one plane: at most one contact per foot; the frame's rows are its axes.
            self.force[feet] = np.einsum("cij,ci->cj", axes, d.efc_force[start[:, None] + np.arange(3)])
            self.point[feet] = contact.pos[there]

    def friction(self) -> tuple[Floats, Floats]:
        """Return torque of healthy friction (12,) and of what a defect adds to it (12,).

        While a joint sticks nobody can tell the two apart; they then share in the proportion of their sizes.
        """
        # Dry friction of the twelve joints comes first among the engine's constraints.
        dry, wet = self.data.efc_force[:12], self.data.qfrc_damper[6:]
        healthy = self._friction_share * dry + self._damping_share * wet
        return healthy, dry + wet - healthy

    def fallen(self) -> bool:
        upright = self.data.xmat[self._trunk][8]
        return not self.gait.hoisted and (
            self.data.qpos[2] < 0.55 * self.robot.stance_height_m or upright < 0.75
        )


def simulate(
    robot: Terrace, timetable: Gait, seconds: float, seed: int, happenings: Happenings = Happenings()
) -> WalkerRecording:
    """Let the robot move for some seconds, or until it falls."""
    world = _World(robot, timetable, happenings, np.random.default_rng((seed, 5)))
    model, data, controller = world.model, world.data, world.controller
    T = round(seconds / PERIOD_S)
    t: Floats = np.arange(T, dtype=np.float64) * PERIOD_S
    planned = timetable.planned(t)
    state, rate, acceleration = np.zeros((T, 19)), np.zeros((T, 18)), np.zeros((T, 18))
    tau_rows, friction, unexplained = np.zeros((T, 12)), np.zeros((T, 12)), np.zeros((T, 18))
    force, point, harness = np.zeros((T, 4, 3)), np.zeros((T, 4, 3)), np.zeros((T, 6))
    fell_s = None
    for k, now in enumerate(t.tolist()):
        world.prepare(now, planned[k])
        mujoco.mj_step1(model, data)
        world.command(now)
        for substep in range(SUBSTEPS):
            if substep:
                mujoco.mj_step1(model, data)
            q, qd = data.qpos[7:], data.qvel[6:]
            tau = controller.ahead + controller.kp * (controller.q - q) + controller.kd * (controller.qd - qd)
            np.minimum(np.maximum(tau, -robot.peak, out=tau), robot.peak, out=tau)
            wrong = world.apply(now + substep * PERIOD_S / SUBSTEPS, tau)
            if substep == 0:
                state[k], rate[k], tau_rows[k], unexplained[k] = data.qpos, data.qvel, tau, wrong
                harness[k] = world.harness
            mujoco.mj_step2(model, data)
            if substep == 0:
                world.feel()
                acceleration[k], force[k], point[k] = data.qacc, world.force, world.point
                friction[k], added = world.friction()
                unexplained[k, 6:] += added
        if world.fallen():
            fell_s, T = now, k + 1
            break
    R = _rotations(state[:, 3:7])
    return WalkerRecording(
        t=t[:T],
        q=state[:T, 7:],
        qd=rate[:T, 6:],
        tau=tau_rows[:T],
        base_p=state[:T, :3],
        base_quat=state[:T, 3:7],
        base_v=rate[:T, :3],
        base_w=rate[:T, 3:6],
        a=_product_acceleration(acceleration, rate, R)[:T],
        friction=friction[:T],
        foot_force=force[:T],
        foot_point=point[:T],
        harness=_product_force(harness, R)[:T],
        unexplained=_product_force(unexplained, R)[:T],
        planned=planned[:T],
        fell_s=fell_s,
    )


def _rotations(quat: Floats) -> Floats:
    """Return matrices (T,3,3) of unit quaternions w-x-y-z (T,4)."""
    w, x, y, z = quat.T
    rows = [
        [1 - 2 * (y * y + z * z), 2 * (x * y - w * z), 2 * (x * z + w * y)],
        [2 * (x * y + w * z), 1 - 2 * (x * x + z * z), 2 * (y * z - w * x)],
        [2 * (x * z - w * y), 2 * (y * z + w * x), 1 - 2 * (x * x + y * y)],
    ]
    matrices: Floats = np.moveaxis(np.array(rows), 2, 0)
    return matrices


def _product_force(force: Floats, R: Floats) -> Floats:
    """Turn forces of the engine (force in world axes, moment in base axes, joints) into the product's."""
    turned = force.copy()
    turned[:, :3], turned[:, 3:6] = force[:, 3:6], np.einsum("tij,ti->tj", R, force[:, :3])
    return turned


def _product_acceleration(acceleration: Floats, rate: Floats, R: Floats) -> Floats:
    """Turn accelerations of the engine into derivatives of base rate, velocity in base axes, speeds."""
    turned = acceleration.copy()
    turned[:, :3] = acceleration[:, 3:6]
    linear = np.einsum("tij,ti->tj", R, acceleration[:, :3])
    turned[:, 3:6] = linear - np.cross(rate[:, 3:6], np.einsum("tij,ti->tj", R, rate[:, :3]))
    return turned


# Happenings.

_WALKING = (
    "trunk-push",
    "standard-push",
    "leg-push",
    "hole",
    "trapdoor",
    "step",
    "stance-fault",
    "swing-fault",
    "both",
)
_KINDS = {
    "stand": ("trunk-push", "standard-push", "leg-push", "stance-fault", "both"),
    "crawl": _WALKING,
    "trot": _WALKING,
    "hoisted": ("trunk-push", "leg-push", "air-fault", "air-fault", "both"),
}


def draw_happenings(robot: Terrace, timetable: Gait, seconds: float, rng: np.random.Generator) -> Happenings:
    """Return happenings at least `APART_S` apart, every kind of the motion as often as the others."""
    pushes: list[Push] = []
    defects: list[Defect] = []
    grounds: list[Ground] = []
    kinds: list[str] = []
    now = START_S + 2.5
    while True:
        if not kinds:
            kinds = rng.permutation(_KINDS[timetable.name]).tolist()
        start = now + rng.uniform(0.0, 1.5)
        more = _drawn(kinds.pop(), robot, timetable, start, rng)
        ends = [p.start_s + p.duration_s for p in more.pushes] + [d.end_s for d in more.defects]
        # Ground is found, or the step taken, soon after it changed; that it is level again is no happening.
        end = max(ends + [g.start_s + 0.5 * timetable.swing_s + 0.5 for g in more.grounds])
        if end > seconds - 1.0:
            return Happenings(tuple(pushes), tuple(defects), tuple(grounds))
        pushes += more.pushes
        defects += more.defects
        grounds += more.grounds
        now = end + APART_S


def _drawn(kind: str, robot: Terrace, timetable: Gait, start: float, rng: np.random.Generator) -> Happenings:
    foot = int(rng.integers(4))
    lifts = timetable.lifts(foot, start + 3.0 * timetable.period_s)
    lifts = lifts[lifts > start]
    period, swing = timetable.period_s, timetable.swing_s
    if kind in ("trunk-push", "standard-push"):
        return Happenings(pushes=(_trunk_push(kind, robot, start, rng),))
    if kind == "leg-push":
        return Happenings(pushes=(_leg_push(robot, foot, start, rng),))
    if kind in ("hole", "step"):
        deep = _depth(timetable, rng)
        height = deep if kind == "hole" else rng.uniform(0.45, 0.7) * timetable.clearance_m
        high = lifts[0] + 0.5 * swing
        return Happenings(grounds=(Ground(foot, high, high + period, height),))
    if kind == "trapdoor":
        opens = lifts[0] + swing + rng.uniform(0.2, 0.6) * (period - swing)
        return Happenings(grounds=(Ground(foot, opens, lifts[1] + 0.5 * swing, _depth(timetable, rng)),))
    if kind == "swing-fault":
        return Happenings(
            defects=(_defect(robot, foot, "swing", lifts[0] + rng.uniform(0.05, 0.2) * swing, swing, rng),)
        )
    if kind == "both":
        fault = _defect(robot, foot, "both", start, swing, rng)
        push = _trunk_push("trunk-push", robot, start + rng.uniform(4.5, 6.5), rng)
        if timetable.hoisted:
            push = _leg_push(robot, int(rng.integers(4)), push.start_s, rng)
        return Happenings(pushes=(push,), defects=(fault,))
    if kind == "stance-fault" and lifts.size:
        start = lifts[0] + swing + rng.uniform(0.1, 0.5) * (period - swing)
    return Happenings(defects=(_defect(robot, foot, kind.split("-")[0], start, swing, rng),))


def _depth(timetable: Gait, rng: np.random.Generator) -> float:
    """Return the height of a hole [m]: on two feet one survives less."""
    return -rng.uniform(0.03, 0.06) * (0.75 if timetable.name == "trot" else 1.0)


def _trunk_push(kind: str, robot: Terrace, start: float, rng: np.random.Generator) -> Push:
    force = 40.0 if kind == "standard-push" else math.exp(rng.uniform(math.log(20.0), math.log(120.0)))
    # No more than 0.4 m/s of the whole robot: it is to survive.
    longest = min(0.5, 0.4 * robot.mass_kg / force)
    duration = 0.1 if kind == "standard-push" else rng.uniform(0.05, max(0.06, longest))
    angle, up = rng.uniform(0.0, 2.0 * math.pi), rng.uniform(-0.5, 0.3)
    level = math.sqrt(1.0 - up * up)
    way = (force * level * math.cos(angle), force * level * math.sin(angle), force * up)
    x, y, _ = robot.legs.hips[0]
    point = (rng.uniform(-x, x), rng.uniform(-y, y), rng.uniform(-0.05, 0.07))
    return Push(start, duration, "trunk", way, point, rise_s=min(0.02, 0.25 * duration))


def _leg_push(robot: Terrace, foot: int, start: float, rng: np.random.Generator) -> Push:
    link = LINKS[int(rng.integers(1, 3))]
    length = robot.legs.thigh if link == "thigh" else robot.legs.shank
    force, way = rng.uniform(20.0, 60.0), rng.standard_normal(3) * (1.0, 1.0, 0.4)
    way *= force / np.linalg.norm(way)
    point = (0.0, 0.0, -rng.uniform(0.4, 0.95) * length)
    return Push(
        start, rng.uniform(0.08, 0.4), f"{FEET[foot]}_{link}", tuple(way.tolist()), point, rise_s=0.02
    )


def _defect(
    robot: Terrace, foot: int, phase: str, start: float, swing_s: float, rng: np.random.Generator
) -> Defect:
    hinge = int(rng.integers(3))
    kinds = ["torque-loss", "torque-loss", "coulomb-friction", "viscous-friction", "offset"]
    kinds += ["open-circuit"] * {"air": 1, "swing": 2}.get(phase, 0)
    kind = str(rng.choice(kinds))
    sizes = {
        "torque-loss": rng.uniform(0.15, 1.0 if phase == "air" else 0.6),
        "coulomb-friction": rng.uniform(0.5, 3.0),
        "viscous-friction": rng.uniform(5.0, 15.0),
        "offset": rng.choice((-1.0, 1.0)) * rng.uniform(0.05, 0.2) * robot.rated[3 * foot + hinge],
        "open-circuit": 1.0,
    }
    lasting = rng.uniform(8.0, 9.5) if phase == "both" else rng.uniform(3.0, 6.0)
    if kind == "open-circuit" and phase == "swing":
        lasting = 0.6 * swing_s  # the drive is back before the leg has to carry
    return Defect(3 * foot + hinge, kind, float(sizes[kind]), float(start), float(start + lasting))


# Truths.


@dataclass(frozen=True)
class WalkerTruth(Truth):
    """What really happened; attributes beyond those of every world.

    Further kinds: `touchdown` (detail `step`) from the first touch to the planned one, its size the largest
    force [N]; `foothold-lost` (detail `hole` or `trapdoor`) from the planned touch, or from the trapdoor's
    giving way, until the foot finds ground or is lifted, its size the depth [m]. `effect` is over the
    joints: a push on the trunk has none.

    Attributes
    ----------
    foot : str or None
        Of touchdown and foothold.
    phase : str or None
        `air`, `swing` or `stance`: what the leg of a fault or push was planned to do at its start.
    """

    foot: str | None = None
    phase: str | None = None


def truths(
    robot: Terrace, timetable: Gait, happenings: Happenings, recording: WalkerRecording
) -> tuple[WalkerTruth, ...]:
    """Return what happened, in order of time; a hole or step that the foot never noticed is none."""
    found: list[WalkerTruth | None] = [_push_truth(push, timetable) for push in happenings.pushes]
    found += [_defect_truth(robot, defect, timetable) for defect in happenings.defects]
    for ground in happenings.grounds:
        made = _step_truth if ground.height_m > 0.0 else _hole_truth
        found.append(made(ground, timetable, recording))
    last = float(recording.t[-1])
    seen = [truth for truth in found if truth is not None and truth.start_s < last]
    seen = [_measured(replace(truth, end_s=min(truth.end_s, last)), robot, recording) for truth in seen]
    seen.sort(key=lambda truth: truth.start_s)
    return tuple(replace(truth, during=_around(truth, seen)) for truth in seen)


def _measured(truth: WalkerTruth, robot: Terrace, recording: WalkerRecording) -> WalkerTruth:
    """Return the truth with its effect on the joints, where it has one."""
    during = slice(round(truth.start_s / PERIOD_S), round(truth.end_s / PERIOD_S) + 1)
    shares = np.abs(recording.unexplained[during, 6:]) / robot.rated
    if not shares.any():
        return truth
    passed = np.flatnonzero(shares.max(axis=1) >= 0.03)
    return replace(
        truth,
        effect=float(shares.max()),
        effect_joint=JOINTS[int(shares.max(axis=0).argmax())],
        passes_s=float(recording.t[during][passed[0]]) if passed.size else None,
    )


def _around(truth: WalkerTruth, truths: Sequence[WalkerTruth]) -> int | None:
    """Return the index of the fault during which this began."""
    for i, other in enumerate(truths):
        if other.kind == "actuator" and other is not truth and other.start_s <= truth.start_s < other.end_s:
            return i
    return None


def _phase(timetable: Gait, foot: int, t: float) -> str:
    if timetable.hoisted:
        return "air"
    return "stance" if timetable.planned(t)[foot] else "swing"


def _push_truth(push: Push, timetable: Gait) -> WalkerTruth:
    force = float(np.linalg.norm(push.force_n))
    foot = push.link.rsplit("_", 1)[0]
    phase = _phase(timetable, FEET.index(foot), push.start_s) if foot in FEET else None
    end = push.start_s + push.duration_s
    return WalkerTruth(
        "contact",
        "prescribed",
        None,
        push.link,
        push.start_s,
        end,
        force,
        "N",
        point_m=push.point_m,
        force_n=push.force_n,
        phase=phase,
    )


def _defect_truth(robot: Terrace, defect: Defect, timetable: Gait) -> WalkerTruth:
    j = defect.joint
    offset, friction = defect.kind == "offset", defect.kind.endswith("friction")
    return WalkerTruth(
        "actuator",
        defect.kind,
        JOINTS[j],
        None,
        defect.start_s,
        defect.end_s,
        float(defect.size / robot.rated[j]) if offset else defect.size,
        "of rated" if offset else "times normal" if friction else "lost share",
        truthful=False if defect.kind == "open-circuit" else None,
        phase=_phase(timetable, j // 3, defect.start_s),
    )


def _cycle(ground: Ground, timetable: Gait) -> tuple[float, float]:
    """Return when the foot, lifted last before the ground changed, is to land and to be lifted again."""
    lift = START_S + timetable.lift_s[ground.foot]
    lift += timetable.period_s * math.floor((ground.start_s - lift) / timetable.period_s)
    return lift + timetable.swing_s, lift + timetable.period_s


def _step_truth(ground: Ground, timetable: Gait, recording: WalkerRecording) -> WalkerTruth | None:
    planned, _ = _cycle(ground, timetable)
    before = (recording.t >= ground.start_s) & (recording.t < planned - 1e-9)
    touching = before & recording.contact[:, ground.foot]
    if not touching.any():
        return None
    start = float(recording.t[touching][0])
    force = float(np.linalg.norm(recording.foot_force[before, ground.foot], axis=1).max())
    foot = FEET[ground.foot]
    return WalkerTruth("touchdown", "step", None, f"{foot}_shank", start, planned, force, "N", foot=foot)


def _hole_truth(ground: Ground, timetable: Gait, recording: WalkerRecording) -> WalkerTruth | None:
    landing, lift = _cycle(ground, timetable)
    start = max(landing, ground.start_s)
    t = recording.t[(recording.t >= start - 1e-9) & (recording.t < lift - 1e-9)]
    touching = recording.contact[np.searchsorted(recording.t, t), ground.foot]
    if touching.all():
        return None
    t, touching = t[np.argmin(touching) :], touching[np.argmin(touching) :]
    end = float(t[np.argmax(touching)]) if touching.any() else float(t[-1] + PERIOD_S)
    foot, depth = FEET[ground.foot], -ground.height_m
    detail = "hole" if ground.start_s < landing else "trapdoor"
    return WalkerTruth(
        "foothold-lost", detail, None, f"{foot}_shank", float(t[0]), end, depth, "m", foot=foot
    )


# Sessions.


@dataclass(frozen=True)
class Noise:
    """Of sensors and estimator.

    Encoder steps and white noise of speed and torque are in the data sheet. Standard deviations of the base
    estimate are totals per axis: a share `slow_share` of each variance is not white but wanders with a time
    constant `slow_s` (first-order Gauss-Markov), because estimators err in a correlated way. Errors of
    position, attitude, velocity and rate are independent of each other.
    """

    position_sd: float = 0.001
    attitude_sd: float = 0.0015
    velocity_sd: float = 0.01
    rate_sd: float = 0.01
    slow_share: float = 0.5
    slow_s: float = 0.25


@dataclass(frozen=True)
class WalkerSession:
    """What the monitor is given, and what it is judged by.

    Given: `urdf` (as drawn), `joints`, `feet` (tables of the configuration), `t` (T,) [s], `q`, `qd`, `tau`
    (T,12), `base_p`, `base_quat` (w-x-y-z), `base_v` (world axes), `base_w` (base axes), `planned` (T,4) 0
    or 1. True: `contact` (T,4), `foot_force` (T,4,3) [N] world axes, `unexplained` (T,18) as at the head of
    this file, `truths`, `fell_s`. `support` is `ground` or `hoisted`, as the robot announces it.
    """

    world: str
    support: str
    robot_seed: int
    seed: int
    urdf: str
    joints: tuple[dict[str, Any], ...]
    feet: tuple[dict[str, Any], ...]
    t: Floats
    q: Floats
    qd: Floats
    tau: Floats
    base_p: Floats
    base_quat: Floats
    base_v: Floats
    base_w: Floats
    planned: NDArray[np.int8]
    contact: Bools
    foot_force: Floats
    unexplained: Floats
    truths: tuple[WalkerTruth, ...]
    fell_s: float | None


_ARRAYS = (
    *("t", "q", "qd", "tau", "base_p", "base_quat", "base_v", "base_w"),
    *("planned", "contact", "foot_force", "unexplained"),
)


def walker_session(
    motion: str,
    robot_seed: int,
    seed: int,
    seconds: float = 60.0,
    happenings: bool = True,
    noise: Noise = Noise(),
    folder: str | Path | None = None,
) -> WalkerSession:
    """Return a session of one of `MOTIONS`; `folder` keeps it for the next time.

    Without a folder that of the environment variable `LIMBTELL_WORLDS` is taken; without that, none. Robots
    differ by `robot_seed`; motion, day, happenings and noise by `seed`. With `happenings` False nothing
    befalls the robot.
    """
    key = json.dumps(
        [VERSION, mujoco.__version__, motion, robot_seed, seed, seconds, happenings, asdict(noise)]
    )
    folder = folder or os.environ.get(FOLDER_VARIABLE)
    path = Path(folder) / f"walker-{hashlib.sha256(key.encode()).hexdigest()[:24]}.npz" if folder else None
    robot = terrace(robot_seed)
    if path is not None and path.exists():
        with np.load(path) as stored:
            arrays = {name: stored[name] for name in _ARRAYS}
            said = json.loads(str(stored["said"]))
        found, fell_s = tuple(_truth(values) for values in said["truths"]), said["fell_s"]
    else:
        rng = np.random.default_rng((robot_seed, seed, MOTIONS.index(motion)))
        timetable = gait(motion, rng)
        befalling = draw_happenings(robot, timetable, seconds, rng) if happenings else Happenings()
        recording = simulate(robot, timetable, seconds, int(rng.integers(2**31)), befalling)
        arrays = as_sensed(recording, robot, noise, rng)
        found, fell_s = truths(robot, timetable, befalling, recording), recording.fell_s
        if path is not None:
            said = {"truths": [asdict(truth) for truth in found], "fell_s": fell_s}
            _store(path, arrays, said)
    support = "hoisted" if motion == "hoisted" else "ground"
    return WalkerSession(
        f"walker-{motion}",
        support,
        robot_seed,
        seed,
        robot.cad,
        robot.joints,
        robot.feet,
        truths=found,
        fell_s=fell_s,
        **arrays,
    )


def _truth(values: dict[str, Any]) -> WalkerTruth:
    for name in ("point_m", "force_n"):
        values[name] = None if values[name] is None else tuple(values[name])
    return WalkerTruth(**values)


def _store(path: Path, arrays: dict[str, Any], said: dict[str, Any]) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    unfinished = path.with_suffix(".part.npz")
    np.savez(unfinished, said=json.dumps(said), **arrays)
    unfinished.replace(path)


def as_sensed(
    recording: WalkerRecording, robot: Terrace, noise: Noise, rng: np.random.Generator
) -> dict[str, Any]:
    """Return the arrays of a session: the recording through sensors and estimator, and the truth."""
    arrays = {name: getattr(recording, name) for name in _ARRAYS}
    T = recording.t.size
    white = rng.standard_normal((2, T, 12))
    arrays["q"] = quantised(recording.q, ENCODER_STEP)
    arrays["qd"] = recording.qd + VELOCITY_SD * white[0]
    arrays["tau"] = recording.tau + TORQUE_SD_SHARE * robot.rated * white[1]
    arrays["base_p"] = recording.base_p + noise.position_sd * _wandering(T, noise, rng)
    arrays["base_v"] = recording.base_v + noise.velocity_sd * _wandering(T, noise, rng)
    arrays["base_w"] = recording.base_w + noise.rate_sd * _wandering(T, noise, rng)
    arrays["base_quat"] = _turned(recording.base_quat, noise.attitude_sd * _wandering(T, noise, rng))
    arrays["planned"] = recording.planned.astype(np.int8)
    return arrays


def _wandering(T: int, noise: Noise, rng: np.random.Generator) -> Floats:
    """Return noise (T,3) of unit variance, partly slow."""
    keep = math.exp(-PERIOD_S / noise.slow_s)
    drive = rng.standard_normal((T, 3)) * math.sqrt(1.0 - keep * keep)
    drive[0] /= math.sqrt(1.0 - keep * keep)
    slow = lfilter([1.0], [1.0, -keep], drive, axis=0)
    mixed: Floats = math.sqrt(noise.slow_share) * slow + math.sqrt(
        1.0 - noise.slow_share
    ) * rng.standard_normal((T, 3))
    return mixed


def _turned(quat: Floats, angle: Floats) -> Floats:
    """Return attitudes (T,4) turned by small rotation vectors (T,3) in base axes."""
    small = np.hstack((np.ones((len(angle), 1)), 0.5 * angle))
    small /= np.linalg.norm(small, axis=1, keepdims=True)
    (w, a), (s, b) = (quat[:, :1], quat[:, 1:]), (small[:, :1], small[:, 1:])
    real = w * s - (a * b).sum(axis=1, keepdims=True)
    turned: Floats = np.hstack((real, w * b + s * a + np.cross(a, b)))
    return turned
