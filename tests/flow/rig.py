"""Small robots, their motion by an outside library (`pin`), and a data path that is fed with wire bytes."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

import msgpack
import numpy as np
import pinocchio
import tomlkit
from numpy.typing import ArrayLike, NDArray

from monitor.flow.pipeline import Message
from monitor.setup.build import Setup, build
from monitor.setup.config import loads

Floats = NDArray[np.float64]

PERIOD_NS = 1_000_000
FORMS = ("joint-space", "second-order", "first-order")
GRAVITY = (0.0, 0.0, -9.81)

# An arm of two hinges that are not parallel, and a body with a hinged arm that carries a slide.
PAIR = """<robot name="pair"><link name="stand"/>
<joint name="upper" type="revolute"><parent link="stand"/><child link="beam"/><origin xyz="0 0 0.4"/>
 <axis xyz="0 1 0"/><limit lower="-3" upper="3" velocity="6" effort="60"/></joint>
<link name="beam"><inertial><origin xyz="0.02 0.01 0.2"/><mass value="4"/>
 <inertia ixx="0.06" iyy="0.07" izz="0.02" ixy="0.002" ixz="0.001" iyz="0.003"/></inertial></link>
<joint name="lower" type="revolute"><parent link="beam"/><child link="blade"/><origin xyz="0 0 0.4"/>
 <axis xyz="0.6 0.8 0"/><limit lower="-3" upper="3" velocity="6" effort="30"/></joint>
<link name="blade"><inertial><origin xyz="0.05 0 0.15"/><mass value="2"/>
 <inertia ixx="0.02" iyy="0.025" izz="0.01" ixy="0" ixz="0.001" iyz="0"/></inertial></link>
<joint name="mount" type="fixed"><parent link="blade"/><child link="tip"/>
 <origin xyz="0.1 0.02 0.3" rpy="0.3 0.2 0.1"/></joint><link name="tip"/></robot>"""
PAIR_JOINTS: list[dict[str, Any]] = [
    {"name": "upper", "rated_torque": 40.0, "peak_torque": 60.0, "armature": 0.3},
    {"name": "lower", "rated_torque": 20.0, "peak_torque": 30.0, "armature": 0.1},
]
SLED = """<robot name="sled"><link name="body"><inertial><origin xyz="0.03 -0.02 0.05"/><mass value="12"/>
 <inertia ixx="0.3" iyy="0.5" izz="0.6" ixy="0.01" ixz="0.02" iyz="-0.01"/></inertial></link>
<joint name="hip" type="revolute"><parent link="body"/><child link="thigh"/><origin xyz="0.3 0.1 0"/>
 <axis xyz="0 1 0"/><limit lower="-3" upper="3" velocity="9" effort="40"/></joint>
<link name="thigh"><inertial><origin xyz="0 0 -0.15"/><mass value="2"/>
 <inertia ixx="0.02" iyy="0.02" izz="0.005" ixy="0" ixz="0" iyz="0"/></inertial></link>
<joint name="slide" type="prismatic"><parent link="thigh"/><child link="rod"/><origin xyz="0 0 -0.3"/>
 <axis xyz="0.6 0 -0.8"/><limit lower="-0.5" upper="0.5" velocity="3" effort="80"/></joint>
<link name="rod"><inertial><origin xyz="0 0.01 -0.1"/><mass value="1"/>
 <inertia ixx="0.006" iyy="0.006" izz="0.001" ixy="0" ixz="0" iyz="0"/></inertial></link></robot>"""
SLED_JOINTS: list[dict[str, Any]] = [
    {"name": "hip", "rated_torque": 30.0, "armature": 0.05},
    {"name": "slide", "rated_torque": 60.0, "armature": 0.5},
]


def made(
    urdf: str,
    joints: Sequence[Mapping[str, Any]],
    robot: Mapping[str, Any] | None = None,
    watch: Mapping[str, Any] | None = None,
    **tables: Mapping[str, Any],
) -> Setup:
    """Return a robot made ready from its description and what its configuration says of it."""
    document = {
        "schema": 1,
        "robot": {"urdf": "robot.urdf", **(robot or {}), "joint": [dict(joint) for joint in joints]},
        "watch": dict(watch or {}),
        **{name: dict(table) for name, table in tables.items()},
    }
    return build(loads(tomlkit.dumps(document), "robot.toml", {"robot.urdf": urdf}))


def both(upper: float, lower: float) -> Floats:
    """Return a value for each joint of the arm of two."""
    return np.array([upper, lower])


class Rows(NamedTuple):
    """Samples of a motion in the product's order: t (T) s, q (T,nq), v, tau and torque from outside (T,n)."""

    t: Floats
    q: Floats
    v: Floats
    tau: Floats
    outside: Floats


Torque = Callable[[float, Floats, Floats], ArrayLike]


@dataclass
class Mover:
    """A robot moved by `pin`'s forward dynamics, on a fixed or floating base.

    Parameters
    ----------
    urdf : str
        Description.
    armature : sequence of float
        Rotor inertia of each joint.
    floating : bool
        Whether the base is free.
    gravity : sequence of float
        Of the world (fixed: base axes).
    """

    urdf: str
    armature: Sequence[float] = ()
    floating: bool = False
    gravity: Sequence[float] = GRAVITY

    def __post_init__(self) -> None:
        free = (pinocchio.JointModelFreeFlyer(),) if self.floating else ()
        self.model = pinocchio.buildModelFromXML(self.urdf, *free)
        self.model.gravity.linear = np.array(self.gravity)
        if len(self.armature):
            self.model.armature[6 * self.floating :] = self.armature
        self.data = self.model.createData()

    def run(
        self,
        seconds: float,
        q: ArrayLike,
        v: ArrayLike,
        torque: Torque,
        outside: Torque | None = None,
        times: Floats | None = None,
        substeps: int = 4,
    ) -> Rows:
        """Move from q, v (product order) under joint torques and generalised torques (n) from outside.

        The midpoint rule in `substeps` between two samples: its error is far below that of the ledger.
        """
        t: Floats = 1e-3 * np.arange(round(seconds * 1000), dtype=np.float64) if times is None else times
        x, w = self._swap_q(np.array(q, float), -1), self._swap(np.array(v, float))
        rows: list[tuple[Floats, ...]] = []
        for k, now in enumerate(t):
            given = self._torques(now, x, w, torque, outside)
            rows.append((self._swap_q(x, 1), self._swap(w), *given))
            if k + 1 == len(t):
                break
            h = (t[k + 1] - now) / substeps
            for step in range(substeps):
                at = now + h * step
                a = self._acceleration(at, x, w, torque, outside)
                w_mid = w + 0.5 * h * a
                x_mid = pinocchio.integrate(self.model, x, 0.5 * h * w)
                a_mid = self._acceleration(at + 0.5 * h, x_mid, w_mid, torque, outside)
                x, w = pinocchio.integrate(self.model, x, h * w_mid), w + h * a_mid
        return Rows(t, *(np.array(column) for column in zip(*rows, strict=True)))

    def gravity_torque(self, q: Floats) -> Floats:
        """Return the torque (n) against gravity, fixed base."""
        torque: Floats = pinocchio.computeGeneralizedGravity(self.model, self.data, q)
        return torque.copy()

    def _acceleration(self, t: float, q: Floats, v: Floats, torque: Torque, outside: Torque | None) -> Floats:
        tau, pushed = self._torques(t, q, v, torque, outside)
        a: Floats = pinocchio.aba(self.model, self.data, q, v, self._swap(tau + pushed))
        return a.copy()

    def _torques(
        self, t: float, q: Floats, v: Floats, torque: Torque, outside: Torque | None
    ) -> tuple[Floats, Floats]:
        state = t, self._swap_q(q, 1), self._swap(v)
        tau = np.zeros(self.model.nv)
        tau[6 * self.floating :] = torque(*state)
        pushed = np.zeros(self.model.nv)
        if outside is not None:
            pushed[:] = outside(*state)
        return tau, pushed

    def _swap(self, v: Floats) -> Floats:
        """Angular first to linear first, and back."""
        return np.concatenate([v[3:6], v[:3], v[6:]]) if self.floating else v.copy()

    def _swap_q(self, q: Floats, roll: int) -> Floats:
        """Quaternion w first to w last (-1), and back (1)."""
        return np.concatenate([q[:3], np.roll(q[3:7], roll), q[7:]]) if self.floating else q.copy()


def rotation(quat: Floats) -> Floats:
    """Return the rotation matrix (3,3) of a unit quaternion w x y z, by `pin`."""
    R: Floats = pinocchio.Quaternion(*quat).toRotationMatrix()
    return R


def message(seq: int, t_ns: int, q: ArrayLike, qd: ArrayLike, tau: ArrayLike, **fields: Any) -> bytes:
    """Return a message of topic `joints`."""
    arrays = {"q": q, "qd": qd, "tau": tau}
    numbers = {name: np.asarray(value, float).tolist() for name, value in arrays.items()}
    packed: bytes = msgpack.packb({"v": 1, "seq": seq, "t_ns": t_ns, **numbers, **fields})
    return packed


def base_fields(q: Floats, v: Floats) -> dict[str, Any]:
    """Return the field `base` of a sample of a floating robot."""
    R = rotation(q[3:7])
    return {
        "base": {
            "p": q[:3].tolist(),
            "quat": q[3:7].tolist(),
            "v": (R @ v[3:6]).tolist(),
            "w": v[:3].tolist(),
        }
    }


class Rig:
    """A data path, and a robot's side and clocks to go with it: every sample comes at once and is ticked."""

    def __init__(self, setup: Setup, known: bool = True) -> None:
        self.setup = setup
        self.m = len(setup.facts.joints)
        self.pipeline = setup.pipeline("a-run")
        self.state, self.outputs = self.pipeline.blocks.state[0], self.pipeline.blocks.outputs[0]
        self.seq, self.t_ns, self.now_ns = 0, 5_000_000_000, 77_000_000_000
        self.messages: list[Message] = []
        self._told: dict[str, Any] | None = None
        if known:
            self.condition()

    def condition(self, **fields: Any) -> None:
        """Send a message of topic `robot`; from then on it is repeated every half second."""
        self._told = {
            "boot": "first",
            "mode": "work",
            "drive": [1] * self.m,
            "brake": [0] * self.m,
            "payload": None,
            "support": "hoisted",
        } | fields
        self._told = {name: value for name, value in self._told.items() if value is not ...}
        self.pipeline.feed("robot", msgpack.packb(self._told), self.now_ns)

    def silent_condition(self) -> None:
        """Send no message of topic `robot` any more."""
        self._told = None

    def sample(
        self, q: ArrayLike, qd: ArrayLike, tau: ArrayLike, step_ns: int = PERIOD_NS, **fields: Any
    ) -> None:
        """Send the next sample, `step_ns` after the last one, and tick."""
        self.seq += 1
        self.t_ns += step_ns
        self.elapse(step_ns, message(self.seq, self.t_ns, q, qd, tau, **fields))

    def elapse(self, ns: int, payload: bytes | None = None, topic: str = "joints") -> None:
        """Let time pass, then feed a message and tick."""
        before, self.now_ns = self.now_ns, self.now_ns + ns
        if self._told is not None and before // 500_000_000 != self.now_ns // 500_000_000:
            self.pipeline.feed("robot", msgpack.packb(self._told), self.now_ns)
        if payload is not None:
            self.pipeline.feed(topic, payload, self.now_ns)
        self.messages += self.pipeline.tick(self.now_ns)

    def play(self, rows: Rows, lost: Sequence[int] = (), **fields: Any) -> tuple[Floats, Floats]:
        """Send a motion; return r_fast and r_slow (T,n) after each sample."""
        fast, slow = (np.zeros((len(rows.t), self.setup.tree.n)) for _ in range(2))
        base = self.setup.tree.n - self.m
        steps = np.diff(rows.t, prepend=rows.t[0] - 1e-3)
        missing = set(lost)
        for k in range(len(rows.t)):
            if k in missing:
                self.seq += 1
                self.t_ns += round(1e9 * steps[k])
                self.elapse(round(1e9 * steps[k]))
            else:
                floating = base_fields(rows.q[k], rows.v[k]) if base else {}
                self.sample(
                    rows.q[k, base and 7 :],
                    rows.v[k, base:],
                    rows.tau[k, base:],
                    round(1e9 * steps[k]),
                    **floating,
                    **fields,
                )
            fast[k], slow[k] = self.outputs["r_fast"], self.outputs["r_slow"]
        return fast, slow

    def alarms(self, kind: str | None = None) -> list[dict[str, Any]]:
        """Return the bodies of all alarms so far."""
        return [m.body for m in self.messages if m.topic == "alarm" and kind in (None, m.body["kind"])]

    def standing(self) -> set[tuple[str, str, str | None]]:
        """Return (kind, detail, joint) of what stands, as the alarms tell it."""
        last = {body["event"]: body for body in self.alarms()}
        return {
            (body["kind"], body["detail"], body["joint"])
            for body in last.values()
            if body["state"] == "unacknowledged"
        }


def low_passed(x: Floats, pole: float, dt: float) -> Floats:
    """Return x (T,n), constant before it begins, through a first-order low-pass of that pole [rad/s]."""
    keep, y = math.exp(-pole * dt), np.array(x)
    for k in range(1, len(x)):
        y[k] = keep * y[k - 1] + (1.0 - keep) * x[k]
    return y
