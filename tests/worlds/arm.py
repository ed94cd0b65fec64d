"""An arm in an independent physics engine (`mujoco`): motion, motor torque and exact external torque.

Time: the controller runs at every physics step (0.25 ms), so the motor torque is nearly continuous, and a
sample of 1 kHz is simply every fourth physics step. Row k of a recording holds state, acceleration and all
torques of the same instant t_k; between two rows torque varies about linearly (trapezoidal rule), it is *not*
held. What remains is the engine's semi-implicit Euler step: positions and velocities of a row are apart by
half a physics step, 0.125 ms.

Each row fulfils `M qdd + C qd + g = tau + friction + tau_ext` (rotor inertia in M) to rounding.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import mujoco
import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]

PERIOD_S = 1e-3
SUBSTEPS = 4
_CONTACTS = (
    mujoco.mjtConstraint.mjCNSTR_CONTACT_FRICTIONLESS,
    mujoco.mjtConstraint.mjCNSTR_CONTACT_PYRAMIDAL,
    mujoco.mjtConstraint.mjCNSTR_CONTACT_ELLIPTIC,
)
_LIMITS = (mujoco.mjtConstraint.mjCNSTR_LIMIT_JOINT, mujoco.mjtConstraint.mjCNSTR_LIMIT_TENDON)
_FRICTION = (mujoco.mjtConstraint.mjCNSTR_FRICTION_DOF,)


@dataclass(frozen=True)
class Motion:
    """Sines about a centre: `q = centre + sum_k amplitude_k sin(2 pi frequency_k t + phase_k)`.

    `centre` (n,) [rad], `amplitude` [rad], `frequency` [Hz], `phase` [rad] (K,n).
    """

    centre: Floats
    amplitude: Floats
    frequency: Floats
    phase: Floats

    def at(self, t: float) -> tuple[Floats, Floats, Floats]:
        """Return position, velocity and acceleration (n,) at time t [s]."""
        w = 2.0 * math.pi * self.frequency
        s, c = np.sin(w * t + self.phase), np.cos(w * t + self.phase)
        q = self.centre + (self.amplitude * s).sum(axis=0)
        return q, (self.amplitude * w * c).sum(axis=0), -(self.amplitude * w * w * s).sum(axis=0)


def random_motion(n: int, seed: int, speed: float = 1.0, centre: ArrayLike | None = None) -> Motion:
    """Return a motion of three sines per joint (0.1 to 0.6 Hz) that stays below `speed` [rad/s]."""
    rng = np.random.default_rng(seed)
    frequency = rng.uniform(0.1, 0.6, (3, n))
    share = rng.dirichlet(np.ones(3), n).T
    amplitude = speed * share / (2.0 * math.pi * frequency)
    middle = rng.uniform(-0.6, 0.6, n) if centre is None else np.asarray(centre, dtype=float)
    return Motion(middle, amplitude, frequency, rng.uniform(0.0, 2.0 * math.pi, (3, n)))


@dataclass(frozen=True)
class Friction:
    """Joint friction `-(coulomb tanh(v / v0) + viscous v)` [Nm], [Nm s/rad], [rad/s].

    With `by_engine` the engine's own dry friction (a constraint that really sticks) takes the place of tanh.
    """

    coulomb: ArrayLike = 0.0
    viscous: ArrayLike = 0.0
    v0: float = 0.01
    by_engine: bool = False


@dataclass(frozen=True)
class Push:
    """A force [N] in world axes at a point [m] in the frame of `link`; it swells and fades over `rise_s`."""

    start_s: float
    duration_s: float
    link: str
    force_n: tuple[float, float, float]
    point_m: tuple[float, float, float] = (0.0, 0.0, 0.0)
    rise_s: float = 0.03

    def force_at(self, t: float) -> Floats:
        """Return the force (3,) [N] at time t [s]: a trapezoid with sin² flanks."""
        into, left = t - self.start_s, self.start_s + self.duration_s - t
        share = np.clip(min(into, left) / self.rise_s, 0.0, 1.0)
        force: Floats = math.sin(0.5 * math.pi * share) ** 2 * np.array(self.force_n)
        return force


@dataclass(frozen=True)
class Ball:
    """A ball free of gravity in the arm's way, held at `centre_m` by springs [N/m] and dampers [N s/m]."""

    centre_m: tuple[float, float, float]
    radius_m: float = 0.08
    mass_kg: float = 2.0
    stiffness: float = 800.0
    damping: float = 40.0


@dataclass(frozen=True)
class ArmWorld:
    """An arm and what surrounds it.

    Parameters
    ----------
    urdf : str
        Text of the robot description: a fixed base, hinges and slides only, no mimic joints.
    motion : Motion
        What the controller follows, joints in depth-first order.
    armature : (n,) array_like
        Rotor inertia seen at the joint [kg m²].
    friction : Friction
        Of the joints; that of the description is ignored.
    ball : Ball, optional
        Something to run into.
    bandwidth : float
        Of the controller [rad/s], critically damped.
    gravity : tuple
        World axes [m/s²].
    """

    urdf: str
    motion: Motion
    armature: ArrayLike = 0.0
    friction: Friction = Friction()
    ball: Ball | None = None
    bandwidth: float = 30.0
    gravity: tuple[float, float, float] = (0.0, 0.0, -9.81)


@dataclass(frozen=True)
class Recording:
    """Samples at 1 kHz; see the head of this file for what belongs to which instant.

    Attributes
    ----------
    joints : tuple of str
        Names, depth-first.
    t : (T,)
        Time [s].
    q, qd, qdd : (T,n)
        Position, velocity, acceleration.
    tau : (T,n)
        Motor torque at the joint.
    tau_ext : (T,n)
        Torque from outside: `Jᵀ F` of pushes and of contacts.
    friction : (T,n)
        Torque of joint friction; against the velocity.
    tau_link : (T,n)
        What passes from the gear to the link: motor torque and friction, less what turns the rotor.
    """

    joints: tuple[str, ...]
    t: Floats
    q: Floats
    qd: Floats
    qdd: Floats
    tau: Floats
    tau_ext: Floats
    friction: Floats
    tau_link: Floats


def compiled(world: ArmWorld) -> Any:
    """Return the engine's model of the world; the arm's joints come first."""
    spec = mujoco.MjSpec.from_string(world.urdf)
    spec.compiler.fusestatic = False  # every link stays a body that can be pushed
    spec.option.timestep = PERIOD_S / SUBSTEPS
    spec.option.gravity = world.gravity
    for geom in spec.geoms:
        geom.contype, geom.conaffinity = 1, 2  # the arm meets the ball, never itself
    n = len(spec.joints)
    friction = world.friction
    for joint, armature, coulomb, viscous in zip(
        spec.joints,
        np.broadcast_to(world.armature, n),
        np.broadcast_to(friction.coulomb, n),
        np.broadcast_to(friction.viscous, n),
        strict=True,
    ):
        joint.armature = armature
        joint.frictionloss = coulomb if friction.by_engine else 0.0
        joint.damping = [viscous if friction.by_engine else 0.0, 0.0, 0.0]
    if world.ball is not None:
        _add_ball(spec, world.ball)
    return spec.compile()


def _add_ball(spec: Any, ball: Ball) -> None:
    body = spec.worldbody.add_body(name="ball", pos=ball.centre_m, gravcomp=1.0)
    body.add_geom(
        type=mujoco.mjtGeom.mjGEOM_SPHERE,
        size=[ball.radius_m, 0.0, 0.0],
        mass=ball.mass_kg,
        contype=2,
        conaffinity=1,
        solref=[0.004, 1.0],
    )
    for axis in np.eye(3):
        body.add_joint(
            type=mujoco.mjtJoint.mjJNT_SLIDE,
            axis=axis,
            stiffness=[ball.stiffness, 0.0, 0.0],
            damping=[ball.damping, 0.0, 0.0],
        )


def place(world: ArmWorld, q: ArrayLike, link: str, point: ArrayLike = (0.0, 0.0, 0.0)) -> Floats:
    """Return where a point [m] of a link is in the world (3,) [m] at joint positions q (n,)."""
    model = compiled(world)
    data = mujoco.MjData(model)
    q = np.asarray(q, dtype=float)
    data.qpos[: len(q)] = q
    mujoco.mj_kinematics(model, data)
    body = data.body(link)
    position: Floats = body.xpos + body.xmat.reshape(3, 3) @ np.asarray(point, dtype=float)
    return position


def simulate(world: ArmWorld, seconds: float, pushes: Sequence[Push] = ()) -> Recording:
    """Let the arm follow its motion while it is pushed.

    Raises
    ------
    RuntimeError
        If a joint runs into its limit: that torque would be neither motor, friction nor outside.
    """
    model = compiled(world)
    data = mujoco.MjData(model)
    controller = _Controller(world)
    n = controller.n
    names = tuple(model.joint(i).name for i in range(n))
    samples = round(seconds / PERIOD_S)
    rows = {
        name: np.zeros((samples, n)) for name in ("q", "qd", "qdd", "tau", "tau_ext", "friction", "tau_link")
    }
    data.qpos[:n], data.qvel[:n], _ = world.motion.at(0.0)
    for step in range(samples * SUBSTEPS):
        t = step * PERIOD_S / SUBSTEPS
        mujoco.mj_step1(model, data)
        q, qd = data.qpos[:n].copy(), data.qvel[:n].copy()
        tau = controller.torque(t, q, qd)
        pushed = _push_torque(model, data, pushes, t)[:n]
        slowed = np.zeros(n) if world.friction.by_engine else _tanh_friction(world.friction, qd)
        data.qfrc_applied[:n] = tau + pushed + slowed
        mujoco.mj_step2(model, data)
        if _constraint_torque(model, data, _LIMITS).any():
            raise RuntimeError(f"a joint is at its limit at {t:.3f} s: {dict(zip(names, q, strict=True))}")
        if step % SUBSTEPS == 0:
            k = step // SUBSTEPS
            if world.friction.by_engine:
                slowed = data.qfrc_damper[:n] + _constraint_torque(model, data, _FRICTION)[:n]
            rows["q"][k], rows["qd"][k], rows["qdd"][k] = q, qd, data.qacc[:n]
            rows["tau"][k], rows["friction"][k] = tau, slowed
            rows["tau_link"][k] = tau + slowed - model.dof_armature[:n] * data.qacc[:n]
            rows["tau_ext"][k] = pushed + _constraint_torque(model, data, _CONTACTS)[:n]
    return Recording(joints=names, t=np.arange(samples, dtype=np.float64) * PERIOD_S, **rows)


class _Controller:
    """Feed-forward of the wanted motion, plus position and velocity feedback."""

    def __init__(self, world: ArmWorld) -> None:
        free = ArmWorld(world.urdf, world.motion, world.armature, gravity=world.gravity)
        self._world, self._model = world, compiled(free)
        self._data = mujoco.MjData(self._model)
        self.n = self._model.nv
        self._data.qpos[:] = world.motion.centre
        mujoco.mj_forward(self._model, self._data)
        M = np.zeros((self.n, self.n))
        mujoco.mj_fullM(self._model, self._data, M)
        self._kp, self._kd = world.bandwidth**2 * np.diag(M), 2.0 * world.bandwidth * np.diag(M)

    def torque(self, t: float, q: Floats, qd: Floats) -> Floats:
        """Return the motor torque (n,) at time t."""
        model, data = self._model, self._data
        q_ref, qd_ref, qdd_ref = self._world.motion.at(t)
        data.qpos[:], data.qvel[:], data.qacc[:] = q_ref, qd_ref, qdd_ref
        mujoco.mj_fwdPosition(model, data)
        mujoco.mj_fwdVelocity(model, data)
        ahead = np.zeros(self.n)
        mujoco.mj_rne(model, data, 1, ahead)
        ahead += model.dof_armature * qdd_ref - _tanh_friction(self._world.friction, qd_ref)
        torque: Floats = ahead + self._kp * (q_ref - q) + self._kd * (qd_ref - qd)
        return torque


def _tanh_friction(friction: Friction, qd: Floats) -> Floats:
    coulomb, viscous = np.asarray(friction.coulomb, dtype=float), np.asarray(friction.viscous, dtype=float)
    torque: Floats = -(coulomb * np.tanh(qd / friction.v0) + viscous * qd)
    return torque


def _push_torque(model: Any, data: Any, pushes: Sequence[Push], t: float) -> Floats:
    """Return `Jᵀ F` (nv,) of all pushes at time t, by the engine."""
    total = np.zeros(model.nv)
    for push in pushes:
        force = push.force_at(t)
        if force.any():
            body = data.body(push.link)
            point = body.xpos + body.xmat.reshape(3, 3) @ np.array(push.point_m)
            mujoco.mj_applyFT(model, data, force, np.zeros(3), point, body.id, total)
    return total


def _constraint_torque(model: Any, data: Any, kinds: Sequence[Any]) -> Floats:
    """Return the torque (nv,) of the constraints of these kinds."""
    torque = np.zeros(model.nv)
    chosen = np.isin(data.efc_type, [int(kind) for kind in kinds])
    if chosen.any():
        mujoco.mj_mulJacTVec(model, data, torque, np.where(chosen, data.efc_force, 0.0))
    return torque


def random_arm(n: int, seed: int) -> str:
    """Return the description of a chain of n hinges, random axes, with rods `link1` to `link{n}`."""
    rng = np.random.default_rng(seed)
    parts = ['<robot name="chain">', '<link name="link0"/>']
    length = 0.1
    for i in range(n):
        axis, rpy = _direction(rng), rng.uniform(-0.6, 0.6, 3)
        parts.append(
            f'<joint name="joint{i}" type="continuous"><parent link="link{i}"/><child link="link{i + 1}"/>'
            f'<origin xyz="0 0 {length}" rpy="{_text(rpy)}"/><axis xyz="{_text(axis)}"/></joint>'
        )
        length = rng.uniform(0.1, 0.3)
        parts.append(_rod(f"link{i + 1}", length, rng))
    return "\n".join([*parts, "</robot>"])


def _direction(rng: np.random.Generator) -> Floats:
    v = rng.standard_normal(3)
    unit: Floats = v / np.linalg.norm(v)
    return unit


def _rod(name: str, length: float, rng: np.random.Generator) -> str:
    """Return a solid cylinder (any mechanics handbook) along z, its frame turned at random."""
    radius, mass = rng.uniform(0.03, 0.06), rng.uniform(0.8, 4.0)
    across = mass * (3.0 * radius**2 + length**2) / 12.0
    origin = f'<origin xyz="0 0 {length / 2}" rpy="{_text(rng.uniform(-0.3, 0.3, 3))}"/>'
    inertia = f'ixx="{across}" iyy="{across}" izz="{mass * radius**2 / 2}" ixy="0" ixz="0" iyz="0"'
    shape = f'<cylinder radius="{radius}" length="{length}"/>'
    return (
        f'<link name="{name}"><inertial>{origin}<mass value="{mass}"/><inertia {inertia}/></inertial>'
        f"<collision>{origin}<geometry>{shape}</geometry></collision></link>"
    )


def _text(numbers: Floats) -> str:
    return " ".join(str(float(x)) for x in numbers)
