"""*Rind*, a simulated seven-joint arm for the demo: it turns cheese wheels, and is pushed on schedule.

The true robot is its description (`data/rind.urdf`) with every link inertia and friction a few percent off.
Its drives follow a cycle of picking and turning by computed torque on the description; they report the torque
that they believe to give. A sample holds the state and the torque of one instant; torque varies continuously,
at the rate of the simulation, not at the rate of the samples.
"""

from __future__ import annotations

import csv
import json
import math
import signal
import threading
import time
from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from multiprocessing.synchronize import Event
from pathlib import Path
from typing import Any, NamedTuple

import msgpack
import numpy as np
import zmq
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from monitor.errors import SystemFault
from monitor.kernels.dynamics import dynamics, jacobian
from monitor.kernels.filters import cholesky, cholesky_solve
from monitor.kernels.jit import kernel
from monitor.robot.tree import Tree, build_tree
from monitor.robot.urdf import read_urdf

Floats = NDArray[np.float64]

URDF = Path(__file__).parent / "data" / "rind.urdf"
DATASHEET = Path(__file__).parent / "data" / "rind-datasheet.json"
SERIAL = "RIND-0117"

PERIOD_NS = 1_000_000
_CONDITION_EVERY = 500
SUBSTEPS = 4
QUIET_START_S = 3.0
SHORTEST_S = 12.0
TANH_V0 = 0.01
_INERTIA_SPREAD = 0.06
_FRICTION_SPREAD = 0.08
_GRAVITY = (0.0, 0.0, -9.81)
# Position and velocity gains of the drives, base to paddle [Nm/rad], [Nm s/rad].
_GAINS = (
    (4000.0, 4500.0, 2000.0, 2000.0, 700.0, 700.0, 350.0),
    (160.0, 180.0, 60.0, 60.0, 18.0, 18.0, 9.0),
)
# One cycle: over the shelf, under the wheel, lift, swing out, turn it over, swing back, set down.
_CYCLE_S = (0.0, 0.9, 1.7, 2.6, 3.5, 4.4, 5.3, 6.2)
_CYCLE_RAD = (
    (0.00, 0.40, 0.00, 1.30, 0.00, 0.70, -0.60),
    (0.70, 0.80, 0.25, 0.95, -0.35, 1.15, -1.20),
    (0.85, 0.50, 0.40, 1.25, -0.55, 0.75, -0.90),
    (0.05, 0.15, 0.00, 1.75, 0.15, 0.30, 0.10),
    (-0.80, 0.30, -0.45, 1.45, 0.70, 0.55, 1.10),
    (-1.10, 0.75, -0.60, 1.00, 0.85, 1.05, 1.30),
    (-0.65, 0.60, -0.35, 1.15, 0.40, 0.95, 0.40),
    (0.00, 0.40, 0.00, 1.30, 0.00, 0.70, -0.60),
)
# An ordinary stop: slow down, settle, close the brakes, take the drives off; and back.
_SLOW_S, _SETTLE_S, _DRIVE_RAMP_S, _BRAKE_MARGIN_S = 0.6, 0.3, 0.05, 0.1
_SHORTEST_STOP_S = 2.0


@dataclass(frozen=True)
class Push:
    """A force [N] in world axes at a point [m] in the frame of `link`, swelling and fading over `rise_s`."""

    start_s: float
    duration_s: float
    link: str
    force_n: tuple[float, float, float]
    point_m: tuple[float, float, float] = (0.0, 0.0, 0.0)
    rise_s: float = 0.03


@dataclass(frozen=True)
class TorqueLoss:
    """A joint gives `1 - loss` of the torque its drive believes."""

    start_s: float
    duration_s: float
    joint: str
    loss: float
    rise_s: float = 0.01


@dataclass(frozen=True)
class Stop:
    """An ordinary stop: from `start_s` the arm slows down, brakes close, and at the end it works again."""

    start_s: float
    duration_s: float
    cause: str = "door-open"


@dataclass(frozen=True)
class Schedule:
    """What happens to the robot; all times count from its first sample."""

    pushes: tuple[Push, ...] = ()
    losses: tuple[TorqueLoss, ...] = ()
    stops: tuple[Stop, ...] = ()


class Sample(NamedTuple):
    """What the robot reports: its clock [ns], positions [rad], velocities [rad/s], believed torques [Nm]."""

    t_ns: int
    q: Floats
    qd: Floats
    tau: Floats


@dataclass(frozen=True)
class Happening:
    """What truly happened.

    `kind` is `push` (`where` a link, `size` the force [N]), `torque-loss` (`where` a joint, `size` the share
    lost) or `stop` (`where` its cause, `size` the time [s] with closed brakes). Times on the robot's clock.
    `peak_nm` is the largest effect so far on each joint, by name.
    """

    kind: str
    where: str
    size: float
    start_ns: int
    end_ns: int
    peak_nm: dict[str, float]


def _block(n: int, segments: int) -> np.dtype[np.void]:
    """Return the layout of all numbers of the simulation but the schedule: n joints, one per axis."""
    f, i = np.float64, np.int64
    return np.dtype(
        [
            # The tree, as monitor.robot.tree.TreeArrays; E twice: true robot and description.
            ("parent", i, (n,)), ("kind", i, (n,)), ("dof", i, (n,)),
            ("multiplier", f, (n,)), ("offset", f, (n,)),
            ("R_PJ", f, (n, 3, 3)), ("p_PJ", f, (n, 3)), ("axis", f, (n, 3)),
            ("E_true", f, (n, 4, 4)), ("E_model", f, (n, 4, 4)),
            ("armature", f, (n,)), ("gravity", f, (3,)),
            # Coulomb and viscous friction: true robot and description.
            ("friction_true", f, (2, n)), ("friction_model", f, (2, n)),
            # Drives: gains on position and velocity, torque limit; the cycle as cubic pieces over its phase.
            ("gains", f, (2, n)), ("peak", f, (n,)),
            ("knots", f, (segments + 1,)), ("pieces", f, (4, segments, n)),
            # Work arrays of monitor.kernels.dynamics.
            ("R_W", f, (n + 1, 3, 3)), ("p_W", f, (n + 1, 3)), ("S", f, (n, 6)), ("Sd", f, (n, 6)),
            ("V", f, (n + 1, 6)), ("Ic", f, (n, 10)), ("Bc", f, (n, 12)),
            ("M", f, (n, n)), ("C", f, (n, n)), ("g", f, (n,)), ("p", f, (n,)), ("Ctv", f, (n,)),
            ("J", f, (6, n)), ("r", f, (3,)), ("push", f, (n,)),
            # Reference: position, velocity, acceleration.
            ("reference", f, (3, n)),
            # State: phase of the cycle [s], braked and powered (0 or 1), position, velocity.
            ("phase", f, ()), ("braked", i, ()), ("powered", i, ()), ("q", f, (n,)), ("v", f, (n,)),
            # Torque the drives believe, torque from outside, acceleration.
            ("tau", f, (n,)), ("tau_ext", f, (n,)), ("a", f, (n,)),
        ]
    )  # fmt: skip


# Columns of the schedule's arrays.
_START, _END, _RISE, _INDEX, _SHARE = range(5)
_FORCE, _POINT = 4, 7
_SLOW_FROM, _MOVING_AT, _BRAKES_CLOSE, _BRAKES_OPEN = range(4)


@kernel
def _smooth(x: float) -> float:
    """Return a step from 0 at x = 0 to 1 at x = 1 with continuous first and second derivative."""
    x = min(max(x, 0.0), 1.0)
    return x * x * x * (10.0 - x * (15.0 - 6.0 * x))


@kernel
def _swell(t: float, event: Floats) -> float:
    """Return how much of an event acts at time t: 0 outside, 1 inside, smooth over the rise time."""
    rise = event[_RISE]
    return _smooth((t - event[_START]) / rise) * _smooth((event[_END] - t) / rise)


@kernel
def _pace(t: float, stops: Floats) -> float:
    """Return how fast the cycle runs at time t: 1 at work, 0 within a stop."""
    pace = 1.0
    for i in range(stops.shape[0]):
        slowed = _smooth((t - stops[i, _SLOW_FROM]) / _SLOW_S)
        resumed = _smooth((t - stops[i, _MOVING_AT]) / _SLOW_S + 1.0)
        pace -= slowed - resumed
    return pace


@kernel
def _drive_power(t: float, stops: Floats) -> float:
    """Return the share of torque the drives give at time t: 0 while they rest behind closed brakes."""
    power = 1.0
    for i in range(stops.shape[0]):
        off = t - stops[i, _BRAKES_CLOSE] - _BRAKE_MARGIN_S
        on = t - stops[i, _BRAKES_OPEN] + _BRAKE_MARGIN_S
        power -= _smooth(off / _DRIVE_RAMP_S) - _smooth(on / _DRIVE_RAMP_S + 1.0)
    return power


@kernel
def _is_braked(t: float, stops: Floats) -> bool:
    """Tell whether the brakes are closed at time t."""
    braked = False
    for i in range(stops.shape[0]):
        braked |= stops[i, _BRAKES_CLOSE] <= t < stops[i, _BRAKES_OPEN]
    return braked


@kernel
def _refer(
    phase: float, pace: float, pace_rate: float, knots: Floats, pieces: Floats, reference: Floats
) -> None:
    """Fill position, velocity and acceleration (3,n) of the cycle at a phase [s] that runs at `pace`."""
    x = phase % knots[-1]
    i = 0
    while knots[i + 1] < x:
        i += 1
    x -= knots[i]
    for j in range(reference.shape[1]):
        a, b, c, d = pieces[0, i, j], pieces[1, i, j], pieces[2, i, j], pieces[3, i, j]
        slope = (3.0 * a * x + 2.0 * b) * x + c
        reference[0, j] = ((a * x + b) * x + c) * x + d
        reference[1, j] = slope * pace
        reference[2, j] = (6.0 * a * x + 2.0 * b) * pace * pace + slope * pace_rate


@kernel
def _model(x: Any, E: Floats) -> None:
    """Fill M, C, g and the twists S of the arm with inertias E, at its state."""
    dynamics(
        x["parent"], x["kind"], x["dof"], x["multiplier"], x["offset"], x["R_PJ"], x["p_PJ"], x["axis"],
        E, x["armature"], x["gravity"], x["q"], x["v"],
        x["R_W"], x["p_W"], x["S"], x["Sd"], x["V"], x["Ic"], x["Bc"],
        x["M"], x["C"], x["g"], x["p"], x["Ctv"],
    )  # fmt: skip


@kernel
def _drive(x: Any, t: float, h: float, stops: Floats) -> None:
    """Fill the torque that the drives believe to give at time t, and the condition of drives and brakes."""
    pace = _pace(t, stops)
    pace_ahead = _pace(t + h, stops)
    _refer(x["phase"], pace, (pace_ahead - pace) / h, x["knots"], x["pieces"], x["reference"])
    x["phase"] += 0.5 * h * (pace + pace_ahead)
    power = _drive_power(t, stops)
    x["powered"] = 1 if power == 1.0 else 0
    x["braked"] = 1 if _is_braked(t, stops) else 0
    _model(x, x["E_model"])
    q, v, tau, M, C, reference = x["q"], x["v"], x["tau"], x["M"], x["C"], x["reference"]
    coulomb, viscous = x["friction_model"][0], x["friction_model"][1]
    for i in range(q.shape[0]):
        y = x["g"][i] + coulomb[i] * math.tanh(reference[1, i] / TANH_V0) + viscous[i] * reference[1, i]
        y += x["gains"][0, i] * (reference[0, i] - q[i]) + x["gains"][1, i] * (reference[1, i] - v[i])
        for j in range(q.shape[0]):
            y += M[i, j] * reference[2, j] + C[i, j] * v[j]
        tau[i] = power * min(max(y, -x["peak"][i]), x["peak"][i])


@kernel
def _feel(x: Any, t: float, pushes: Floats, push_peaks: Floats) -> None:
    """Fill the joint torque of all pushes at time t, and keep the largest of each."""
    tau_ext, r, J, push = x["tau_ext"], x["r"], x["J"], x["push"]
    tau_ext[:] = 0.0
    for e in range(pushes.shape[0]):
        share = _swell(t, pushes[e])
        if share == 0.0:
            continue
        link = int(pushes[e, _INDEX])
        force, point = pushes[e, _FORCE:_POINT], pushes[e, _POINT:]
        R, p = x["R_W"][link], x["p_W"][link]
        for k in range(3):
            r[k] = p[k] + R[k, 0] * point[0] + R[k, 1] * point[1] + R[k, 2] * point[2]
        jacobian(x["parent"], x["dof"], x["S"], link, r, J)
        for i in range(push.shape[0]):
            push[i] = share * (J[3, i] * force[0] + J[4, i] * force[1] + J[5, i] * force[2])
            tau_ext[i] += push[i]
            push_peaks[e, i] = max(push_peaks[e, i], abs(push[i]))


@kernel
def _move(x: Any, t: float, h: float, losses: Floats, loss_peaks: Floats) -> None:
    """Move the true robot on by h under the torque of drives, pushes, gravity and friction.

    Velocity is semi-implicit: friction is linearised about v, so a steep tanh cannot make it ring.
    """
    q, v, a, M, C = x["q"], x["v"], x["a"], x["M"], x["C"]
    coulomb, viscous = x["friction_true"][0], x["friction_true"][1]
    n = q.shape[0]
    for i in range(n):
        s = math.tanh(v[i] / TANH_V0)
        a[i] = x["tau"][i] + x["tau_ext"][i] - x["g"][i] - coulomb[i] * s - viscous[i] * v[i]
        for j in range(n):
            a[i] -= C[i, j] * v[j]
        M[i, i] += h * (viscous[i] + coulomb[i] / TANH_V0 * (1.0 - s * s))
    for e in range(losses.shape[0]):
        i = int(losses[e, _INDEX])
        lost = _swell(t, losses[e]) * losses[e, _SHARE] * x["tau"][i]
        a[i] -= lost
        loss_peaks[e, i] = max(loss_peaks[e, i], abs(lost))
    cholesky(M, M)
    cholesky_solve(M, a, a)
    for i in range(n):
        if x["braked"]:
            v[i] = 0.0
        else:
            q[i] += h * (v[i] + 0.5 * h * a[i])
            v[i] += h * a[i]


@kernel
def _advance(
    block: Any, t: float, h: float, pushes: Floats, losses: Floats, stops: Floats,
    push_peaks: Floats, loss_peaks: Floats, sample: Floats,
) -> None:  # fmt: skip
    """Fill the noiseless sample (3,n) of time t, then move the robot on by one period in steps of h."""
    x = block[0]
    for k in range(SUBSTEPS):
        now = t + k * h
        _drive(x, now, h, stops)
        if k == 0:
            sample[0], sample[1], sample[2] = x["q"], x["v"], x["tau"]
        _model(x, x["E_true"])
        _feel(x, now, pushes, push_peaks)
        _move(x, now, h, losses, loss_peaks)


class Rind:
    """The simulated robot.

    Parameters
    ----------
    seed : int
        Decides the true robot and the noise.
    schedule : Schedule
        What happens to it.
    start_ns : int
        Robot clock of the first sample [ns].
    noisy : bool
        Whether the sensors have encoder steps and noise, or are perfect.

    Attributes
    ----------
    joints : tuple of str
        Names in the order of all arrays.
    inertias : (7,4,4)
        True pseudo-inertias of the links.
    coulomb, viscous : (7,)
        True friction `coulomb tanh(v / TANH_V0) + viscous v` [Nm], [Nm s/rad].

    Raises
    ------
    ValueError
        If the schedule names an unknown link or joint, or a stop is too short to close the brakes.
    """

    def __init__(self, seed: int, schedule: Schedule, start_ns: int = 0, noisy: bool = True) -> None:
        sheet = json.loads(DATASHEET.read_text(encoding="utf-8"))["joints"]
        self._tree = build_tree(read_urdf(URDF), "fixed", {row["name"]: row["armature"] for row in sheet})
        self.joints = self._tree.joints
        self._schedule, self._start_ns, self._ticks = schedule, start_ns, 0
        self._boot = f"{seed}-{start_ns}"
        self._rng = np.random.default_rng(seed)
        self._noisy = noisy
        self._noise = np.array([[row["velocity_noise_sd"], row["torque_noise_sd"]] for row in sheet]).T
        self._encoder_step = np.array([row["encoder_step"] for row in sheet])
        self._block = _filled(self._tree, np.array([row["peak_torque"] for row in sheet]), self._rng)
        self.inertias: Floats = self._block["E_true"][0]
        self.coulomb, self.viscous = self._block["friction_true"][0]
        self._pushes, self._losses, self._stops = _rows(self._tree, schedule)
        self._push_peaks = np.zeros((len(self._pushes), self._tree.n))
        self._loss_peaks = np.zeros((len(self._losses), self._tree.n))
        self._sample = np.zeros((3, self._tree.n))

    def step(self) -> Sample:
        """Return the sample of this instant and let one millisecond pass."""
        t_ns = self._ticks * PERIOD_NS
        _advance(
            self._block, t_ns * 1e-9, PERIOD_NS * 1e-9 / SUBSTEPS, self._pushes, self._losses, self._stops,
            self._push_peaks, self._loss_peaks, self._sample,
        )  # fmt: skip
        self._ticks += 1
        if not self._noisy:
            return Sample(self._start_ns + t_ns, *self._sample.copy())
        q = np.round(self._sample[0] / self._encoder_step) * self._encoder_step
        qd, tau = self._sample[1:] + self._noise * self._rng.standard_normal(self._noise.shape)
        return Sample(self._start_ns + t_ns, q, qd, tau)

    def condition(self) -> dict[str, Any]:
        """Return the `robot` message that belongs to the last sample."""
        x = self._block[0]
        braked, powered, n = int(x["braked"]), int(x["powered"]), len(self.joints)
        cause = next((stop.cause for stop in self._schedule.stops if self._in_stop(stop)), None)
        return {
            "serial": SERIAL,
            "boot": self._boot,
            "mode": "stopped" if braked else "work",
            "drive": [powered] * n,
            "brake": [braked] * n,
            "stop": cause if braked else None,
            "tool": "paddle",
            "payload": None,
            "support": "ground",
            "program": "turn-wheels",
            "revision": "1",
        }

    def _in_stop(self, stop: Stop) -> bool:
        return stop.start_s <= (self._ticks - 1) * PERIOD_NS * 1e-9 < stop.start_s + stop.duration_s

    @property
    def truth(self) -> list[Happening]:
        """All that has begun so far, in order of time."""
        schedule = self._schedule
        found = [
            self._happening("push", push.link, math.hypot(*push.force_n), push, peaks)
            for push, peaks in zip(schedule.pushes, self._push_peaks, strict=True)
        ]
        found += [
            self._happening("torque-loss", loss.joint, loss.loss, loss, peaks)
            for loss, peaks in zip(schedule.losses, self._loss_peaks, strict=True)
        ]
        found += [
            self._happening(
                "stop", stop.cause, row[_BRAKES_OPEN] - row[_BRAKES_CLOSE], stop, np.zeros(self._tree.n)
            )
            for stop, row in zip(schedule.stops, self._stops[1:], strict=True)
        ]
        now_ns = self._start_ns + self._ticks * PERIOD_NS
        return sorted((one for one in found if one.start_ns < now_ns), key=lambda one: one.start_ns)

    def _happening(
        self, kind: str, where: str, size: float, event: Push | TorqueLoss | Stop, peaks: Floats
    ) -> Happening:
        start_ns = self._start_ns + round(event.start_s * 1e9)
        end_ns = start_ns + round(event.duration_s * 1e9)
        peak_nm = dict(zip(self.joints, peaks.tolist(), strict=True))
        return Happening(kind, where, float(size), start_ns, end_ns, peak_nm)


def _filled(tree: Tree, peak_nm: Floats, rng: np.random.Generator) -> NDArray[np.void]:
    """Return the block of a robot at rest at the start of its cycle; rng draws inertias and friction."""
    cycle = CubicSpline(_CYCLE_S, _CYCLE_RAD, bc_type="periodic")
    block = np.zeros(1, _block(tree.n, len(_CYCLE_S) - 1))
    x = block[0]
    arrays = tree.arrays
    for name in ("parent", "kind", "dof", "multiplier", "offset", "R_PJ", "p_PJ", "axis"):
        x[name] = getattr(arrays, name)
    x["E_model"] = arrays.E
    x["E_true"] = [_varied(E, rng) for E in arrays.E]
    x["armature"], x["gravity"] = tree.armature, _GRAVITY
    x["friction_model"] = tree.friction, tree.damping
    x["friction_true"] = x["friction_model"] * rng.uniform(
        1 - _FRICTION_SPREAD, 1 + _FRICTION_SPREAD, (2, tree.n)
    )
    x["gains"], x["peak"] = _GAINS, peak_nm
    x["knots"], x["pieces"] = cycle.x, cycle.c
    x["q"], x["powered"] = _CYCLE_RAD[0], 1
    return block


def _varied(E: Floats, rng: np.random.Generator) -> Floats:
    """Return a body a few percent off; still positive definite, so still one that can be built."""
    L = np.linalg.cholesky(E)
    deviation = rng.uniform(-_INERTIA_SPREAD, _INERTIA_SPREAD, (4, 4))
    varied: Floats = L @ (np.eye(4) + 0.5 * (deviation + deviation.T)) @ L.T
    return varied


def _rows(tree: Tree, schedule: Schedule) -> tuple[Floats, Floats, Floats]:
    """Return pushes, losses and stops as rows of numbers; the first stop is the standstill at the start."""
    axes = {link.name: link.axis for link in tree.links if link.axis >= 0}
    joints = {name: index for index, name in enumerate(tree.joints)}
    pushes = [
        (e.start_s, e.start_s + e.duration_s, e.rise_s, _known(axes, e.link), *e.force_n, *e.point_m)
        for e in schedule.pushes
    ]
    losses = [
        (e.start_s, e.start_s + e.duration_s, e.rise_s, _known(joints, e.joint), e.loss)
        for e in schedule.losses
    ]
    stops = [(-1.0, 1.0, math.inf, math.inf), *(_stop_row(e) for e in schedule.stops)]
    return np.array(pushes).reshape(-1, 10), np.array(losses).reshape(-1, 5), np.array(stops)


def _known(indices: dict[str, int], name: str) -> int:
    if name not in indices:
        raise ValueError(f"the schedule names {name!r}; expected one of {', '.join(indices)}")
    return indices[name]


def _stop_row(stop: Stop) -> tuple[float, float, float, float]:
    if stop.duration_s < _SHORTEST_STOP_S:
        raise ValueError(f"a stop of {stop.duration_s} s; expected at least {_SHORTEST_STOP_S} s")
    end = stop.start_s + stop.duration_s
    return stop.start_s, end, stop.start_s + _SLOW_S + _SETTLE_S, end - _SLOW_S - _SETTLE_S


# Pushes of the default schedule, taken in turn: a person brushing past, leaning on, catching the arm.
_PUSHES = (
    Push(0.0, 0.30, "sleeve", (30.0, 90.0, 0.0), (0.04, 0.0, 0.19)),
    Push(0.0, 0.25, "spar", (40.0, 30.0, 25.0), (0.0, 0.05, 0.10)),
    Push(0.0, 0.40, "paddle", (0.0, -35.0, 20.0), (0.12, 0.0, 0.042), 0.04),
    Push(0.0, 0.30, "beam", (110.0, 110.0, 0.0), (0.0, 0.0, 0.18), 0.02),
    Push(0.0, 0.35, "crook", (0.0, 60.0, -40.0), (-0.03, 0.0, 0.11)),
    Push(0.0, 0.30, "fork", (-40.0, -35.0, 0.0), (0.0, 0.0, 0.08)),
)
_LOSS = TorqueLoss(0.0, 1.2, "elbow", 0.4)
_STOP = Stop(0.0, 2.8)
# Time each takes with the quiet after it, at the shortest [s].
_SLOT_S = {Push: 1.3, TorqueLoss: 2.2, Stop: 3.4}
_PUSH_EVERY_S = 4.0


def default_schedule(seconds: float) -> Schedule:
    """Return pushes, one torque loss and one ordinary stop, spread over `seconds` with quiet time between.

    Nothing happens in the first 3 s. There are at least two pushes, and more in a longer run.

    Raises
    ------
    ValueError
        If `seconds` is less than 12.
    """
    if seconds < SHORTEST_S:
        raise ValueError(f"a schedule of {seconds:g} s; expected at least {SHORTEST_S:g} s")
    available = seconds - QUIET_START_S
    count = max(2, int((available - _SLOT_S[TorqueLoss] - _SLOT_S[Stop]) / _PUSH_EVERY_S))
    events: list[Push | TorqueLoss | Stop] = [_PUSHES[i % len(_PUSHES)] for i in range(count)]
    events.insert((3 * count + 3) // 4, _STOP)
    events.insert((count + 1) // 2, _LOSS)
    slots = np.array([_SLOT_S[type(event)] for event in events])
    starts = QUIET_START_S + (np.cumsum(slots) - slots) * available / slots.sum()
    placed = [
        replace(event, start_s=round(start, 3)) for event, start in zip(events, starts.tolist(), strict=True)
    ]
    return Schedule(
        tuple(event for event in placed if isinstance(event, Push)),
        tuple(event for event in placed if isinstance(event, TorqueLoss)),
        tuple(event for event in placed if isinstance(event, Stop)),
    )


def write_truth(path: Path, truth: Sequence[Happening]) -> None:
    """Write what truly happened: a table if the name ends in `.csv` (one column per joint), else JSON."""
    if path.suffix != ".csv":
        path.write_text(json.dumps([asdict(one) for one in truth], indent=2) + "\n", encoding="utf-8")
        return
    with path.open("w", encoding="utf-8", newline="") as file:
        table = csv.writer(file)
        joints = list(truth[0].peak_nm) if truth else []
        table.writerow(
            ["kind", "where", "size", "start_ns", "end_ns", *(f"peak_nm.{name}" for name in joints)]
        )
        for one in truth:
            peaks = (one.peak_nm[name] for name in joints)
            table.writerow([one.kind, one.where, one.size, one.start_ns, one.end_ns, *peaks])


class Start(NamedTuple):
    """How a robot in a process of its own says that it is ready, and is told to begin."""

    ready: Event
    begin: Event


def publish(
    endpoint: str,
    seconds: float,
    seed: int,
    schedule: Schedule,
    truth_path: Path | None = None,
    start: Start | None = None,
) -> None:
    """Be the robot for `seconds`, in a process of its own: publish at 1 kHz on a bound ZeroMQ PUB socket.

    Topics `joints` and `robot` (on change and every 0.5 s) in the wire format. SIGTERM and SIGINT end it
    early. At the end the truth is written to `truth_path`.

    Parameters
    ----------
    endpoint : str
        Where to bind, as `tcp://127.0.0.1:PORT`.
    seconds : float
        How long.
    seed, schedule
        As for `Rind`.
    truth_path : Path, optional
        As for `write_truth`.
    start : Start, optional
        Without it the robot begins as soon as it is ready.

    Raises
    ------
    SystemFault
        If the endpoint cannot be bound.
    """
    asked_to_stop = threading.Event()
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, lambda *_: asked_to_stop.set())
    Rind(seed, schedule).step()  # compiles, so that the first period is no longer than the others
    if start is not None:
        start.ready.set()
        while not start.begin.wait(0.1) and not asked_to_stop.is_set():
            pass
    rind = Rind(seed, schedule, start_ns=time.time_ns())
    with zmq.Context() as context, context.socket(zmq.PUB) as socket:
        socket.linger = 0
        _bind(socket, endpoint)
        begin_ns = time.monotonic_ns()
        condition: dict[str, Any] = {}
        for seq in range(round(seconds * 1000)):
            if asked_to_stop.is_set():
                break
            # Absolute deadlines: a late sample does not make the next ones late.
            time.sleep(max(0, begin_ns + seq * PERIOD_NS - time.monotonic_ns()) * 1e-9)
            sample = rind.step()
            previous, condition = condition, rind.condition()
            if condition != previous or seq % _CONDITION_EVERY == 0:
                socket.send_multipart([b"robot", msgpack.packb(condition)])
            socket.send_multipart([b"joints", _joints_message(seq, sample)])
    if truth_path is not None:
        write_truth(truth_path, rind.truth)


def _bind(socket: zmq.Socket[bytes], endpoint: str) -> None:
    try:
        socket.bind(endpoint)
    except zmq.ZMQError as error:
        raise SystemFault(endpoint, str(error), "an address to bind", "Choose another port.") from error


def _joints_message(seq: int, sample: Sample) -> bytes:
    message = {"v": 1, "seq": seq, "t_ns": sample.t_ns}
    numbers = {name: getattr(sample, name).astype("<f8").tobytes() for name in ("q", "qd", "tau")}
    packed: bytes = msgpack.packb(message | numbers)
    return packed
