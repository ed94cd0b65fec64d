"""What happens to an arm in a session: drawn at random, well apart, contacts sized for a wanted effect."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import mujoco
import numpy as np
from numpy.typing import NDArray

from tests.worlds import engine
from tests.worlds.arm import Push
from tests.worlds.programs import Program
from tests.worlds.robots import JOINTS, Arm

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

FIRST_S = 8.0
APART_S = (6.0, 8.0)
LARGEST_FORCE_N = 350.0
GIVE_WAY_S = 0.1
EFFECT = (0.02, 0.40)
_FAULT_SHARES = {
    "torque-loss": 0.3, "coulomb-friction": 0.15, "viscous-friction": 0.15, "offset": 0.15, "ripple": 0.1,
    "open-circuit": 0.1, "stuck": 0.05,
}  # fmt: skip
# Faults with which an arm can go on working.
_MILD = ("torque-loss", "coulomb-friction", "viscous-friction", "offset", "ripple")
_SIGNALS = ("jump", "frozen", "contradiction", "noise", "gap", "duplicate")
# A jam is not infinitely hard: so many times the peak torque.
_JAM = 3.0
_NO_RAMP_S = 1e-9


@dataclass(frozen=True)
class Fault:
    """A fault of a drive or of its position sensor; `row` is its row in the engine's fault table."""

    kind: str
    detail: str
    joint: int
    start_s: float
    end_s: float
    size: float
    unit: str
    row: tuple[float, ...]
    truthful: bool | None = None


@dataclass(frozen=True)
class Encounter:
    """A padded ball without weight, held in the arm's way by springs that give way at `end_s`."""

    start_s: float
    end_s: float
    centre_m: tuple[float, float, float]
    stiffness: float
    damping: float
    padding_s: float
    padding_m: float


@dataclass(frozen=True)
class Grip:
    """A mass [kg] that the last link carries from `start_s` to `end_s`, taken up over `ramp_s`."""

    start_s: float
    end_s: float
    ramp_s: float
    mass_kg: float
    com_m: tuple[float, float, float]


@dataclass(frozen=True)
class SignalFault:
    """Readings that are wrong on their way: nobody but the receiver sees them."""

    detail: str
    joint: int | None
    start_s: float
    end_s: float
    size: float
    unit: str


@dataclass(frozen=True)
class Misreading:
    """A torque sensor at a link that reads wrong.

    By an `offset` (share of rated), by a `scale` (share), or `frozen`: it stands still (size 1).
    """

    detail: str
    joint: int
    start_s: float
    end_s: float
    ramp_s: float
    size: float
    unit: str


@dataclass
class Happenings:
    """All that happens in one session."""

    pushes: list[Push] = field(default_factory=list)
    encounters: list[Encounter] = field(default_factory=list)
    faults: list[Fault] = field(default_factory=list)
    grips: list[Grip] = field(default_factory=list)
    signals: list[SignalFault] = field(default_factory=list)
    misreadings: list[Misreading] = field(default_factory=list)
    ball_radius_m: float = 0.0
    ball_mass_kg: float = 0.0

    def kept(self, rows: Ints) -> Ints:
        """Return the rows as they arrive: some lost, some twice."""
        for s in self.signals:
            at = rows * engine.PERIOD_S
            hit = (at >= s.start_s - 1e-9) & (at < s.end_s - 1e-9)
            if s.detail == "gap":
                rows = rows[~hit]
            elif s.detail == "duplicate":
                rows = np.repeat(rows, np.where(hit, 2, 1))
        return rows


def spoil(
    signals: Sequence[SignalFault],
    rng: np.random.Generator,
    rated: Floats,
    q: Floats,
    qd: Floats,
    tau: Floats,
) -> None:
    """Put the signal faults into the readings (T,n)."""
    for s in signals:
        rows = slice(
            math.ceil(s.start_s / engine.PERIOD_S - 1e-6), math.ceil(s.end_s / engine.PERIOD_S - 1e-6)
        )
        i = s.joint
        shape = q[rows, i].shape
        if s.detail == "jump":
            q[rows, i] += s.size
        elif s.detail == "frozen":
            q[rows, i] = q[rows, i][:1]
        elif s.detail == "contradiction":
            qd[rows, i] += s.size
        elif s.detail == "noise":
            reading, scale = {"rad": (q, 1.0), "rad/s": (qd, 1.0), "share of rated": (tau, rated[i])}[s.unit]
            reading[rows, i] += rng.normal(0.0, s.size * scale, shape)


def misread(misreadings: Sequence[Misreading], rated: Floats, torque: Floats) -> Floats:
    """Return by how much torque sensors read wrong (T,n) where such a torque passes them."""
    error = np.zeros_like(torque)
    t = engine.PERIOD_S * np.arange(len(torque))
    for one in misreadings:
        flanks = np.clip(
            [(t - one.start_s) / one.ramp_s, (one.end_s + one.ramp_s - t) / one.ramp_s], 0.0, 1.0
        )
        share = one.size * np.sin(0.5 * math.pi * flanks.min(axis=0)) ** 2
        i = one.joint
        if one.detail == "frozen":
            first = min(round(one.start_s / engine.PERIOD_S), len(torque) - 1)
            error[:, i] += share * (torque[first, i] - torque[:, i])
        else:
            error[:, i] += share * (torque[:, i] if one.detail == "scale" else rated[i])
    return error


def actuator_fault(
    arm: Arm,
    detail: str,
    joint: int,
    start_s: float,
    end_s: float,
    size: float,
    ramp_s: float = 0.01,
    truthful: bool | None = None,
    waves: tuple[float, float] = (30.0, 0.0),
) -> Fault:
    """Return a fault of the drive of a joint (index from the base).

    Parameters
    ----------
    detail, size : str, float
        `torque-loss` and `open-circuit` (share), `coulomb-friction`, `viscous-friction` (times normal),
        `offset`, `ripple` (share of rated torque), `stuck` (dry friction as a multiple of peak torque).
    end_s : float
        When it begins to fade; infinite for the end of the session.
    ramp_s : float
        How long it takes to come up and to fade.
    truthful : bool, optional
        Whether a drive with an open circuit reports that its torque is gone.
    waves : tuple
        Ripples per turn of the joint over 2 pi, and phase [rad].
    """
    said = arm.joints[joint]
    kind, unit, scale = {
        "torque-loss": (engine.LOSS, "share", 1.0),
        "coulomb-friction": (engine.COULOMB, "times normal", float(arm.coulomb[joint])),
        "viscous-friction": (engine.VISCOUS, "times normal", float(arm.viscous[joint])),
        "offset": (engine.OFFSET, "share of rated", said["rated_torque"]),
        "ripple": (engine.RIPPLE, "share of rated", said["rated_torque"]),
        "open-circuit": (engine.OPEN_SAID if truthful else engine.OPEN, "share", 1.0),
        "stuck": (engine.STUCK, "times peak torque", said["peak_torque"]),
    }[detail]
    row = (kind, joint, start_s, ramp_s, end_s, size * scale, *waves)
    return Fault("actuator", detail, joint, start_s, end_s + ramp_s, size, unit, row, truthful)


def draw(
    arm: Arm,
    program: Program,
    rng: np.random.Generator,
    seconds: float,
    kind: str | None,
    collisions: bool,
    torque_sensors: bool = False,
) -> Happenings:
    """Return happenings of one kind, or of all for None, at least 6 s apart; kinds: see `arms.trial`."""
    return _Drawing(arm, program, rng, seconds, collisions, torque_sensors).draw(kind)


class _Drawing:
    def __init__(
        self,
        arm: Arm,
        program: Program,
        rng: np.random.Generator,
        seconds: float,
        collisions: bool,
        torque_sensors: bool,
    ) -> None:
        self.arm, self.program, self.rng, self.seconds = arm, program, rng, seconds
        self.happenings = Happenings(
            ball_radius_m=rng.uniform(0.04, 0.1),
            ball_mass_kg=math.exp(rng.uniform(math.log(0.2), math.log(2.0))),
        )
        self.model = mujoco.MjModel.from_xml_string(arm.urdf)
        self.data = mujoco.MjData(self.model)
        self.makers: dict[str, Callable[[float], float | None]] = {
            "contact": self._push,
            "actuator": self._actuator,
            "position-sensor": self._position_sensor,
            "load": self._load,
            "signal": self._signal,
        }
        if collisions:
            self.makers["collision"] = self._collide
        if torque_sensors:
            self.makers["torque-sensor"] = self._torque_sensor

    def draw(self, kind: str | None) -> Happenings:
        shares = {
            "contact": 0.32, "collision": 0.13, "actuator": 0.27,
            "position-sensor": 0.08, "load": 0.08, "signal": 0.12, "torque-sensor": 0.1,
        }  # fmt: skip
        if kind == "contact-in-fault":
            self._lasting(FIRST_S)
            shares = {name: shares[name] for name in ("contact", "collision")}
            begin = FIRST_S + self.rng.uniform(*APART_S)
        elif kind is None or kind in self.makers:
            shares = shares if kind is None else {kind: 1.0}
            begin = FIRST_S
        else:
            raise ValueError(f"no kind {kind!r}; there are {(*self.makers, 'contact-in-fault')}")
        while begin < self.seconds - 1.0:
            possible = {name: share for name, share in shares.items() if name in self.makers}
            end = self.makers[self._choice(possible)](begin)
            if end is None:
                begin += 1.0  # nothing fits here
                continue
            if end == math.inf:  # a fault that lasts: from now on contacts only
                if kind is not None:
                    break
                shares, end = {"contact": 0.7, "collision": 0.3}, begin
            begin = end + self.rng.uniform(*APART_S)
        return self.happenings

    def _choice(self, shares: Mapping[str, float]) -> str:
        weights = np.array(list(shares.values()))
        return str(self.rng.choice(list(shares), p=weights / weights.sum()))

    def _log(self, low: float, high: float) -> float:
        return math.exp(self.rng.uniform(math.log(low), math.log(high)))

    def _sign(self) -> float:
        return float(self.rng.choice([-1.0, 1.0]))

    # --- contacts

    def _place(self, t: float) -> None:
        self.data.qpos[:] = self.program(np.array([t]))[0]
        mujoco.mj_fwdPosition(self.model, self.data)

    def _push(self, start: float) -> float | None:
        rng = self.rng
        style = rng.choice(["blow", "push", "lean"], p=[0.45, 0.4, 0.15])
        if style == "blow":
            duration = rng.uniform(0.02, 0.1)
            rise = duration / 2
        elif style == "push":
            duration = self._log(0.2, 2.0)
            rise = min(rng.uniform(0.05, 0.3), duration / 2)
        else:
            duration, rise = 3.0, rng.uniform(0.3, 0.8)
        if start + duration > self.seconds - 0.5:
            return None
        wanted = self._log(*EFFECT)
        link = int(rng.integers(JOINTS))
        best: tuple[float, Floats, Floats] | None = None
        for _ in range(40):
            point, direction = self._touch(link)
            force = wanted / max(self._effect(link, point, direction, start, duration, rise), 1e-9)
            if best is None or force < best[0]:
                best = force, point, direction
            if force <= LARGEST_FORCE_N:
                break
        assert best is not None
        force, point, direction = best
        peak = min(force, LARGEST_FORCE_N) * direction
        self.happenings.pushes.append(
            Push(
                start, duration, self.arm.links[link].name, tuple(peak.tolist()), tuple(point.tolist()), rise
            )
        )
        return start + duration

    def _touch(self, link: int) -> tuple[Floats, Floats]:
        """Return a random point on the link (link axes), and a random direction that presses on it.

        The direction is in link axes too; most hands press more than they rub.
        """
        rng = self.rng
        point, normal = self.arm.links[link].surface(rng.uniform(0.05, 0.95), rng.uniform(0.0, 2.0 * math.pi))
        direction = -normal + 0.95 * rng.uniform(0.0, 1.0) * _direction(rng)
        return point, direction / np.linalg.norm(direction)

    def _effect(
        self, link: int, point: Floats, direction: Floats, start: float, duration: float, rise: float
    ) -> float:
        """Return the largest share of rated torque per newton while the push is at its full size.

        `direction` comes in link axes and is turned, in place, to world axes at the start.
        """
        body = self.data.body(self.arm.links[link].name)
        self._place(start)
        direction[:] = body.xmat.reshape(3, 3) @ direction
        largest = 0.0
        full = start + rise, start + duration - rise
        for t in np.linspace(*full, 1 + min(10, round((full[1] - full[0]) / 0.1))):
            self._place(float(t))
            torque = np.zeros(JOINTS)
            at = body.xpos + body.xmat.reshape(3, 3) @ point
            mujoco.mj_applyFT(self.model, self.data, direction, np.zeros(3), at, body.id, torque)
            largest = max(largest, float((np.abs(torque) / self.arm.rated).max()))
        return largest

    def _collide(self, start: float) -> float | None:
        """Put a ball where a point of the surface will pass soon, with its outside ahead."""
        rng, radius = self.rng, self.happenings.ball_radius_m
        for _ in range(60):
            t = start + rng.uniform(0.3, 2.5)
            link = int(rng.integers(3, JOINTS))
            point, normal = self.arm.links[link].surface(
                rng.uniform(0.2, 0.95), rng.uniform(0.0, 2.0 * math.pi)
            )
            body = self.data.body(self.arm.links[link].name)
            spots = []
            for moment in (t - 0.002, t):
                self._place(moment)
                spots.append(body.xpos + body.xmat.reshape(3, 3) @ point)
            velocity = (spots[1] - spots[0]) / 0.002
            outward = body.xmat.reshape(3, 3) @ normal
            centre = spots[1] + radius * outward
            if outward @ velocity > max(0.15, 0.7 * np.linalg.norm(velocity)) and self._free(t - 0.2, centre):
                end = t + rng.uniform(0.1, 1.2)
                if end > self.seconds - 0.5:
                    return None
                self.happenings.encounters.append(
                    Encounter(
                        t - 0.2, end, tuple(centre.tolist()), self._log(100.0, 2500.0), self._log(5.0, 40.0),
                        rng.uniform(0.02, 0.05), self._log(0.004, 0.04),
                    )
                )  # fmt: skip
                return end + GIVE_WAY_S
        return None

    def _free(self, t: float, centre: Floats) -> bool:
        """Return whether the arm is clear of the ball at time t; a segment along each link is looked at."""
        self._place(t)
        for link in self.arm.links:
            body = self.data.body(link.name)
            along = np.linspace(0.0, link.length_m, 8)
            axis = np.stack([np.full(8, link.aside_m / 2), np.zeros(8), along], axis=1)
            away = np.linalg.norm(body.xpos + axis @ body.xmat.reshape(3, 3).T - centre, axis=1)
            if away.min() < self.happenings.ball_radius_m + link.radius_m + 0.02:
                return False
        return True

    # --- faults

    def _actuator(self, start: float) -> float | None:
        detail = self._choice(_FAULT_SHARES)
        if detail == "stuck" or self.rng.random() < 0.35:
            return self._fault(detail, start, math.inf)
        end = start + self.rng.uniform(4.0, 8.0)
        return None if end > self.seconds - 1.0 else self._fault(detail, start, end)

    def _lasting(self, start: float) -> None:
        self._fault(self._choice({name: _FAULT_SHARES[name] for name in _MILD}), start, math.inf, mild=True)

    def _fault(self, detail: str, start: float, end: float, mild: bool = False) -> float:
        rng, joint = self.rng, int(self.rng.integers(JOINTS))
        ramp = self._log(0.005, 0.5)
        if detail == "torque-loss":
            size = rng.uniform(0.1, 0.5) if mild or rng.random() < 0.7 else rng.uniform(0.5, 1.0)
        elif detail in ("coulomb-friction", "viscous-friction"):
            size = rng.uniform(0.5, 3.0)
        elif detail == "offset":
            size = self._sign() * rng.uniform(0.03, 0.15)
        elif detail == "ripple":
            size = rng.uniform(0.03, 0.1)
        else:
            size, ramp = (1.0, 0.002) if detail == "open-circuit" else (_JAM, 0.01)
        truthful = bool(rng.random() < 0.5) if detail == "open-circuit" else None
        waves = (float(rng.integers(10, 61)), rng.uniform(0.0, 2.0 * math.pi))
        fault = actuator_fault(self.arm, detail, joint, start, end, size, ramp, truthful, waves)
        self.happenings.faults.append(fault)
        return end if end == math.inf else end + ramp

    def _position_sensor(self, start: float) -> float | None:
        rng, i = self.rng, int(self.rng.integers(JOINTS))
        size, ramp, end = self._sign() * rng.uniform(0.01, 0.05), 0.5, start + rng.uniform(4.0, 8.0)
        if end + ramp > self.seconds - 1.0:
            return None
        row = (engine.READING, i, start, ramp, end, size, 0.0, 0.0)
        fault = Fault("position-sensor", "offset", i, start, end + ramp, size, "rad", row)
        self.happenings.faults.append(fault)
        return end + ramp

    def _torque_sensor(self, start: float) -> float | None:
        rng, i = self.rng, int(self.rng.integers(JOINTS))
        end, ramp = start + rng.uniform(4.0, 8.0), self._log(0.005, 0.5)
        if end + ramp > self.seconds - 1.0:
            return None
        chance = rng.random()
        if chance < 0.2:
            one = Misreading("frozen", i, start, end, 0.005, 1.0, "share")
        elif chance < 0.6:
            one = Misreading(
                "offset", i, start, end, ramp, self._sign() * rng.uniform(0.03, 0.15), "share of rated"
            )
        else:
            one = Misreading("scale", i, start, end, ramp, self._sign() * rng.uniform(0.1, 0.5), "share")
        self.happenings.misreadings.append(one)
        return end + ramp

    # --- load

    def _load(self, start: float) -> float | None:
        rng, last = self.rng, self.arm.links[-1]
        end, ramp = start + rng.uniform(6.0, 10.0), rng.uniform(0.05, 0.25)
        if end + ramp > self.seconds - 1.0:
            return None
        com = (*rng.uniform(-0.04, 0.04, 2).tolist(), last.length_m + rng.uniform(0.02, 0.12))
        self.happenings.grips.append(Grip(start, end, ramp, self._log(0.3, 2.0), com))
        return end + ramp

    # --- signals

    def _signal(self, start: float) -> float | None:
        rng, i = self.rng, int(self.rng.integers(JOINTS))
        detail = str(rng.choice(_SIGNALS))
        signals = self.happenings.signals
        if detail == "gap":
            duration = rng.uniform(0.005, 0.06)
            signals.append(SignalFault(detail, None, start, start + duration, duration, "s"))
        elif detail == "duplicate":
            duration = rng.uniform(0.002, 0.1)
            signals.append(SignalFault(detail, None, start, start + duration, duration, "s"))
        elif detail == "jump":
            return self._jump(i, start)
        elif detail == "frozen":
            duration = rng.uniform(0.2, 1.0)
            start = self._moving(i, start)
            signals.append(SignalFault(detail, i, start, start + duration, duration, "s"))
        elif detail == "contradiction":
            duration, size = rng.uniform(0.3, 1.0), self._sign() * rng.uniform(0.2, 0.6)
            signals.append(SignalFault(detail, i, start, start + duration, size, "rad/s"))
        else:
            duration = rng.uniform(0.2, 0.5)
            size, unit = [(2e-3, "rad"), (0.14, "rad/s"), (0.1, "share of rated")][rng.integers(3)]
            signals.append(SignalFault(detail, i, start, start + duration, size, unit))
        return start + duration

    def _jump(self, i: int, start: float) -> float | None:
        """Let a position jump, half of the time only on its way, half of the time for the drive too."""
        rng = self.rng
        if rng.random() < 0.5:
            end, size = start + rng.uniform(0.3, 2.0), self._sign() * self._log(0.01, 0.2)
            self.happenings.signals.append(SignalFault("jump", i, start, end, size, "rad"))
            return end
        end, size = start + rng.uniform(4.0, 8.0), self._sign() * self._log(0.005, 0.03)
        if end > self.seconds - 1.0:
            return None
        row = (engine.READING, i, start, _NO_RAMP_S, end, size, 0.0, 0.0)
        self.happenings.faults.append(Fault("signal", "jump", i, start, end, size, "rad", row))
        return end

    def _moving(self, i: int, start: float) -> float:
        """Return the first time from `start` on at which the joint moves: rest hides a frozen reading."""
        times = start + np.arange(0.0, 10.0, 0.01)
        fast = np.abs(self.program(times, 1)[:, i]) > 0.3
        return float(times[np.argmax(fast)])


def _direction(rng: np.random.Generator) -> Floats:
    v: Any = rng.standard_normal(3)
    unit: Floats = v / np.linalg.norm(v)
    return unit
