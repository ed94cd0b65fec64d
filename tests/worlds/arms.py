"""Simulated sessions of seven-joint arms, with `mujoco` as the judge of what truly happened.

Worlds:

- `rigid`: stiff joints; the engine's dry friction, a constraint that really sticks, plus viscous friction.
- `elastic`: a spring with backlash and a little damping couples rotor and link of each joint; its program of
  work has no steps of acceleration, after which it would swing on its springs; encoders,
  velocities and torques are those of the motor side; the engine's dry friction acts on the rotors.
- `dip`: stiff joints; friction falls with speed before viscous friction makes it rise again (a law of the
  velocity, see engine.py); it does not truly stick but creeps below `v0`.
- `sensed`: as `rigid`, with a torque sensor behind each gear.

Everywhere: the true inertias are 3 to 8 % off the description; friction differs by up to 10 % from session
to session and falls by some percent while the arm gets warm; the drives follow smooth moves by feed-forward
of the description plus position and velocity feedback, with a torque limit, on their own readings. The
physics runs at 0.25 ms, samples at 1 kHz; a row holds state and torque of one instant; torque varies
continuously between rows, but where a stiff arm begins or ends a continuous path: there its acceleration
steps. What a load adds is no row of `unexplained`.

Seeds: see sessions.py for which ones are held out.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any
from zlib import crc32

import mujoco
import numpy as np
from numpy.typing import NDArray

from tests.worlds.engine import (
    PERIOD_S,
    STEP_S,
    Drive,
    Rows,
    Wanted,
    advance,
    empty_rows,
    engine_of,
    feed_forward,
)
from tests.worlds.happenings import GIVE_WAY_S, Encounter, Grip, Happenings, draw, misread, spoil
from tests.worlds.noise import quantised
from tests.worlds.programs import Program, work
from tests.worlds.robots import (
    FRICTION_VELOCITY,
    HALF_RANGE,
    HOME,
    JOINTS,
    LINK_TORQUE_SD_SHARE,
    Arm,
    robot,
)
from tests.worlds.sessions import Exact, Truth, WorldSession, cached

Floats = NDArray[np.float64]

WORLDS = ("rigid", "elastic", "dip", "sensed")
STOP_RAD = 0.3
_BANDWIDTH = 30.0
_LONGEST_CHUNK = 1000
_SETTLE = 500
_AHEAD_EVERY = 4
# Dry friction that sticks: creep stays below 1e-4 rad/s.
_STICKING = {"solref_friction": [0.002, 1.0], "solimp_friction": [0.99, 0.99, 0.001, 0.5, 2.0]}
_FADE_STEPS = 10


def fault_free(
    world: str,
    robot_seed: int,
    session_seed: int,
    seconds: float,
    exact: bool = False,
    folder: str | Path | None = None,
) -> WorldSession:
    """Return a session in which nothing happens but work; some minutes each, memory grows with it."""
    key = {"made": "work", "world": world, "robot": robot_seed, "seed": session_seed, "seconds": seconds}

    def make() -> WorldSession:
        return session(world, robot_seed, session_seed, seconds, lambda program, rng: Happenings(), exact)

    return make() if exact else cached(make, key, folder)


def trial(
    world: str,
    robot_seed: int,
    session_seed: int,
    kind: str | None = None,
    seconds: float = 60.0,
    exact: bool = False,
    folder: str | Path | None = None,
) -> WorldSession:
    """Return a session with some well separated happenings of random kinds and sizes.

    Parameters
    ----------
    kind : str, optional
        `contact` (prescribed), `collision` (not in the elastic world), `actuator`, `position-sensor`, `load`,
        `signal`, `torque-sensor` (sensed world), or `contact-in-fault` (a lasting actuator fault, then
        contacts); without it a mix of all.
    exact : bool
        Keep the exact motion too; such a session is made anew each time.
    """
    key = {
        "made": "trial",
        "world": world,
        "robot": robot_seed,
        "seed": session_seed,
        "seconds": seconds,
        "kind": kind,
    }

    def make() -> WorldSession:
        def happen(program: Program, rng: np.random.Generator) -> Happenings:
            arm = robot(robot_seed)
            return draw(arm, program, rng, seconds, kind, world != "elastic", world == "sensed")

        return session(world, robot_seed, session_seed, seconds, happen, exact)

    return make() if exact else cached(make, key, folder)


def session(
    world: str,
    robot_seed: int,
    seed: int,
    seconds: float,
    happen: Callable[[Program, np.random.Generator], Happenings],
    exact: bool = False,
) -> WorldSession:
    """Return a session with the happenings that `happen` returns for its program of work."""
    if world not in WORLDS:
        raise ValueError(f"no world {world!r}; there are {WORLDS}")
    arm = robot(robot_seed)
    streams = np.random.SeedSequence([robot_seed, seed, crc32(world.encode())]).spawn(6)
    moving, happening, day, noise, spoiling, sensing = (np.random.default_rng(stream) for stream in streams)
    program = work(moving, seconds, steady=world == "elastic")
    happenings = happen(program, happening)
    samples = round(seconds / PERIOD_S)
    simulation = _Simulation(world, arm, program, happenings, _Friction.drawn(world, arm, day))
    rows, stopped = simulation.run(samples)
    done = len(rows.q)
    rated, step = arm.rated, arm.joints[0]["encoder_step"]
    q, qd, tau = (
        rows.q,
        rows.qd + noise.normal(0.0, arm.joints[0]["velocity_noise_sd"], rows.q.shape),
        rows.tau + noise.normal(0.0, 1.0, rows.q.shape) * [joint["torque_noise_sd"] for joint in arm.joints],
    )
    spoil(happenings.signals, spoiling, rated, q, qd, tau)
    error, tau_link = np.zeros_like(q), None
    if world == "sensed":
        through = _through(arm, rows)
        error = misread(happenings.misreadings, rated, through)
        tau_link = through + error + sensing.normal(0.0, LINK_TORQUE_SD_SHARE, q.shape) * rated
    seq = happenings.kept(np.arange(done))
    q = quantised(q, step) + 0.0  # no negative zero, so that a cached session has the same bytes
    return WorldSession(
        world=world,
        robot_seed=robot_seed,
        seed=seed,
        urdf=arm.urdf,
        joints=tuple(_with_sensor(joint) for joint in arm.joints) if world == "sensed" else arm.joints,
        links=tuple(link.name for link in arm.links),
        seq=seq,
        t=seq * PERIOD_S,
        q=q[seq],
        qd=_in_single(qd[seq]),
        tau=_in_single(tau[seq]),
        tau_cmd=_in_single(rows.cmd[seq]),
        tau_link=None if tau_link is None else _in_single(tau_link[seq]),
        truths=_truths(arm, happenings, rows, error, simulation.link_of_body),
        unexplained=(rows.outside + rows.lost)[seq] + 0.0,
        force=rows.force[seq] + 0.0,
        stopped=stopped,
        exact=_exact(rows, seq) if exact else None,
    )


def _through(arm: Arm, rows: Rows) -> Floats:
    """Return the torque (T,n) that passes from each gear to its link: the engine's account of the rotor."""
    passes: Floats = rows.tau + rows.lost + rows.friction - arm.armature * rows.motor_qdd
    return passes


def _with_sensor(joint: dict[str, Any]) -> dict[str, Any]:
    noise_sd = LINK_TORQUE_SD_SHARE * joint["rated_torque"]
    return joint | {"link_torque_sensor": True, "link_torque_noise_sd": noise_sd}


def _exact(rows: Rows, seq: NDArray[np.int64]) -> Exact:
    arrays = rows.link_q, rows.link_qd, rows.link_qdd, rows.motor_qdd, rows.tau, rows.friction
    return Exact(*(array[seq] for array in arrays))


def _in_single(values: Floats) -> Floats:
    """Return values as single precision holds them, so that a cached session equals a fresh one."""
    return values.astype(np.float32).astype(np.float64)


@dataclass(frozen=True)
class _Friction:
    """Friction of one session: tables (n,5) cold and warm, and how fast it gets warm."""

    cold: Floats
    warm: Floats
    warming_s: float

    @classmethod
    def drawn(cls, world: str, arm: Arm, rng: np.random.Generator) -> _Friction:
        """Draw the day: within 10 % of the usual friction; cold up to 6 % (viscous 15 %) more than warm."""
        n = JOINTS
        day = (1.0 + rng.uniform(-0.06, 0.06, 2))[:, None] * (1.0 + rng.uniform(-0.035, 0.035, (2, n)))
        coulomb, viscous = arm.coulomb * day[0], arm.viscous * day[1]
        dip = arm.dip if world == "dip" else np.zeros(n)
        rest = [dip, arm.dip_velocity, np.full(n, FRICTION_VELOCITY)]
        more = rng.uniform(0.0, 0.06, n), rng.uniform(0.02, 0.15, n)
        return cls(
            np.stack([coulomb * (1.0 + more[0]), viscous * (1.0 + more[1]), *rest], axis=1),
            np.stack([coulomb, viscous, *rest], axis=1),
            rng.uniform(120.0, 400.0),
        )

    def at(self, t: float) -> Floats:
        """Return the table (n,5) at time t [s]."""
        return self.warm + np.exp(-max(t, 0.0) / self.warming_s) * (self.cold - self.warm)


class _Simulation:
    """The engine's model of one session, and its run."""

    def __init__(
        self, world: str, arm: Arm, program: Program, happenings: Happenings, friction: _Friction
    ) -> None:
        self._arm, self._program, self._friction, self._happenings = arm, program, friction, happenings
        self._by_engine = world != "dip"
        self._model = _model(world, arm, happenings)
        self._data = mujoco.MjData(self._model)
        names = [joint["name"] for joint in arm.joints]
        link = _coordinates(self._model, names)
        motor = _coordinates(self._model, [f"{name}_rotor" for name in names]) if world == "elastic" else link
        touched = [link.name for link in arm.links] if happenings.encounters else []
        bodies = np.array([self._model.body(name).id for name in touched], dtype=np.int64)
        self._engine = engine_of(self._model, self._data, motor, link, bodies)
        self._coordinates = motor, link
        self._teacher = _Teacher(arm)
        for ball in happenings.encounters[:1]:
            self._give_way(ball, 0.0)
        self.link_of_body = {self._model.body(one.name).id: one.name for one in arm.links}

    def run(self, samples: int) -> tuple[Rows, bool]:
        """Return the rows, and whether a protective stop ended them early."""
        for coordinates in self._coordinates:
            self._data.qpos[coordinates] = self._program(np.zeros(1))[0]
        faults = np.array([fault.row for fault in self._happenings.faults]).reshape(-1, 8)
        pushes = np.array([self._push_row(push) for push in self._happenings.pushes]).reshape(-1, 10)
        changes = sorted(self._changes(), key=lambda change: change[0])
        whole, begin = empty_rows(samples, JOINTS), -_SETTLE
        while begin < samples:
            while changes and changes[0][0] <= begin:
                changes.pop(0)[1]()
            end = min([begin + _LONGEST_CHUNK, samples, *(at for at, _ in changes[:1])])
            if begin < 0:
                end, rows = 0, empty_rows(-begin, JOINTS)
            else:
                rows = Rows(*(array[begin:end] for array in whole))
            count = end - begin
            reached = advance(
                self._engine,
                self._teacher.drive,
                self._teacher.wanted(self._program, begin, count),
                self._friction.at(begin * PERIOD_S),
                self._by_engine,
                faults,
                pushes,
                begin,
                count,
                rows,
            )
            begin += reached
            if reached < count:
                return Rows(*(array[:begin] for array in whole)), True
        return whole, False

    def _push_row(self, push: Any) -> list[float]:
        body = self._model.body(push.link).id
        return [push.start_s, push.duration_s, push.rise_s, body, *push.force_n, *push.point_m]

    def _changes(self) -> list[tuple[int, Callable[[], None]]]:
        """Return changes of the model between chunks: (sample, what to do)."""
        changes: list[tuple[int, Callable[[], None]]] = []
        for grip in self._happenings.grips:
            for k in range(_FADE_STEPS + 1):
                share, later = k / _FADE_STEPS, grip.ramp_s * k / _FADE_STEPS
                changes.append((_sample(grip.start_s + later), lambda g=grip, s=share: self._carry(g, s)))
                changes.append((_sample(grip.end_s + later), lambda g=grip, s=1 - share: self._carry(g, s)))
        for ball in self._happenings.encounters:
            changes.append((_sample(ball.start_s), lambda b=ball: self._put(b)))
            for k in range(1, _FADE_STEPS + 1):
                share, at = 1.0 - k / _FADE_STEPS, _sample(ball.end_s + GIVE_WAY_S * k / _FADE_STEPS)
                changes.append((at, lambda b=ball, s=share: self._give_way(b, s)))
        return changes

    def _carry(self, grip: Grip, share: float) -> None:
        body, mass = self._model.body("payload"), grip.mass_kg * share
        # A block of some centimetres.
        body.mass, body.inertia, body.ipos = max(mass, 1e-9), max(mass, 1e-9) * 6e-4, grip.com_m
        mujoco.mj_setConst(self._model, mujoco.MjData(self._model))

    def _put(self, ball: Encounter) -> None:
        model = self._model
        model.body("ball").pos = ball.centre_m
        # The padding gets harder over its depth: force grows from nothing, as with foam.
        geom = model.geom("ball")
        geom.solref, geom.solimp = [ball.padding_s, 0.7], [0.02, 0.9, ball.padding_m, 0.5, 2.0]
        for axis in range(3):
            joint = model.joint(f"ball{axis}")
            joint.damping = ball.damping
            self._data.joint(f"ball{axis}").qpos, self._data.joint(f"ball{axis}").qvel = 0.0, 0.0
        self._give_way(ball, 1.0)

    def _give_way(self, ball: Encounter, share: float) -> None:
        for axis in range(3):
            self._model.joint(f"ball{axis}").stiffness = ball.stiffness * share
        geom = self._model.geom("ball")
        geom.contype, geom.conaffinity = (2, 1) if share > 0.0 else (0, 0)


def _sample(t: float) -> int:
    return round(t / PERIOD_S)


def _coordinates(model: Any, names: list[str]) -> NDArray[np.int64]:
    """Return the indices of hinges; position and velocity share them in a tree of hinges and slides."""
    return np.array([model.joint(name).dofadr[0] for name in names], dtype=np.int64)


class _Teacher:
    """The robot maker's controller: it knows the description, the datasheet and the program."""

    def __init__(self, arm: Arm) -> None:
        spec = mujoco.MjSpec.from_string(arm.urdf)
        for joint, said in zip(spec.joints, arm.joints, strict=True):
            joint.armature = said["armature"]
        self._model = spec.compile()
        self._model.opt.disableflags |= int(
            mujoco.mjtDisableBit.mjDSBL_CONTACT | mujoco.mjtDisableBit.mjDSBL_LIMIT
        )
        self._data = mujoco.MjData(self._model)
        postures = HOME + HALF_RANGE * np.random.default_rng(0).uniform(-1.0, 1.0, (50, JOINTS))
        inertia = np.median([self._inertia(q) for q in postures], axis=0)
        self.drive = Drive(_BANDWIDTH**2 * inertia, 2.0 * _BANDWIDTH * inertia, arm.peak, STOP_RAD)
        self._coulomb = np.array([said["coulomb_friction"] for said in arm.joints])
        self._viscous = np.array([said["viscous_friction"] for said in arm.joints])

    def _inertia(self, q: Floats) -> Floats:
        self._data.qpos[:] = q
        mujoco.mj_forward(self._model, self._data)
        M = np.zeros((JOINTS, JOINTS))
        mujoco.mj_fullM(self._model, self._data, M)
        diagonal: Floats = np.diag(M).copy()
        return diagonal

    def wanted(self, program: Program, begin: int, count: int) -> Wanted:
        """Return what the drives are told for `count` samples from the sample `begin` on, and one more."""
        rows = np.arange(count + 1)
        t = (begin + rows) * PERIOD_S
        q, qd, qdd = (program(t, order) for order in range(3))
        coarse = np.unique(np.append(rows[::_AHEAD_EVERY], count))
        ahead = np.empty((len(coarse), JOINTS))
        d = self._data
        feed_forward(
            self._model._address, d._address, d.qpos, d.qvel, d.qacc, d.qfrc_inverse,
            q[coarse], qd[coarse], qdd[coarse], ahead,
        )  # fmt: skip
        full = np.stack([np.interp(rows, coarse, ahead[:, i]) for i in range(JOINTS)], axis=1)
        full += self._coulomb * np.tanh(qd / 0.05) + self._viscous * qd
        return Wanted(q, qd, full)


def _model(world: str, arm: Arm, happenings: Happenings) -> Any:
    """Return the engine's model of the true arm in its world."""
    spec = mujoco.MjSpec.from_string(arm.true_urdf)
    spec.compiler.fusestatic = False
    spec.option.timestep = STEP_S
    spec.option.gravity = (0.0, 0.0, -9.81)
    for geom in spec.geoms:
        geom.contype, geom.conaffinity = 1, 2  # the arm meets the ball, never itself
    for joint, armature in zip(spec.joints, arm.armature, strict=True):
        joint.limited = False
        joint.armature = armature
        for name, value in _STICKING.items():
            setattr(joint, name, value)
    if world == "elastic":
        _couple(spec, arm)
    if happenings.grips:
        spec.body(arm.links[-1].name).add_body(
            name="payload", mass=1e-9, inertia=[1e-12] * 3, explicitinertial=True
        )
    if happenings.encounters:
        _add_ball(spec, arm, happenings)
    model = spec.compile()
    disabled = mujoco.mjtDisableBit.mjDSBL_LIMIT
    if not happenings.encounters:
        disabled |= mujoco.mjtDisableBit.mjDSBL_CONTACT
    model.opt.disableflags |= int(disabled)
    return model


def _couple(spec: Any, arm: Arm) -> None:
    """Give each joint a rotor of its own; the spring between it and the link is idle within the backlash."""
    for i, said in enumerate(arm.joints):
        joint = spec.joint(said["name"])
        link = joint.parent
        rotor = link.parent.add_body(
            name=f"{said['name']}_rotor", pos=link.pos, quat=link.quat,
            mass=1e-6, inertia=[1e-9] * 3, explicitinertial=True,
        )  # fmt: skip
        hinge = rotor.add_joint(
            name=f"{said['name']}_rotor", type=mujoco.mjtJoint.mjJNT_HINGE, axis=joint.axis,
            armature=joint.armature, **_STICKING,
        )  # fmt: skip
        joint.armature = 0.0
        slack = arm.backlash[i] / 2
        tendon = spec.add_tendon(
            name=f"{said['name']}_gear",
            stiffness=[arm.stiffness[i], 0.0, 0.0],
            damping=[arm.coupling_damping[i], 0.0, 0.0],
            springlength=[-slack, slack],
        )
        tendon.wrap_joint(hinge.name, 1.0)
        tendon.wrap_joint(joint.name, -1.0)


def _add_ball(spec: Any, arm: Arm, happenings: Happenings) -> None:
    body = spec.worldbody.add_body(name="ball", gravcomp=1.0)
    body.add_geom(
        name="ball",
        type=mujoco.mjtGeom.mjGEOM_SPHERE,
        size=[happenings.ball_radius_m, 0.0, 0.0],
        mass=happenings.ball_mass_kg,
        contype=2,  # switched off until there is an encounter; off from the start, the engine would drop it
        conaffinity=1,
        priority=1,  # its padding decides, not the mean of both sides
    )
    for axis in range(3):
        # Set when the ball is put somewhere; without any here the engine would drop both.
        body.add_joint(
            name=f"ball{axis}", type=mujoco.mjtJoint.mjJNT_SLIDE, axis=np.eye(3)[axis],
            stiffness=[1.0, 0.0, 0.0], damping=[1.0, 0.0, 0.0],
        )  # fmt: skip
    wanted = (
        mujoco.mjtConDataField.mjCONDATA_FOUND,
        mujoco.mjtConDataField.mjCONDATA_FORCE,
        mujoco.mjtConDataField.mjCONDATA_TORQUE,
        mujoco.mjtConDataField.mjCONDATA_POS,
    )
    for link in arm.links:
        spec.add_sensor(
            type=mujoco.mjtSensor.mjSENS_CONTACT,
            objtype=mujoco.mjtObj.mjOBJ_BODY,
            objname="ball",
            reftype=mujoco.mjtObj.mjOBJ_BODY,
            refname=link.name,
            intprm=[sum(1 << int(bit) for bit in wanted), 3, 1],
        )


def _truths(
    arm: Arm, happenings: Happenings, rows: Rows, error: Floats, link_of_body: dict[int, str]
) -> tuple[Truth, ...]:
    """Return what happened, as far as it did before the session ended; error (T,n) of the torque sensors."""
    done_s = len(rows.q) * PERIOD_S
    names = [joint["name"] for joint in arm.joints]
    truths = [_push_truth(arm, push, rows) for push in happenings.pushes if push.start_s < done_s]
    for ball in happenings.encounters:
        truth = _collision_truth(arm, ball, rows, link_of_body)
        if truth is not None:
            truths.append(truth)
    for fault in happenings.faults:
        if fault.start_s >= done_s:
            continue
        truth = Truth(
            fault.kind, fault.detail, names[fault.joint], None,
            fault.start_s, min(fault.end_s, done_s), fault.size, fault.unit, truthful=fault.truthful,
        )  # fmt: skip
        truths.append(truth if fault.kind != "actuator" else _measured(truth, arm, rows.lost))
    for wrong in happenings.misreadings:
        if wrong.start_s < done_s:
            end = min(wrong.end_s + wrong.ramp_s, done_s)
            where = names[wrong.joint], None, wrong.start_s, end
            truth = Truth("torque-sensor", wrong.detail, *where, wrong.size, wrong.unit)
            truths.append(_measured(truth, arm, error))
    for grip in happenings.grips:
        if grip.start_s < done_s:
            truths.append(_load_truth(arm, grip, rows, done_s))
    for signal in happenings.signals:
        if signal.start_s < done_s:
            joint = None if signal.joint is None else names[signal.joint]
            end = min(signal.end_s, done_s)
            truths.append(
                Truth("signal", signal.detail, joint, None, signal.start_s, end, signal.size, signal.unit)
            )
    truths.sort(key=lambda truth: truth.start_s)
    return tuple(replace(truth, during=_around(truth, truths)) for truth in truths)


def _around(truth: Truth, truths: list[Truth]) -> int | None:
    """Return the index of the fault during which this began."""
    for i, other in enumerate(truths):
        if other is not truth and other.start_s <= truth.start_s < other.end_s:
            return i
    return None


def _measured(truth: Truth, arm: Arm, torque: Floats) -> Truth:
    """Return the truth with the effect of the torque (T,n) during it."""
    first, last = _sample(truth.start_s), _sample(truth.end_s) + 1
    shares = np.abs(torque[first:last]) / arm.rated
    if not shares.any():
        return replace(truth, effect=0.0)
    joint = int(shares.max(axis=0).argmax())
    passed = shares.max(axis=1) >= 0.03
    passes = (first + int(passed.argmax())) * PERIOD_S if passed.any() else None
    return replace(truth, effect=float(shares.max()), effect_joint=arm.joints[joint]["name"], passes_s=passes)


def _push_truth(arm: Arm, push: Any, rows: Rows) -> Truth:
    end = min(push.start_s + push.duration_s, len(rows.q) * PERIOD_S)
    truth = Truth(
        "contact", "prescribed", None, push.link, push.start_s, end, float(np.linalg.norm(push.force_n)), "N",
        point_m=push.point_m, force_n=push.force_n,
    )  # fmt: skip
    return _measured(truth, arm, rows.outside)


def _collision_truth(arm: Arm, ball: Encounter, rows: Rows, link_of_body: dict[int, str]) -> Truth | None:
    """Return what the engine saw of the ball; None where it was missed."""
    first, last = _sample(ball.start_s), _sample(ball.end_s + GIVE_WAY_S)
    sizes = np.linalg.norm(rows.force[first:last], axis=1)
    if not sizes.any():
        return None
    touching = first + np.flatnonzero(sizes)
    peak = first + int(sizes.argmax())
    truth = Truth(
        "contact", "collision", None, link_of_body[int(rows.body[peak])],
        float(touching[0] * PERIOD_S), float((touching[-1] + 1) * PERIOD_S), float(sizes.max()), "N",
        point_m=tuple(rows.point[peak].tolist()), force_n=tuple(rows.force[peak].tolist()),
    )  # fmt: skip
    return _measured(truth, arm, rows.outside)


def _load_truth(arm: Arm, grip: Grip, rows: Rows, done_s: float) -> Truth:
    """Return the load with its largest weight torque, looked at every 20 ms."""
    end = min(grip.end_s + grip.ramp_s, done_s)
    model = mujoco.MjModel.from_xml_string(arm.urdf)
    data = mujoco.MjData(model)
    body = data.body(arm.links[-1].name)
    torque = np.zeros((len(rows.q), JOINTS))
    for k in range(_sample(grip.start_s + grip.ramp_s), _sample(min(grip.end_s, done_s)), 20):
        data.qpos[:] = rows.link_q[k]
        mujoco.mj_fwdPosition(model, data)
        at = body.xpos + body.xmat.reshape(3, 3) @ np.array(grip.com_m)
        weight = np.array([0.0, 0.0, -9.81 * grip.mass_kg])
        mujoco.mj_applyFT(model, data, weight, np.zeros(3), at, body.id, torque[k])
    truth = Truth(
        "load", "gripped", None, arm.links[-1].name, grip.start_s, end, grip.mass_kg, "kg", point_m=grip.com_m
    )
    return replace(_measured(truth, arm, torque), passes_s=None)
